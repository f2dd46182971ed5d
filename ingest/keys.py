# ruff: noqa: E501 -- the table is read across, one row per key
"""The one table of unit file keys.

A row says where a key stands, what form and range its value has, whether it must be there, what it means and what
to write. Reading, messages and the reference in config/README.md all come from these rows.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass, replace
from typing import Any

from ingest.unit import (
    EVENT_KINDS,
    FRACTION_KINDS,
    KINDS,
    NOTIFY_KINDS,
    PRIORITIES,
    REACTORS,
    ROLES,
    SAMPLINGS,
    SIDES,
    TESTS,
    TLS,
)

NESTED = ("uncertainty", "status")  # forms that are a table with a section of their own
BASES = ("dry", "wet", "as analysed")
ANALYZED = (*FRACTION_KINDS, "volume fraction", "species flow")
QUALITIES = ("words", "opc ua", "opc da")
DATE_ORDERS = ("day first", "month first", "year first")
DAY_NUMBERS = ("from 1900", "from 1904")
DECIMALS = (",", ".")


@dataclass(frozen=True, slots=True)
class Key:
    """One key of the unit file.

    `needed` is 'always', empty, or says when; only 'always' is enforced by the table itself. `low` and `high` bound
    a number, or a time span in seconds. `default` stands in when the key is left out, written as in the file.
    """

    section: str
    key: str
    form: str
    sentence: str
    example: str
    needed: str = ""
    default: Any = None
    low: float = -math.inf
    high: float = math.inf
    choices: tuple[str, ...] = ()

    @property
    def name(self) -> str:
        """Give the dotted name, as documents and messages write it."""
        return f"{self.section}.{self.key}"


_DAY = 86400.0

_INSTRUMENT = (
    Key("instrument", "name", "text", "name of the instrument, unique in the file", '"FI-201"', "always"),
    Key("instrument", "tag", "text", "historian tag that gives the reading", '"FI-201.PV"', "unless value is stated"),
    Key("instrument", "value", "number", "a declared reading that does not change, in the unit", "20.95", "unless tag is stated"),
    Key("instrument", "kind", "choice", "what the reading is", '"mass flow"', "always", choices=(*KINDS, "volume fraction")),
    Key("instrument", "unit", "text", "engineering unit of the reading, range and floors", '"kg/h"', "always"),
    Key("instrument", "stream", "text", "stream the reading is about", '"outlet"', "for all but pressure, temperature, signal"),
    Key("instrument", "per_stream", "text", "stream that a flow ratio divides by", '"air"', "for a flow ratio"),
    Key("instrument", "species", "texts", "species that a fraction or species flow counts together", '["oxygen"]', "for fractions and species flow"),
    Key("instrument", "basis", "choice", "dry leaves out water, wet nothing, as analysed what left_out names", '"dry"', "for fractions of a stream that holds water", choices=BASES),
    Key("instrument", "left_out", "texts", "species the sample no longer holds when it is analysed", '["water"]', 'for basis "as analysed"'),
    Key("instrument", "reference", "text", "conditions at which a volume flow is stated", '"0 degC, 101.325 kPa"', "for a volume flow"),
    Key("instrument", "design_molar_mass", "number", "molar mass that a differential pressure flow is read with [kg/kmol]", "18.0", "for a differential pressure flow", low=1, high=1000),
    Key("instrument", "design", "text", "temperature and pressure that it is read with, compensated by those measured; left out, it already is", '"180 degC, 350 kPa"', "with pressure and temperature"),
    Key("instrument", "atmosphere", "text", "atmospheric pressure that a gauge pressure adds to", '"101.325 kPa"', "for a gauge pressure"),
    Key("instrument", "pressure", "text", "pressure instrument at the meter", '"PI-211"', "for an actual volume flow"),
    Key("instrument", "temperature", "text", "temperature instrument at the meter", '"TI-212"', "for an actual volume flow"),
    Key("instrument", "random", "uncertainty", "standard uncertainty (k = 1) that differs from result to result", "{ relative_pct = 0.3 }", "for all that enter the balance"),
    Key("instrument", "systematic", "uncertainty", "standard uncertainty (k = 1) that stays, such as calibration", "{ relative_pct = 0.5, floor = 0.1 }", "for all that enter the balance"),
    Key("instrument", "range", "pair", "lowest and highest credible reading", "[0, 12000]"),
    Key("instrument", "cycle", "duration", "time between independent results", '"6min"', "with tag", low=1, high=30 * _DAY),
    Key("instrument", "dead_time", "duration", "time from the sample leaving the stream to its time stamp", '"4min"', default="0 s", low=0, high=7 * _DAY),
    Key("instrument", "max_age", "duration", "age at which a result is stale", '"20min"', "with tag", low=1, high=90 * _DAY),
    Key("instrument", "sampling", "choice", "what a stored value says about the time between two", '"held"', "with tag", choices=SAMPLINGS),
    Key("instrument", "largest_step", "number", "largest change of the true value within one cycle; a larger step is a spike or a doubt", "5.0", low=1e-9),
    Key("instrument", "longest_repeat", "number", "longest run of equal results in its healthy past, outages included [results]; more than half as many again are stuck", "3", low=1, high=10000),
)  # fmt: skip


_SHARED: tuple[str, ...] = ("unit", "basis", "left_out", "random", "systematic", "range")
_SHARED += ("cycle", "dead_time", "max_age", "sampling", "largest_step", "longest_repeat")
_EITHER = ("unit", "random", "systematic", "cycle", "max_age", "sampling")


def _again(section: str, names: Iterable[str]) -> tuple[Key, ...]:
    """Repeat rows of the instrument for analyzers and channels: what one does not state, the other may."""
    again = []
    for row in (row for row in _INSTRUMENT if row.key in names):
        needed = "at the analyzer or each channel" if row.key in _EITHER else row.needed
        example = '"mol%"' if row.key == "unit" else row.example
        again.append(replace(row, section=section, needed=needed, example=example, default=None))
    return tuple(again)


TABLE: tuple[Key, ...] = (
    Key("unit", "name", "text", "name of the reactor as people say it", '"Unit 2"', "always"),
    Key("unit", "time_zone", "zone", "the plant's own time zone, for days, months and wording", '"Europe/Berlin"', "always"),
    Key("unit", "cell", "duration", "time step of the balance; divides an hour, or is whole hours that divide a day", '"10min"', default="10min", low=1, high=_DAY),
    Key("unit", "reactor", "choice", "kind of reactor, which decides what instantaneous selectivity means", '"packed bed"', "always", choices=REACTORS),
    Key("unit", "windows", "durations", "trailing times over which figures are formed", '["1h", "8h"]', default=["1h", "8h", "24h", "7d"], low=1, high=366 * _DAY),
    Key("unit", "least_coverage", "number", "share of a window that has to be known for a figure", "0.75", default=0.75, low=0.01, high=1),
    Key("unit", "shift_starts", "clocks", "when the shifts of a day begin, in plant time, for notes from shift to shift", '["06:00", "18:00"]', default=["06:00", "14:00", "22:00"]),
    Key("chemistry", "key_reactant", "text", "reactant that conversion is about", '"isobutene"', "always"),
    Key("chemistry", "wanted", "text", "product that yield is about", '"methacrolein"', "always"),
    Key("chemistry", "unwanted", "texts", "products that selectivity compares with", '["carbon dioxide"]', "always"),
    Key("chemistry", "inert", "texts", "species that take no part", '["nitrogen"]', default=[]),
    Key("chemistry", "key_element", "text", "element that yield and shares count", '"C"', default="C"),
    Key("chemistry", "species", "formulas", "formula of each species", '{ water = "H2O" }', "always"),
    Key("node", "name", "text", "name of the node, unique in the file", '"separator"', "always"),
    Key("node", "reacts", "yes or no", "true: a reactor, elements balance; false: each species does", "false", "always"),
    Key("stream", "name", "text", "name of the stream, unique in the file", '"outlet"', "always"),
    Key("stream", "direction", "choice", "into the envelope or out of it", '"in"', "unless nodes are stated", choices=("in", "out")),
    Key("stream", "from", "text", "node it comes from; left out, it comes from outside", '"separator"', "with nodes, unless it comes from outside"),
    Key("stream", "to", "text", "node it goes to; left out, it goes outside", '"mixer"', "with nodes, unless it goes outside"),
    Key("stream", "species", "texts", "every species the stream may hold", '["oxygen", "nitrogen"]', "always"),
    Key("stream", "role", "choice", "what the recycle ratio counts it as: recycle over fresh feed, in moles", '"recycle"', choices=ROLES),
    *_INSTRUMENT,
    Key("uncertainty", "relative_pct", "number", "part in percent of the reading", "0.5", default=0.0, low=0, high=100),
    Key("uncertainty", "floor", "number", "part in the unit of the reading", "0.002", default=0.0, low=0),
    Key("analyzer", "name", "text", "name of the analyzer; its instruments are called name and species", '"AI-220"', "always"),
    Key("analyzer", "stream", "text", "stream that the sample is taken from", '"outlet"', "always"),
    Key("analyzer", "kind", "choice", "what the readings are", '"mole fraction"', "always", choices=ANALYZED),
    *_again("analyzer", _SHARED),
    Key("analyzer", "channel", "channels", "tag of each species, or a table of what differs for it", '{ oxygen = "AI-220.O2" }', "always"),
    Key("analyzer", "status", "status", "tag that tells when results are not of the stream", '{ tag = "AI-220.CAL", calibrating = [1], max_age = "26h" }'),
    Key("analyzer", "certificate", "numbers", "what the channels read on the calibration gas, within tolerance_pct of it and three of their standard uncertainties", "{ oxygen = 5.0, nitrogen = 83.0, tolerance_pct = 2 }"),
    Key("analyzer", "sum_band", "pair", "what all channels add up to, before any normalising", "[98, 102]"),
    Key("analyzer", "air_ingress", "bands", "least and most nitrogen and oxygen that the stream holds; more of both is air in the sample", "{ nitrogen = [0.3, 0.5], oxygen = [5.0, 6.5] }"),
    Key("analyzer.channel", "tag", "text", "historian tag of the channel", '"AI-220.O2"', "always"),
    Key("analyzer.channel", "species", "texts", "species counted together; left out, the one the channel is named for", '["oxygen"]'),
    *_again("analyzer.channel", _SHARED),
    Key("status", "tag", "text", "historian tag of the status", '"AI-220.CAL"', "always"),
    Key("status", "calibrating", "states", "numbers, or words of state_words, that mean that results are not of the stream", "[1, 2]", "always"),
    Key("status", "max_age", "duration", "how long a status stands without a new one; where it is stored on change, the longest rest", '"26h"', "always", low=1, high=90 * _DAY),
    Key("status", "settle", "duration", "how long after a calibration results are still not of the stream", '"10min"', default="0 s", low=0, high=_DAY),
    Key("shared", "name", "text", "name of the common error", '"AI-220 span"', "always"),
    Key("shared", "instruments", "texts", "instruments it moves together", '["FI-201", "FI-203"]', "unless analyzer is stated"),
    Key("shared", "analyzer", "text", "analyzer whose channels it moves together", '"AI-220"', "unless instruments is stated"),
    Key("shared", "relative_pct", "number", "standard uncertainty (k = 1) in percent of each reading", "0.3", "always", low=0.001, high=100),
    Key("operating", "load", "text", "instrument that tells the load", '"FI-201"', "always"),
    Key("operating", "down_below", "number", "load below which the reactor is down", "1000", "always"),
    Key("operating", "running_above", "number", "load above which it is back", "2000", "always"),
    Key("operating", "turned_down_below", "number", "load below which it is turned down; left out, it never is", "4000"),
    Key("operating", "starting_for", "duration", "time after coming back that counts as starting", '"4h"', default="0 s", low=0, high=30 * _DAY),
    Key("operating", "vote", "votes", "other signals that tell down from running; most of those that are seen decide, the load among them", '[{ instrument = "FI-210", down_below = 9000, running_above = 15000 }]'),
    Key("operating.vote", "instrument", "text", "instrument that gives the signal", '"FI-210"', "always"),
    Key("operating.vote", "down_below", "number", "value below which it says down", "9000", "unless down_above is stated"),
    Key("operating.vote", "running_above", "number", "value above which it says running", "15000", "with down_below"),
    Key("operating.vote", "down_above", "number", "value above which it says down, where high means down", "16.0", "unless down_below is stated"),
    Key("operating.vote", "running_below", "number", "value below which it says running", "12.0", "with down_above"),
    Key("catalyst", "charged", "moment", "when the catalyst was charged, with its offset", "2026-02-10T06:00:00+01:00", "always"),
    Key("event", "at", "moment", "when it happened, with its offset", "2026-05-12T09:30:00+02:00", "always"),
    Key("event", "kind", "choice", "what it was; a catalyst change or a calibration breaks ageing there, a catalyst change ends the expectation", '"calibration"', "always", choices=EVENT_KINDS),
    Key("event", "name", "text", "what people call it", '"AI-220 on new span gas"', "always"),
    Key("event", "instrument", "text", "instrument or analyzer that was calibrated", '"AI-220"'),
    Key("healthy", "from", "moment", "when the healthy period begins, with its offset", "2026-03-02T00:00:00+01:00", "always"),
    Key("healthy", "to", "moment", "when it ends, with its offset", "2026-05-01T00:00:00+02:00", "always"),
    Key("healthy", "operating_point", "texts", "instruments whose readings the expectation may depend on, beside load and catalyst age", '["TI-205"]', default=[]),
    Key("hold_up", "total_kmol", "number", "what a well-mixed reactor holds at any time, all species together [kmol]", "12.5", "always", low=1e-9),
    Key("hold_up", "relative_pct", "number", "standard uncertainty (k = 1) of that in percent", "5", "always", low=0.001, high=100),
    Key("watch", "name", "text", "name of the watch; left out, it is the figure and the window", '"yield, shift"'),
    Key("watch", "figure", "text", "figure that is watched", '"yield on feed"', "always"),
    Key("watch", "window", "duration", "one of the windows of the unit", '"8h"', "always", low=1, high=366 * _DAY),
    Key("watch", "test", "choice", "limits, or a test for drift away from the expectation, window by window", '"cusum"', default="limits", choices=TESTS),
    Key("watch", "low", "number", "limit below which an episode begins, in the unit of the figure", "76.0", 'for test "limits", unless high is stated'),
    Key("watch", "high", "number", "limit above which an episode begins, in the unit of the figure", "103.0", 'for test "limits", unless low is stated'),
    Key("watch", "count", "number", "so many windows have to lie beyond the limit", "2", default=1, low=1, high=20),
    Key("watch", "among", "number", "out of the last so many that do not overlap", "3", default=1, low=1, high=20),
    Key("watch", "shift_pct", "number", "change in percent of the figure that a test for drift is made to find; for a slope within 30 d", "0.5", default=0.5, low=0.05, high=20),
    Key("watch", "false_alarm_interval", "duration", "how often all tests for drift of the unit together may be wrong", '"60d"', default="60d", low=_DAY, high=3650 * _DAY),
    Key("watch", "side", "choice", "which way a test for drift looks; left out, the way that is bad for the figure", '"both"', choices=SIDES),
    Key("watch", "priority", "choice", "how soon somebody has to act", '"high"', "always", choices=PRIORITIES),
    Key("watch", "deadband", "number", "how far back inside the limit the figure has to come", "0.3", default=0.0, low=0),
    Key("watch", "on_delay", "duration", "how long the limit has to be crossed", '"1h"', default="0 s", low=0, high=30 * _DAY),
    Key("watch", "off_delay", "duration", "how long the figure has to be back", '"2h"', default="0 s", low=0, high=30 * _DAY),
    Key("watch", "steady", "yes or no", "watch the steady figure rather than the one as operated", "true", default=True),
    Key("budget", "figure", "numbers", "what the figure of that name should be, in its unit", '{ "yield on feed" = 82.0 }'),
    Key("guarantee", "figure", "numbers", "what was warranted of it, in its unit", '{ conversion = 95.0 }'),
    Key("prices", "currency", "text", "what the prices are stated in", '"EUR"', "always"),
    Key("prices", "wanted_per_kg", "number", "what a kilogram of the wanted product is worth", "1.60", "always", low=0),
    Key("prices", "key_reactant_per_kg", "number", "what a kilogram of the key reactant costs", "0.90", "always", low=0),
    Key("notify", "name", "text", "name of the target, of letters, digits, - and _; a webhook's keyid", '"shift"', "always"),
    Key("notify", "kind", "choice", "how notices go there", '"email"', "always", choices=NOTIFY_KINDS),
    Key("notify", "priorities", "texts", "priorities of the alerts that it is told of", '["high", "medium"]', default=[*PRIORITIES]),
    Key("notify", "quiet_from", "time of day", "from when on notices wait, by the plant's clock", '"22:00"', "with quiet_to"),
    Key("notify", "quiet_to", "time of day", "until when they wait", '"06:00"', "with quiet_from"),
    Key("notify", "quiet_exempt", "texts", "priorities that go out in quiet hours too, and first of all", '["high"]', default=["high"]),
    Key("notify", "per_hour", "number", "most notices in an hour; what is more goes as one digest", "12", default=12, low=2, high=1000),
    Key("notify", "address", "text", "e-mail address, one; for more people a list of the mail server's, or more targets", '"shift@plant.example"', "for an email"),
    Key("notify", "from", "text", "e-mail address that notices come from", '"outlet@plant.example"', "for an email"),
    Key("notify", "server", "text", "host name of the mail server", '"mail.plant.example"', "for an email"),
    Key("notify", "port", "number", "its port; left out, 587, or 465 with implicit TLS", "587", low=1, high=65535),
    Key("notify", "tls", "choice", "how the connection to it is secured; none only to this computer", '"implicit"', default="starttls", choices=TLS),
    Key("notify", "user", "text", "login name at the mail server; the password is the secret", '"outlet"'),
    Key("notify", "url", "text", "address that notices are posted to; https, or http to this computer", '"https://desk.plant.example/alerts"', "for a webhook"),
    Key("notify", "secret_env", "text", "environment variable that holds the password, or the key that signs", '"OUTLET_MAIL_PASSWORD"', "with user, unless secret_file is stated"),
    Key("notify", "secret_file", "text", "file that holds it, readable by its owner alone (mode 600); relative to the unit file", '"mail.secret"', "with user, unless secret_env is stated"),
    Key("notify", "ca_file", "text", "certificates (PEM) that servers are checked against in place of the system's; relative to the unit file", '"plant-ca.pem"'),
    Key("notify", "page", "text", "address of the page as the reader of a notice reaches it", '"https://outlet.plant.example/"'),
    Key("exports", "time_zone", "zone", "zone of time stamps that state no offset", '"Europe/Berlin"'),
    Key("exports", "missing_words", "texts", "words in the value column that mean no reading", '["No Data"]', default=[]),
    Key("exports", "state_words", "numbers", "words in the value column that stand for a number, such as those of a status", "{ Sample = 0, Calibrating = 1 }"),
    Key("exports", "quality", "choice", "what the quality column holds, where it does not tell by itself", '"words"', choices=QUALITIES),
    Key("exports", "date_order", "choice", "order of dates such as 03/04/2026 or 26-03-04, where a file does not tell by itself", '"day first"', choices=DATE_ORDERS),
    Key("exports", "decimal", "choice", "decimal mark of numbers such as 1,234, where a file does not tell by itself", '","', choices=DECIMALS),
    Key("exports", "day_numbers", "choice", "what the day numbers of a spreadsheet count from; left out, from 1900", '"from 1904"', choices=DAY_NUMBERS),
)  # fmt: skip


def rows(section: str) -> dict[str, Key]:
    """Give the rows of one section by key.

    Parameters
    ----------
    section : str
        For example 'instrument' or 'analyzer.channel'.

    Returns
    -------
    dict
        Key name to row, in the order of the table.
    """
    return {row.key: row for row in TABLE if row.section == section}
