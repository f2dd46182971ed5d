"""The monthly summary as files: workbook, page, CSV and Parquet say the same; same input, same bytes."""

from __future__ import annotations

import csv
import io
import re
import shutil
import subprocess
import time
from datetime import timedelta
from pathlib import Path

import numpy as np
import openpyxl
import pandas as pd
import pyarrow.parquet as pq
import pytest
from click.testing import CliRunner

from ingest import documents, journal
from ingest.errors import OutletError
from ingest.unitfile import load
from monitor.celltext import neutral
from monitor.cli import outlet
from monitor.run import run_pass
from monitor.summary.digits import decimals
from monitor.summary.files import csv_text, write
from monitor.summary.identity import Stamp
from monitor.summary.issue import issue, kept, sealed
from monitor.summary.report import report
from monitor.summary.span import month_span
from monitor.summary.table import KEYS, Summary, body_of, changes, from_body, settled, told
from monitor.summary.workbook import FRONT, TITLES, sheets, workbook
from tests.summaries_made import STAMP, month_cells, month_of, passed, take_in
from tests.test_gotchas import half_converted, wide

TAG = "=T3()"
NOTE = '@SUM(1)"; <script>alert(1)</script>'
SPAN = month_span("Europe/Berlin", 2026, 3)
CELLS = month_cells(2026, 2, "Europe/Berlin").append(month_cells(2026, 3, "Europe/Berlin"))
TARGETS = '\n[budget]\n"yield on feed" = 43.5\n[catalyst]\ncharged = 2026-01-10T06:00:00Z\n'


def rows_of_plant() -> tuple[np.ndarray, np.ndarray]:
    """Feed and selectivity of February and March: load moves, an outage, an hour of another selectivity."""
    rng = np.random.default_rng(11)
    feed = rng.uniform(80, 120, len(CELLS))
    feed[5000:5030] = 0
    return feed, rng.uniform(0.84, 0.88, len(CELLS))


@pytest.fixture(scope="module")
def plant(tmp_path_factory) -> Path:
    """A folder with unit file and store."""
    folder = tmp_path_factory.mktemp("plant")
    take_in(folder, CELLS, *rows_of_plant(), zone="Europe/Berlin", more=TARGETS, tag=TAG)
    journal.write(folder / "store", who="=A", act="note", unit="made", subject="2026-03", note=NOTE)
    return folder


@pytest.fixture(scope="module")
def summary(plant) -> Summary:
    return sealed(month_of(plant, load(plant / "made.toml"), 2026, 3), 1)


@pytest.fixture(scope="module")
def written(summary, tmp_path_factory) -> Path:
    """Where all forms of the summary were written."""
    folder = tmp_path_factory.mktemp("written")
    write(summary, folder, ("xlsx", "html", "csv", "parquet"))
    return folder


def parquet(written: Path, name: str) -> pd.DataFrame:
    path = written / "made-2026-03" / f"{name.replace(' ', '-')}.parquet"
    return pq.read_table(path).to_pandas()


def cells_of(sheet, top: int, rows: int, columns: int) -> list[list[object]]:
    return [[sheet.cell(top + r, 1 + c).value for c in range(columns)] for r in range(rows)]


def expected(frame: pd.DataFrame) -> list[list[object]]:
    """What a sheet should hold: texts as they are neutralised, empty ones and missing numbers as nothing."""
    rows = frame.astype(object).to_numpy().tolist()
    plain = [[None if one is None or one != one else one for one in row] for row in rows]  # noqa: PLR0124
    return [[(neutral(one) or None) if isinstance(one, str) else one for one in row] for row in plain]


def assert_same(found: list[list[object]], wanted: list[list[object]]) -> None:
    assert len(found) == len(wanted)
    for one, other in zip(found, wanted, strict=True):
        assert one == other


# --- the workbook


def test_every_sheet_of_the_workbook_holds_the_values_of_the_parquet(written, summary):
    book = openpyxl.load_workbook(written / "made-2026-03.xlsx")
    assert book.sheetnames == ["summary", *sheets(summary)]
    for name in sheets(summary):
        frame, sheet = parquet(written, name), book[name]
        assert [cell.value for cell in sheet[1]] == list(frame)
        assert_same(cells_of(sheet, 2, sheet.max_row - 1, len(frame.columns)), expected(frame))


def test_the_first_sheet_holds_the_tables_that_have_no_sheet_of_their_own(written):
    sheet = openpyxl.load_workbook(written / "made-2026-03.xlsx")["summary"]
    titles = {sheet.cell(row, 1).value: row for row in range(1, sheet.max_row + 1)}
    for name in FRONT:
        frame, top = parquet(written, name), titles[TITLES[name]]
        assert [sheet.cell(top + 1, 1 + c).value for c in range(len(frame.columns))] == list(frame)
        assert_same(cells_of(sheet, top + 2, len(frame), len(frame.columns)), expected(frame))


def test_every_table_is_in_the_workbook_once(summary):
    assert {*FRONT, *sheets(summary)} == set(summary.tables) == set(KEYS) - {"changes"}


def test_the_workbook_has_native_charts_frozen_panes_filters_and_a_print_set_up(written, summary):
    book = openpyxl.load_workbook(written / "made-2026-03.xlsx")
    charts = {sheet.title: len(sheet._charts) for sheet in book}
    assert charts["summary"] == 3
    assert charts["days"] == charts["balances"] == 1
    for name in sheets(summary):
        sheet = book[name]
        assert sheet.freeze_panes is not None
        assert sheet.freeze_panes.endswith("2")
        assert sheet.auto_filter.ref is not None
        assert (sheet.page_setup.orientation, sheet.page_setup.paperSize) == ("landscape", 9)  # 9 is A4
        assert sheet.print_title_rows is not None
        assert "no basis for interlock" in sheet.oddFooter.left.text


def test_numbers_in_the_workbook_show_the_digits_that_their_half_width_supports(written, summary):
    sheet = openpyxl.load_workbook(written / "made-2026-03.xlsx")["figures"]
    column = [cell.value for cell in sheet[1]].index("steady") + 1
    places = decimals(summary, "figures")["steady"]
    for row, place in enumerate(places, start=2):
        assert sheet.cell(row, column).number_format == "#,##0" + ("." + "0" * place if place else "")
    half = summary.tables["figures"].set_index("figure").loc["conversion", "steady ±"]
    assert f"{half:.{places[0]}f}".replace(".", "").lstrip("0").__len__() == 2  # JCGM 100:2008, 7.2.6


def test_what_looks_like_a_formula_is_text_in_every_form(written):
    book = openpyxl.load_workbook(written / "made-2026-03.xlsx")
    tags = [cell for cell in book["instruments"]["B"] if cell.value and "T3" in str(cell.value)]
    assert [(cell.value, cell.data_type) for cell in tags] == [("'=T3()", "s")]
    assert not [cell for sheet in book for row in sheet.iter_rows() for cell in row if cell.data_type == "f"]
    text = (written / "made-2026-03" / "instruments.csv").read_text(encoding="utf-8-sig")
    assert '"\'=T3()"' in text
    words = (written / "made-2026-03" / "words.csv").read_text(encoding="utf-8-sig")
    assert '"\'@SUM(1)""; <script>' in words
    page = (written / "made-2026-03.html").read_text(encoding="utf-8")
    assert "<script" not in page
    assert "&#x27;@SUM(1)&quot;; &lt;script&gt;" in page


# --- CSV


def test_every_csv_holds_the_values_of_the_parquet(written, summary):
    for name in summary.tables:
        frame = parquet(written, name)
        text = (written / "made-2026-03" / f"{name.replace(' ', '-')}.csv").read_bytes().decode("utf-8-sig")
        head, *rows = csv.reader(io.StringIO(text, newline=""))
        assert head == list(frame)
        texts = [
            [told(one) if not isinstance(one, str) else neutral(one) for one in row]
            for row in frame.astype(object).to_numpy().tolist()
        ]
        assert_same(rows, texts)


def test_a_text_with_quotes_commas_and_line_ends_comes_back_whole():
    frame = pd.DataFrame({"a": ['x "y", z\nnext', "-1", "-b"], "n": [1.5, float("nan"), 2.0]})
    rows = list(csv.reader(io.StringIO(csv_text(frame), newline="")))
    assert rows == [["a", "n"], ['x "y", z\nnext', "1.5"], ["-1", ""], ["'-b", "2"]]


# --- the page


def test_the_page_is_whole_in_itself(written):
    page = (written / "made-2026-03.html").read_text(encoding="utf-8")
    assert not re.findall(r"<(?:script|link|img|iframe|object|embed)\b", page)
    assert not re.findall(r"@import|url\((?!#)", page)
    # names of XML namespaces are the only addresses, and nothing fetches them
    assert set(re.findall(r"https?://[^\"'<> ]*", page)) == {
        "http://www.w3.org/2000/svg",
        "http://www.w3.org/1999/xlink",
    }
    assert page.count("<svg") == 6
    ids = re.findall(r'\bid="([^"]+)"', page)
    assert len(ids) == len(set(ids))
    assert "size: A4 landscape" in page
    assert "Advice only: no safety function" in page


def test_the_page_shows_hours_tonnes_and_figures_as_they_are(written, summary):
    page = (written / "made-2026-03.html").read_text(encoding="utf-8")
    cells = re.sub(r"[ \n]+", " ", re.sub(r"<[^>]+>", " ", page))
    assert "calendar 743.00 100.0" in cells
    fed = summary.tables["tonnes"].set_index("flow").loc["ethane fed", "tonnes"]
    assert f"ethane fed {fed:,.3f}".replace(",", "\u202f") in cells
    budget = summary.tables["comparisons"].set_index("against").loc["budget", "steady there"]
    assert budget == 43.5


@pytest.mark.browser
def test_chromium_prints_the_page_on_a4(written, chromium, tmp_path):
    target = tmp_path / "page.pdf"
    quiet = [
        "--headless",
        "--no-sandbox",
        "--disable-gpu",
        "--no-pdf-header-footer",
        f"--user-data-dir={tmp_path}",
    ]
    subprocess.run(
        [chromium, *quiet, f"--print-to-pdf={target}", (written / "made-2026-03.html").as_uri()],
        check=True, capture_output=True, timeout=120,
    )  # fmt: skip
    pdf = target.read_bytes()
    boxes = {
        tuple(round(float(n)) for n in box.split()) for box in re.findall(rb"/MediaBox\s*\[([^\]]+)\]", pdf)
    }
    assert boxes == {(0, 0, 842, 595)}  # A4 across: 297 x 210 mm at 72 to the inch (ISO 216)
    assert pdf.count(b"/Type /Page\n") <= 16


# --- same bytes


def test_the_same_input_gives_the_same_bytes_at_another_time(summary):
    first, page = workbook(summary), report(summary)
    time.sleep(2.1)  # zip entries tell time in steps of two seconds
    assert workbook(summary) == first
    assert report(summary) == page


def test_a_store_that_is_built_anew_in_other_passes_gives_the_same_files(plant, summary, written, tmp_path):
    shutil.copy(plant / "made.toml", tmp_path)
    unit = load(tmp_path / "made.toml")
    stamps = [f"{one:%Y-%m-%dT%H:%M:%SZ}" for one in CELLS]
    rows = half_converted(*rows_of_plant())
    cuts = [slice(4000, None), slice(0, 4000)]  # the later half first
    for number, cut in enumerate(cuts):
        passed(tmp_path, unit, wide(stamps[cut], rows[cut]).replace("T3", TAG, 1), name=f"{number}.csv")
    for line in journal.lines(plant / "store"):
        journal.write(
            tmp_path / "store",
            who=line.who,
            act=line.act,
            unit=line.unit,
            subject=line.subject,
            note=line.note,
            at=pd.Timestamp(line.written).to_pydatetime(),
        )
    again = sealed(month_of(tmp_path, unit, 2026, 3), 1)
    assert again.digest == summary.digest
    write(again, tmp_path, ("xlsx", "html", "csv", "parquet"))
    files = sorted(path.relative_to(written) for path in written.rglob("*") if path.is_file())
    assert len(files) == 2 + 2 * len(summary.tables)
    assert [path for path in files if (tmp_path / path).read_bytes() != (written / path).read_bytes()] == []


def test_the_summary_names_readings_unit_file_and_program_that_it_was_made_from(summary):
    items = summary.tables["identity"].set_index("item")["text"]
    assert re.fullmatch("[0-9a-f]{64}", items["readings sha256"])
    assert items["unit file sha256"] == STAMP.unit_file
    assert items["program"] == "outlet test"
    assert items["results sha256"] == summary.digest
    assert items["prepared by"] == "A. Name"


def test_another_reading_gives_another_hash_of_the_readings(plant, summary, tmp_path):
    shutil.copytree(plant, tmp_path / "plant")
    unit = load(tmp_path / "plant" / "made.toml")
    passed(
        tmp_path / "plant",
        unit,
        wide([f"{CELLS[5000]:%Y-%m-%dT%H:%M:%SZ}"], np.array([[0.1, 0, 0, 0]])).replace("T3", TAG, 1),
        name="one.csv",
    )
    items = [
        one.tables["identity"].set_index("item")["text"]
        for one in (summary, month_of(tmp_path / "plant", unit, 2026, 3))
    ]
    assert items[0]["readings sha256"] != items[1]["readings sha256"]


# --- revisions


def test_a_summary_comes_back_from_the_store_as_it_was(summary):
    again = from_body(body_of(summary))
    assert again.digest == summary.digest
    assert list(again.tables) == list(summary.tables)
    for name, frame in summary.tables.items():
        pd.testing.assert_frame_equal(again.tables[name], frame)


def issued(folder: Path, who: str = "A. Name"):
    return issue(folder / "store", load(folder / "made.toml"), SPAN, Stamp(who, "0" * 64, "test"))


def test_the_same_results_again_are_the_revision_that_was_issued(plant, tmp_path):
    folder = shutil.copytree(plant, tmp_path / "plant")
    first, again = issued(folder), issued(folder, "B. Name")
    assert (first.is_new, again.is_new) == (True, False)
    assert (first.summary.revision, again.summary.revision) == (1, 1)
    assert workbook(again.summary) == workbook(first.summary)  # who issued it first stands in it
    assert len(documents.revisions(folder / "store", "made", "summary")) == 1
    acts = [line for line in journal.lines(folder / "store") if line.act == "summary issued"]
    assert [(line.subject, line.note, line.who) for line in acts] == [("2026-03", "revision 1", "A. Name")]


def test_late_data_make_a_second_revision_that_lists_exactly_what_changed(plant, tmp_path):
    folder = shutil.copytree(plant, tmp_path / "plant")
    first = issued(folder).summary
    late = slice(6000, 6006)  # one hour of March, corrected
    values = half_converted(np.full(6, 100.0), np.full(6, 0.50))
    stamps = [f"{one:%Y-%m-%dT%H:%M:%SZ}" for one in CELLS[late]]
    passed(folder, load(folder / "made.toml"), wide(stamps, values).replace("T3", TAG, 1), name="late.csv")
    second = issued(folder)
    assert (second.is_new, second.summary.revision) == (True, 2)
    listed = second.summary.tables["changes"]
    assert listed.to_dict("records") == by_hand(first, second.summary)
    day = f"{CELLS[6000].tz_convert('Europe/Berlin'):%Y-%m-%d}"
    assert set(listed.loc[listed["table"].isin(["days", "figures by day", "balances"]), "row"]) == {day}
    assert "whole span, selectivity on converted" in set(listed.loc[listed["table"] == "figures", "row"])
    assert issued(folder).summary.revision == 2
    write(second.summary, tmp_path, ("xlsx", "html"))
    assert (tmp_path / "made-2026-03-revision-2.xlsx").exists()
    assert [one.digest for one in kept(folder / "store", "made", "2026-03")] == [
        first.digest,
        second.summary.digest,
    ]
    page = (tmp_path / "made-2026-03-revision-2.html").read_text(encoding="utf-8")
    assert f"{len(listed)} entries of revision 1 are changed" in page
    assert page.index("What the words mean") < page.index("What revision 2 changes")


def by_hand(old: Summary, new: Summary) -> list[dict[str, str]]:
    """Compare two summaries cell by cell, in the plainest way; no row came or went."""
    found = []
    for name, frame in new.tables.items():
        if name in ("identity", "changes"):
            continue
        was = old.tables[name]
        assert len(was) == len(frame)
        for at in range(len(frame)):
            row = ", ".join(told(frame[key].iloc[at]) for key in KEYS[name])
            for column in frame:
                one, other = was[column].iloc[at], frame[column].iloc[at]
                if not (one == other or (one != one and other != other)):  # noqa: PLR0124  NaN is not itself
                    found.append(
                        {"table": name, "row": row, "column": column, "was": told(one), "is": told(other)}
                    )
    return found


def test_rows_that_come_and_go_are_listed(summary):
    alerts = pd.DataFrame({"watch": ["a"], "side": ["low"], "raised": ["x"], "hours": [1.0]})
    with_one = Summary(
        **{
            **{name: getattr(summary, name) for name in Summary.__slots__},
            "tables": {**summary.tables, "alerts": alerts},
        }
    )
    assert changes(summary, with_one).to_dict("records") == [
        {"table": "alerts", "row": "a, low, x", "column": "", "was": "", "is": "new row"}
    ]
    assert changes(with_one, summary)["was"].tolist() == ["was there"]


def test_noise_in_the_last_bits_makes_no_revision():
    frame = pd.DataFrame({"a": [80.123456789012, 0.1 + 0.2, -1e-15, np.nan]})
    other = pd.DataFrame({"a": [80.123456789013, 0.3, 1e-16, np.nan]})
    pd.testing.assert_frame_equal(settled(frame), settled(other), check_exact=True)
    assert not np.signbit(settled(frame)["a"][2])


# --- commands


def outlet_run(*words: object):
    return CliRunner().invoke(outlet, [str(word) for word in words], standalone_mode=False)


def test_the_command_writes_the_month_and_says_which_revision_it_is(plant, tmp_path):
    folder = shutil.copytree(plant, tmp_path / "plant")
    words = (
        "month",
        "2026-03",
        "--unit",
        folder / "made.toml",
        "--store",
        folder / "store",
        "--out",
        tmp_path / "out",
        "--by",
        "A. Name",
    )
    done = outlet_run(*words)
    assert done.exception is None
    assert "made: March 2026, revision 1, issued now" in done.output
    assert (tmp_path / "out" / "made-2026-03.xlsx").exists()
    assert "revision 1, as it was issued" in outlet_run(*words, "--form", "csv").output
    draft = outlet_run(*words, "--draft", "--form", "html", "--json")
    assert '"revision": 0' in draft.output
    assert (tmp_path / "out" / "made-2026-03-draft.html").exists()
    assert len(documents.revisions(folder / "store", "made", "summary")) == 1


def test_some_days_are_summed_up_like_a_month(plant, tmp_path):
    days = ("--from", "2026-03-02", "--to", "2026-03-15", "--draft", "--form", "parquet")
    done = outlet_run(
        "month", "--unit", plant / "made.toml", "--store", plant / "store", "--out", tmp_path, *days
    )
    assert done.exception is None
    hours = pq.read_table(tmp_path / "made-2026-03-02_2026-03-15-draft" / "hours.parquet").to_pandas()
    assert hours.set_index("item").loc["calendar", "hours"] == 14 * 24
    assert "without data" not in done.output


def test_a_month_that_is_not_over_is_told(plant, tmp_path):
    words = (
        "--unit",
        plant / "made.toml",
        "--store",
        plant / "store",
        "--out",
        tmp_path,
        "--draft",
        "--form",
        "csv",
    )
    done = outlet_run("month", "--from", "2026-03-30", "--to", "2026-04-02", *words)
    assert "  48 h of it are without data: what comes in later makes another revision" in done.output


def test_many_units_are_summed_up_on_several_processes_and_a_fault_of_one_stops_no_other(plant, tmp_path):
    other = tmp_path / "other.toml"
    shutil.copy(plant / "made.toml", other)
    store = shutil.copytree(plant / "store", tmp_path / "store")
    words = (
        "--unit",
        plant / "made.toml",
        "--unit",
        other,
        "--store",
        store,
        "--out",
        tmp_path,
        "--form",
        "csv",
    )
    done = outlet_run("month", "2026-03", *words)
    assert done.return_value == 2
    assert "made: March 2026, revision 1" in done.output
    assert "holds no cells of other in March 2026" in done.stderr


@pytest.mark.parametrize(
    ("words", "told"),
    [
        ((), "write a month such as 2026-04, or --from and --to"),
        (("2026-03", "--from", "2026-03-01", "--to", "2026-03-02"), "write a month such as"),
        (("--from", "2026-03-01"), "--from and --to go together"),
        (("--from", "2026-03-02", "--to", "2026-03-01"), "the first day 2026-03-02 lies after the last"),
    ],
)
def test_what_span_is_meant_has_to_be_clear(words, told, plant):
    done = outlet_run("month", *words, "--unit", plant / "made.toml", "--store", plant / "store")
    assert told in str(done.exception)


def test_a_span_is_left_out_and_taken_back_by_command(plant, tmp_path):
    folder = shutil.copytree(plant, tmp_path / "plant")
    asked = ("exclude", "--unit", folder / "made.toml", "--store", folder / "store", "--by", "A. Name")
    done = outlet_run(
        *asked,
        "--from",
        "2026-03-10 06:00",
        "--to",
        "2026-03-10T18:00",
        "--cause",
        "test",
        "--note",
        "trial of a load",
    )
    assert "made: exclude, number 2 of the journal" in done.output
    unit = load(folder / "made.toml")
    found = month_of(folder, unit, 2026, 3).tables["exclusions"].set_index("code").loc["TE"]
    assert (found["start"], found["hours"], found["by"]) == ("2026-03-10 06:00 +01:00", 12.0, "A. Name")
    assert "include" in outlet_run(*asked, "--back", 2).output
    assert "TE" not in set(month_of(folder, unit, 2026, 3).tables["exclusions"]["code"])
    assert "write --from, --to and --cause, or --back" in str(outlet_run(*asked, "--cause", "test").exception)


def test_a_folder_that_cannot_be_written_to_is_told(summary, tmp_path):
    (tmp_path / "file").write_text("")
    with pytest.raises(OutletError, match=r"file.*\n  Give another folder with --out"):
        write(summary, tmp_path / "file", ("xlsx",))


def test_no_half_written_file_is_left_behind(written):
    assert not list(written.rglob("*.tmp"))


def test_a_pass_without_new_exports_makes_no_new_revision(plant, tmp_path):
    folder = shutil.copytree(plant, tmp_path / "plant")
    first = issued(folder)
    run_pass(
        [load(folder / "made.toml")],
        folder / "store",
        [folder / "made.csv"],
        progress=lambda *_: None,
        settle=timedelta(0),
    )
    assert not issued(folder).is_new
    assert first.is_new
