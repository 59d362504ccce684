"""Percentage points of the families from published tables.

All are quoted from memory of the tables; every one was checked by a second route, mpmath's root of the
defining integral, in the test that uses them.
"""

NORMAL = {0.05: 1.95996, 0.01: 2.57583, 0.001: 3.29053}
"""Two-sided points of the normal law: P(|Z| > z) to z. Abramowitz & Stegun 1964, Handbook of Mathematical
Functions, table 26.5 (tail areas). Tolerance 5e-6: half the last digit."""

CHI_SQUARE = {1: 3.841, 2: 5.991, 5: 11.070, 10: 18.307, 30: 43.773, 100: 124.342}
"""Upper 5 % points of chi-square by degrees of freedom nu, a gamma law of shape nu / 2 and scale 2.
NIST/SEMATECH e-Handbook of Statistical Methods, section 1.3.6.7.4. Tolerance 0.0005: half the last digit."""

F_RATIO = {(1, 1): 161.448, (2, 5): 5.786, (5, 10): 3.326, (10, 10): 2.978}
"""Upper 5 % points of F by degrees of freedom (m, n); m F / (m F + n) is beta with a = m / 2, b = n / 2.
NIST/SEMATECH e-Handbook of Statistical Methods, section 1.3.6.7.3. Tolerance 0.0005: half the last digit."""
