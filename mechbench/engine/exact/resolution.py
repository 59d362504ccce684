"""How finely to integrate, and what there is no integral for."""

from __future__ import annotations

from dataclasses import astuple, dataclass

from mechbench.contract import Functional

__all__ = ["LOOSE", "NoRouteError", "Resolution"]

LOOSE = 1e-6
"""Errors asked for from here on are met with fewer nodes and shorter searches."""


class NoRouteError(ValueError):
    """The functional looks at a combination that has no exact integral here; simulate instead."""

    def __init__(self, functional: Functional) -> None:
        uses = ", ".join(sorted(functional.uses))
        super().__init__(f"no exact integral over {functional.over} of what uses {uses}")


@dataclass(frozen=True)
class Resolution:
    """How many nodes each rule gets; every number is 4 m + 1."""

    outer: int = 65
    cut: int = 129
    inner: int = 65
    slack: int = 129
    smooth: int = 33

    @classmethod
    def enough_for(cls, error: float) -> Resolution:
        """Where to start for an error that is asked for."""
        return cls() if error < LOOSE else cls(outer=33, cut=65, inner=33, slack=65, smooth=17)

    @property
    def loose(self) -> bool:
        """Whether this is where a loose error starts, and not a refinement."""
        return self.smooth < 33  # noqa: PLR2004

    def finer(self) -> Resolution:
        """Twice the nodes."""
        return Resolution(*(2 * nodes - 1 for nodes in astuple(self)))
