"""The table of figures: what each one is a ratio of, in which unit, and which way is better.

A figure is `scale * numerator / denominator` of amount sums, or for a make `scale * numerator` per
running hour. Nothing here judges: too little data, a gap or a doubtful denominator is the affair of
`windows`. Values below 0 or above 100 % are shown as they are.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from ingest.chemistry import ELEMENT_NAMES
from ingest.unit import Species, Unit

Array = NDArray[np.float64]


# Only an ideally mixed vessel at steady state has its outlet composition everywhere inside.
INSTANTANEOUS = {
    "well-mixed": "At steady state, with neither of them fed, it is also the instantaneous selectivity.",
    "packed bed": "Outlet data do not give the instantaneous selectivity of a packed bed.",
    "batch": "The instantaneous selectivity is the slope between samples, not this ratio.",
}


@dataclass(frozen=True, slots=True)
class Figure:
    """One figure: `scale * (numerator . sums) / (denominator . sums)`.

    Weights are per amount name; `denominator` None means per running hour that the sums cover.
    `amounts` is the amount axis of every array of sums given to `evaluate`. `higher_is_better` is None
    where neither direction is good (a closure).
    """

    name: str
    label: str
    unit: str
    numerator: Mapping[str, float]
    denominator: Mapping[str, float] | None
    scale: float
    definition: str
    higher_is_better: bool | None
    amounts: tuple[str, ...]

    @property
    def needs(self) -> tuple[str, ...]:
        """Amounts with a weight."""
        return tuple({**self.numerator, **(self.denominator or {})})


def figures_of(unit: Unit, amount_names: Sequence[str]) -> tuple[Figure, ...]:
    """Every figure of the unit whose amounts are all there, in the order they are read.

    Parameters
    ----------
    unit : Unit
        One reactor.
    amount_names : sequence of str
        The amount axis, as in `Amounts.names`.

    Returns
    -------
    tuple of Figure
        A figure that needs an absent amount, or whose product holds none of the key element, is not
        there at all.
    """
    names = tuple(amount_names)
    have = set(names)
    species = {one.name: one for one in unit.species}
    of_the_feed = _of_the_feed(unit, species, names)
    table = [
        *(_around(one, "the whole unit") if unit.nodes else one for one in of_the_feed),
        *_per_pass(unit, of_the_feed, names),
        *_selectivities(unit, names),
        *_instantaneous(unit, names),
        *_shares(unit, species, names),
        *_closures(unit, names),
        *_makes(unit, species, names),
        *_consumptions(unit, species, names),
    ]
    return tuple(figure for figure in table if have.issuperset(figure.needs) and figure.scale != 0)


def weights(figure: Figure) -> tuple[Array, Array | None]:
    """Give numerator and denominator as rows over the amount axis.

    Parameters
    ----------
    figure : Figure
        Any figure.

    Returns
    -------
    numerator : ndarray, shape (p,)
        Weight of each amount.
    denominator : ndarray, shape (p,), or None
        None for a make.
    """
    if figure.denominator is None:
        return _row(figure.numerator, figure.amounts), None
    return _row(figure.numerator, figure.amounts), _row(figure.denominator, figure.amounts)


def evaluate(figure: Figure, sums: Array, *, hours: Array | float = 1.0) -> tuple[Array, Array]:
    """Value of a figure and its gradient with respect to the amount sums, unjudged and unclipped.

    Parameters
    ----------
    figure : Figure
        Any figure.
    sums : ndarray, shape (rows, p)
        Sums of amounts over some span, on the axis `figure.amounts` [kmol].
    hours : ndarray, shape (rows,), or float
        Running hours the sums cover; only a make uses it [h].

    Returns
    -------
    value : ndarray, shape (rows,)
        In the figure's unit; NaN where the denominator is 0 or a needed amount is NaN.
    gradient : ndarray, shape (rows, p)
        Change of the value per kmol of each amount; NaN where the value is; 0 for amounts not needed.
    """
    numerator, denominator = weights(figure)
    top = weighted(sums, numerator)
    if denominator is None:
        value, by_top, _ = quotient(
            top, np.broadcast_to(np.asarray(hours, dtype=float), top.shape), figure.scale
        )
        return value, by_top[:, None] * numerator
    value, by_top, by_bottom = quotient(top, weighted(sums, denominator), figure.scale)
    return value, by_top[:, None] * numerator + by_bottom[:, None] * denominator


def quotient(top: Array, bottom: Array, scale: float) -> tuple[Array, Array, Array]:
    """Give `scale * top / bottom` with its two derivatives; never infinite.

    Parameters
    ----------
    top, bottom : ndarray, shape (rows,)
        Numerator and denominator [kmol, or h below a make].
    scale : float
        What turns their ratio into the figure's unit.

    Returns
    -------
    value, by_top, by_bottom : ndarray, shape (rows,)
        NaN where the denominator is 0 or so small that the ratio overflows.
    """
    with np.errstate(over="ignore", invalid="ignore"):
        inverse = 1.0 / np.where(bottom == 0, np.nan, bottom)
        value = scale * top * inverse
        by_top, by_bottom = scale * inverse, -value * inverse
    bad = ~(np.isfinite(value) & np.isfinite(by_bottom))
    return tuple(np.where(bad, np.nan, one) for one in (value, by_top, by_bottom))  # type: ignore[return-value]


def weighted(sums: Array, row: Array) -> Array:
    """Sum the amounts times their weights; an unseen amount without weight does no harm.

    Parameters
    ----------
    sums : ndarray, shape (rows, p)
        Amounts [kmol].
    row : ndarray, shape (p,)
        Weights.

    Returns
    -------
    ndarray, shape (rows,)
        NaN where an amount with a weight is NaN [kmol].
    """
    used = np.flatnonzero(row)
    return np.asarray(sums)[:, used] @ row[used]


def _row(mapping: Mapping[str, float], names: tuple[str, ...]) -> Array:
    """Lay weights by name out over the amount axis."""
    return np.array([mapping.get(name, 0.0) for name in names])


def _atoms(species: Species, element: str) -> float:
    """Atoms of an element in one molecule; 0 if there are none."""
    return dict(species.atoms).get(element, 0.0)


def _factor(unit: Unit, species: Mapping[str, Species], product: str) -> float:
    """Moles of key reactant that the key element in one mole of product stands for (e_P/e_A)."""
    element = unit.key_element
    return _atoms(species[product], element) / _atoms(species[unit.key_reactant], element)


def _called(symbol: str) -> str:
    """Give an element's name in a sentence; its symbol where the trade uses that."""
    return ELEMENT_NAMES.get(symbol, symbol)


def _of_the_feed(unit: Unit, species: Mapping[str, Species], names: tuple[str, ...]) -> list[Figure]:
    """Conversion, selectivity on converted, yield on feed."""
    key, wanted = unit.key_reactant, unit.wanted
    fed, consumed, made = {f"fed {key}": 1.0}, {f"consumed {key}": 1.0}, {f"made {wanted}": 1.0}
    scale = 100 * _factor(unit, species, wanted)
    element = _called(unit.key_element)
    return [
        Figure(
            "conversion",
            f"Conversion of {key}",
            "%",
            consumed,
            fed,
            100.0,
            f"Part of the {key} fed that was consumed (in minus out).",
            True,
            names,
        ),
        Figure(
            "selectivity on converted",
            f"Selectivity to {wanted} on converted {key}",
            "%",
            made,
            consumed,
            scale,
            f"Share of the {element} of the consumed {key} that is in the {wanted} made.",
            True,
            names,
        ),
        Figure(
            "yield on feed",
            f"Yield of {wanted} on {key} fed",
            "%",
            made,
            fed,
            scale,
            f"Share of the {element} of the {key} fed that is in the {wanted} made; "
            "conversion times selectivity on converted.",
            True,
            names,
        ),
    ]


def _per_pass(unit: Unit, of_the_feed: Sequence[Figure], names: tuple[str, ...]) -> list[Figure]:
    """Give conversion, selectivity and yield around the reactor alone, and the recycle ratio.

    Selectivity is the same around both, since nothing but the reactor reacts; it stands beside its two
    companions so that nobody has to know.
    """
    fed, fed_per_pass = f"fed {unit.key_reactant}", f"fed {unit.key_reactant} per pass"
    if not unit.nodes:
        return []
    passes = [
        replace(
            _around(whole, "the reactor alone"),
            name=f"{whole.name} per pass",
            label=f"{whole.label}, per pass",
            denominator={fed_per_pass if name == fed else name: 1.0 for name in whole.denominator or ()},
        )
        for whole in of_the_feed
    ]
    fresh, recycle = (_said(unit, role) for role in ("fresh feed", "recycle"))
    ratio = Figure(
        "recycle ratio",
        f"Recycle ratio, {recycle} over {fresh}",
        "mol/mol",
        {"recycled": 1.0},
        {"fresh feed": 1.0},
        1.0,
        f"Moles of recycle ({recycle}) per mole of fresh feed ({fresh}), all species together.",
        None,
        names,
    )
    return [*passes, ratio]


def _around(figure: Figure, what: str) -> Figure:
    """Say in its definition what a figure is drawn around."""
    return replace(figure, definition=f"Around {what}: {figure.definition[0].lower()}{figure.definition[1:]}")


def _said(unit: Unit, role: str) -> str:
    """Name the streams of one role in a sentence."""
    return " and ".join(stream.name for stream in unit.streams if stream.role == role)


def _selectivities(unit: Unit, names: tuple[str, ...]) -> list[Figure]:
    """Overall selectivity, wanted over unwanted, to each unwanted product and to all together."""
    targets = [*unit.unwanted, "all unwanted"]
    return [
        Figure(
            f"overall selectivity to {one}",
            f"Overall selectivity, {unit.wanted} over {one}",
            "mol/mol",
            {f"made {unit.wanted}": 1.0},
            {f"made {one}": 1.0},
            1.0,
            f"Mol {unit.wanted} made per mol {one} made (out minus in). {INSTANTANEOUS[unit.reactor]}",
            True,
            names,
        )
        for one in targets
    ]


def _instantaneous(unit: Unit, names: tuple[str, ...]) -> list[Figure]:
    """Give the ratio of rates of formation, wanted over unwanted; there only with a stated hold-up."""
    return [
        Figure(
            f"instantaneous selectivity to {one}",
            f"Instantaneous selectivity, {unit.wanted} over {one}",
            "mol/mol",
            {f"formed {unit.wanted}": 1.0},
            {f"formed {one}": 1.0},
            1.0,
            f"Rate at which {unit.wanted} forms inside the reactor over that of {one}: out minus in, plus "
            "what the contents gain, which have the composition of the outlet. At steady state it is the "
            "overall one.",
            True,
            names,
        )
        for one in (*unit.unwanted, "all unwanted")
    ]


def _shares(unit: Unit, species: Mapping[str, Species], names: tuple[str, ...]) -> list[Figure]:
    """Where the consumed key reactant went: each unwanted product and what no product accounts for."""
    key, consumed = unit.key_reactant, {f"consumed {unit.key_reactant}": 1.0}
    factors = {one: _factor(unit, species, one) for one in (unit.wanted, *unit.unwanted)}
    unseen = consumed | {f"made {one}": -factor for one, factor in factors.items() if factor}
    element = _called(unit.key_element)
    return [
        *(
            Figure(
                f"share of {one}",
                f"Share of converted {key} that became {one}",
                "%",
                {f"made {one}": 1.0},
                consumed,
                100 * factors[one],
                f"Share of the {element} of the consumed {key} that is in the {one} made.",
                False,
                names,
            )
            for one in unit.unwanted
        ),
        Figure(
            "share of unseen",
            f"Share of converted {key} that no named product accounts for",
            "%",
            unseen,
            consumed,
            100.0,
            "100 % minus selectivity on converted minus the shares of all unwanted products. A reconciled "
            "balance has no hole: this is what other species of the streams hold. What no stream lists shows "
            "in the converted closure.",
            None,
            names,
        ),
    ]


def _closures(unit: Unit, names: tuple[str, ...]) -> list[Figure]:
    """Give the raw closures: one per element read on both sides, then the converted closure."""
    prefix = "raw in "
    symbols = [name.removeprefix(prefix) for name in names if name.startswith(prefix)]
    key, element = unit.key_element, _called(unit.key_element)
    return [
        *(_closure(symbol, names) for symbol in symbols),
        Figure(
            "converted closure",
            "Converted closure",
            "%",
            {f"raw made {key}": 1.0},
            {f"raw consumed {key}": 1.0},
            100.0,
            f"{element.capitalize()} in what was made per {element} in the {unit.key_reactant} consumed, "
            "by raw readings.",
            None,
            names,
        ),
    ]


def _closure(symbol: str, names: tuple[str, ...]) -> Figure:
    """Give the raw closure of one element."""
    element = _called(symbol)
    return Figure(
        f"{element} closure",
        f"Closure of {element}",
        "%",
        {f"raw out {symbol}": 1.0},
        {f"raw in {symbol}": 1.0},
        100.0,
        f"{element.capitalize()} out per {element} in by raw readings, inert carriers left out.",
        None,
        names,
    )


def _makes(unit: Unit, species: Mapping[str, Species], names: tuple[str, ...]) -> list[Figure]:
    """Make of the wanted and of each unwanted product by mass."""
    return [
        Figure(
            f"make of {one}",
            f"Make of {one}",
            "t/h",
            {f"made {one}": 1.0},
            None,
            species[one].molar_mass_kg_kmol / 1000,
            f"Tonnes of {one} made (out minus in) per running hour with a valid state; "
            "hours without one count neither above nor below the line.",
            one == unit.wanted,
            names,
        )
        for one in (unit.wanted, *unit.unwanted)
    ]


def _consumptions(unit: Unit, species: Mapping[str, Species], names: tuple[str, ...]) -> list[Figure]:
    """Key reactant by mass, fed and consumed, per wanted product by mass."""
    key, wanted = unit.key_reactant, unit.wanted
    scale = species[key].molar_mass_kg_kmol / species[wanted].molar_mass_kg_kmol
    return [
        Figure(
            f"specific consumption {what}",
            f"Specific consumption, {key} {what} per {wanted}",
            "kg/kg",
            {f"{what} {key}": 1.0},
            {f"made {wanted}": 1.0},
            scale,
            f"Kilograms of {key} {what} per kilogram of {wanted} made.",
            False,
            names,
        )
        for what in ("fed", "consumed")
    ]
