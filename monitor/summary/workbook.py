"""A summary as an XLSX workbook: a sheet per table, native charts, print set-up, same input same bytes."""

from __future__ import annotations

import io
import math
from collections.abc import Sequence
from datetime import datetime
from typing import Any

import pandas as pd
import xlsxwriter

from monitor.celltext import neutral
from monitor.summary.digits import decimals
from monitor.summary.table import KEYS, Summary, names
from monitor.windows import MODES
from monitor.wording import CAUTIONS

# On the first sheet, one below the other; every other table has a sheet of its own.
FRONT = ("identity", "hours", "tonnes", "catalyst", "alert counts")
HEADLINE = ("conversion", "selectivity on converted", "yield on feed", "specific consumption fed")
HEADLINE_COLUMNS = (
    "stretch",
    "figure",
    "unit",
    *(f"{m}{f}" for m in MODES for f in ("", " ±", " coverage [%]", " remark")),
)
TITLES = {
    "identity": "What this is",
    "hours": "Hours",
    "tonnes": "Tonnes",
    "catalyst": "Catalyst",
    "alert counts": "Alerts",
}
INK, ACCENT, SECOND, QUIET = "#1c2a33", "#0072B2", "#D55E00", "#4f5d66"
# Pages across and down of wide tables, whose first columns are then repeated; the rest is one page across.
PAGES = {
    "figures": (2, 0),
    "comparisons": (2, 0),
    "figures by day": (0, 1),
    "days": (1, 1),
    "balances": (1, 1),
}
A4, WIDEST, NARROWEST = 9, 46, 9
OPTIONS = {
    "in_memory": True,
    "strings_to_formulas": False,
    "strings_to_urls": False,
    "strings_to_numbers": False,
}


def workbook(summary: Summary) -> bytes:
    """Write a summary as a workbook.

    Parameters
    ----------
    summary : Summary

    Returns
    -------
    bytes
        The file; the date in it is the end of the span.
    """
    room = io.BytesIO()
    book = xlsxwriter.Workbook(room, OPTIONS)
    book.set_properties(
        {
            "title": f"{summary.unit_name}, {summary.span_name}",
            "comments": CAUTIONS[0],
            "created": _made(summary),
        }
    )
    writer = _Writer(book, summary)
    writer.front()
    for name in sheets(summary):
        writer.sheet(name)
    writer.charts()
    book.close()
    return room.getvalue()


def sheets(summary: Summary) -> list[str]:
    """List the tables that have a sheet of their own.

    Parameters
    ----------
    summary : Summary

    Returns
    -------
    list of str
        In the order of the sheets, after the first.
    """
    return [name for name in summary.tables if name not in FRONT]


def headline(summary: Summary) -> pd.DataFrame:
    """Take out of the table of figures what is read first.

    Parameters
    ----------
    summary : Summary

    Returns
    -------
    DataFrame
        Rows of `figures`, index kept.
    """
    table = summary.tables["figures"]
    return table.loc[table["figure"].isin(HEADLINE), list(HEADLINE_COLUMNS)]


def _made(summary: Summary) -> datetime:
    """The date of the file: the end of the span, since a clock would give other bytes every time."""
    to = summary.tables["identity"].set_index("item").loc["to", "text"]
    return datetime.fromisoformat(str(to)[:16])


class _Writer:
    """One workbook while it is written: its formats by kind, made once each."""

    def __init__(self, book: Any, summary: Summary) -> None:
        self.book, self.summary = book, summary
        self._formats: dict[tuple[Any, ...], Any] = {}

    def format(self, **wanted: Any) -> Any:
        """Give a format with the house font, made once."""
        key = tuple(sorted(wanted.items()))
        if key not in self._formats:
            plain = {"font_name": "Arial", "font_size": 9, "font_color": INK, "valign": "vcenter"}
            self._formats[key] = self.book.add_format(plain | wanted)
        return self._formats[key]

    def header(self, *, of_numbers: bool) -> Any:
        """Give the format of headings, on the side on which the column is read."""
        side = {"align": "right"} if of_numbers else {"align": "left", "indent": 1}
        return self.format(bold=True, text_wrap=True, bottom=1, bg_color="#eef1f0", **side)

    def number(self, places: int) -> Any:
        """Give the format of a number with some decimals."""
        return self.format(num_format="#,##0" + ("." + "0" * places if places else ""))

    def page(self, name: str) -> Any:
        """Begin a sheet that prints on A4 across, as wide as the page, headed and with its caution."""
        sheet = self.book.add_worksheet(name)
        sheet.set_landscape()
        sheet.set_paper(A4)
        sheet.set_margins(left=0.4, right=0.4, top=0.7, bottom=0.6)
        sheet.fit_to_pages(1, 0)
        sheet.hide_gridlines(2)
        title = f"{self.summary.unit_name}, {self.summary.span_name}".replace("&", "&&")
        sheet.set_header(f"&L&9{title}&C&9{name}&R&9{revision_words(self.summary)}")
        sheet.set_footer("&L&8Advice only: no basis for interlock, trip or alarm settings.&R&8&P / &N")
        return sheet

    def front(self) -> None:
        """Write the first sheet: title, what this is, hours, tonnes, catalyst, and the figures read first."""
        sheet = self.page("summary")
        sheet.fit_to_pages(1, 1)
        for column, width in enumerate((26, 36, 9, *[11] * 8)):
            sheet.set_column(column, column, width)
        sheet.write_string(0, 0, neutral(self.summary.unit_name), self.format(bold=True, font_size=16))
        words = f"{self.summary.span_name}, {revision_words(self.summary)}"
        sheet.write_string(1, 0, words, self.format(font_size=11, font_color=QUIET))
        row = self.block(sheet, 3, "figures", headline(self.summary), "Figures read first")
        for name in FRONT:
            row = self.block(sheet, row + 1, name, self.summary.tables[name], TITLES[name])
        for place, caution in enumerate(CAUTIONS):
            sheet.write_string(row + 1 + place, 0, caution, self.format(font_size=8, font_color=QUIET))

    def block(self, sheet: Any, row: int, name: str, frame: pd.DataFrame, title: str) -> int:
        """Write a titled table at a row; give the row after it."""
        sheet.write_string(row, 0, title, self.format(bold=True, font_size=11, font_color=ACCENT))
        sheet.set_row(row + 1, 26)
        self.rows(sheet, row + 1, name, frame)
        return row + 2 + len(frame)

    def sheet(self, name: str) -> None:
        """Write a table on a sheet of its own, with panes frozen at its keys and a filter."""
        frame = self.summary.tables[name]
        sheet = self.page(name)
        self.rows(sheet, 0, name, frame)
        for place, width in enumerate(_widths(frame)):
            sheet.set_column(place, place, width)
        across, down = PAGES.get(name, (1, 0))
        sheet.fit_to_pages(across, down)
        if across != 1:
            sheet.repeat_columns(0, _frozen(name, frame) - 1)
        sheet.set_row(0, 40)
        sheet.freeze_panes(1, _frozen(name, frame))
        sheet.repeat_rows(0)
        if len(frame.columns):
            sheet.autofilter(0, 0, max(len(frame), 1), len(frame.columns) - 1)

    def rows(self, sheet: Any, top: int, name: str, frame: pd.DataFrame) -> None:
        """Write heading and rows of a table; a missing number is an empty cell, its reason beside it."""
        places = decimals(self.summary, name)
        text = self.format(text_wrap=name == "definitions", align="left", indent=1)
        first = {at: row for row, at in enumerate(self.summary.tables[name].index)}
        for column, title in enumerate(names(frame)):
            sheet.write_string(top, column, neutral(title), self.header(of_numbers=title in places))
            for row, (at, value) in enumerate(frame[title].items(), start=top + 1):
                if title not in places:
                    if value:
                        sheet.write_string(row, column, neutral(str(value)), text)
                elif math.isfinite(value):
                    sheet.write_number(row, column, value, self.number(places[title][first[at]]))

    def charts(self) -> None:
        """Draw the figures by day beside the front page's tables, tonnes and closures on their sheets."""
        by_day = self.summary.tables["figures by day"]
        for place, name in enumerate(one for one in HEADLINE[:3] if f"{one} | steady | %" in by_day):
            front = self.lines(by_day, "figures by day", [f"{name} | steady | %"], f"{name}, steady [%]")
            front.set_size({"width": 420, "height": 235})
            top = 7 + len(headline(self.summary))
            self.book.get_worksheet_by_name("summary").insert_chart(
                top + 14 * place, 7, front, {"object_position": 2}
            )
        self._columns_of_tonnes()
        balances = self.summary.tables["balances"]
        closures = [one for one in names(balances) if one.endswith("closure [%]")]
        if closures:
            chart = self.lines(balances, "balances", closures, "closures as read [%]")
            self.book.get_worksheet_by_name("balances").insert_chart(len(balances) + 2, 0, chart)

    def _columns_of_tonnes(self) -> None:
        """Draw the tonnes of the wanted product by day."""
        days = self.summary.tables["days"]
        made = [one for one in names(days) if one.endswith(" made [t]")][:1]
        if not made:
            return
        chart = self.book.add_chart({"type": "column"})
        self._series(chart, (days, "days"), made[0], {"fill": {"color": ACCENT}, "gap": 40})
        self._dressed(chart, made[0])
        self.book.get_worksheet_by_name("days").insert_chart(len(days) + 2, 0, chart)

    def lines(self, frame: pd.DataFrame, sheet: str, columns: Sequence[str], title: str) -> Any:
        """Draw some columns of a table of days as lines, with their half-widths where they have one."""
        chart = self.book.add_chart({"type": "line"})
        for column, ink in zip(columns, (ACCENT, SECOND), strict=False):
            width = (
                f"{column.rsplit(' | ', 1)[0]} | ±" if " | " in column else column.replace(" [%]", " ± [%]")
            )
            style: dict[str, Any] = {"line": {"color": ink, "width": 1.5}}
            style["marker"] = {"type": "circle", "size": 4, "fill": {"color": ink}, "border": {"color": ink}}
            if len(columns) == 1 and width in frame:
                cells = self._range(frame, sheet, width)
                style["y_error_bars"] = {
                    "type": "custom", "end_style": 0, "plus_values": cells, "minus_values": cells,
                    "line": {"color": QUIET, "width": 0.75},
                }  # fmt: skip
            self._series(chart, (frame, sheet), column, style)
        self._dressed(chart, title, legend=len(columns) > 1)
        return chart

    def _range(self, frame: pd.DataFrame, sheet: str, column: str) -> str:
        place = list(frame).index(column)
        letters = xlsxwriter.utility.xl_col_to_name(place, col_abs=True)
        return f"='{sheet}'!{letters}$2:{letters}${len(frame) + 1}"

    def _series(self, chart: Any, of: tuple[pd.DataFrame, str], column: str, style: dict[str, Any]) -> None:
        name = column.split(" | ")[1] if " | " in column else column
        cells = {"categories": self._range(*of, "day"), "values": self._range(*of, column)}
        chart.add_series({"name": name, **cells, **style})

    def _dressed(self, chart: Any, title: str, *, legend: bool = False) -> None:
        """Give a chart its title, plain axes and size."""
        font = {"name": "Arial", "size": 9, "color": QUIET, "bold": False}
        chart.set_title(
            {"name": title, "name_font": {"name": "Arial", "size": 11, "color": INK}, "overlay": False}
        )
        chart.set_x_axis(
            {"num_font": {**font, "rotation": -60}, "line": {"color": "#b8c0c4"}, "interval_unit": 2}
        )
        chart.set_y_axis(
            {
                "num_font": font,
                "major_gridlines": {"visible": True, "line": {"color": "#e2e6e4"}},
                "line": {"none": True},
            }
        )
        chart.set_legend({"position": "bottom", "font": font} if legend else {"none": True})
        chart.show_blanks_as("gap")
        chart.set_size({"width": 560, "height": 300})


def revision_words(summary: Summary) -> str:
    """Name the revision of a summary.

    Parameters
    ----------
    summary : Summary

    Returns
    -------
    str
        `draft`, `revision 2`.
    """
    return f"revision {summary.revision}" if summary.revision else "draft"


def _frozen(name: str, frame: pd.DataFrame) -> int:
    """How many columns stay in view: those that name a row."""
    keys = [one for one in KEYS[name] if one in frame]
    return (
        max((list(frame).index(one) + 1 for one in keys), default=0)
        if name not in ("alerts", "exclusions", "words")
        else 1
    )


def _widths(frame: pd.DataFrame) -> list[int]:
    """Width of each column, by its texts and by the longest word of its heading."""
    found = []
    for title, column in frame.items():
        longest = max((len(word) for word in str(title).split()), default=0)
        body = column.map(len).max() if column.dtype.kind != "f" and len(column) else 8
        found.append(int(min(max(longest + 2, min(body, WIDEST) + 2, NARROWEST), 90)))
    return found
