"""Processor time per reconciled cell, next to scipy's SLSQP called cell by cell with the same objective.

`python -m tests.bench.bench_reconcile [--write]`
"""

from __future__ import annotations

import os

os.environ["OPENBLAS_NUM_THREADS"] = "1"  # before numpy: threads only burn processor time here

import statistics
import time
from collections.abc import Callable
from pathlib import Path

import numpy as np
from scipy.optimize import minimize

from ingest.balance import problem_of
from ingest.instruments import Measured
from ingest.reconcile import SOLVED, solve
from ingest.unitfile import load
from tests.balances_made import made_flows, predicted
from tests.bench.marked import show, table

UNIT = load(Path("config/demo.toml"))
PROBLEM = problem_of(UNIT)
CELLS, SCALED_CALLS, PLAIN_CALLS = 32_768, 200, 20
RANDOM, SYSTEMATIC, SPAN = 0.004, 0.006, 0.003  # relative; near what the demo's unit file states


def measured(count: int) -> Measured:
    """Readings of random states with the errors that are stated for them."""
    exact = predicted(PROBLEM, made_flows(PROBLEM.state, count, 1))
    rng = np.random.default_rng(2)
    loading = np.zeros((len(exact), 1, count))
    channels = [name.startswith("AI-220") for name in PROBLEM.names]
    loading[channels, 0] = SPAN * exact[channels]
    spread = np.hypot(RANDOM, SYSTEMATIC) * exact
    return Measured(
        reading=exact
        + spread * rng.standard_normal(exact.shape)
        + loading[:, 0] * rng.standard_normal(count),
        random=RANDOM * exact,
        systematic=SYSTEMATIC * exact,
        loading=loading,
        averaged=np.ones_like(exact),
    )


def cost(readings: Measured, t: int, flow: np.ndarray, common: float) -> tuple[float, np.ndarray, float]:
    """Half the objective at the flows and the shared error, and its slopes."""
    below = np.where(PROBLEM.linear, 1.0, PROBLEM.denominator @ flow)
    told = PROBLEM.numerator @ flow / below
    load, variance = readings.loading[:, 0, t], readings.variance[:, t]
    miss = readings.reading[:, t] - told - load * common
    lean = miss / variance
    slope = (PROBLEM.numerator.T - PROBLEM.denominator.T * told) @ (lean / below)
    return 0.5 * (miss @ lean + common**2), -slope, common - load @ lean


def scaled(readings: Measured, t: int) -> np.ndarray:
    """SLSQP in the null space, whitened, with derivatives: all that one can do for it."""
    start = PROBLEM.basis.T @ made_flows(PROBLEM.state, 1, 99)[:, 0]
    white = np.linalg.inv(np.linalg.cholesky(curvature(readings, t, PROBLEM.basis @ start))).T
    k = len(start)

    def flow_of(z: np.ndarray) -> np.ndarray:
        return PROBLEM.basis @ (start + (white @ z)[:k])

    def target(z: np.ndarray) -> tuple[float, np.ndarray]:
        value, slope, by_common = cost(readings, t, flow_of(z), (white @ z)[k])
        return value, white.T @ np.r_[PROBLEM.basis.T @ slope, by_common]

    positive = {"type": "ineq", "fun": flow_of, "jac": lambda _: PROBLEM.basis @ white[:k]}
    best = minimize(
        target, np.zeros(k + 1), jac=True, method="SLSQP", constraints=positive,
        options={"ftol": 1e-10, "maxiter": 200},
    )  # fmt: skip
    return flow_of(best.x)


def curvature(readings: Measured, t: int, flow: np.ndarray) -> np.ndarray:
    """Normal matrix in (q, shared error) at the flows."""
    below = np.where(PROBLEM.linear, 1.0, PROBLEM.denominator @ flow)
    told = PROBLEM.numerator @ flow / below
    seen = (PROBLEM.numerator - told[:, None] * PROBLEM.denominator) / below[:, None] @ PROBLEM.basis
    whole = np.column_stack([seen, readings.loading[:, 0, t]])
    prior = np.diag(np.r_[np.zeros(seen.shape[1]), 1.0])
    return whole.T @ (whole / readings.variance[:, t, None]) + prior


def plain(readings: Measured, t: int) -> np.ndarray:
    """SLSQP as one would call it at first: flows, balances as constraints, no derivatives."""
    start = made_flows(PROBLEM.state, 1, 99)[:, 0]
    best = minimize(
        lambda x: cost(readings, t, x[:-1], x[-1])[0], np.r_[start, 0.0], method="SLSQP",
        bounds=[(0, None)] * len(start) + [(None, None)],
        constraints={"type": "eq", "fun": lambda x: PROBLEM.conservation @ x[:-1]},
        options={"ftol": 1e-10, "maxiter": 1000},
    )  # fmt: skip
    return best.x[:-1]


def spent(work: Callable[[], object], repeats: int) -> float:
    """Median processor seconds."""
    taken = []
    for _ in range(repeats):
        begun = time.process_time()
        work()
        taken.append(time.process_time() - begun)
    return statistics.median(taken)


def compared(
    readings: Measured, call: Callable[[Measured, int], np.ndarray], calls: int
) -> tuple[float, float]:
    """Processor seconds of one call, and the largest difference of flows in standard uncertainties."""
    found = solve(PROBLEM, readings.take(np.arange(calls)), np.eye(len(PROBLEM.state)))
    spread = np.einsum("nmt,mt->nt", found.gain**2, readings.variance[:, :calls])
    spread += np.einsum("nmt,mt->nt", found.gain, readings.loading[:, 0, :calls]) ** 2
    seconds, apart = [], 0.0
    for t in range(calls):
        begun = time.process_time()
        best = call(readings, t)
        seconds.append(time.process_time() - begun)
        apart = max(apart, float((np.abs(best - found.flow[:, t]) / np.sqrt(spread[:, t])).max()))
    return statistics.median(seconds), apart


def main() -> None:
    """Measure and show."""
    readings, rows = measured(CELLS), np.eye(len(PROBLEM.state))
    assert (solve(PROBLEM, readings).status == SOLVED).all()
    alone = spent(lambda: solve(PROBLEM, readings), 5) / CELLS
    whole = spent(lambda: solve(PROBLEM, readings, rows), 5) / CELLS
    lines = [
        ["flows, adjustments and their spread", f"{1e6 * alone:.1f}", "", ""],
        [f"the same with the gains of all {len(rows)} flows", f"{1e6 * whole:.1f}", "1", ""],
    ]
    for what, call, calls in (
        ("scipy SLSQP per cell, scaled, with derivatives", scaled, SCALED_CALLS),
        ("scipy SLSQP per cell, plain", plain, PLAIN_CALLS),
    ):
        seconds, apart = compared(readings, call, calls)
        lines.append([what, f"{1e6 * seconds:,.0f}", f"{seconds / whole:,.0f}", f"{apart:.1g}"])
    head = [
        "reconcile one cell of the demo unit",
        "processor us",
        "ratio",
        "largest difference [standard uncertainties]",
    ]
    show("bench reconcile", table(head, lines))


if __name__ == "__main__":
    main()
