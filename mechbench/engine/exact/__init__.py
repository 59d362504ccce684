"""Measures by quadrature over order statistics, with error bounds; `exact` is the one door."""

from mechbench.engine.exact.measures import exact

__all__ = ["exact"]
