"""The summary of a month that cantera made, read with errors as stated, against what cantera knows."""

from __future__ import annotations

import numpy as np
import pytest

from monitor.summary.making import summarise
from monitor.summary.span import month_span
from monitor.windows import MODES
from tests.pyrolysis_made import read, stored, true_figures, truth, unit_of
from tests.summaries_made import STAMP

SEEDS = 40


def held(folder, seeds: range) -> dict[str, list[bool]]:
    """For each figure, whether the true value lay within its half-width, seed by seed and mode by mode."""
    true = truth()
    unit, wanted = unit_of(folder, true), true_figures(true)
    found: dict[str, list[bool]] = {}
    for seed in seeds:
        stored(folder / "store", unit, read(unit, true, seed))
        table = summarise(folder / "store", unit, month_span("UTC", 2026, 4), STAMP).tables["figures"]
        rows = table.set_index("figure")
        for (name, mode), value in wanted.items():
            within = abs(rows.loc[name, mode] - value) <= rows.loc[name, f"{mode} ±"]
            found.setdefault(name, []).append(bool(within))
    return found


def test_error_free_readings_give_canteras_month_back(tmp_path):
    true = truth()
    unit, wanted = unit_of(tmp_path, true), true_figures(true)
    exact = read(unit, true, 0)
    exact.value[:] = true.readings()
    stored(tmp_path / "store", unit, exact)
    rows = (
        summarise(tmp_path / "store", unit, month_span("UTC", 2026, 4), STAMP)
        .tables["figures"]
        .set_index("figure")
    )
    assert {mode for _, mode in wanted} == set(MODES)
    assert len(wanted) > 40
    for (name, mode), value in wanted.items():
        assert rows.loc[name, mode] == pytest.approx(value, rel=2e-4), name  # traces are not on the list


def test_19_of_20_figures_lie_within_their_stated_half_width(tmp_path):
    found = held(tmp_path, range(SEEDS))
    share = np.mean([one for each in found.values() for one in each])
    # the figures of one seed share its errors: about 8 of them are independent, so that chance moves the
    # share by sqrt(0.05 x 0.95 / (8 x 40)) = 1.2 points about 95 (k = 2 allowed)
    assert 0.95 - 0.024 <= share <= 1
