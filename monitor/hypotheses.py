"""What may have moved, and how likely each of it is, given the evidence of one window.

Each hypothesis says in which directions the evidence moves; sizes are not known, so each has a normal law of
mean zero, at several spreads at once (from a slight fault to a gross one). What the evidence then says is the
normal density with a covariance that is wider by the hypothesis: no free parameter is fitted, and a
hypothesis with more directions pays for them (Bayes factors of linear models, Jeffreys 1961, from memory).
For a single bias the size of greatest likelihood is that of the measurement test (Mah & Tamhane 1982).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.special import chdtrc, log_ndtr, logsumexp

from ingest.instruments import balance_instruments
from ingest.suspects import RIVAL
from ingest.unit import Unit
from monitor.evidence import Evidence, bent

Floats = NDArray[np.float64]

NONE, INSTRUMENT, REACTOR, SEVERAL = KINDS = ("nothing", "instrument", "reactor", "several")
BOTH = "conversion and by-products"
UNSEEN = "a product that no channel sees"
AIR = "air into the sample of "

SPREADS = (0.01, 0.04, 0.16, 0.64)  # of sizes, as fractions; the same for all (on the high side, no source)
# Odds before any evidence: half the alerts of a plant have nothing behind them that lasts (no source).
PRIOR_NONE = 0.5
PRIOR_OWN = 1.0  # of each instrument, against which the others are weighed
PRIOR_SHARED, PRIOR_AIR = 1.0, 1.0
PRIOR_CONVERSION, PRIOR_PRODUCT, PRIOR_BOTH = 2.0, 1.0, 2.0
# Oxygen that an unseen product takes per wanted one [mol/mol], and the odds of it; just as much as the wanted
# product itself is what only its isomers and oligomers do.
UNSEEN_OXYGEN = {-1.0: 0.2, 0.0: 0.02, 1.0: 0.26, 2.0: 0.26, 4.0: 0.26}
PRIOR_UNSEEN = 1.0
PRIOR_SEVERAL = 0.05  # that two things moved at once, of all cases in which something did

BENDS = 3  # rounds in which directions and sizes settle
MISFIT = 0.003  # chance of so poor a fit of the best hypothesis by itself
SECOND = 0.003  # chance that a second cause explains so much by itself, over all of them
SET = 0.95  # chance that a set of names holds the right one


@dataclass(frozen=True, slots=True)
class Hypothesis:
    """Something that may have moved.

    Parameters
    ----------
    name, kind : str
        A cause of the balance, a coordinate, `BOTH` or `UNSEEN`; one of `KINDS`.
    direction : array (d, r)
        Change of the evidence per unit of each of its r sizes.
    prior : float
        Odds before any evidence, against those of the others.
    sign : float
        1 where only sizes above zero are possible, else 0.
    """

    name: str
    kind: str
    direction: Floats
    prior: float
    sign: float = 0.0


@dataclass(frozen=True, slots=True)
class Belief:
    """How likely each hypothesis is after the evidence.

    Parameters
    ----------
    names, kinds : tuple of str
        The n hypotheses, the first is that nothing moved.
    chance : array (n,)
        Adds up to one.
    size, standard_error : array (n,)
        Most likely size of those with one direction, NaN of others.
    misfit : float
        Chance of so poor a fit of the likeliest by itself.
    second : float
        Chance that some second cause explains so much more by itself.
    evidence : array (n,)
        Log of how much better each explains the evidence than that nothing moved, whatever its odds.
    """

    names: tuple[str, ...]
    kinds: tuple[str, ...]
    chance: Floats
    size: Floats
    standard_error: Floats
    misfit: float
    second: float
    evidence: Floats

    def of_kind(self, kind: str) -> float:
        """Give the chance of all hypotheses of a kind.

        Parameters
        ----------
        kind : str
            One of `KINDS`.
        """
        return float(self.chance[[one == kind for one in self.kinds]].sum())


def hypotheses_of(unit: Unit, evidence: Evidence) -> tuple[Hypothesis, ...]:
    """Give everything that may have moved, that nothing did first.

    Parameters
    ----------
    unit : Unit
        The reactor.
    evidence : Evidence
        Of one window.
    """
    evidence = _at_their_sizes(evidence)
    nothing = Hypothesis(NONE, NONE, np.zeros((len(evidence.value), 0)), 0.0)
    found = [*_of_instruments(unit, evidence), *_of_reaction(evidence), *_unseen(unit, evidence)]
    single = [one for one in found if np.linalg.norm(one.direction) > 0]
    return (nothing, *single, *_pairs(single))


def _pairs(single: Sequence[Hypothesis]) -> list[Hypothesis]:
    """Two instruments at once, or an instrument and the reaction; as likely as the two are by themselves."""
    own = [one for one in single if one.kind == INSTRUMENT]
    reaction = [one for one in single if one.name == BOTH]
    chosen = [(one, other) for i, one in enumerate(own) for other in (*own[i + 1 :], *reaction)]
    odds = np.array([one.prior * other.prior for one, other in chosen])
    odds *= PRIOR_SEVERAL / (1 - PRIOR_SEVERAL) * sum(one.prior for one in single) / max(odds.sum(), 1e-300)
    return [
        Hypothesis(
            f"{one.name} and {other.name}", SEVERAL, np.hstack([one.direction, other.direction]), prior
        )
        for (one, other), prior in zip(chosen, odds.tolist(), strict=True)
    ]


def _at_their_sizes(evidence: Evidence) -> Evidence:
    """Give each cause the direction that it has at its likeliest size."""
    inverse = np.linalg.inv(evidence.covariance)
    found = evidence
    for _ in range(BENDS):
        lean = inverse @ found.response
        told = (lean * found.response).sum(axis=0)
        size = (lean.T @ found.value) / np.where(told > 0, told, np.inf)
        found = replace(found, response=bent(evidence, size))
    return found


def _of_instruments(unit: Unit, evidence: Evidence) -> list[Hypothesis]:
    shared = {one.name for one in unit.shared}
    found = []
    for name, direction in zip(evidence.causes, evidence.response.T, strict=True):
        is_air = name.startswith(AIR)
        prior = PRIOR_AIR if is_air else PRIOR_SHARED if name in shared else PRIOR_OWN
        found.append(Hypothesis(name, INSTRUMENT, direction[:, None], prior, float(is_air)))
    return found


def _of_reaction(evidence: Evidence) -> list[Hypothesis]:
    """Each coordinate by itself, and all of them; nothing of it moves the balance."""
    count = len(evidence.coordinates)
    moves = np.vstack([np.zeros((evidence.freedom, count)), np.eye(count)])
    found = [
        Hypothesis(name, REACTOR, moves[:, i, None], PRIOR_PRODUCT if i else PRIOR_CONVERSION)
        for i, name in enumerate(evidence.coordinates)
    ]
    return [*found, Hypothesis(BOTH, REACTOR, moves, PRIOR_BOTH)] if count > 1 else found


def _unseen(unit: Unit, evidence: Evidence) -> list[Hypothesis]:
    """Something forms from the wanted product, with more or less oxygen, that no channel sees."""
    seen = balance_instruments(unit)
    channels = [i for i, one in enumerate(seen) if _counts(one.species, unit.wanted) and one.tag]
    oxygen = next((one.name for one in unit.species if one.formula == "O2" and not one.inert), None)
    oxygens = [i for i, one in enumerate(seen) if oxygen and _counts(one.species, oxygen)]
    streams = {seen[i].stream for i in channels}
    found = []
    for taken, odds in UNSEEN_OXYGEN.items():
        change = np.zeros(len(seen))
        for i in channels:
            change[i] = -evidence.reading[i]
            for k in (k for k in oxygens if taken and seen[k].stream in streams):
                change[k] = -taken * evidence.reading[i]
        if taken == 0 or (oxygens and channels):
            direction = evidence.by_reading @ np.nan_to_num(change)
            found.append(Hypothesis(UNSEEN, REACTOR, direction[:, None], PRIOR_UNSEEN * odds, 1.0))
    return found


def _counts(species: tuple[str, ...], name: str) -> bool:
    return species == (name,)


def believed(evidence: Evidence, hypotheses: Sequence[Hypothesis], *, odds: Floats | None = None) -> Belief:
    """Weigh the hypotheses by the evidence.

    Parameters
    ----------
    evidence : Evidence
        Of one window.
    hypotheses : sequence of Hypothesis
        That nothing moved first.
    odds : array (n,), optional
        What else is known, as a factor on the odds of each.
    """
    inverse = np.asarray(np.linalg.inv(evidence.covariance), dtype=np.float64)
    prior = np.array([one.prior for one in hypotheses])
    prior = (1 - PRIOR_NONE) * prior / prior.sum()
    prior[0] = PRIOR_NONE
    prior = prior if odds is None else prior * odds
    gain = np.array([_log_marginal(evidence.value, inverse, one) for one in hypotheses])
    weight = gain + np.log(prior)
    chance = np.exp(weight - logsumexp(weight))
    size, error = (
        np.array(part)
        for part in zip(*(_size(evidence.value, inverse, one) for one in hypotheses), strict=True)
    )
    misfit, second = _left_over(
        evidence.value, inverse, hypotheses, _widest(hypotheses, int(np.argmax(chance)))
    )
    return Belief(
        names=tuple(one.name for one in hypotheses),
        kinds=tuple(one.kind for one in hypotheses),
        chance=chance,
        size=size,
        standard_error=error,
        misfit=misfit,
        second=second,
        evidence=gain,
    )


def _log_marginal(value: Floats, inverse: Floats, one: Hypothesis) -> float:
    """Give the log density of the evidence, against that of nothing, averaged over the spreads."""
    lean = inverse @ one.direction
    told, axes = np.linalg.eigh(one.direction.T @ lean)
    score = (lean @ axes).T @ value
    wide = 1.0 + np.square(SPREADS)[:, None] * told
    inner = np.square(SPREADS)[:, None] * score / wide
    gain = (inner @ score - np.log(wide).sum(axis=1)) / 2
    if one.sign:
        # the axis of the one direction may point either way
        side = one.sign * axes[0, 0] * inner[:, 0] * np.sqrt(wide[:, 0]) / SPREADS
        gain = gain + np.log(2.0) + log_ndtr(side)
    return float(logsumexp(gain) - np.log(len(SPREADS)))


def _size(value: Floats, inverse: Floats, one: Hypothesis) -> tuple[float, float]:
    if one.direction.shape[1] != 1:
        return np.nan, np.nan
    lean = inverse @ one.direction[:, 0]
    told = lean @ one.direction[:, 0]
    return float(lean @ value / told), float(1 / np.sqrt(told))


def _widest(hypotheses: Sequence[Hypothesis], best: int) -> int:
    """Take all coordinates together for one of them: a real change seldom moves just one."""
    names = [one.name for one in hypotheses]
    best_one = hypotheses[best]
    is_reaction = best_one.kind == REACTOR and best_one.name != UNSEEN
    return names.index(BOTH) if is_reaction and BOTH in names else best


def _left_over(
    value: Floats, inverse: Floats, hypotheses: Sequence[Hypothesis], best: int
) -> tuple[float, float]:
    """Tell how likely what the best leaves is by itself, in all and along the likeliest second cause."""
    freed = _without(inverse, hypotheses[best].direction)
    freedom = len(value) - hypotheses[best].direction.shape[1]
    misfit = float(chdtrc(max(freedom, 1), max(value @ freed @ value, 0.0)))
    ratios = [
        _gain(value, freed, inverse, one.direction)
        for one in hypotheses[1:]
        if one.direction.shape[1] == 1 and one.kind != SEVERAL
    ]
    single = float(chdtrc(1, max(ratios, default=0.0)))
    return misfit, float(1 - (1 - single) ** max(freedom, 1))


def _without(inverse: Floats, direction: Floats) -> Floats:
    """Give the inverse covariance in which some directions no longer count."""
    lean = inverse @ direction
    return np.asarray(inverse - lean @ np.linalg.pinv(direction.T @ lean) @ lean.T)


def _gain(value: Floats, freed: Floats, inverse: Floats, direction: Floats) -> float:
    told = float((direction.T @ freed @ direction)[0, 0])
    whole = float((direction.T @ inverse @ direction)[0, 0])
    if told < 1e-2 * whole:
        return 0.0  # it is all but the same as the best
    return float((direction.T @ freed @ value)[0] ** 2 / told)


def suspects(belief: Belief) -> tuple[str, ...]:
    """Give the names that together hold `SET` of the chance that something moved, with all like them.

    Parameters
    ----------
    belief : Belief
        Of one window.
    """
    single = np.array([kind in (INSTRUMENT, REACTOR) for kind in belief.kinds])
    order = [i for i in np.argsort(-belief.chance, kind="stable") if single[i]]
    total = float(belief.chance[single].sum())
    held, told = 0.0, []
    for i in order:
        if held >= SET * total:
            break
        told.append(i)
        held += float(belief.chance[i])
    best = order[0]
    like = [i for i in order if belief.evidence[i] > belief.evidence[best] - RIVAL / 2]
    return tuple(dict.fromkeys(belief.names[i] for i in (*told, *(i for i in like if i not in told))))
