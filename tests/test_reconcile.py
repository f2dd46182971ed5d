"""The solver on the demo unit: laws that must hold, and agreement with a general-purpose optimiser."""

from __future__ import annotations

import dataclasses
from pathlib import Path

import numpy as np
import pytest
from scipy.optimize import minimize

from ingest.balance import problem_of
from ingest.instruments import Measured
from ingest.reconcile import NO_READINGS, SOLVED, STATUS, UNSEEN, solve
from ingest.unitfile import load
from tests.balances_made import made_flows, predicted

UNIT = load(Path("config/demo.toml"))
PROBLEM = problem_of(UNIT)


def measured(flow, *, seed=None, relative=0.01, shared=0.004) -> Measured:
    """Readings of the flows, 1 % random error on each (none without a seed), a span error on the gases."""
    exact = predicted(PROBLEM, flow)
    noise = 0.0 if seed is None else relative * np.random.default_rng(seed).standard_normal(exact.shape)
    loading = np.zeros((len(exact), 1, exact.shape[1]))
    channels = [i for i, name in enumerate(PROBLEM.names) if name.startswith("AI-220")]
    loading[channels, 0] = shared * exact[channels]
    return Measured(
        reading=exact * (1 + noise),
        random=relative * exact,
        systematic=0.5 * relative * exact,
        loading=loading,
        averaged=np.ones_like(exact),
    )


def without(readings, seed, share=0.15):
    gone = np.random.default_rng(seed).random(readings.reading.shape) < share
    return dataclasses.replace(readings, reading=np.where(gone, np.nan, readings.reading))


def test_error_free_readings_give_back_the_true_flows():
    flow = made_flows(PROBLEM.state, 300, 1)
    found = solve(PROBLEM, measured(flow))
    assert (found.status == SOLVED).all()
    np.testing.assert_allclose(found.flow, flow, rtol=1e-9, atol=1e-7)
    np.testing.assert_allclose(found.objective, 0, atol=1e-12)


def test_every_balance_closes_whatever_the_readings_are():
    flow = made_flows(PROBLEM.state, 500, 2)
    found = solve(PROBLEM, measured(flow, seed=3, relative=0.05))
    feed = found.flow[0]
    assert (np.abs(PROBLEM.conservation @ found.flow) <= 1e-9 * feed).all()


def test_two_hundred_random_cells_with_missing_readings_agree_with_scipys_slsqp():
    # scipy.optimize.minimize(method="SLSQP"): a general optimiser of the same objective with n >= 0
    flow = made_flows(PROBLEM.state, 200, 4)
    readings = without(measured(flow, seed=5), 6)
    found = solve(PROBLEM, readings)
    assert np.isin(found.status, (SOLVED,)).all()
    worst = max(_difference(readings, found, t) for t in range(200))
    assert worst < 1e-6


def _difference(readings, found, t):
    """Largest difference of seen flows to SLSQP's, relative to the flow or to a thousandth of the total."""
    best = _by_slsqp(readings, t)
    seen = np.isfinite(found.flow[:, t])
    size = np.maximum(np.abs(best), 1e-3 * np.abs(best).sum())
    return (np.abs(best - found.flow[:, t]) / size)[seen].max()


def _by_slsqp(readings, t):
    present = np.isfinite(readings.reading[:, t])
    y, load = readings.reading[present, t], readings.loading[present, :, t]
    root = np.sqrt(readings.variance[present, t])
    upper = PROBLEM.numerator[present] @ PROBLEM.basis
    lower = PROBLEM.denominator[present] @ PROBLEM.basis
    ratio = ~PROBLEM.linear[present]
    k = upper.shape[1]

    def residuals(x):
        below = np.where(ratio, lower @ x[:k], 1.0)
        told = upper @ x[:k] / below
        slope = (upper - told[:, None] * lower) / below[:, None]
        value = np.r_[(y - told - load @ x[k:]) / root, x[k:]]
        return value, np.block(
            [[-slope / root[:, None], -load / root[:, None]], [np.zeros((1, k)), np.eye(1)]]
        )

    start = np.r_[PROBLEM.basis.T @ made_flows(PROBLEM.state, 1, 99)[:, 0], 0.0]
    # whitening by the curvature at the start: SLSQP's own scaling is poor for traces
    _, slope = residuals(start)
    white = np.linalg.inv(np.linalg.cholesky(slope.T @ slope + 1e-9 * np.eye(k + 1))).T

    def cost(z):
        value, slope = residuals(start + white @ z)
        return 0.5 * value @ value, white.T @ (slope.T @ value)

    z = np.zeros(k + 1)
    for _ in range(3):
        z = minimize(
            cost,
            z,
            jac=True,
            method="SLSQP",
            constraints={
                "type": "ineq",
                "fun": lambda z: PROBLEM.basis @ (start + white @ z)[:k],
                "jac": lambda z: PROBLEM.basis @ white[:k],
            },
            options={"ftol": 1e-18, "maxiter": 500},
        ).x
    return PROBLEM.basis @ (start + white @ z)[:k]


def test_a_flow_that_the_readings_would_push_below_zero_is_held_there():
    # the optimum of the bounded problem, by SLSQP
    flow = made_flows(PROBLEM.state, 20, 7)
    readings = measured(flow, seed=8)
    low = PROBLEM.names.index("AI-220 acetone")
    reading = readings.reading.copy()
    reading[low] = -0.002
    pushed = dataclasses.replace(readings, reading=reading)
    found = solve(PROBLEM, pushed)
    acetone = PROBLEM.state.index(("outlet", "acetone"))
    assert (found.status == SOLVED).all()
    np.testing.assert_allclose(found.flow[acetone], 0, atol=1e-9)
    assert (found.flow > -1e-9).all()
    assert max(_difference(pushed, found, t) for t in range(5)) < 1e-6


def test_a_flow_held_too_eagerly_is_let_go_again():
    # one channel far negative drags others below zero on the way; only what must be held stays held
    flow = made_flows(PROBLEM.state, 10, 9)
    readings = measured(flow, seed=10)
    reading = readings.reading.copy()
    for name in ("AI-220 acetone", "AI-220 acetic acid", "AI-220 methacrylic acid"):
        reading[PROBLEM.names.index(name)] *= -1
    pushed = dataclasses.replace(readings, reading=reading)
    found = solve(PROBLEM, pushed)
    assert (found.status == SOLVED).all()
    assert max(_difference(pushed, found, t) for t in range(5)) < 1e-6


def test_what_the_readings_present_cannot_tell_is_missing_and_the_rest_is_as_without_it():
    flow = made_flows(PROBLEM.state, 50, 11)
    readings = measured(flow)
    reading = readings.reading.copy()
    for i, name in enumerate(PROBLEM.names):
        if name.startswith("AI-220"):
            reading[i] = np.nan
    found = solve(PROBLEM, dataclasses.replace(readings, reading=reading), np.eye(len(PROBLEM.state)))
    seen = np.isfinite(found.flow[:, 0])
    stream = np.array([name for name, _ in PROBLEM.state])
    ties = np.array([name in ("nitrogen", "isobutane") for _, name in PROBLEM.state])
    assert seen.tolist() == ((stream != "outlet") | ties).tolist()
    np.testing.assert_allclose(found.flow[seen], flow[seen], rtol=1e-8)
    assert (np.isfinite(found.value[:, 0]) == seen).all()


def test_cells_of_which_half_the_readings_are_gone_stop_nobody_and_close_where_they_are_solved():
    # the law that must hold is the balance; 400 random sets of readings, many of which tell next to nothing
    readings = without(measured(made_flows(PROBLEM.state, 400, 25), seed=26), 27, share=0.5)
    found = solve(PROBLEM, readings)
    full = np.isfinite(found.flow).all(axis=0)
    assert full.any()
    assert (found.status[full] == SOLVED).all()
    total = found.flow[:, full].sum(axis=0)
    assert (np.abs(PROBLEM.conservation @ found.flow[:, full]) <= 1e-9 * total).all()


def test_a_missing_reading_is_no_reading_and_not_a_zero():
    flow = made_flows(PROBLEM.state, 20, 12)
    readings = measured(flow, seed=13)
    gone = readings.reading.copy()
    gone[3] = np.nan
    wide = readings.random.copy()
    wide[3] *= 1e7
    missing = solve(PROBLEM, dataclasses.replace(readings, reading=gone))
    doubted = solve(PROBLEM, dataclasses.replace(readings, random=wide))
    np.testing.assert_allclose(missing.flow, doubted.flow, rtol=1e-6, atol=1e-6)
    assert np.isnan(missing.adjustment[3]).all()


def test_cells_without_readings_yield_nothing_and_say_so():
    readings = measured(made_flows(PROBLEM.state, 3, 14))
    reading = readings.reading.copy()
    declared = [PROBLEM.names.index(name) for name in ("isobutane in feed", "oxygen in air")]
    reading[:, 1] = np.nan
    rest = [i for i in range(len(reading)) if i not in declared]
    reading[rest, 2] = np.nan
    found = solve(PROBLEM, dataclasses.replace(readings, reading=reading))
    assert [STATUS[code] for code in found.status[:2]] == ["solved", "no readings"]
    assert found.status[1] == NO_READINGS
    assert found.status[2] in (SOLVED, UNSEEN)
    assert np.isnan(found.flow[:, 1:]).all()


def test_the_order_and_grouping_of_cells_changes_nothing():
    flow = made_flows(PROBLEM.state, 120, 15)
    readings = without(measured(flow, seed=16), 17)
    whole = solve(PROBLEM, readings)
    turned = solve(PROBLEM, readings.take(np.arange(120)[::-1]))
    alone = solve(PROBLEM, readings.take(np.array([37])))
    np.testing.assert_allclose(turned.flow[:, ::-1], whole.flow, rtol=1e-9, atol=1e-9)
    np.testing.assert_allclose(alone.flow[:, 0], whole.flow[:, 37], rtol=1e-9, atol=1e-9)


def test_the_gains_are_the_slopes_of_the_solution():
    # central differences of the solution itself
    flow = made_flows(PROBLEM.state, 1, 18)
    readings = measured(flow, seed=19)
    eye = np.eye(len(PROBLEM.state))
    gain = solve(PROBLEM, readings, eye).gain[:, :, 0]
    for i in range(len(PROBLEM.names)):
        step = 1e-4 * readings.reading[i, 0]
        up, down = (_nudged(readings, i, sign * step) for sign in (1, -1))
        slope = (solve(PROBLEM, up).flow - solve(PROBLEM, down).flow)[:, 0] / (2 * step)
        # the gain leaves out second derivatives, which the residuals of 1 % make small
        np.testing.assert_allclose(gain[:, i], slope, rtol=0.05, atol=0.03 * np.abs(slope).max())


def _nudged(readings, i, step):
    reading = readings.reading.copy()
    reading[i] += step
    return dataclasses.replace(readings, reading=reading)


def test_adjustments_over_their_spread_and_the_objective_follow_their_laws():
    # standard normal and chi-square with the degrees of freedom (JCGM 100; common statistics)
    flow = np.repeat(made_flows(PROBLEM.state, 1, 20), 4000, axis=1)
    rng = np.random.default_rng(21)
    exact = measured(flow)
    spread = np.sqrt(exact.variance) * rng.standard_normal(flow.shape[1:] and exact.reading.shape)
    span = exact.loading[:, 0] * rng.standard_normal(flow.shape[1])
    found = solve(PROBLEM, dataclasses.replace(exact, reading=exact.reading + spread + span))
    freedom = found.freedom[0]
    assert found.objective.mean() == pytest.approx(freedom, rel=0.05)
    assert found.objective.var() == pytest.approx(2 * freedom, rel=0.15)
    redundant = found.adjustment_sd[:, 0] > 0.05
    ratio = (found.adjustment / np.where(found.adjustment_sd > 0, found.adjustment_sd, np.nan))[redundant]
    np.testing.assert_allclose(ratio.std(axis=1), 1, atol=0.05)


def test_the_input_is_left_as_it_was():
    readings = without(measured(made_flows(PROBLEM.state, 5, 22), seed=23), 24)
    before = dataclasses.asdict(readings)
    solve(PROBLEM, readings, np.eye(len(PROBLEM.state)))
    for name, array in dataclasses.asdict(readings).items():
        np.testing.assert_array_equal(array, before[name])


@pytest.mark.parametrize("share", [0.15, 0.3, 0.45])
def test_a_cell_that_calls_itself_solved_is_never_far_from_the_optimum(share):
    # readings with 1 % errors leave an objective near their degrees of freedom; a search for the flows at
    # zero that goes round in circles must say so rather than stop at thousands
    readings = without(measured(made_flows(PROBLEM.state, 2000, 44), seed=45), 46, share)
    found = solve(PROBLEM, readings)
    solved = found.status == SOLVED
    assert solved.mean() > 0.9
    assert (found.objective[solved] < found.freedom[solved] + 20).all()
    assert np.isnan(found.flow[:, ~solved]).all()
