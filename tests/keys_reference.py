# ruff: noqa: E501 -- sentences of a document stand whole
"""The reference of unit file keys, made from the program's own tables.

After a change of the tables write it anew from the top of the repository:
`python -m tests.keys_reference > config/README.md`
"""

from __future__ import annotations

import sys

from ingest import entries, keys, quantities
from ingest.cells import RULES
from ingest.checks import CHECKS
from ingest.conditions import CONDITIONS, GOOD
from ingest.instrumentrules import KIND_RULES
from ingest.keys import Key

HEADINGS = {
    "unit": "[unit]",
    "chemistry": "[chemistry]",
    "node": "[[node]]",
    "stream": "[[stream]]",
    "instrument": "[[instrument]]",
    "uncertainty": "uncertainty",
    "analyzer": "[[analyzer]]",
    "analyzer.channel": "[analyzer.channel]",
    "status": "status",
    "shared": "[[shared]]",
    "operating": "[operating]",
    "operating.vote": "[[operating.vote]]",
    "catalyst": "[catalyst]",
    "event": "[[event]]",
    "healthy": "[healthy]",
    "hold_up": "[hold_up]",
    "watch": "[[watch]]",
    "budget": "[budget]",
    "guarantee": "[guarantee]",
    "prices": "[prices]",
    "notify": "[[notify]]",
    "exports": "[exports]",
}
START = """# The unit file

A unit file (TOML) describes one reactor. `demo.toml` in this folder is a whole example. `outlet check` tells all faults
of a file at once, each with its key and what to write. Sections in double brackets may stand several times. Nothing is
guessed: a key without a default that is needed has to be there.

Time spans are a number and s, min, h or d in quotes: `"10min"`, `"8h"`. Formulas are symbols, counts and round brackets,
fractions allowed: `"C4H8"`, `"(C2H5)2O"`, `"CH1.8O0.5N0.2"`; molar masses use the IUPAC/CIAAW 2021 abridged atomic
weights.
"""
ABOUT = {
    "node": "A part of the unit that balances by itself: a mixer, a reactor, a separator. A file without nodes is one"
    " reactor. With nodes, conversion and yield are those of the whole unit, recycle inside; `per pass` stands beside"
    " those around the reactor alone.",
    "stream": "A flow into the unit, out of it or between two nodes. Without nodes it states its `direction`; with nodes"
    " `from` and `to` take the place of that, and the outside is not named: a feed has only `to`, a product only `from`.",
    "instrument": "Anything that gives a reading about a stream. Which keys it needs depends on its kind, see below.",
    "uncertainty": "What `random` and `systematic` hold. The standard uncertainty of a reading is the sum of both parts;"
    " `{}` states zero, and one of the two has to be more.",
    "analyzer": "Several readings of one sample. Each channel becomes an instrument called analyzer and species,"
    " such as `AI-220 oxygen`. What the analyzer states holds for all channels that do not state it themselves.",
    "analyzer.channel": "One line for each species: its tag, or a table with `tag` and whatever differs from the"
    " analyzer. A channel that counts several species together names them in `species`.",
    "status": 'What `status` of an analyzer holds: `status = { tag = "AI-220.CAL", calibrating = [1], max_age = "26h" }`.'
    " While the status has one of the values of `calibrating`, and for `settle` after that, no result takes part. A status"
    " is the surest sign; a certificate finds the calibration gas by itself, but not one that is like the process gas."
    " Where no status stands (none came for `max_age`), results are not checked.",
    "shared": "A systematic error that moves several instruments together, such as the span of an analyzer.",
    "operating": "How the load tells whether the reactor is down, starting, turned down or running.",
    "operating.vote": "Signals that vote beside the load, so that one dead meter does not call a shutdown. The reactor is"
    " down once more than half of the signals that are seen say down, and back once more than half say running; in"
    " between it stays what it was. A missing, stale or refused signal has no vote; one between its two limits counts"
    " as seen and says neither. Take signals that move within minutes of the feed and that fail each by itself: other"
    " feeds, the outlet flow, oxygen at the outlet. Where no signal is seen, the condition is not known.",
    "event": "What people know to have happened. Trends show it; after a catalyst change or a calibration the ageing"
    " before it says nothing about the time after it.",
    "healthy": "A time that a person calls healthy: what the unit does is held against what it did then, at the same load,"
    " catalyst age and operating point. At least 30 days, better 60. It stays until a person writes another one.",
    "hold_up": "What a well-mixed reactor holds. With it the instantaneous selectivity is worked out: its contents have"
    " the composition of the one stream that leaves it, and what they gain counts as formed.",
    "watch": "Limits on one figure over one window. A reading beyond the limit for `on_delay` begins an episode; back"
    " inside by `deadband` for `off_delay` ends it. With `count` and `among` it takes so many of the last windows that do"
    " not overlap. A test for drift holds the figure, window by window, against what the healthy period lets one expect"
    " at the load, catalyst age and operating point of that window: `cusum` adds up what lies beyond half of `shift_pct`"
    " (a second sum looks for larger shifts), `ewma` averages with fading weights, `slope` looks at the trend of daily"
    " means over 30 d. When each of them alarms follows from `false_alarm_interval` and from how the figure wandered while"
    " healthy; there is no threshold to tune, and deadband and delays are those of limits.",
    "notify": "Where notices of alerts go: one when an alert is raised, clears, is withdrawn or gets another verdict. The"
    " last place in an hour is kept for alerts that quiet hours do not hold. A secret never stands in this file: it is in a"
    " variable of the environment, or in a file that only its owner can read.",
    "exports": "What the exports themselves do not tell.",
}


LAB_SAMPLE = (
    "A lab sample is a tag with few results. `max_age` is how long a result is valid, counted from its sample; `dead_time`",
    "is the time from the sample to the stamp, `cycle` the usual time between samples. A value that an export shows again",
    "within half a cycle is the same result and renews nothing, and words or bad values between two results end nothing.",
    "Several results of one sample go under one `[[analyzer]]`.",
)
DIFFERENTIAL_PRESSURE = (
    "A differential pressure flow (orifice, nozzle, Venturi) of a gas is what a meter shows that takes the density of its",
    "design for the true one. Its reading is set right by the root of the densities: by pressure and temperature where",
    "`design` and both instruments are stated (left out, the reading already is), and by the reconciled molar mass",
    'against `design_molar_mass`. A volume is at its `reference`, or `reference = "flowing"` for cubic metres as they',
    "flow. The molar mass is taken in to second order: off by 0.1 % at 10 % from the design, 0.4 % at 20 %, 2 % at 50 %.",
    "The gas is taken as ideal; expansibility and discharge coefficient are those of the meter.",
)


def reference() -> str:
    """The whole of config/README.md."""
    sections = [_section(name, heading) for name, heading in HEADINGS.items()]
    return "\n".join([START, *sections, _samplings(), _kinds(), _references(), _checks()])


def _section(name: str, heading: str) -> str:
    lines = [f"## {heading}", ""]
    if name in ABOUT:
        lines += [ABOUT[name], ""]
    lines += ["| key | value | needed | meaning | example |", "|---|---|---|---|---|"]
    lines += [_row(row) for row in keys.rows(name).values()]
    return "\n".join([*lines, ""])


def _row(row: Key) -> str:
    # The keys of these two are the figures themselves: their table is the section.
    example = row.example.strip("{ }") if row.section in ("budget", "guarantee") else ""
    example = example or f"{row.key} = {row.example}"
    cells = (f"`{row.key}`", _value(row), _needed(row), row.sentence, f"`{example}`")
    return f"| {' | '.join(cells)} |"


def _value(row: Key) -> str:
    if row.choices:
        return "one of " + ", ".join(f'"{word}"' for word in row.choices)
    form = {
        "uncertainty": "table, see uncertainty",
        "texts": "list of texts",
        "durations": "list of time spans",
        "clocks": "list of times of day",
    }
    form |= {
        "duration": "time span",
        "pair": "two numbers",
        "zone": "IANA time zone",
        "moment": "date and time",
    }
    form |= {"formulas": "table of texts", "channels": "table", "numbers": "table of numbers"}
    form |= {
        "bands": "table of two numbers each",
        "states": "list of numbers or texts",
        "status": "table, see status",
    }
    return form.get(row.form, row.form) + _bounds(row)


def _bounds(row: Key) -> str:
    if row.low == float("-inf"):
        return ""
    if row.form.startswith("duration"):
        return f", {entries.span_words(row.low)} to {entries.span_words(row.high)}"
    return f", {row.low:g} to {row.high:g}" if row.high < float("inf") else f", {row.low:g} or more"


def _needed(row: Key) -> str:
    if row.needed:
        return row.needed
    if row.default is None or row.default == []:
        return "no"
    words = row.default if isinstance(row.default, str) else str(row.default).lower().replace("'", "")
    return f"no; {words}"


def _samplings() -> str:
    lines = ["## What a stored value says about time", "", "| sampling | why |", "|---|---|"]
    lines += [f"| {name} | {rule.why} |" for name, rule in RULES.items()]
    return "\n".join([*lines, "", *LAB_SAMPLE, ""])


def _kinds() -> str:
    lines = ["## Kinds of instrument and their units", ""]
    lines += [
        "A bare % is refused. ppm means mol per million mol. Pressures are absolute unless the unit says gauge"
    ]
    lines += [
        "(`kPa gauge`, `barg`, `psig`). Other units are understood where they have one meaning only, such as"
    ]
    lines += ["`t/day`, `mmHg` or `MMscfd`.", "", *DIFFERENTIAL_PRESSURE, ""]
    lines += ["| kind | needs | may have | common units |", "|---|---|---|---|"]
    for kind, rule in KIND_RULES.items():
        units = quantities.fitting("mole fraction" if kind == "volume fraction" else kind).replace("'", "")
        needs, may = (", ".join(f"`{key}`" for key in group) for group in (rule.needs, rule.may))
        lines.append(f"| {kind} | {needs} | {may} | {units or 'any'} |")
    return "\n".join([*lines, ""])


def _references() -> str:
    lines = ["## Reference conditions", ""]
    lines += [
        "A volume flow states the temperature and absolute pressure that its cubic metre or cubic foot is at;"
    ]
    lines += ["the gas is taken as ideal. Any such pair is read; these are the usual ones:", ""]
    lines += ["| reference | source | kmol in 1 m3 |", "|---|---|---|"]
    for text, source in quantities.REFERENCES.items():
        lines.append(f'| `"{text}"` | {source} | {quantities.kmol_per_m3(text):.7f} |')
    return "\n".join([*lines, ""])


def _checks() -> str:
    lines = ["## Checks on readings", ""]
    lines += [
        "Each reading is checked before any averaging, in this order. A check has four answers: good, not checked,"
    ]
    lines += [
        "suspect and bad. Bad readings take no part; suspect ones do, and are shown as such. A check whose key is not"
    ]
    lines += ["stated is not checked.", "", "| check | suspect | bad | why |", "|---|---|---|---|"]
    for name, check in CHECKS.items():
        words = ("" if code == GOOD else CONDITIONS[code] for code in (check.suspect, check.bad))
        lines.append(f"| {name} | {' | '.join(words)} | {check.why} |")
    return "\n".join([*lines, ""])


if __name__ == "__main__":
    sys.stdout.write(reference())
