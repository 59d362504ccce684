"""The Python surface: what the commands print, as pandas DataFrames with the columns of the records.

Call these as ``mechbench.choose``, ``mechbench.measure`` and ``mechbench.catalogue``.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Literal

from mechbench.contract import MEASURES

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["catalogue", "choose", "measure"]


def choose(market: str | Path | None = None) -> pd.DataFrame:
    """Weigh every pricing rule that fits a market.

    Parameters
    ----------
    market : str or Path, optional
        A market file; the built-in demo market unless given.

    Returns
    -------
    DataFrame
        One row for every size, rule and measure; columns `mechbench.show.records.FIELDS`.

    Raises
    ------
    InputError
        If the file, or the log that it names, is not accepted.
    """
    import pandas as pd  # noqa: PLC0415 - half a second, only where a DataFrame is asked for

    from mechbench.choice.evidence import gather  # noqa: PLC0415
    from mechbench.choice.records import choice_records  # noqa: PLC0415
    from mechbench.market.file import read_market  # noqa: PLC0415
    from mechbench.show.records import FIELDS  # noqa: PLC0415

    evidence = gather(read_market(None if market is None else Path(market)))
    return pd.DataFrame(choice_records(evidence), columns=list(FIELDS))


def measure(
    mechanism: str,
    family: str,
    *,
    bidders: int,
    units: int,
    mechanism_settings: Mapping[str, float | str] | None = None,
    family_settings: Mapping[str, float | str] | None = None,
    reserve: float = 0.0,
    turnout: float = 1.0,
    measures: Sequence[str] = tuple(MEASURES),
    method: Literal["auto", "exact", "simulated"] = "auto",
    error: float | None = None,
    seed: int = 0,
    threshold: float = 0.05,
) -> pd.DataFrame:
    """Measure one pricing rule in one market.

    Parameters
    ----------
    mechanism, family : str
        Names, as `catalogue` lists them.
    bidders, units : int
    mechanism_settings, family_settings : mapping, optional
        Their parameters.
    reserve, turnout : float
    measures : sequence of str
        All of them unless given.
    method, error, seed, threshold
        See `mechbench.engine.evaluate.evaluate`.

    Returns
    -------
    DataFrame
        One row for every measure; columns `mechbench.show.records.FIELDS`.

    Raises
    ------
    InputError
        If a name or a number is not accepted.
    """
    import pandas as pd  # noqa: PLC0415 - see above

    from mechbench.measuring import Cell, cell_records  # noqa: PLC0415
    from mechbench.show.records import FIELDS  # noqa: PLC0415

    cell = Cell(
        mechanism=mechanism,
        mechanism_settings=mechanism_settings or {},
        family=family,
        family_settings=family_settings or {},
        bidders=bidders,
        units=units,
        reserve=reserve,
        turnout=turnout,
        measures=measures,
        method=method,
        error=error,
        seed=seed,
        threshold=threshold,
    )
    return pd.DataFrame(cell_records(cell), columns=list(FIELDS))


def catalogue() -> pd.DataFrame:
    """List the pricing rules and the families there are, one row for each of their parameters."""
    import pandas as pd  # noqa: PLC0415 - see above

    from mechbench.show.catalogue import CATALOGUE_FIELDS, catalogue_rows  # noqa: PLC0415

    return pd.DataFrame(catalogue_rows(), columns=list(CATALOGUE_FIELDS))
