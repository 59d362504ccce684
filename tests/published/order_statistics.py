"""Published expectations of order statistics, and limits of the worst gain."""

from __future__ import annotations

NORMAL_OF_TEN = (1.53875, 1.00136, 0.65606, 0.37576, 0.12267)
"""Expected order statistics of ten standard normals, highest first. H. L. Harter, "Expected values of normal order
statistics", *Biometrika* 48 (1961), 151-165, table 1; D. Teichroew, *Annals of Mathematical Statistics* 27 (1956),
410-426, table I. From memory; checked in the test by mpmath's quadrature of the density. Tolerance 6e-6: half the
last digit, and the engine's 1e-9 of a mean of 40."""

EXPONENTIAL_ONE_UNIT = {1_000: (0.122, 5e-4), 10**8: (0.0503, 5e-5)}
"""Worst gain of pay-as-bid with one unit and exponential values, by bidders: value and half of its last digit. No
publication known; derived, and checked in the test by mpmath: the best two bids differ by an independent standard
exponential E, so the gain is the mean of ``1 - b e^b E1(b)`` over the second-highest bid b."""

PATH_LIMITS = {"exponential": (1.0, 0.5), "half-normal": (2.0, 1 - 0.5**0.5)}
"""With about sqrt(n) units: index c of the log survival, and the limit 1 - (1 - 1/2)^(1/c) of the worst gain.
"exponential 1/2, half-normal 0.29" is common practice, no source; derived from ``b_(k+1)/b_(1) -> (1/2)^(1/c)``."""
