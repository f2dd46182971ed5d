"""Reactors with mixer, separator and recycle, as unit files: made from published loops."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

from tests.plants_made import Seen, unit_text

NODES = "\n".join(
    f'[[node]]\nname = "{name}"\nreacts = {reacts}'
    for name, reacts in (("mixer", "false"), ("reactor", "true"), ("separator", "false"))
)
OXIDE = {"ethylene": "C2H4", "oxygen": "O2", "oxide": "C2H4O"}


def loop(fresh: Sequence[str], feed: Sequence[str], effluent: Sequence[str], recycle: Sequence[str]):
    """The five streams of a loop without a purge; all that leaves the reactor may be in the product."""
    return {
        "fresh": ("> mixer, fresh feed", fresh),
        "reactor feed": ("mixer > reactor", feed),
        "effluent": ("reactor > separator", effluent),
        "product": ("separator >", effluent),
        "recycle": ("separator > mixer, recycle", recycle),
    }


def seen(stream: str, amounts: Mapping[str, float]) -> list[Seen]:
    """A reading of each species of a stream by itself [kmol/h]."""
    return [Seen("species flow", stream, value, "kmol/h", name) for name, value in amounts.items()]


def oxide_text(readings: Sequence[Seen]) -> str:
    """The ethylene oxide loop: unit file with these readings."""
    return unit_text(
        OXIDE,
        loop(["ethylene", "oxygen"], list(OXIDE), list(OXIDE), list(OXIDE)),
        readings,
        'key_reactant = "ethylene"\nwanted = "oxide"\nunwanted = []\nkey_element = "C"',
        NODES,
    )


def oxide_readings() -> list[Seen]:
    """6 % of the ethylene converted per pass; 98 % of it, 99.5 % of the oxygen and 3 % of the oxide recycled.

    Neither the reactor's feed nor the recycle is read: both come out of the balance.
    """
    extent = 0.06 * 196 / (1 - 0.98 * 0.94) / 2
    behind = {
        "ethylene": 0.94 / 0.06 * 2 * extent,
        "oxygen": (84.5 - extent) / 0.005,
        "oxide": 2 * extent / 0.97,
    }
    product = {name: share * behind[name] for name, share in zip(OXIDE, (0.02, 0.005, 0.97), strict=True)}
    fresh = {"ethylene": 196.0, "oxygen": 84.5}
    return [*seen("fresh", fresh), *seen("effluent", behind), *seen("product", product)]
