"""The evidence: every rule that is weighed, every measure, at every size of the market file."""

from __future__ import annotations

import itertools
import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from mechbench import discovery
from mechbench.choice.judge import Candidate, Finding
from mechbench.choice.resampling import resampled_findings, unseen_chance
from mechbench.contract import MONEY, Distribution, Floats, IdenticalUnits, InputError, Mechanism
from mechbench.engine.evaluate import evaluate
from mechbench.market.file import FamilyChoice, MarketFile, MechanismChoice
from mechbench.market.market import Market

if TYPE_CHECKING:
    from mechbench.logs.fit import Fit
    from mechbench.logs.read import BidLog

__all__ = ["SHOWN", "AtSize", "Evidence", "Rule", "gather"]

SHOWN = (
    "worst_gain",
    "mean_gain",
    "interim_gain",
    "gain_chance",
    "revenue",
    "shaded_revenue",
    "efficiency",
)
"""Measures that every choice shows; what the file requires or ranks by comes on top."""

_RESAMPLES = 200
_SEED = 0

Progress = Callable[[str, int], None]
"""Called with what is being done and how much of it was done since the last call."""


@dataclass(frozen=True)
class Rule:
    """A pricing rule that is weighed."""

    mechanism: Mechanism
    current: bool

    @property
    def name(self) -> str:
        """The rule in words: its name, and its settings if it has any."""
        settings = ", ".join(f"{name} {value}" for name, value in self.mechanism.settings.items())
        return f"{self.mechanism.name} ({settings})" if settings else self.mechanism.name


@dataclass(frozen=True)
class AtSize:
    """The findings at one size.

    Attributes
    ----------
    market : Market
    candidates : tuple of Candidate
        In the order of the rules.
    tail_note : str or None
        Why the numbers rest on the fitted tail, where they do.
    """

    market: Market
    candidates: tuple[Candidate, ...]
    tail_note: str | None = None


@dataclass(frozen=True)
class Evidence:
    """All that the decision and its words rest on.

    Attributes
    ----------
    file : MarketFile
    values : Distribution
        The file's family, or what was fitted to its log.
    rules : tuple of Rule
        The rule in use today first, if there is one.
    sizes : tuple of AtSize
    left_out : tuple of str
        Plug-ins that could not be weighed, each with the reason.
    log, fit : BidLog and Fit, or None
    """

    file: MarketFile
    values: Distribution
    rules: tuple[Rule, ...]
    sizes: tuple[AtSize, ...]
    left_out: tuple[str, ...] = ()
    log: BidLog | None = None
    fit: Fit | None = None

    @property
    def current(self) -> int | None:
        """Place of the rule in use today."""
        return next((place for place, rule in enumerate(self.rules) if rule.current), None)


def gather(file: MarketFile, progress: Progress | None = None) -> Evidence:
    """Evaluate every rule at every size, with the log's own sampling error where values come from one.

    Parameters
    ----------
    file : MarketFile
    progress : callable, optional
        See `Progress`.

    Raises
    ------
    InputError
        If the log cannot be read, no value reaches the reserve, or a rule or a family fails in this market.
    """
    rules, left_out = _rules(file)
    measures = _measures(file)
    if isinstance(file.values, FamilyChoice):
        values = file.values.distribution()
        sizes = tuple(_at_size(file, values, rules, measures, bidders) for bidders in file.bidders)
        return Evidence(file, values, rules, sizes, left_out)
    return _from_log(file, rules, measures, left_out, progress or (lambda _what, _done: None))


def _from_log(
    file: MarketFile,
    rules: tuple[Rule, ...],
    measures: Sequence[str],
    left_out: tuple[str, ...],
    progress: Progress,
) -> Evidence:
    from mechbench.logs.fit import depends_on_tail, fit_log, resampled_fits  # noqa: PLC0415
    from mechbench.logs.read import read_log  # noqa: PLC0415

    source = file.values
    if isinstance(source, FamilyChoice):
        msg = "a family is no log"
        raise TypeError(msg)
    log = read_log(
        source.path,
        bid=source.bid,
        auction=source.auction,
        progress=lambda rows: progress("reading the log, rows", rows),
    )
    fit = fit_log(log)
    again = [one.values for one in resampled_fits(log, _RESAMPLES, np.random.default_rng(_SEED))]
    mechanisms = [rule.mechanism for rule in rules]
    sizes = []
    for bidders in file.bidders:
        at = _at_size(file, fit.values, rules, measures, bidders)
        markets = _markets(file, again, bidders)
        changes = resampled_findings(
            at.market,
            markets,
            mechanisms,
            measures,
            file.gain_threshold,
            np.random.default_rng(_SEED),
            lambda done: progress("resampling the log", done),
        )
        sizes.append(
            AtSize(
                at.market,
                _spread(at.candidates, changes, unseen_chance(at.market, mechanisms)),
                depends_on_tail(fit.bids, at.market),
            )
        )
    return Evidence(file, fit.values, rules, tuple(sizes), left_out, log, fit)


def _markets(file: MarketFile, resampled: Sequence[Distribution], bidders: int) -> list[Market]:
    """Make the market under each law of the resampled logs, all of which must leave something to sell."""
    try:
        return [file.market(values, bidders) for values in resampled]
    except InputError as error:
        msg = (
            f"{file.source}: supply: found a reserve of {file.supply.reserve:g} so close to the highest bids that by "
            f"some resamples of the log nothing ever sells; accepted is one that the log often exceeds"
        )
        raise InputError(msg) from error


def _spread(
    candidates: Sequence[Candidate], changes: Mapping[tuple[int, str], Floats], unseen: float
) -> tuple[Candidate, ...]:
    """Put beside each number what it becomes on the resampled logs."""
    return tuple(
        Candidate(
            candidate.rule,
            {
                measure: Finding(
                    finding.estimate,
                    _moved(measure, finding, changes[place, measure]),
                    blur=_blur(measure, finding, unseen),
                )
                for measure, finding in candidate.findings.items()
            },
        )
        for place, candidate in enumerate(candidates)
    )


def _blur(measure: str, finding: Finding, unseen: float) -> float:
    """How far off the resampled numbers of a chance may be that the draws hardly ever, or nearly always, see."""
    rare = min(finding.value, 1.0 - finding.value) < 3.0 * unseen
    return unseen if measure in {"gain_chance", "no_sale"} and rare and not _always_nought(finding) else 0.0


def _always_nought(finding: Finding) -> bool:
    """Whether a number is 0 by the rule itself, whatever the law of the values."""
    return finding.value == 0 and finding.estimate.error == 0 and finding.estimate.method == "exact"


def _moved(measure: str, finding: Finding, change: Floats) -> Floats:
    """Return the resampled numbers: never negative, and shares never above 1; infinite ones stay so."""
    value = finding.value
    if measure not in MONEY and _always_nought(finding):
        return np.zeros_like(change)
    if math.isinf(value):
        return np.where(np.isinf(change), change, math.nan)
    return np.clip(value + change, 0.0, math.inf if measure in MONEY else 1.0)


def _at_size(
    file: MarketFile, values: Distribution, rules: Sequence[Rule], measures: Sequence[str], bidders: int
) -> AtSize:
    market = file.market(values, bidders)
    candidates = tuple(
        Candidate(rule.name, _findings(market, rule.mechanism, measures, file.gain_threshold)) for rule in rules
    )
    return AtSize(market, candidates)


def _findings(market: Market, mechanism: Mechanism, measures: Sequence[str], threshold: float) -> Mapping[str, Finding]:
    try:
        found = evaluate(market, mechanism, measures, threshold=threshold)
    except InputError:
        raise
    except Exception as error:  # a plug-in may raise anything at all
        msg = f"mechanism {mechanism!r} fails with {market.values!r}: {type(error).__name__}: {error}"
        raise InputError(msg) from error
    return {measure: Finding(estimate) for measure, estimate in found.items()}


def _measures(file: MarketFile) -> tuple[str, ...]:
    required = (bound.measure for bound in file.requirements)
    return tuple(dict.fromkeys([*SHOWN, *required, file.objective]))


def _rules(file: MarketFile) -> tuple[tuple[Rule, ...], tuple[str, ...]]:
    """Return the rules weighed, that in use today first, and what had to be left out."""
    choices, left_out = (list(file.compare), []) if file.compare is not None else _every_rule()
    if file.current is not None:
        choices = [file.current, *(choice for choice in choices if choice != file.current)]
    rules = tuple(Rule(choice.mechanism(), choice == file.current) for choice in choices)
    return rules, tuple(left_out)


def _every_rule() -> tuple[list[MechanismChoice], list[str]]:
    """Every rule there is for identical units, with every choice of its words."""
    choices, left_out = [], []
    for name in discovery.mechanisms():
        try:
            kind = discovery.mechanism_class(name)
        except InputError as error:
            left_out.append(str(error))
            continue
        if IdenticalUnits.kind not in kind.serves:
            continue
        open_ones = [one.name for one in kind.parameters if one.default is None and not one.choices]
        if open_ones:
            left_out.append(f"mechanism {name!r} needs {', '.join(open_ones)}: name it under [compare]")
            continue
        options = [parameter.choices or (parameter.default,) for parameter in kind.parameters]
        names = [parameter.name for parameter in kind.parameters]
        choices += [
            MechanismChoice(name, dict(zip(names, taken, strict=True)))  # type: ignore[arg-type]
            for taken in itertools.product(*options)
        ]
    return choices, left_out
