"""A status that is exported in words masks calibration like one in numbers, in every form of export."""

from __future__ import annotations

from datetime import timedelta
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from ingest.conditions import CALIBRATING
from ingest.ledger import Store
from ingest.unit import Unit
from ingest.values import Numbers
from monitor.run import run_pass
from tests.unitfiles_made import loaded, with_edit

TEXT = with_edit(
    "calibrating = [1]",
    'calibrating = ["calibrating", "Span check"]',
    with_edit(
        "missing_words = [",
        'state_words = { Sample = 0, Calibrating = 1, "Span check" = 2 }\nmissing_words = [',
    ),
)
TIMES = [f"2026-03-02T{hour:02}:{minute:02}:00+01:00" for hour in (8, 9) for minute in range(0, 60, 6)]
WORDS = ["Sample"] * 5 + ["Calibrating"] * 5 + ["SPAN CHECK"] * 5 + ["Sample"] * 5
OXYGEN = [f"{3 + 0.01 * at:.2f}" for at in range(20)]
NITROGEN = [f"{80 + 0.01 * at:.2f}" for at in range(20)]
TAGS = {"AI-220.O2": OXYGEN, "AI-220.N2": NITROGEN, "AI-220.CAL": WORDS}


def wide(path: Path) -> Path:
    rows = [",".join(row) for row in zip(TIMES, *TAGS.values(), strict=True)]
    path.write_text("\n".join([",".join(["time", *TAGS]), *rows]) + "\n", encoding="utf-8")
    return path


def long(path: Path) -> Path:
    rows = [f"{time},{tag},{values[at]}" for at, time in enumerate(TIMES) for tag, values in TAGS.items()]
    path.write_text("\n".join(["time,tag,value", *rows]) + "\n", encoding="utf-8")
    return path


def parquet(path: Path) -> Path:
    times = pa.array([np.datetime64(time[:19], "us") - np.timedelta64(1, "h") for time in TIMES]).cast(
        pa.timestamp("us", "UTC")
    )
    pq.write_table(pa.table({"time": times, **TAGS}), path.with_suffix(".parquet"))
    return path.with_suffix(".parquet")


def masked(unit: Unit, folder: Path, export: Path) -> list[str]:
    """The cells that are masked after one pass, by the UTC time of their start."""
    result = run_pass([unit], folder / "store", [export], progress=lambda *_: None, settle=timedelta(0))
    (one,) = result.exports
    assert one.status == "taken", one.words
    assert one.account is not None
    assert one.account.rejections == ()
    table = Store(folder / "store").read(unit.key, "cells", columns=["start", "condition AI-220 oxygen"])
    found = table.column(1).to_numpy() == CALIBRATING
    return [f"{start:%H:%M}" for start in table.column(0).filter(pa.array(found)).to_pylist()]


@pytest.mark.parametrize("write", [wide, long, parquet])
def test_words_of_a_status_mask_calibration_whatever_the_export(tmp_path: Path, write):
    # Results of 07:30 to 08:24 UTC are of the gas; each is of a sample 4 min before, for 3 min
    # about it: 07:23 to 08:23. A cell is masked where that is more than half of it.
    found = masked(loaded(tmp_path, TEXT), tmp_path, write(tmp_path / "export.csv"))
    assert found == ["07:20", "07:30", "07:40", "07:50", "08:00", "08:10"]


def test_a_word_that_is_not_declared_is_rejected_and_counted(tmp_path: Path):
    unit = loaded(
        tmp_path, TEXT.replace('"Span check" = 2', '"Zero check" = 2').replace('"Span check"', '"Zero check"')
    )
    result = run_pass(
        [unit],
        tmp_path / "store",
        [wide(tmp_path / "export.csv")],
        progress=lambda *_: None,
        settle=timedelta(0),
    )
    assert result.exports[0].account is not None
    assert sum(count for _, count in result.exports[0].account.rejections) == 5


def test_the_same_export_is_not_read_again_for_its_state_words(tmp_path: Path):
    unit, export = loaded(tmp_path, TEXT), wide(tmp_path / "export.csv")
    for _ in range(2):
        result = run_pass([unit], tmp_path / "store", [export], progress=lambda *_: None, settle=timedelta(0))
    assert [one.status for one in result.exports] == ["taken already"]
    assert not any("other rules" in note for note in result.notes)


def test_a_word_may_stand_for_a_number_with_decimals_in_either_mark():
    for mark, written in ((".", "0.5"), (",", "0,5")):
        read = Numbers(mark, frozenset(), (("Half", 0.5),)).read(pa.array(["half ", written, "HALF", "7"]))
        assert read.value.tolist() == [0.5, 0.5, 0.5, 7.0]
        assert not read.reason.any()
