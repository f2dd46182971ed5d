"""Readings and balances for tests of the solver: plain matrices in, `Measured` out."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np

from ingest.balance import Problem
from ingest.cells import Cells
from ingest.instruments import Measured, measured
from ingest.reconcile import States, reconcile
from ingest.unit import Unit

PUBLISHED: dict[str, Any] = json.loads(
    (Path(__file__).parent / "published" / "reconciliation.json").read_text()
)


def made_readings(reading, variance, loading=None) -> Measured:
    """Readings (m,) or (m, t) with plain variances (m,), no cycle, and shared errors (m, s) if given."""
    y = np.asarray(reading, dtype=float)
    y = y[:, None] if y.ndim == 1 else y
    spread = np.sqrt(np.asarray(variance, dtype=float))[:, None] * np.ones_like(y)
    shared = np.zeros((len(y), 0)) if loading is None else loading
    return Measured(
        reading=y,
        random=spread,
        systematic=np.zeros_like(y),
        loading=np.repeat(shared[:, :, None], y.shape[1], axis=2),
        averaged=np.ones_like(y),
    )


# Extents of the demo chemistry: key reactant to each product, oxygen and water as the atoms demand.
REACTIONS = {
    "methacrolein": {"isobutene": -1, "oxygen": -1, "methacrolein": 1, "water": 1},
    "methacrylic acid": {"isobutene": -1, "oxygen": -1.5, "methacrylic acid": 1, "water": 1},
    "acetic acid": {"isobutene": -1, "oxygen": -2, "acetic acid": 2},
    "acetone": {"isobutene": -1, "oxygen": -2, "acetone": 1, "carbon dioxide": 1, "water": 1},
    "carbon monoxide": {"isobutene": -1, "oxygen": -4, "carbon monoxide": 4, "water": 4},
    "carbon dioxide": {"isobutene": -1, "oxygen": -6, "carbon dioxide": 4, "water": 4},
}
SPLIT = (0.86, 0.02, 0.01, 0.012, 0.038, 0.06)  # shares of the converted key reactant


def made_flows(state, count, seed, *, conversion=(0.9, 0.98)) -> np.ndarray:
    """True flows (N, count) of the demo unit that close every atom balance, random in load and extents."""
    rng = np.random.default_rng(seed)
    feed = 100 * rng.uniform(0.75, 1.05, count)
    fed = {
        ("isobutene feed", "isobutene"): 0.982 * feed,
        ("isobutene feed", "isobutane"): 0.018 * feed,
        ("air", "oxygen"): 0.2095 * 12 * feed,
        ("air", "nitrogen"): 0.7905 * 12 * feed,
        ("steam", "water"): 4 * feed,
    }
    out = {name: sum((v for (_, s), v in fed.items() if s == name), np.zeros(count)) for _, name in state}
    shares = np.array(SPLIT)[:, None] * rng.uniform(0.9, 1.1, (6, count))
    extents = (
        rng.uniform(*conversion, count) * fed["isobutene feed", "isobutene"] * shares / shares.sum(axis=0)
    )
    for extent, change in zip(extents, REACTIONS.values(), strict=True):
        for name, by in change.items():
            out[name] = out[name] + by * extent
    return np.array([fed.get(key, out[key[1]]) if key[0] != "outlet" else out[key[1]] for key in state])


def predicted(problem, flow) -> np.ndarray:
    """What error-free instruments read at the flows, (m, t)."""
    below = np.where(problem.linear[:, None], 1.0, problem.denominator @ flow)
    return (problem.numerator @ flow) / below


def reconciled(unit: Unit, problem: Problem, cells: Cells) -> States:
    """States of the cells of a unit."""
    return reconcile(problem, cells, measured(unit, cells.value, cells.share))[0]
