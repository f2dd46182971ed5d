"""A summary as one HTML file: tables and inline charts, prints on A4, needs no script and no address."""

from __future__ import annotations

from collections.abc import Iterable
from html import escape

from monitor.axes import Spec
from monitor.summary import pictures, printed
from monitor.summary.table import Summary
from monitor.summary.workbook import HEADLINE, revision_words
from monitor.wording import CAUTIONS

STYLE = """
@page { size: A4 landscape; margin: 12mm 12mm 14mm; }
:root { color-scheme: light; }
* { box-sizing: border-box; }
body { margin: 0 auto; max-width: 273mm; padding: 6mm; background: #fff; color: #1c2a33;
  font: 9.5pt/1.4 Arial, Helvetica, sans-serif; }
header { display: flex; justify-content: space-between; align-items: end; border-bottom: 2px solid #00607f;
  padding-bottom: 2mm; margin-bottom: 4mm; }
h1 { font-size: 17pt; line-height: 1.15; margin: 0; font-weight: 600; }
h2 { font-size: 12pt; margin: 7mm 0 1.5mm; color: #00607f; font-weight: 600; break-after: avoid; }
p { margin: 0 0 2mm; max-width: 190mm; }
.quiet, .word { color: #4f5d66; }
.span { font-size: 12pt; text-align: right; }
table { border-collapse: collapse; width: 100%; font-size: 8pt; line-height: 1.3; margin-bottom: 3mm; }
thead { display: table-header-group; }
tr { break-inside: avoid; }
th, td { padding: 0.7mm 1.6mm; text-align: left; vertical-align: top; border-bottom: 0.2mm solid #e2e6e4; }
th { font-weight: 600; color: #4f5d66; vertical-align: bottom; border-bottom: 0.4mm solid #7d8a92; }
td.n, th.n { text-align: right; font-variant-numeric: tabular-nums; }
td.n { white-space: nowrap; }
th.group { text-align: center; border-left: 0.4mm solid #fff; background: #eef1f0; }
.two { display: grid; grid-template-columns: 1fr 1fr; gap: 2mm 8mm; align-items: start; }
figure { margin: 0; break-inside: avoid; }
figcaption { font-weight: 600; font-size: 9pt; margin: 2mm 0 1mm; }
svg { width: 100%; height: auto; }
.wide { grid-template-columns: 7fr 5fr; }
.new { break-before: page; }
td.t { white-space: nowrap; }
td.long { overflow-wrap: anywhere; min-width: 60mm; }
tr.stretch td { font-weight: 600; padding-top: 2mm; border-bottom-color: #7d8a92; }
footer { margin-top: 6mm; border-top: 0.3mm solid #7d8a92; padding-top: 2mm; font-size: 7.5pt;
  color: #4f5d66; }
@media print { body { padding: 0; max-width: none; } h2.wide { grid-template-columns: 7fr 5fr; }
.new { margin-top: 0; } }
"""


def report(summary: Summary) -> str:
    """Write a summary as a page.

    Parameters
    ----------
    summary : Summary

    Returns
    -------
    str
        HTML, whole in itself.
    """
    title = escape(f"{summary.unit_name}, {summary.span_name}")
    head = f'<meta charset="utf-8"><title>{title}</title><meta name="viewport" content="width=device-width">'
    body = "\n".join(_sections(summary))
    return (
        f'<!doctype html>\n<html lang="en"><head>{head}<style>{STYLE}</style></head>\n'
        f"<body>\n{body}\n</body></html>\n"
    )


def _sections(summary: Summary) -> Iterable[str]:
    """The page from top to bottom."""
    yield _head(summary)
    changed = summary.tables.get("changes")
    if changed is not None:
        words = f"{len(changed)} entries of revision {summary.revision - 1} are changed"
        yield f"<p><strong>{words}</strong>; they are listed at the end.</p>"
    yield "<h2>Figures read first</h2>"
    yield printed.figures(summary, HEADLINE)
    yield f'<div class="two">{"".join(_pictures(summary))}</div>'
    yield '<h2 class="new">Hours and tonnes</h2>'
    hours, tonnes = (printed.table(summary, name) for name in ("hours", "tonnes"))
    yield f'<div class="two"><div>{hours}</div><div>{tonnes}'
    yield _picture("Hours of each day", pictures.hours_by_day(summary), "b") + "</div></div>"
    yield f"<h2>Catalyst</h2>{printed.table(summary, 'catalyst')}"
    yield '<h2 class="new">All figures</h2>'
    yield printed.figures(summary, None)
    yield '<h2 class="new">Compared with</h2>'
    yield printed.comparisons(summary)
    yield f"<h2>Against the healthy period</h2>{printed.table(summary, 'expectation')}"
    yield '<h2 class="new">Days</h2>'
    yield printed.table(summary, "days")
    yield '<h2 class="new">Figures by day</h2>'
    yield printed.by_day(summary)
    yield '<h2 class="new">Balance by day</h2>'
    yield '<div class="two wide">'
    yield printed.table(summary, "balances")
    yield _picture("Closures by day as read [%], 95 % interval", pictures.closures_by_day(summary), "c")
    yield "</div>"
    yield '<h2 class="new">Instruments and operating point</h2>'
    yield printed.table(summary, "instruments")
    yield f"<h2>Alerts</h2><p>{printed.counted(summary)}</p>{printed.table(summary, 'alerts')}"
    for name, heading in (("exclusions", "Left out"), ("words", "Events and notes")):
        yield f"<h2>{heading}</h2>{printed.table(summary, name)}"
    yield '<h2 class="new">What this was made from</h2>'
    yield printed.table(summary, "identity")
    yield "<h2>What the words mean</h2>"
    yield printed.table(summary, "definitions")
    if changed is not None:
        yield f'<h2 class="new">What revision {summary.revision} changes</h2>'
        yield printed.table(summary, "changes")
    yield "<footer>" + "".join(f"<p>{escape(one)}</p>" for one in CAUTIONS) + "</footer>"


def _head(summary: Summary) -> str:
    """Title, span, revision, and who prepared it."""
    told = summary.tables["identity"].set_index("item")["text"]
    words = (
        f"{revision_words(summary)}; prepared by {told['prepared by']}; record until {told['record until']}"
    )
    return (
        f"<header><div><h1>{printed.text(summary.unit_name)}</h1>"
        f'<div class="quiet">{printed.text(told["catalyst"])}</div></div>'
        f'<div class="span"><strong>{printed.text(summary.span_name)}</strong>'
        f'<div class="quiet" style="font-size:8.5pt">{printed.text(words)}</div></div></header>'
    )


def _pictures(summary: Summary) -> Iterable[str]:
    """The charts of the first page, each with its caption."""
    specs = pictures.front(summary)
    yield from (_picture(caption, spec, f"a{place}") for place, (caption, spec) in enumerate(specs.items()))


def _picture(caption: str, spec: Spec, name: str) -> str:
    return f"<figure><figcaption>{escape(caption)}</figcaption>{pictures.svg(spec, name)}</figure>"
