"""One window explained: the evidence weighed, and laid out as a verdict with all that it rests on."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from datetime import timedelta

import numpy as np
from numpy.typing import NDArray
from scipy.special import chdtrc

from ingest.balance import Problem
from ingest.cells import Cells
from ingest.conditions import CONDITIONS, GOOD
from ingest.unit import FLOW_KINDS, Unit
from monitor.amounts import amounts_of
from monitor.board import key_figures
from monitor.coordinates import AGE, operating_point, regressors
from monitor.evidence import Evidence, evidence_of
from monitor.figures import figures_of
from monitor.fit import counted, left_over
from monitor.healthy import BLOCK, Baseline
from monitor.hypotheses import (
    INSTRUMENT as OWN,
)
from monitor.hypotheses import (
    KINDS,
    MISFIT,
    NONE,
    SECOND,
    SEVERAL,
    Belief,
    Hypothesis,
    believed,
    hypotheses_of,
    suspects,
)
from monitor.losses import loss_of
from monitor.onset import calibrated_at, near, odds, onset_us
from monitor.settling import reactor_check, settling
from monitor.suspicion import CHECKS, put_right, sort_of
from monitor.verdict import (
    CANNOT,
    INSTRUMENT,
    NOTHING,
    REACTOR,
    Condition,
    Shift,
    Suspect,
    Verdict,
    Without,
)
from monitor.windows import TWO_SIDED_95, window_at

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]

SAY = 0.1  # chance that nothing moved, up to which anything is said
STATE = 0.9  # chance of a kind from which on it is stated
MOST = 5  # rows of each list of a verdict
LEFT_OUT = 3  # suspects without which the figures are worked out

NO_HEALTHY = "there is no healthy time to hold it against"
NO_CHECK = "no reading can be checked by the others, so that nothing speaks for or against an instrument"
TOO_LITTLE = "too little of the window can be told"
WEAK = "what is seen is still too weak to say more"
MIXED = "several causes at once, or one that is not in the list"
ALIKE = "what is seen fits an instrument as well as the reactor"
_US = timedelta(microseconds=1)

Learn = Callable[[bytes], Baseline | None]  # from which balance readings count, as bytes of flags


@dataclass(frozen=True, slots=True)
class Picture:
    """What some time looks like: figures, adjustments and operating point, by name.

    Parameters
    ----------
    figures : tuple of (str, str, float)
        Main figures with unit and value, as operated.
    adjustment : dict of str to float
        Mean adjustment of each balance reading [standard uncertainties].
    point : dict of str to float
        Mean of each part of the operating point, in its own unit.
    fed_kmol_h : float
        Key reactant fed.
    """

    figures: tuple[tuple[str, str, float], ...]
    adjustment: dict[str, float]
    point: dict[str, float]
    fed_kmol_h: float


@dataclass(frozen=True, slots=True)
class _Case:
    """One window under one unit file: where it stands, and what is held against what."""

    unit: Unit
    problem: Problem
    cells: Cells  # the window and some time before it
    window: Cells
    baseline: Baseline
    evidence: Evidence


@dataclass(frozen=True, slots=True)
class Reference:
    """The healthy time, ready to hold any window against: its span [us UTC], picture, what is learnt."""

    span_us: tuple[int, ...]
    is_stated: bool
    picture: Picture | None
    learn: Learn


def picture_of(unit: Unit, problem: Problem, cells: Cells) -> Picture:
    """Give what some time looks like.

    Parameters
    ----------
    unit : Unit
        The reactor.
    problem : Problem
        Its balance.
    cells : Cells
        That time.
    """
    states, amounts = amounts_of(unit, problem, cells)
    every = figures_of(unit, amounts.names)
    last = int(cells.start[-1]) + unit.cell // _US
    value = window_at(unit, amounts, every, int(cells.start[0]), last)["value"]
    sums = dict(zip(amounts.names, np.nansum(amounts.kmol, axis=0).tolist(), strict=True))
    fed = amounts.kmol[:, amounts.names.index(f"fed {unit.key_reactant}")]
    mean = _means(states.adjustment)
    return Picture(
        figures=(
            *(
                (one.name, one.unit, float(value[one.name, "as operated"]))
                for one in key_figures(unit, every)
            ),
            *_routes(unit, sums),
        ),
        adjustment=dict(zip(problem.names, mean.tolist(), strict=True)),
        point=_point(unit, cells),
        fed_kmol_h=float(_means(fed[:, None])[0] / (unit.cell / timedelta(hours=1))),
    )


def _routes(unit: Unit, sums: Mapping[str, float]) -> list[tuple[str, str, float]]:
    """Give the selectivity by raw readings along two routes; a sick reading moves those that it stands in."""
    element = unit.key_element
    wanted = sums.get(f"raw made {element} in {unit.wanted}")
    routes = {
        "consumed": sums.get(f"raw consumed {element}"),
        "all products": sums.get(f"raw made {element}"),
    }
    return [
        (f"raw selectivity over {name}", "%", 100 * wanted / below if below else np.nan)
        for name, below in routes.items()
        if wanted is not None and below is not None
    ]


def _means(value: Floats) -> Floats:
    """Give the means of columns over what is there, NaN where nothing is."""
    there = np.isfinite(value)
    count = there.sum(axis=0)
    return np.where(count > 0, np.where(there, value, 0.0).sum(axis=0) / np.maximum(count, 1), np.nan)


def _point(unit: Unit, cells: Cells) -> dict[str, float]:
    kind = {one.name: one.kind for one in unit.instruments}
    mean = _means(operating_point(unit, cells))
    return {
        name: float(np.exp(value) if kind.get(name) in FLOW_KINDS else value)
        for name, value in zip(regressors(unit), mean.tolist(), strict=True)
    }


def explain(
    unit: Unit,
    problem: Problem,
    reference: Reference,
    cells: Cells,
    first_us: int,
    *,
    is_provisional: bool,
    mark: str,
) -> Verdict:
    """Say whether the reactor moved, or an instrument, or that it cannot be told.

    Parameters
    ----------
    unit : Unit
        The reactor.
    problem : Problem
        Its balance.
    reference : Reference
        The healthy time.
    cells : Cells
        The window and some time before it, on one grid without holes.
    first_us : int
        Start of the window [us UTC].
    is_provisional : bool
        Whether the window does not hold eight hours after the onset yet.
    mark : str
        What the verdict is known by.
    """
    window = Cells(*(getattr(cells, name)[cells.start >= first_us] for name in Cells.__slots__))
    blank = _blank(unit, reference, window, is_provisional, mark)
    there = np.isfinite(counted(unit, window).reading).any(axis=1)
    baseline = reference.learn(there.tobytes())
    if not left_over(unit, problem, window).freedom.any():
        return replace(blank, reason=TOO_LITTLE if not there.any() else NO_CHECK)
    if baseline is None or reference.picture is None:
        return replace(blank, reason=NO_HEALTHY)
    evidence = evidence_of(unit, problem, baseline, window)
    if evidence is None:
        return replace(blank, reason=TOO_LITTLE)
    case = _Case(unit, problem, cells, window, baseline, evidence)
    hypotheses = hypotheses_of(unit, evidence)
    belief = believed(evidence, hypotheses)
    since, calibrated = _since(case, hypotheses, belief)
    if calibrated:
        known = _odds(case, belief, hypotheses, calibrated)
        belief = believed(evidence, hypotheses, odds=known)
    dated = replace(blank, onset_us=since, calibrated=calibrated)
    return _laid_out(case, reference.picture, belief, dated)


def _blank(unit: Unit, reference: Reference, window: Cells, is_provisional: bool, mark: str) -> Verdict:
    """Give the verdict of which nothing is known yet."""
    return Verdict(
        word=CANNOT, reason="", is_provisional=is_provisional, first_us=int(window.start[0]),
        last_us=int(window.start[-1]) + unit.cell // _US, healthy_us=reference.span_us,
        is_healthy_stated=reference.is_stated, onset_us=None, calibrated="", chances=(), suspects=(),
        balance_p=np.nan, reaction_p=np.nan, misfit_p=np.nan, closures=(), adjustments=(), operating=(),
        outside=(), conditions=_conditions(unit, window), figures=(), loss=None, settle=(), mark=mark,
    )  # fmt: skip


def _since(case: _Case, hypotheses: Sequence[Hypothesis], belief: Belief) -> tuple[int | None, str]:
    """Tell the onset of the likeliest hypothesis, and what was calibrated just then."""
    if belief.chance[0] > SAY:
        return None, ""
    best = hypotheses[1 + int(np.argmax(belief.chance[1:]))]
    direction = _along(case.evidence, best.direction)
    unit, cells = case.unit, case.cells
    since = onset_us(unit, case.problem, case.baseline, case.evidence, cells, direction=direction)
    if since is None:
        return None, ""
    times = calibrated_at(unit, cells)
    return since, next((name for name, at in times.items() if near(unit, at, since)), "")


def _along(evidence: Evidence, direction: Floats) -> Floats:
    """Give the one direction among several in which the evidence lies."""
    lean = np.linalg.solve(evidence.covariance, direction)
    size = np.linalg.lstsq(direction.T @ lean, lean.T @ evidence.value, rcond=None)[0]
    return np.asarray(direction @ size)


def _odds(case: _Case, belief: Belief, hypotheses: Sequence[Hypothesis], name: str) -> Floats:
    start = case.cells.start
    length = (int(start[-1]) - int(start[0])) / (BLOCK // _US) + 1
    hours = {at // (BLOCK // _US) for at in calibrated_at(case.unit, case.cells)[name]}
    share = min(1.0, 3 * len(hours) / length)
    return odds(case.unit, belief, hypotheses, name, share)


def _laid_out(case: _Case, before: Picture, belief: Belief, blank: Verdict) -> Verdict:
    """Lay out what is believed with all that it rests on."""
    unit, evidence = case.unit, case.evidence
    word, reason = answer(belief)
    now = picture_of(unit, case.problem, case.window)
    told = () if word == NOTHING else _suspects(unit, belief)
    balance, reaction = _tested(evidence)
    return replace(
        blank,
        word=word,
        reason=reason,
        chances=tuple((kind, belief.of_kind(kind)) for kind in KINDS),
        suspects=told,
        balance_p=balance,
        reaction_p=reaction,
        misfit_p=belief.misfit,
        closures=_closures(before, now),
        adjustments=_adjustments(before, now),
        operating=_operating(unit, before, now),
        outside=tuple(name for name, _ in evidence.outside),
        figures=_without(case, now, told),
        loss=loss_of(unit, evidence, now.fed_kmol_h),
        settle=settling(unit, [(one.name, one.kind) for one in told])
        if word == CANNOT or len(told) > 1
        else (),
    )


def answer(belief: Belief) -> tuple[str, str]:
    """Give the word of a verdict, and why it cannot be told where it cannot.

    Parameters
    ----------
    belief : Belief
        Of one window.
    """
    nothing = belief.of_kind(NONE)
    if nothing > SAY:
        return (NOTHING, "") if nothing > 1 - nothing else (CANNOT, WEAK)
    if belief.misfit < MISFIT or belief.second < SECOND:
        return CANNOT, MIXED
    for kind, word in ((OWN, INSTRUMENT), (REACTOR, REACTOR)):
        if belief.of_kind(kind) > STATE:
            return word, ""
    others = belief.of_kind(OWN) + belief.of_kind(REACTOR)
    return CANNOT, MIXED if belief.of_kind(SEVERAL) > others else ALIKE


def _suspects(unit: Unit, belief: Belief) -> tuple[Suspect, ...]:
    found = []
    for name in suspects(belief):
        places = [i for i, one in enumerate(belief.names) if one == name]
        best = max(places, key=lambda i: float(belief.chance[i]))
        kind = belief.kinds[best]
        sort = sort_of(unit, name) if kind == OWN else ""
        check = CHECKS[sort] if sort else reactor_check(name)
        chance = float(belief.chance[places].sum())
        wide = TWO_SIDED_95 * float(belief.standard_error[best])
        found.append(Suspect(name, kind, chance, float(belief.size[best]), wide, check, sort))
    return tuple(found)


def _tested(evidence: Evidence) -> tuple[float, float]:
    """Give the chance of the residuals and of the coordinates, each by themselves, while all is well."""
    found = []
    for part in (slice(0, evidence.freedom), slice(evidence.freedom, None)):
        value, covariance = evidence.value[part], evidence.covariance[part, part]
        statistic = value @ np.linalg.solve(covariance, value) if len(value) else 0.0
        found.append(float(chdtrc(len(value), statistic)) if len(value) else np.nan)
    return found[0], found[1]


def _closures(before: Picture, now: Picture) -> tuple[Shift, ...]:
    pairs = zip(before.figures, now.figures, strict=True)
    return tuple(Shift(old[0], old[1], old[2], new[2]) for old, new in pairs)


def _adjustments(before: Picture, now: Picture) -> tuple[Shift, ...]:
    """Give the adjustments that changed most."""
    shifts = [Shift(name, "", before.adjustment[name], new) for name, new in now.adjustment.items()]
    told = [one for one in shifts if np.isfinite(one.now - one.before)]
    return tuple(sorted(told, key=lambda one: -abs(one.now - one.before))[:MOST])


def _operating(unit: Unit, before: Picture, now: Picture) -> tuple[Shift, ...]:
    units = {one.name: one.unit for one in unit.instruments} | {AGE: "d"}
    return tuple(Shift(name, units[name], before.point[name], new) for name, new in now.point.items())


def _conditions(unit: Unit, window: Cells) -> tuple[Condition, ...]:
    """Give the readings of a window that were not good, those that were so most often first."""
    found = []
    for place, one in enumerate(unit.instruments):
        codes, counts = np.unique(window.condition[:, place], return_counts=True)
        for code, count in zip(codes.tolist(), counts.tolist(), strict=True):
            if code != GOOD:
                found.append(Condition(one.name, CONDITIONS[code], count / len(window.start)))
    return tuple(sorted(found, key=lambda one: -one.share)[:MOST])


def _without(case: _Case, now: Picture, told: Sequence[Suspect]) -> tuple[Without, ...]:
    """Give the main figures without each of the first instruments that are suspected."""
    unit, problem, window = case.unit, case.problem, case.window
    found = []
    for one in [one for one in told if one.kind == OWN][:LEFT_OUT]:
        right = picture_of(unit, problem, put_right(unit, problem, window, one.name, one.size)).figures
        for (name, measure, shown), (_, _, value) in zip(now.figures, right, strict=True):
            found.append(Without(name, measure, shown, one.name, value))
    return tuple(found)
