"""Units that exports write, through whole passes: stored converted, or set aside until they fit."""

from __future__ import annotations

from dataclasses import replace
from datetime import timedelta
from pathlib import Path

from ingest.exports import describe
from ingest.intake import IntakeResult, take_in
from ingest.ledger import Store
from ingest.measures import stated_units
from ingest.readings import read_months
from ingest.unit import Unit
from monitor.telling import described
from tests.exports_made import NO_RULES, saved
from tests.units_made import made_instrument, made_unit

UNIT = made_unit(
    replace(made_instrument("FI-1"), kind="mass flow", unit="kg/h"),
    exports=replace(NO_RULES, time_zone="UTC", decimal="."),
)
EXPORT = """Unit 2, last hour
Exported at 2026-03-13 07:00
time,FI-1.PV,LI-9.PV
,Feed flow,Level
[UTC],t/h,%
2026-03-13 06:00,5.012,40
2026-03-13 06:01,5.013,41
2026-03-13 06:02,5.014,42
2026-03-13 06:03,Bad,43
Average,5.013,41.5
"""


def stating(unit: str) -> Unit:
    """The unit with another engineering unit of its one instrument."""
    return replace(UNIT, instruments=(replace(UNIT.instruments[0], unit=unit),))


def passed(store: Store, unit: Unit, *paths: Path) -> IntakeResult:
    with store.begin() as pass_:
        return take_in(pass_, (unit,), paths, settle=timedelta(0))


def test_a_pass_stores_values_in_the_unit_of_the_unit_file_and_keeps_what_it_converted(tmp_path: Path):
    store = Store(tmp_path / "store")
    (outcome,) = passed(store, UNIT, saved(tmp_path, EXPORT)).outcomes
    assert outcome.account is not None
    assert outcome.account.converted == (("FI-1.PV", "t/h", "kg/h"),)
    held = read_months(store.snapshot().paths("site", "readings"), ("FI-1.PV",), 0, 2**62)["FI-1.PV"]
    assert held.value[:3].round(9).tolist() == [5012.0, 5013.0, 5014.0]
    (entry,) = store.exports()
    assert entry.account["asides"] == [["above", 2], ["descriptions", 1], ["units", 1], ["sums", 1]]


def test_a_unit_that_is_no_longer_stated_is_told_with_the_exports_it_was_converted_to(tmp_path: Path):
    store = Store(tmp_path / "store")
    export = saved(tmp_path, EXPORT)
    assert passed(store, UNIT, export).notes == ()
    (note,) = passed(store, stating("t/h"), export).notes
    assert note.startswith("export.csv: was converted to units that the unit file does not state any more")


def test_an_export_whose_unit_is_in_conflict_is_set_aside_until_the_unit_file_is_mended(tmp_path: Path):
    store = Store(tmp_path / "store")
    export = saved(tmp_path, EXPORT)
    for _ in range(2):  # the second time by what the ledger holds
        (outcome,) = passed(store, stating("mol/h"), export).outcomes
        assert outcome.status == "set aside"
        assert (
            "export.csv:5 [FI-1.PV]: 't/h' cannot be converted to 'mol/h', the unit of FI-1" in outcome.words
        )
    (outcome,) = passed(store, UNIT, export).outcomes
    assert outcome.status == "taken"


def test_describe_tells_every_decision_three_rows_as_read_and_the_lines_that_hold_no_readings(tmp_path: Path):
    found = describe(
        saved(tmp_path, EXPORT),
        rules=UNIT.exports,
        wanted=frozenset({"FI-1.PV"}),
        time_zone=None,
        units=stated_units([UNIT]),
    )
    assert list(described(found, replace(UNIT, time_zone="UTC"))) == [
        "export.csv",
        "  Text in UTF-8, separated by comma; line 3 names the columns.",
        "  Wide: times in 'time', a column for each of 2 tags.",
        "  Times are calendar times, year first, without offset: read as clock time of UTC.",
        "  Decimal mark: point; a comma, blank or apostrophe before three digits parts thousands.",
        "  Blank cells: nothing was stored then, no reading.",
        "  Words that mean bad quality, whatever their capitals:"
        " '#n/a', '-', 'bad', 'err', 'nan', 'no data'.",
        "  No quality column: every number counts as usable.",
        "  FI-1.PV: t/h converted to kg/h.",
        "  row 6: 13 Mar 2026 06:00 UTC: FI-1.PV 5012",
        "  row 7: 13 Mar 2026 06:01 UTC: FI-1.PV 5013",
        "  row 8: 13 Mar 2026 06:02 UTC: FI-1.PV 5014",
        "  4 rows, 8 readings: 4 accepted (as read: 1 of bad quality, 3 without a stated quality),"
        " 4 of tags that no unit file names (LI-9.PV), 0 rejected.",
        "  Lines that hold no readings: 2 above the header, 1 of descriptions, 1 of units,"
        " 1 of sums or ends.",
        "    export.csv:1: 'Unit 2, last hour' is above the header",
        "    export.csv:2: 'Exported at 2026-03-13 07:00' is above the header",
        "    export.csv:4: ',Feed flow,Level' is of descriptions",
        "    export.csv:5: '[UTC],t/h,%' is of units",
        "    export.csv:10: 'Average,5.013,41.5' is of sums or ends",
    ]
