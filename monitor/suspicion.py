"""Why does the balance not fit? Suspects with size, interval and onset, and the figures without each one."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass, replace
from datetime import timedelta
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ingest.balance import Problem, problem_of
from ingest.cells import Cells
from ingest.instruments import balance_columns
from ingest.pairs import pairs
from ingest.residuals import Residuals
from ingest.suspects import PASSES, STOPS, biases, eliminate
from ingest.unit import FLOW_KINDS, Unit
from monitor.amounts import amounts_of
from monitor.board import key_figures
from monitor.days import rows
from monitor.figures import Figure, figures_of
from monitor.fit import LEVEL, Failure, causes_of, counted, failures, fits
from monitor.windows import TWO_SIDED_95, window_at

Floats = NDArray[np.float64]

ANSWERS = ("one suspect", "cannot tell", "several causes")
ONE, OPEN, SEVERAL = ANSWERS

PLAUSIBLE = (
    0.5  # of its reading; nobody overlooks an instrument that is off by more (common practice, no source)
)

MOST = 5  # pairs that are told of one failure

# Causes, each with size and standard error; and whether no others explain more.
Explanation = tuple[tuple[tuple[str, float, float], ...], bool]

# Where to look first, by what is suspected (common practice, no source).
CHECKS = {
    "channel": "calibration of this channel, and a lab sample of the same hour",
    "flow meter": "zero, impulse lines and the density, pressure or temperature that it is read with",
    "declared": "the value in the unit file against the certificate of what is fed now",
    "shared": "the raw sum of all channels, then the calibration gas and its certificate",
    "air": "leak test of the sample line from probe to analyzer, fittings and filter first",
    "other": "an independent reading",
}


@dataclass(frozen=True, slots=True)
class Part:
    """One thing that may be off.

    `size` and `half_width` (95 %) are fractions of its reading, above zero when it reads too high (of an air
    leak: the share of the sample that is air).
    """

    name: str
    size: float
    half_width: float
    check: str


@dataclass(frozen=True, slots=True)
class Suspect:
    """What would explain a failure: one thing, or two that are off at once.

    `is_likeliest` tells whether nothing explains more, `is_plausible` whether every size is at most
    `PLAUSIBLE`. `without` holds the value of each main figure without it, in the order of `Finding.figures`;
    NaN where it cannot be seen then.
    """

    parts: tuple[Part, ...]
    is_likeliest: bool
    is_plausible: bool
    without: tuple[float, ...]

    @property
    def name(self) -> str:
        """Give the names of its parts."""
        return " and ".join(part.name for part in self.parts)


@dataclass(frozen=True, slots=True)
class Finding:
    """One failure and what may explain it.

    `kind` and `window` tell which test it is. It lasts from `since_us` to `until_us`, the windows in between
    failed one after the other; `is_lasting` when none has fitted since. Sizes and figures are those of the
    worst window, from `worst_us` on. Of several causes the suspects are pairs, those that explain most
    first; `untold` more pairs explain it nearly as well.
    """

    kind: str
    window: timedelta
    since_us: int
    until_us: int
    worst_us: int
    is_lasting: bool
    p_value: float
    answer: str
    suspects: tuple[Suspect, ...]
    untold: int
    figures: tuple[tuple[str, str, float], ...]  # name, unit, value with all readings


@dataclass(frozen=True, slots=True)
class Fit:
    """How the windows of one length did in one test."""

    kind: str
    window: timedelta
    tested: int
    failed: int


@dataclass(frozen=True, slots=True)
class Report:
    """Whether the balance of a unit fits over a span [us UTC], and if not, why."""

    unit: str
    name: str
    time_zone: str
    span_us: tuple[int, int]
    healthy_us: tuple[int, int] | None
    false_share: float
    fits: tuple[Fit, ...]
    findings: tuple[Finding, ...]


def report(unit: Unit, cells: Cells, healthy: Cells | None = None) -> Report:
    """Test a span of a unit's record and explain what does not fit.

    Parameters
    ----------
    unit : Unit
        The reactor.
    cells : Cells
        The span, on one grid without holes.
    healthy : Cells, optional
        A period in which all was well, by a person's word.
    """
    problem = problem_of(unit)
    tests = fits(unit, problem, cells, healthy)
    return Report(
        unit=unit.key,
        name=unit.name,
        time_zone=unit.time_zone,
        span_us=_span(unit, cells),
        healthy_us=None if healthy is None else _span(unit, healthy),
        false_share=LEVEL,
        fits=tuple(
            Fit(one.kind, one.length, int(np.isfinite(one.p_value).sum()), int(one.failed.sum()))
            for one in tests
        ),
        findings=tuple(_finding(unit, problem, cells, one) for one in failures(tests)),
    )


def _span(unit: Unit, cells: Cells) -> tuple[int, int]:
    return int(cells.start[0]), int(cells.start[-1]) + unit.cell // timedelta(microseconds=1)


def _finding(unit: Unit, problem: Problem, cells: Cells, failure: Failure) -> Finding:
    """Explain one failure by its worst window."""
    test, worst = failure.worst.test, failure.worst.worst
    window = test.residuals.take(slice(worst, worst + 1))
    first = int(np.searchsorted(cells.start, test.start[worst]))
    inside = rows(cells, slice(first, first + max(1, round(test.length / unit.cell))))
    figures, with_all = main_figures(unit, problem, inside)
    singles = _singles(window)
    both = [] if singles else _pairs(window)
    told = singles or both[:MOST]
    return Finding(
        kind=test.kind,
        window=test.length,
        since_us=failure.since_us,
        until_us=failure.until_us,
        worst_us=int(test.start[worst]),
        is_lasting=failure.is_lasting,
        p_value=float(test.p_value[worst]),
        answer=_answer(told),
        suspects=tuple(_suspect(unit, problem, inside, *one) for one in told),
        untold=max(0, len(both) - MOST),
        figures=tuple((one.name, one.unit, value) for one, value in zip(figures, with_all, strict=True)),
    )


def _singles(window: Residuals) -> list[Explanation]:
    """Give what explains a window by itself and what comes near it, sizes that can be believed first.

    Nothing where one cause is not enough, or none has a size to be believed.
    """
    found = eliminate(window, level=LEVEL)
    if len(found.steps) != 1 or found.stop != STOPS[PASSES]:
        return []
    alone = biases(window)
    likeliest, rivals = found.steps[0].suspects, found.steps[0].rivals
    told: list[Explanation] = []
    for name in (*likeliest, *rivals):
        at = alone.names.index(name)
        own = (name, float(alone.size[0, at]), float(alone.standard_error[0, at]))
        told.append(((own,), name in likeliest))
    ordered = sorted(told, key=lambda one: not _is_plausible(one))
    return ordered if _is_plausible(ordered[0]) else []


def _pairs(window: Residuals) -> list[Explanation]:
    """Give the pairs that explain a window, the likeliest first."""
    found = pairs(window, level=LEVEL, largest=PLAUSIBLE)
    return [
        (tuple(zip(one.names, one.size, one.standard_error, strict=True)), one is found[0]) for one in found
    ]


def _is_plausible(one: Explanation) -> bool:
    return all(abs(size) <= PLAUSIBLE for _, size, _ in one[0])


def _answer(explained: Sequence[Explanation]) -> str:
    """Tell whether one thing is named: nothing else explains it by a size to be believed."""
    if not explained or len(explained[0][0]) > 1:
        return SEVERAL
    return ONE if sum(_is_plausible(one) for one in explained) == 1 else OPEN


def _suspect(
    unit: Unit,
    problem: Problem,
    cells: Cells,
    parts: tuple[tuple[str, float, float], ...],
    is_likeliest: bool,
) -> Suspect:
    """Lay out one explanation, with the figures without it."""
    right = cells
    for name, size, _ in parts:
        right = put_right(unit, problem, right, name, size)
    return Suspect(
        parts=tuple(
            Part(name, size, TWO_SIDED_95 * error, CHECKS[sort_of(unit, name)]) for name, size, error in parts
        ),
        is_likeliest=is_likeliest,
        is_plausible=_is_plausible((parts, is_likeliest)),
        without=main_figures(unit, problem, right)[1],
    )


def put_right(unit: Unit, problem: Problem, cells: Cells, cause: str, size: float) -> Cells:
    """Give cells without an instrument's reading, or with another cause taken out of every reading it moves.

    Parameters
    ----------
    unit : Unit
        The reactor.
    problem : Problem
        Its balance.
    cells : Cells
        Some of its cells.
    cause : str
        One of `fit.causes_of`.
    size : float
        Of the cause; an instrument is left out whatever its size.
    """
    columns = balance_columns(unit)
    value = cells.value.copy()
    if cause in problem.names:
        value[:, columns[problem.names.index(cause)]] = np.nan
        return replace(cells, value=value)
    readings = counted(unit, cells)
    causes = causes_of(unit, problem, readings)
    moved = causes.change[:, causes.names.index(cause)]
    offset = np.array([unit.instruments[at].offset for at in columns])
    # A reading that a cause does not move keeps its bits; one of zero has nothing to scale.
    whole = (moved != 0) & (readings.reading != 0)
    share = np.where(whole, 1.0 - size * moved / np.where(whole, readings.reading, 1.0), 1.0).T
    value[:, columns] = (value[:, columns] + offset) * share - offset
    return replace(cells, value=value)


def main_figures(unit: Unit, problem: Problem, cells: Cells) -> tuple[tuple[Figure, ...], tuple[float, ...]]:
    """Give the key figures of some cells in one window, as operated, with values; NaN where one is missing.

    Parameters
    ----------
    unit : Unit
        The reactor.
    problem : Problem
        Its balance.
    cells : Cells
        The window.
    """
    _, amounts = amounts_of(unit, problem, cells)
    figures = figures_of(unit, amounts.names)
    first, last = _span(unit, cells)
    value = window_at(unit, amounts, figures, first, last)["value"]
    main = key_figures(unit, figures)
    return main, tuple(float(value[one.name, "as operated"]) for one in main)


def sort_of(unit: Unit, cause: str) -> str:
    """Tell what sort of thing a cause is: a key of `CHECKS`.

    Parameters
    ----------
    unit : Unit
        The reactor.
    cause : str
        One of `fit.causes_of`.
    """
    one = next((one for one in unit.instruments if one.name == cause), None)
    if one is None:
        return "shared" if cause in {shared.name for shared in unit.shared} else "air"
    if one.tag is None:
        return "declared"
    return "channel" if one.analyzer else "flow meter" if one.kind in FLOW_KINDS else "other"


def as_table(found: Report) -> dict[str, Any]:
    """Lay a report out for other programs: times in ISO 8601 (UTC), windows in hours, null for not known.

    Parameters
    ----------
    found : Report
        Of one unit.
    """
    return {
        "unit": found.unit,
        "name": found.name,
        "span": _iso(found.span_us),
        "baseline": None if found.healthy_us is None else _iso(found.healthy_us),
        "false_share": found.false_share,
        "fits": [_row(asdict(one)) for one in found.fits],
        "findings": [_row(asdict(one)) for one in found.findings],
    }


def _iso(times_us: tuple[int, ...]) -> list[str]:
    return [f"{one}Z" for one in np.array(times_us).astype("datetime64[us]")]


def _row(table: Mapping[str, Any]) -> dict[str, Any]:
    """Turn times, durations and missing numbers of one row into what JSON can hold."""
    row: dict[str, Any] = {}
    for key, value in table.items():
        if key.endswith("_us"):
            row[key.removesuffix("_us")] = _iso((value,))[0]
        elif isinstance(value, timedelta):
            row[f"{key}_h"] = value / timedelta(hours=1)
        else:
            row[key] = _plain(value)
    return row


def _plain(value: Any) -> Any:
    if isinstance(value, dict):
        return _row(value)
    if isinstance(value, list | tuple):
        return [_plain(one) for one in value]
    return None if isinstance(value, float) and np.isnan(value) else value
