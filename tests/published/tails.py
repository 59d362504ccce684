"""Generalised Pareto tails fitted in print."""

DANISH_ABOVE_10 = {"exceedances": 109, "index": 0.4970, "index_error": 0.14, "scale": 6.975}
"""Danish fire claims above 10 million kroner, by maximum likelihood. McNeil 1997, Estimating the tails of
loss severity distributions using extreme value theory, ASTIN Bulletin 27, 117-137 (from memory); checked by a
second route: scipy.stats.genpareto on the data set evir/danish (2,167 claims) gives 0.49698 and 6.9755.
Tolerance of index and scale: half their last digit; of the error 0.0075, one and a half of its last digit, as
ours is another estimator's."""

LARGE_SAMPLE_ERROR = {0.0: 1.0, 0.1: 1.1, 0.25: 1.25, 0.4: 1.4}
"""Standard error of the maximum-likelihood tail index times the square root of the count, ``1 + xi``. Hosking
& Wallis 1987, Technometrics 29, 339-349, section 3 (shape k = -xi there; from memory); checked by a second
route, the inverse of the Fisher information, in the test that uses it. Tolerance 10 %: our estimator is
another, the count is finite, and 300 samples give a spread to 4 %."""
