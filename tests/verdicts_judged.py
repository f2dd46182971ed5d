"""What is said of windows of made plants, and faults drawn to put into them (`tests/verdicts_made.py`)."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ingest.cells import Cells
from ingest.suspects import visible_sizes
from monitor.evidence import Evidence, evidence_of
from monitor.explain import answer
from monitor.healthy import baseline_of
from monitor.hypotheses import INSTRUMENT, REACTOR, UNSEEN, believed, hypotheses_of, suspects
from monitor.suspicion import main_figures
from tests.verdicts_made import Fault, Floats, Plant, rows_of, with_faults


@dataclass(frozen=True)
class Said:
    """What was said of one window: the word, the likeliest single name, and all that are suspected."""

    word: str
    reason: str
    top: str
    names: tuple[str, ...]


class Judge:
    """A plant with its healthy month learnt: says what moved in any window of it."""

    def __init__(self, made: Plant) -> None:
        self.made = made
        learnt = baseline_of(made.unit, made.problem, made.healthy, np.ones(len(made.problem.names), bool))
        assert learnt is not None
        self.baseline = learnt
        self.windows = made.windows()
        self.visible, self.by_balance = self._visible()
        self.names = [name for name, size in self.by_balance.items() if size < NEVER and name != UNSEEN]
        self.large = [name for name in self.names if self.by_balance[name] <= SEEN_BY_BALANCE]

    def evidence(self, cells: Cells) -> Evidence:
        found = evidence_of(self.made.unit, self.made.problem, self.baseline, cells)
        assert found is not None
        return found

    def say(self, cells: Cells) -> Said:
        evidence = self.evidence(cells)
        belief = believed(evidence, hypotheses_of(self.made.unit, evidence))
        single = np.array([kind in (INSTRUMENT, REACTOR) for kind in belief.kinds])
        top = belief.names[int(np.argmax(np.where(single, belief.chance, 0.0)))]
        return Said(*answer(belief), top, suspects(belief))

    def _visible(self) -> tuple[dict[str, float], dict[str, float]]:
        """Sizes that show in 90 of 100 windows: by all of the evidence, and by the balance alone."""
        evidence = self.evidence(rows_of(self.made.cells, self.windows[0]))
        whole, balance = {}, {}
        inside = slice(0, evidence.freedom)
        for one in hypotheses_of(self.made.unit, evidence):
            if one.kind in (INSTRUMENT, REACTOR) and one.direction.shape[1] == 1:
                whole[one.name] = _seen(evidence.covariance, one.direction[:, 0])
                balance[one.name] = _seen(evidence.covariance[inside, inside], one.direction[inside, 0])
        return whole, balance


def _seen(covariance: Floats, direction: Floats) -> float:
    told = direction @ np.linalg.solve(covariance, direction)
    return float(visible_sizes(1 / np.sqrt(max(told, 1e-12)), NAMES_TESTED))


NAMES_TESTED = 26  # causes that are tested together, instruments and the reaction


def yield_of(made: Plant, cells: Cells) -> float:
    """The yield on feed that is shown over some cells [%]."""
    figures, values = main_figures(made.unit, made.problem, cells)
    return dict(zip([one.name for one in figures], values, strict=True))["yield on feed"]


# --- faults drawn

NEVER = 1e3  # visible size of what leaves no trace
SEEN_BY_BALANCE = 0.3  # a channel that the balance sees only when it is off by more is one of a small product
SMALL, KEY, SLOWER, PRODUCT = "small channel", "channel of the key reactant", "conversion", "one by-product"
PARALLEL = (SMALL, KEY, SLOWER, PRODUCT)  # an instrument looks like the reaction there
LEAST, MOST = 0.5, 3.0  # sizes, in those that are visible


@dataclass(frozen=True)
class Trial:
    """Faults to put into one window, of which kind, and the word and name that would be right.

    `visible` is the size of a fault of an instrument in those that the balance shows in 90 of 100 windows.
    """

    kind: str
    faults: tuple[Fault, ...]
    word: str
    name: str = ""
    visible: float = 0.0


def trials(judge: Judge, each: int, seed: int) -> list[Trial]:
    """Some faults of every kind, 0.5 to 3 times as large as is visible."""
    rng = np.random.default_rng(seed)
    found = [_of_instrument(judge, name, rng) for name in judge.names * each]
    for _ in range(3 * each):
        found += _of_reaction(judge, rng)
    for _ in range(4 * each):
        found += _of_two(judge, rng)
    return found


def _of_instrument(judge: Judge, name: str, rng: np.random.Generator) -> Trial:
    kind = "channel or meter"
    if name.endswith(f" {judge.made.unit.key_reactant}"):
        kind = KEY
    elif name not in judge.large:
        kind = SMALL
    elif name.startswith("air"):
        kind = "air into the sample"
    elif name in {one.name for one in judge.made.unit.shared}:
        kind = "span"
    elif " in " in name:
        kind = "feed composition"
    fault = _off(judge, name, rng)
    return Trial(kind, (fault,), "instrument", name, abs(fault.size) / judge.by_balance[name])


def _off(judge: Judge, name: str, rng: np.random.Generator, least: float = LEAST) -> Fault:
    size = (judge.by_balance if name in judge.large else judge.visible)[name] * rng.uniform(least, MOST)
    return Fault(name, size if name.startswith("air") else size * rng.choice([-1, 1]))


def _burnt(rng: np.random.Generator, least: float = LEAST) -> Fault:
    """Wanted reaction that burns instead, half to CO and half to CO2."""
    return Fault("burnt", 0.02 * rng.uniform(least, MOST))


def _of_reaction(judge: Judge, rng: np.random.Generator) -> list[Trial]:
    size = rng.choice([-0.5, 1]) * rng.uniform(LEAST, MOST) * judge.visible["conversion"]
    slower = Fault("conversion", size / 3)  # of the rate; the unconverted share moves three times as much
    products = [name for name in judge.baseline.shares.names if name != "conversion"]
    product = Fault(str(rng.choice(products)), 0.004 * rng.uniform(LEAST, MOST))
    return [
        Trial("selectivity", (_burnt(rng),), "reactor"),
        Trial("selectivity and conversion", (_burnt(rng), slower), "reactor"),
        Trial(SLOWER, (slower,), "reactor"),
        Trial(PRODUCT, (product,), "reactor"),
        Trial("unseen product", (Fault("unseen", 0.012 * rng.uniform(LEAST, MOST)),), "reactor"),
    ]


def _of_two(judge: Judge, rng: np.random.Generator) -> list[Trial]:
    """Two that each are visible by themselves."""
    one, other = (_off(judge, name, rng, 1.0) for name in rng.choice(judge.large, 2, replace=False).tolist())
    return [
        Trial("two instruments", (one, other), "cannot tell"),
        Trial("reactor and instrument", (_burnt(rng, 1.0), one), "cannot tell"),
    ]


@dataclass(frozen=True)
class Result:
    """What was said of one trial, and how far the shown yield moved [points]."""

    trial: Trial
    said: Said
    moved: float


def tried(judge: Judge, each: int, seed: int) -> list[Result]:
    """Put every trial into some window."""
    rng = np.random.default_rng((seed, 1))
    usual: dict[int, float] = {}
    found = []
    for trial in trials(judge, each, seed):
        window = judge.windows[rng.integers(len(judge.windows))]
        cells = with_faults(judge.made, window, list(trial.faults))
        if window.start not in usual:
            usual[window.start] = yield_of(judge.made, rows_of(judge.made.cells, window))
        found.append(Result(trial, judge.say(cells), yield_of(judge.made, cells) - usual[window.start]))
    return found
