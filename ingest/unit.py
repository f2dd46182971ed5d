"""One reactor as its unit file describes it: frozen, checked, in the program's own units.

Everything downstream of `unitfile.load` sees only these objects. Times are `timedelta`, relative
uncertainties are fractions (not percent), floors and ranges stay in the instrument's own unit.
"""

from __future__ import annotations

from dataclasses import dataclass
from datetime import datetime, time, timedelta
from pathlib import Path

FLOW_KINDS = ("molar flow", "mass flow", "volume flow", "actual volume flow", "differential pressure flow")
FRACTION_KINDS = ("mole fraction", "mass fraction")
BALANCE_KINDS = (*FLOW_KINDS, *FRACTION_KINDS, "species flow", "flow ratio")
AUXILIARY_KINDS = ("pressure", "temperature", "signal")
KINDS = (*BALANCE_KINDS, *AUXILIARY_KINDS)

SAMPLINGS = ("held", "interpolated", "mean at end", "mean at start", "lab sample")
PRIORITIES = ("high", "medium", "low")
REACTORS = ("well-mixed", "packed bed", "batch")
ROLES = ("fresh feed", "recycle")
EVENT_KINDS = ("catalyst change", "calibration", "planned", "note")
TESTS = ("limits", "cusum", "ewma", "slope")
SIDES = ("low", "high", "both")
NOTIFY_KINDS = ("email", "webhook")
TLS = ("starttls", "implicit", "none")
# Why a reactor has no instantaneous selectivity, and what to do about it.
NO_RATES = {
    "well-mixed": ("needs what the reactor holds", "write a section [hold_up]"),
    "packed bed": ("is not given by outlet data of a packed bed", "take the overall selectivity"),
    "batch": (
        "is the slope between samples of a batch, which is not worked out",
        "take the overall selectivity",
    ),
}


@dataclass(frozen=True, slots=True)
class Species:
    """A chemical species: its name in the unit file, formula, atoms per molecule, molar mass [kg/kmol]."""

    name: str
    formula: str
    atoms: tuple[tuple[str, float], ...]
    molar_mass_kg_kmol: float
    inert: bool


@dataclass(frozen=True, slots=True)
class Node:
    """A part of the unit that balances by itself: by element where it reacts, else by species."""

    name: str
    reacts: bool


@dataclass(frozen=True, slots=True)
class Stream:
    """A flow into the envelope, out of it or inside it; species in state order.

    `direction` is 'in', 'out' or 'inner'. `source` and `target` name the nodes it joins; None is the
    outside, and both are None in a unit that is one node without a name. `role` is one of ROLES or None.
    """

    name: str
    direction: str
    species: tuple[str, ...]
    source: str | None = None
    target: str | None = None
    role: str | None = None


@dataclass(frozen=True, slots=True)
class Uncertainty:
    """Standard uncertainty (k = 1) of a reading y: `relative * |y| + floor`, floor in the reading's unit."""

    relative: float
    floor: float


@dataclass(frozen=True, slots=True)
class Instrument:
    """Anything that gives a reading about a stream.

    A reading in its own unit becomes a base value by `(reading + offset) * to_base`; base values are
    kmol/h (molar, volume, differential pressure and species flow), kg/h (mass flow), mole or mass fraction,
    mol/mol (flow ratio), kPa, K. An actual volume flow has `to_base` to m3/h and becomes kmol/h with the
    readings of `pressure` and `temperature` (names of auxiliary instruments).
    """

    name: str
    kind: str
    tag: str | None  # None: declared, see value
    value: float | None  # a declared reading, in own unit
    unit: str
    to_base: float
    offset: float
    stream: str | None  # None only for auxiliary kinds
    per_stream: str | None  # flow ratio: stream over per_stream
    species: tuple[str, ...]  # what a fraction or species flow counts; empty otherwise
    left_out: tuple[str, ...]  # species the sample no longer holds (water behind a drier)
    random: Uncertainty
    systematic: Uncertainty
    low: float  # range in own unit; -inf / inf when not stated
    high: float
    cycle: timedelta  # time between independent results
    dead_time: timedelta
    max_age: timedelta  # a result older than this is stale
    sampling: str  # one of SAMPLINGS
    analyzer: str | None  # channels of one analyzer share this name
    pressure: str | None
    temperature: str | None
    largest_step: float | None = None  # largest true change within one cycle, in own unit
    longest_repeat: float | None = None  # longest run of equal results in its healthy past [results]
    design_molar_mass_kg_kmol: float | None = None  # that a differential pressure flow is read with
    design_kmol_m3: float | None = None  # at its design pressure and temperature; None: always right


@dataclass(frozen=True, slots=True)
class Analyzer:
    """What is stated of all channels of an analyzer together; readings in the channels' own unit."""

    name: str
    status: str | None = None  # signal instrument that tells when results are not of the stream
    calibrating: tuple[float, ...] = ()  # values of the status that say so
    settle: timedelta = timedelta(0)  # how much longer results are not of the stream
    certificate: tuple[tuple[str, float], ...] = ()  # channel and its reading on the calibration gas
    tolerance: float = 0.0  # of the certificate, as a fraction of each reading
    sum_band: tuple[float, float] | None = None  # what all channels add up to before any normalising
    air: tuple[tuple[str, float, float], ...] = ()  # nitrogen, oxygen: channel, least and most in the stream


@dataclass(frozen=True, slots=True)
class SharedError:
    """A systematic error common to several instruments, as a fraction of each reading (k = 1)."""

    name: str
    instruments: tuple[str, ...]
    relative: float


@dataclass(frozen=True, slots=True)
class Vote:
    """What one signal says: down beyond `down`, running beyond `running`, in its own unit.

    The side is told by their order: where `down` is the lower limit, a low value says down, else a high one.
    """

    instrument: str
    down: float
    running: float


@dataclass(frozen=True, slots=True)
class Operating:
    """How load and votes tell the operating condition; limits in the load instrument's own unit.

    Down once most of the signals that are seen say so, the load by `down_below`; back once most say running,
    the load by `running_above`; starting for `starting_for` after that; turned down by the load alone, below
    `turned_down_below`. Without votes the load decides by itself.
    """

    load: str
    down_below: float
    running_above: float
    turned_down_below: float
    starting_for: timedelta
    votes: tuple[Vote, ...] = ()


@dataclass(frozen=True, slots=True)
class HoldUp:
    """What a well-mixed reactor holds [kmol, all species], and how sure that is (k = 1, a fraction)."""

    total_kmol: float
    relative: float


@dataclass(frozen=True, slots=True)
class Event:
    """Something people know of; `kind` is one of EVENT_KINDS, `instrument` one, an analyzer or None."""

    at: datetime  # tz-aware
    kind: str
    name: str
    instrument: str | None


@dataclass(frozen=True, slots=True)
class Healthy:
    """The time that a person calls healthy: from `first` to before `last`, tz-aware.

    The expectation is fitted there, on load, catalyst age and the instruments of `operating_point`.
    """

    first: datetime
    last: datetime
    operating_point: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Prices:
    """What a kilogram of wanted product is worth and one of key reactant costs, in one currency."""

    currency: str
    wanted_per_kg: float
    key_reactant_per_kg: float


@dataclass(frozen=True, slots=True)
class Watch:
    """Limits on one windowed figure, or a test for its drift away from the expectation.

    `low` and `high` are in the figure's unit; None means no such limit, and a test for drift has neither.
    """

    name: str
    figure: str
    window: timedelta
    low: float | None
    high: float | None
    priority: str
    deadband: float
    on_delay: timedelta
    off_delay: timedelta
    steady: bool  # watch the steady figure rather than the as-operated one
    test: str = "limits"  # one of TESTS
    count: int = 1  # so many windows have to lie beyond a limit
    among: int = 1  # out of so many that do not overlap
    shift_pct: float = 0.5  # change that a test for drift is made to find
    false_alarm_interval: timedelta = timedelta(days=60)  # of all tests for drift of the unit together
    side: str | None = None  # one of SIDES; None: the way that is bad for the figure


@dataclass(frozen=True, slots=True)
class ExportRules:
    """What the unit file fixes about exports where the file itself does not tell."""

    time_zone: str | None
    missing_words: tuple[str, ...]
    quality: str | None  # 'words', 'opc ua', 'opc da' or None (found out)
    date_order: str | None = None  # 'day first', 'month first', 'year first' or None (found out)
    decimal: str | None = None  # ',', '.' or None (found out)
    state_words: tuple[tuple[str, float], ...] = ()  # words in the value column, and the number of each
    day_numbers: str | None = None  # 'from 1904', else from 1900


@dataclass(frozen=True, slots=True)
class Target:
    """Where notices of a unit go: one address by e-mail, or one webhook; no secret stands in it.

    `secret_env` and `secret_file` name where the secret is. A text or path that is not needed is empty.
    """

    name: str
    kind: str  # one of NOTIFY_KINDS
    priorities: tuple[str, ...]
    quiet: tuple[time, time] | None  # from, to, by the plant's clock
    quiet_exempt: tuple[str, ...]  # priorities that go out in quiet hours too
    per_hour: int
    page: str
    secret_env: str
    secret_file: Path | None
    ca_file: Path | None
    url: str = ""
    address: str = ""
    sender: str = ""
    server: str = ""
    port: int = 0
    tls: str = "starttls"  # one of TLS
    user: str = ""


@dataclass(frozen=True, slots=True)
class Unit:
    """One reactor. `key` is the unit file's stem and names the unit in the store and in links."""

    key: str
    name: str
    time_zone: str
    cell: timedelta
    reactor: str  # one of REACTORS
    species: tuple[Species, ...]
    key_reactant: str
    wanted: str
    unwanted: tuple[str, ...]
    key_element: str
    streams: tuple[Stream, ...]
    instruments: tuple[Instrument, ...]  # the instrument axis of every array
    shared: tuple[SharedError, ...]
    operating: Operating | None
    catalyst_charged: datetime | None  # tz-aware
    watches: tuple[Watch, ...]
    windows: tuple[timedelta, ...]
    least_coverage: float
    exports: ExportRules
    nodes: tuple[Node, ...] = ()  # none: the whole unit is one node that reacts
    hold_up: HoldUp | None = None
    analyzers: tuple[Analyzer, ...] = ()
    healthy: Healthy | None = None
    events: tuple[Event, ...] = ()  # in the order of time
    prices: Prices | None = None
    budget: tuple[tuple[str, float], ...] = ()  # figure, and the value that it is held against
    guarantee: tuple[tuple[str, float], ...] = ()
    targets: tuple[Target, ...] = ()  # whom notices go to
    shift_starts: tuple[time, ...] = (time(6), time(14), time(22))  # plant time, ascending
