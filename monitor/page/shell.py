"""The frame around every view: style, header with links, words for what is not there, cautions."""

from __future__ import annotations

from collections.abc import Sequence
from datetime import UTC, datetime, timedelta
from html import escape
from typing import Any, Literal

import numpy as np
import streamlit as st
from PIL import Image

from ingest.errors import OutletError
from ingest.unit import Unit
from monitor import axes, wording
from monitor.charts import Chart
from monitor.page import data

REFRESH = timedelta(seconds=30)
# What a link carries from view to view.
CARRIED = ("unit", "figures", "window", "mode", "span", "from", "to")


def ink() -> axes.Ink:
    """Give the chart colours of the theme that the browser shows.

    Returns
    -------
    Ink
        Light where the theme is not known.
    """
    return axes.DARK if st.context.theme.type == "dark" else axes.LIGHT


def icon() -> Image.Image:
    """Give the page's own small picture: one stream that goes in, two that come out.

    Returns
    -------
    Image
        64 by 64 pixels, transparent around it.
    """
    picture = np.zeros((64, 64, 4), np.uint8)
    row, column = np.mgrid[0:64, 0:64]
    fork = np.abs(np.abs(row - 32) - np.clip((column - 30) * 0.6, 0, 18)) < 5
    picture[fork & (column > 4) & (column < 60)] = (0, 114, 178, 255)
    return Image.fromarray(picture)


def style() -> None:
    """Write the page's own style once; colours come from the ink of the theme."""
    pen = ink()
    variables = {
        "text": pen.text, "quiet": pen.quiet, "grid": pen.grid, "alarm": pen.alarm_text, "series": pen.series,
        "tag": pen.tag,
    }  # fmt: skip
    root = "".join(f"--o-{name}:{value};" for name, value in variables.items())
    st.html(f"<style>:root{{{root}}}{STYLE}</style>")


STYLE = """
.stMainBlockContainer{padding:1.1rem 1.6rem 2rem;max-width:118rem}
.stAppHeader{background:transparent;pointer-events:none;height:0;min-height:0}
.o{font-variant-numeric:tabular-nums;color:var(--o-text);line-height:1.35}
.o h1{font-size:1.3rem;font-weight:600;margin:0;padding:0;letter-spacing:0}
.o h2{font-size:1.05rem;font-weight:600;margin:.2rem 0;padding:0;letter-spacing:0}
.o p{margin:.15rem 0}
.o .quiet{color:var(--o-quiet);font-size:.9rem}
.o .big{font-size:1.75rem;font-weight:600;white-space:nowrap;line-height:1.2}
.o .big small{font-size:1.05rem;font-weight:400;color:var(--o-quiet)}
.o .alarm{color:var(--o-alarm);font-weight:600}
.o .facts{display:flex;flex-wrap:wrap;gap:.1rem 1.6rem;font-size:.95rem}
.o dl{padding:0;display:grid;grid-template-columns:max-content 1fr;gap:.15rem .9rem;margin:.2rem 0;
font-size:.95rem}
.o dt{color:var(--o-quiet)}.o dd{margin:0}
.o table{border-collapse:collapse;font-size:.92rem;width:100%}
.o th{color:var(--o-quiet);font-weight:400;text-align:left}
.o td,.o th{padding:.12rem .7rem .12rem 0;vertical-align:baseline;border:0}
.o .windows{display:grid;grid-template-columns:max-content max-content;gap:0 .8rem;font-size:.95rem}
.o .windows span:nth-child(odd){color:var(--o-quiet)}
.o .numbers{display:grid;grid-template-columns:13.5rem max-content;gap:.2rem 1rem;align-items:center}
[class*="st-key-row"]{padding:.35rem .9rem;gap:0}
[class*="st-key-row"] [data-testid=stVerticalBlock]{gap:.05rem}
[class*="st-key-how"] button{padding-left:0;text-align:left;min-height:0}
[data-testid=stMain] [data-testid=stVerticalBlock]{gap:.6rem}
@media (max-width:640px){.stMainBlockContainer{padding:.7rem .8rem 2rem}
.o .numbers,.o dl{grid-template-columns:1fr}.o dd{margin-left:.9rem}
.o .wide{display:none}.o td,.o th{padding-right:.4rem}
[data-testid=stMain] [data-testid=stVerticalBlock]>*{--gap:.3rem}
[data-testid=stMain] .stHorizontalBlock,[data-testid=stMain] [data-testid=stLayoutWrapper]>div{row-gap:.3rem}}
.o ol{list-style:none;margin:0;padding:0}
.o ol li{padding:.35rem 0 .35rem .9rem;border-left:4px solid var(--o-alarm);margin:.35rem 0}
.o ol li.calm{border-left-color:var(--o-grid);color:var(--o-quiet)}
.o .foot{border-top:1px solid var(--o-grid);margin-top:1rem;padding-top:.6rem;font-size:.85rem;
color:var(--o-quiet);max-width:75rem}
.o .foot p{font-size:.85rem}
.o .empty{border-left:4px solid var(--o-grid);padding:.5rem 1rem;margin:1rem 0;max-width:50rem}
.o code{font-size:.9em}
.o h3{font-size:.95rem;font-weight:600;margin:.5rem 0 .15rem;padding:0;letter-spacing:0}
.o .exports{border-top:1px solid var(--o-grid)}
.o details{border-bottom:1px solid var(--o-grid)}
.o summary{display:grid;grid-template-columns:.8rem 12.5rem minmax(9rem,22rem) 10.5rem minmax(12rem,1fr);
gap:0 1rem;padding:.3rem 0;cursor:pointer;align-items:baseline}
.o summary::before{content:"\u25b8";color:var(--o-quiet);font-size:1.2em;line-height:1}
.o details[open]>summary::before{content:"\u25be"}
.o summary .name{font-weight:600;overflow-wrap:anywhere}
.o summary .sum{font-size:.95rem}
.o .some{font-weight:600}
.o details>div{padding:0 0 .8rem 1.8rem}
.o .account{display:flex;flex-wrap:wrap;gap:.2rem 3rem;align-items:flex-start}
.o .account>div{max-width:44rem}
.o table.sums{width:auto}
.o .sums td{text-align:right}
.o .sums .total td,.o .sums .total th{border-top:1px solid var(--o-quiet);color:var(--o-text)}
.o .row{font-size:.9rem;padding-left:.9rem;border-left:4px solid var(--o-grid);overflow-wrap:anywhere}
@media (max-width:900px){.o summary{grid-template-columns:.8rem 1fr}.o summary span{grid-column:2}
.o details>div{padding-left:1.8rem}}
.stMultiSelect [data-testid=stMultiSelectTagsContainer] [data-tag]{background-color:var(--o-tag);color:#fff}
.o ol.steps{list-style:decimal;padding-left:1.3rem}
.o ol.steps li{padding:.1rem 0;border:0;margin:.1rem 0}
.o ol li.rest{border-left-color:var(--o-grid)}
.o .left{border-left:4px solid var(--o-series);padding:.1rem 0 .1rem .9rem;margin:.35rem 0;max-width:75rem;
overflow-wrap:anywhere}
.o table.health{width:auto}
[class*="st-key-case"]{padding:.35rem .9rem;gap:.2rem}
[class*="st-key-open"] button{padding:0;min-height:0}
.o .sheet{overflow-x:auto}
.o .sheet td.n,.o .sheet th.n{text-align:right;white-space:nowrap}
.o .sheet td{white-space:nowrap}.o .sheet td.long{min-width:16rem;white-space:normal;overflow-wrap:anywhere}
.o .sheet th{vertical-align:bottom}.o .sheet th.group{text-align:center;border-bottom:1px solid var(--o-grid)}
.o .sheet tbody td{border-bottom:1px solid var(--o-grid)}.o .sheet td:last-child{padding-right:0}
.o .sheet .word{color:var(--o-quiet)}.o .sheet div.word{white-space:normal;min-width:9rem}
.o .sheet tr.stretch td{font-weight:600;padding-top:.6rem}
.o ol.first{counter-reset:place;max-width:75rem}.o ol.first li{counter-increment:place}
.o ol.first p:first-child::before{content:counter(place) ". "}
.o .caption{font-weight:600;font-size:.92rem;margin-top:.4rem}
@media print{.stAppHeader,.stPopover,[data-testid=stPageLink]{display:none}}
"""


def write(html: str, *, width: Literal["stretch", "content"] = "stretch") -> None:
    """Write a block in the page's own style; every text from outside was escaped by the caller.

    Parameters
    ----------
    html : str
        Inner HTML.
    width : {"stretch", "content"}
        Of the block.
    """
    st.html(f'<div class="o">{html}</div>', width=width)


def sheet(html: str) -> None:
    """Write a table that moves by itself where it is wider than the screen, also by keyboard.

    Parameters
    ----------
    html : str
        The table.
    """
    write(f'<div class="sheet" tabindex="0">{html}</div>')


def draw(chart: Chart, key: str, **more: Any) -> Any:
    """Draw a chart with its sentence for those who cannot see it.

    Parameters
    ----------
    chart : Chart
        Specification and data sets.
    key : str
        Of the widget.
    more : object
        Handed on to the widget.

    Returns
    -------
    object
        The state of the selection where one is asked for.
    """
    spec = chart.spec | {"datasets": chart.data}
    return st.vega_lite_chart(None, spec, theme=None, width="stretch", key=key, alt=chart.alt, **more)


def header() -> tuple[str | None, Any]:
    """Draw the unit's name, the choice of unit where there are several, and a place for the links.

    Returns
    -------
    str or None
        Key of the unit; None when a unit file cannot be read, which is then told.
    container
        For `links`.
    """
    try:
        units = data.units()
    except OutletError as error:
        empty("The unit file cannot be read.", str(error))
        return None, st.container()
    with st.container(horizontal=True, vertical_alignment="center", gap="medium"):
        key = _choice(units)
        write(f"<h1>{escape(units[key].name)}</h1>")
        place = st.container(horizontal=True, gap="medium", width="content")
    return key, place


def links(place: Any, pages: Sequence[Any], chosen: Any, key: str) -> None:
    """Draw the links to all views; each keeps what the address of this one says.

    Parameters
    ----------
    place : container
        From `header`; filled last, when the view has written its choices into the address.
    pages : sequence of Page
        All views.
    chosen : Page
        The one shown.
    key : str
        Of the unit.
    """
    kept = st.session_state.get("kept", {})
    kept = kept | {name: st.query_params.get_all(name) for name in CARRIED if name in st.query_params}
    st.session_state["kept"] = kept
    for page in pages:
        label = f"**{page.title}**" if page.title == chosen.title else page.title
        place.page_link(page, label=label, query_params={**kept, "unit": [key]}, width="content")


def _choice(units: dict[str, Unit]) -> str:
    """Key of the unit in the address; a select box where there are several."""
    keys = list(units)
    if len(keys) == 1:
        return keys[0]
    chosen = st.selectbox(
        "Unit", keys, format_func=lambda key: units[key].name, key="unit", bind="query-params", width=320
    )
    return str(chosen)


def unit() -> Unit:
    """Give the unit that the view is about.

    Returns
    -------
    Unit
        The one the address names, else the first.
    """
    units = data.units()
    named = st.session_state.get("unit", st.query_params.get("unit"))
    return units.get(named, next(iter(units.values())))


def empty(what: str, remedy: str) -> None:
    """Say that there is nothing to show, and what to do.

    Parameters
    ----------
    what, remedy : str
        One or more lines each.
    """
    lines = "<br>".join(escape(line) for line in remedy.splitlines())
    write(f'<div class="empty"><p><strong>{escape(what)}</strong></p><p class="quiet">{lines}</p></div>')


def nothing_yet() -> None:
    """Say that the store is empty, and how to fill it."""
    empty(
        "Nothing has been taken in yet.",
        "Run `outlet run` on the folder of exports, or leave `outlet follow` running: the figures appear "
        "here within half a minute. What could not be read is told under Intake.",
    )


def ends_before_it_begins() -> None:
    """Say that a typed span is the wrong way round."""
    empty("The span ends before it begins.", "Choose an end that is later than the beginning.")


def clock() -> datetime:
    """Give the time of this computer.

    Returns
    -------
    datetime
        Zone-aware UTC.
    """
    return datetime.now(UTC)


def cautions() -> None:
    """Write what the page is not for at its foot."""
    write('<div class="foot">' + "".join(f"<p>{escape(one)}</p>" for one in wording.CAUTIONS) + "</div>")
