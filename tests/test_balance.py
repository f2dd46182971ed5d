"""Conservation rows, their null space, and what readings let one see."""

from __future__ import annotations

import dataclasses
from pathlib import Path

import numpy as np
import pytest

from ingest.balance import conservation_of, null_space, problem, problem_of, sight, state_of
from ingest.errors import BalanceError
from ingest.unitfile import load

UNIT = load(Path("config/demo.toml"))


def test_the_null_space_closes_every_row_and_is_orthonormal():
    rows = conservation_of(UNIT, state_of(UNIT))
    basis = null_space(rows)
    np.testing.assert_allclose(rows @ basis, 0, atol=1e-12)
    np.testing.assert_allclose(basis.T @ basis, np.eye(basis.shape[1]), atol=1e-12)


def test_dependent_rows_are_dropped_and_change_nothing():
    rows = np.array([[1.0, -1, 0], [2, -2, 0], [0, 1, -1], [1, 0, -1]])
    found = problem(rows, np.eye(3))
    assert found.conservation.shape == (2, 3)
    assert found.basis.shape == (3, 1)


def test_one_row_for_each_element_that_reacts_and_one_for_each_inert():
    # C, H, O and two ties; isobutane holds C and H and still counts in neither, since it takes no part
    rows = conservation_of(UNIT, state_of(UNIT))
    assert rows.shape == (5, len(state_of(UNIT)))
    isobutane = state_of(UNIT).index(("outlet", "isobutane"))
    assert np.flatnonzero(rows[:, isobutane]).size == 1


def test_the_demo_unit_has_more_readings_than_unknowns():
    # 16 flows less 5 balances leave 13... counted by hand: 5 in + 11 out = 16 flows, 11 unknowns, 16 readings
    found = problem_of(UNIT)
    view = sight(found, np.ones(len(found.names), dtype=bool))
    assert found.basis.shape == (16, 11)
    assert view.rank == 11
    assert view.freedom == len(found.names) - 11
    assert view.seen.all()


def test_water_behind_a_drier_comes_out_of_the_balance():
    found = problem_of(UNIT)
    water = found.state.index(("outlet", "water"))
    assert sight(found, np.ones(len(found.names), dtype=bool)).seen[water]
    assert not any(name == "AI-220 water" for name in found.names)


def test_an_inert_that_enters_and_never_leaves_is_refused():
    streams = tuple(
        dataclasses.replace(one, species=tuple(name for name in one.species if name != "isobutane"))
        if one.direction == "out"
        else one
        for one in UNIT.streams
    )
    seen = tuple(one for one in UNIT.instruments if one.name != "AI-220 isobutane")
    shared = tuple(
        dataclasses.replace(one, instruments=tuple(n for n in one.instruments if n != "AI-220 isobutane"))
        for one in UNIT.shared
    )
    lame = dataclasses.replace(UNIT, streams=streams, instruments=seen, shared=shared)
    with pytest.raises(BalanceError, match="forces isobutene feed: isobutane to zero"):
        problem_of(lame)
