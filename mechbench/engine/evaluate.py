"""The engine's one door: measures of a mechanism in a market, exact where they can be, else simulated."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Literal

from mechbench.contract import MEASURES, InputError, Mechanism
from mechbench.engine.estimate import Estimate
from mechbench.market.market import Market

__all__ = ["EXACT_ERROR", "SIMULATED_ERROR", "evaluate", "evaluate_sizes"]

EXACT_ERROR = 1e-9
"""Bound asked of the exact engine where nothing else is said: absolute for shares, relative for money."""
SIMULATED_ERROR = 2e-3
"""Half-width asked of the simulation engine where nothing else is said."""

Method = Literal["auto", "exact", "simulated"]


def evaluate(
    market: Market,
    mechanism: Mechanism,
    measures: Sequence[str],
    *,
    method: Method = "auto",
    error: float | None = None,
    seed: int = 0,
    threshold: float = 0.05,
    progress: Callable[[int], None] | None = None,
) -> dict[str, Estimate]:
    """Evaluate measures of one mechanism in one market.

    Parameters
    ----------
    market : Market
    mechanism : Mechanism
        One that serves the market's kind of supply.
    measures : sequence of str
        Names in `mechbench.contract.MEASURES`.
    method : "auto", "exact" or "simulated"
        "auto" integrates what has a functional and simulates the rest.
    error : float, optional
        The error to reach, absolute for shares and relative for money.
    seed : int
        Of the simulation; the exact engine needs none.
    threshold : float
        The level of `gain_chance`, in [0, 1).
    progress : callable, optional
        Called with the number of draws done so far in a simulation.

    Returns
    -------
    dict of Estimate by measure, in the order asked for.

    Raises
    ------
    InputError
        If the mechanism does not serve the supply, a measure or the threshold is unknown, or `method` is
        "exact" and a measure has no exact integral for this mechanism.
    """
    _check(market, mechanism, measures, error, threshold)
    found: dict[str, Estimate] = {}
    if method != "simulated":
        for measure in measures:
            exact = evaluate_sizes([market], mechanism, measure, error=error or EXACT_ERROR, threshold=threshold)
            if exact is not None:
                found[measure] = exact[0]
            elif method == "exact":
                msg = f"measure {measure} of {mechanism!r} has no exact integral; accepted is method auto or simulated"
                raise InputError(msg)
    rest = [measure for measure in measures if measure not in found]
    if rest:
        from mechbench.engine.simulated.simulate import simulate  # noqa: PLC0415 - only where it is needed

        simulation = simulate(
            market,
            [mechanism],
            rest,
            error=error or SIMULATED_ERROR,
            seed=seed,
            threshold=threshold,
            progress=progress,
        )
        found |= {measure: simulation.estimate(0, measure) for measure in rest}
    return {measure: found[measure] for measure in measures}


def evaluate_sizes(
    markets: Sequence[Market],
    mechanism: Mechanism,
    measure: str,
    *,
    error: float = EXACT_ERROR,
    threshold: float = 0.05,
) -> list[Estimate] | None:
    """One measure, exactly, in markets that differ in size alone: one call costs little more than one cell.

    Returns
    -------
    list of Estimate, or None where the mechanism declares nothing that can be integrated.
    """
    from mechbench.engine.exact import exact  # noqa: PLC0415 - scipy.special is slow to import

    return exact(markets, mechanism, measure, error=error, threshold=threshold)


def _check(
    market: Market,
    mechanism: Mechanism,
    measures: Sequence[str],
    error: float | None,
    threshold: float,
) -> None:
    if market.supply.kind not in mechanism.serves:
        serves = ", ".join(sorted(mechanism.serves))
        msg = f"mechanism {mechanism.name} does not serve {market.supply.kind}; it serves {serves}"
        raise InputError(msg)
    for measure in measures:
        if measure not in MEASURES:
            msg = f"measure: found {measure!r}; accepted: {', '.join(MEASURES)}"
            raise InputError(msg)
    if not 0 <= threshold < 1:
        msg = f"threshold: found {threshold!r}; accepted is a number at least 0 and below 1"
        raise InputError(msg)
    if error is not None and not error > 0:
        msg = f"error: found {error!r}; accepted is a number above 0"
        raise InputError(msg)
