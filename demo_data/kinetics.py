"""The invented reactions: isobutene is oxidised in parallel and in series along a packed bed.

All reactions are first order in the organic they eat (oxygen and steam are in excess), so the bed has a
closed solution and every atom that goes in comes out, to rounding. Reaction heat, hot spots and the change
of molar flow along the bed are left out: the plant is a source of data whose truth is known, not a design.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

GAS_CONSTANT_KJ_MOL_K = 8.31446261815324e-3  # CODATA 2018, exact
REFERENCE_K = 623.15  # bath temperature at which the rate constants below hold

SPECIES = (
    "isobutene",
    "oxygen",
    "water",
    "methacrolein",
    "methacrylic acid",
    "acetic acid",
    "acetone",
    "carbon monoxide",
    "carbon dioxide",
    "nitrogen",
    "isobutane",
)
ISOBUTENE = SPECIES.index("isobutene")
METHACROLEIN = SPECIES.index("methacrolein")


@dataclass(frozen=True, slots=True)
class Reaction:
    """One reaction; `eats` isobutene or methacrolein, `rate` is k times contact time at the reference."""

    eats: str
    makes: tuple[tuple[str, float], ...]  # every other species, oxygen negative, per mole eaten
    rate: float
    activation_kj_mol: float


# In the order of the reaction axis. Invented so that about 95 % converts, 86 % of it to methacrolein.
REACTIONS = (
    Reaction("isobutene", (("oxygen", -1), ("methacrolein", 1), ("water", 1)), 2.78, 85.0),
    Reaction("isobutene", (("oxygen", -6), ("carbon dioxide", 4), ("water", 4)), 0.125, 115.0),
    Reaction("isobutene", (("oxygen", -4), ("carbon monoxide", 4), ("water", 4)), 0.080, 110.0),
    Reaction("isobutene", (("oxygen", -2), ("acetone", 1), ("carbon dioxide", 1), ("water", 1)), 0.040, 70.0),
    Reaction("isobutene", (("oxygen", -2), ("acetic acid", 2)), 0.038, 85.0),
    Reaction("methacrolein", (("oxygen", -0.5), ("methacrylic acid", 1)), 0.026, 80.0),
    Reaction("methacrolein", (("oxygen", -5), ("carbon dioxide", 4), ("water", 3)), 0.018, 110.0),
    Reaction("methacrolein", (("oxygen", -3), ("carbon monoxide", 4), ("water", 3)), 0.014, 105.0),
    Reaction(
        "methacrolein",
        (("oxygen", -2), ("acetic acid", 1), ("carbon monoxide", 2), ("water", 1)),
        0.010,
        90.0,
    ),
)
PARALLEL = np.array([r.eats == "isobutene" for r in REACTIONS])  # the others are consecutive
WANTED, BURNT_TO_CO2, BURNT_TO_CO = 0, 1, 2  # places on the reaction axis


def stoichiometry() -> Floats:
    """Moles of each species made per mole of each reaction.

    Returns
    -------
    array, shape (reaction, species)
        Negative where a species is eaten [mol/mol].
    """
    table = np.zeros((len(REACTIONS), len(SPECIES)))
    for row, reaction in zip(table, REACTIONS, strict=True):
        row[SPECIES.index(reaction.eats)] = -1.0
        for name, count in reaction.makes:
            row[SPECIES.index(name)] += count
    return table


def rates(bath_k: Floats, activity: Floats, diverted: Floats) -> Floats:
    """Rate constants follow Arrhenius and the catalyst's activity, and close over a selectivity loss.

    Parameters
    ----------
    bath_k : array, shape (t,)
        Salt-bath temperature [K].
    activity : array, shape (t,)
        Share of the fresh catalyst's rate that is left, common to all reactions [-].
    diverted : array, shape (t,)
        Share of the wanted reaction that burns instead, half to CO2 and half to CO [-].

    Returns
    -------
    array, shape (t, reaction)
        Rate constant times contact time at the reference flow [-].
    """
    at_reference = np.array([r.rate for r in REACTIONS])
    activation = np.array([r.activation_kj_mol for r in REACTIONS])
    exponent = (1 / REFERENCE_K - 1 / bath_k[:, None]) * (activation / GAS_CONSTANT_KJ_MOL_K)
    k = at_reference * np.exp(exponent) * activity[:, None]
    lost = diverted * k[:, WANTED]
    k[:, WANTED] -= lost
    k[:, BURNT_TO_CO2] += lost / 2
    k[:, BURNT_TO_CO] += lost / 2
    return k


def outlet(fed_kmol_h: Floats, k: Floats, contact: Floats) -> Floats:
    """What leaves the bed is what was fed plus the reactions, so atoms close to rounding.

    With K the sum over the parallel and L that over the consecutive reactions, isobutene decays as
    exp(-K c) and methacrolein is k1/(K - L) (exp(-L c) - exp(-K c)): the standard result for reactions in
    series and in parallel in plug flow (textbooks of reaction engineering, from memory).

    Parameters
    ----------
    fed_kmol_h : array, shape (t, species)
        Fed to the bed, no methacrolein in it [kmol/h].
    k : array, shape (t, reaction)
        Rate constants, see `rates` [-].
    contact : array, shape (t,)
        Contact time relative to the reference [-].

    Returns
    -------
    array, shape (t, species)
        Leaving the bed [kmol/h].
    """
    total_parallel = k[:, PARALLEL].sum(axis=1)
    total_series = k[:, ~PARALLEL].sum(axis=1)
    fed = fed_kmol_h[:, ISOBUTENE]
    eaten = fed * -np.expm1(-total_parallel * contact)
    difference = (total_parallel - total_series) * contact
    # exp(-L c) (1 - exp(-(K - L) c)) / ((K - L) c) has the limit exp(-L c) where K equals L
    spread = np.where(
        difference == 0, 1.0, -np.expm1(-difference) / np.where(difference == 0, 1.0, difference)
    )
    wanted_left = fed * k[:, WANTED] * contact * np.exp(-total_series * contact) * spread
    wanted_made = eaten * k[:, WANTED] / total_parallel
    extents = np.empty_like(k)
    extents[:, PARALLEL] = k[:, PARALLEL] * (eaten / total_parallel)[:, None]
    passed_on = np.where(
        total_series > 0, (wanted_made - wanted_left) / np.where(total_series > 0, total_series, 1), 0
    )
    extents[:, ~PARALLEL] = k[:, ~PARALLEL] * passed_on[:, None]
    return fed_kmol_h + extents @ stoichiometry()
