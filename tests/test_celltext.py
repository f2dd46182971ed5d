"""Text from outside stays text in every file that people open in a spreadsheet."""

from __future__ import annotations

import csv
import io
from pathlib import Path

import openpyxl
import pytest
import xlsxwriter
from hypothesis import given
from hypothesis import strategies as st

from monitor.celltext import neutral

# OWASP, "CSV Injection": "cells beginning with any of these characters".
OWASP = ("=", "+", "-", "@", "\t", "\r", "\n", "＝", "＋", "－", "＠")  # noqa: RUF001
HOSTILE = (
    "=1+1",
    "=cmd|' /C calc'!A0",
    "+1+1",
    "-1+1",
    "@SUM(1+1)",
    "\t=1+1",
    "\r=1+1",
    '=HYPERLINK("http://127.0.0.1/?x="&A1,"look")',
    " =1+1",
    "{=1+1}",
    "-",
    "+1e",
    "=",
)
HARMLESS = (
    "FI-201.PV",
    "",
    "12",
    "-12.5",
    "+3",
    "-1,5",
    "1e-3",
    "-2.5E+07",
    "a=b",
    "AI-2 (mol%)",
    "50 % + x",
)


@pytest.mark.parametrize("mark", OWASP)
def test_a_cell_that_begins_with_a_mark_of_the_list_begins_with_an_apostrophe_instead(mark: str):
    assert neutral(f"{mark}x(1)") == f"'{mark}x(1)"


@pytest.mark.parametrize("text", HARMLESS)
def test_names_and_plain_numbers_stay_as_they_are(text: str):
    assert neutral(text) == text


@given(st.text())
def test_whatever_the_text_it_loses_nothing_and_is_neutral_the_second_time(text: str):
    assert neutral(text) in (text, f"'{text}")
    assert neutral(neutral(text)) == neutral(text)


@given(st.sampled_from(OWASP), st.text(alphabet="=+-@ \tA1()!|'\""))
def test_no_text_with_a_mark_in_front_is_left_unless_it_is_a_plain_number(mark: str, rest: str):
    if neutral(mark + rest) == mark + rest:
        float((mark + rest).replace(",", "."))


def _sheet(path: Path, texts: tuple[str, ...], method: str) -> None:
    with xlsxwriter.Workbook(path) as book:
        sheet = book.add_worksheet()
        for row, text in enumerate(texts):
            getattr(sheet, method)(row, 0, text)
        sheet.write_number(len(texts), 0, -12.5)


@pytest.mark.parametrize("method", ["write", "write_string"])
def test_a_workbook_holds_hostile_text_as_text_and_numbers_as_numbers(tmp_path: Path, method: str):
    _sheet(tmp_path / "x.xlsx", tuple(map(neutral, HOSTILE)), method)
    *cells, number = [row[0] for row in openpyxl.load_workbook(tmp_path / "x.xlsx").active.rows]
    # a line of XLSX keeps a carriage return as _x000D_ (ECMA-376, ST_Xstring)
    assert [c.value.replace("_x000D_", "\r") for c in cells] == [f"'{text}" for text in HOSTILE]
    assert {cell.data_type for cell in cells} == {"s"}
    assert (number.data_type, number.value) == ("n", -12.5)


def test_the_same_text_as_it_comes_would_have_become_formulas(tmp_path: Path):
    _sheet(tmp_path / "x.xlsx", HOSTILE, "write")
    kinds = [row[0].data_type for row in openpyxl.load_workbook(tmp_path / "x.xlsx").active.rows]
    assert "f" in kinds, "what this file tests is a danger that exists"


def test_a_csv_cell_comes_back_with_its_apostrophe_and_stands_in_one_cell():
    file = io.StringIO(newline="")
    csv.writer(file, quoting=csv.QUOTE_ALL).writerows([[neutral(text), "7"] for text in HOSTILE])
    file.seek(0)
    assert list(csv.reader(file)) == [[f"'{text}", "7"] for text in HOSTILE]
