# ruff: noqa: E501 -- the cases are read across
"""Unit files that are wrong in one place: the error says where, what, and what to write instead."""

from __future__ import annotations

import re
from pathlib import Path

import pytest

from ingest import unitfile
from ingest.errors import Problem, UnitFileError
from tests.unitfiles_made import DEMO, loaded, with_edit


def problems_of(folder: Path, text: str) -> tuple[Problem, ...]:
    with pytest.raises(UnitFileError, match=r"made\.toml: \d+ problem") as caught:
        loaded(folder, text)
    assert str(caught.value).count("\n") == len(caught.value.problems) + 1  # a line each, then the remedy
    return caught.value.problems


def after(heading: str, old: str, new: str) -> str:
    """The demo file with an edit after a heading or name."""
    at = DEMO.index(heading)
    return DEMO[:at] + with_edit(old, new, DEMO[at:])


def more(section: str) -> str:
    return f"{DEMO}\n{section}"


NO_VOTES = DEMO[: DEMO.index("[[operating.vote]]")] + DEMO[DEMO.index("[catalyst]") :]
NO_POINT = with_edit('operating_point = ["TI-205", "FI-202", "FI-203"]', "")  # nobody else names TI-205
NO_HEALTHY = DEMO[: DEMO.index("[healthy]")] + DEMO[DEMO.index("[[event]]") :]
DECLARED = 'name = "oxygen in air"'
CHANNEL = 'acetone = { tag = "AI-220.ACE", range = [0, 2], systematic = { relative_pct = 2, floor = 0.002 } }'
WATCH = '[[watch]]\nfigure = "conversion"\nwindow = "8h"\nlow = 90\npriority = "low"\n'
DESIGNED = 'kind = "differential pressure flow"\ndesign_molar_mass = 56.1\n'
RATIO = (
    '[[instrument]]\nname = "FFI-1"\ntag = "FFI-1"\nkind = "flow ratio"\nstream = "air"\nunit = "mol/mol"\n'
    'random = {}\nsystematic = { relative_pct = 1 }\ncycle = "1min"\nmax_age = "5min"\nsampling = "held"\n'
)

# What is wrong: the text, the dotted place, words of the fault, words of the remedy.
BAD = {
    "unknown key with a near one": (
        with_edit("deadband = 0.3", "dead_band = 0.3"),
        "watch[1].dead_band", "unknown key", "did you mean 'deadband'?",
    ),
    "unknown key with none near": (
        with_edit('reactor = "packed bed"', 'reactor = "packed bed"\nzzz = 1'),
        "unit.zzz", "unknown key", "write one of 'name', 'time_zone', 'cell'",
    ),
    "unknown section": (
        more("[catalist]\n"), "catalist", "unknown section", "did you mean 'catalyst'?",
    ),
    "unknown key in braces": (
        with_edit("random = { floor = 0.3 }", "random = { flor = 0.3 }"),
        "instrument[PI-211].random.flor", "unknown key", "did you mean 'floor'?",
    ),
    "single brackets where several may stand": (
        DEMO[: DEMO.index("[[shared]]")] + "[shared]\nname = 'x'\n",
        "shared", "wrong kind of heading", "write [[shared]]",
    ),
    "double brackets where one may stand": (
        with_edit("[catalyst]", "[[catalyst]]"), "catalyst", "wrong kind of heading", "write [catalyst]",
    ),
    "a channel that is a number": (
        with_edit(CHANNEL, "acetone = 7"),
        "analyzer[AI-220].channel.acetone", "7 is no table", "write it under [analyzer.channel] or in braces",
    ),
    "missing key": (
        with_edit('reactor = "packed bed"\n', ""),
        "unit.reactor", "missing (kind of reactor", 'write reactor = "packed bed"',
    ),
    "missing key of a watch": (
        with_edit('priority = "high"\n', ""),
        "watch[1].priority", "missing (how soon somebody has to act)", 'write priority = "high"',
    ),
    "text where a number belongs": (
        with_edit("down_below = 1000", 'down_below = "1000"'),
        "operating.down_below", "'1000' is not a number", "write down_below = 1000",
    ),
    "a number that is not finite": (
        with_edit("low = 97.0", "low = nan"), "watch[3].low", "nan is not a number", "write low = 76.0",
    ),
    "true where a number belongs": (
        with_edit("low = 97.0", "low = true"), "watch[3].low", "true is not a number", "write low = 76.0",
    ),
    "number where text belongs": (
        after("[[analyzer]]", 'unit = "mol%"', "unit = 1"),
        "analyzer[AI-220].unit", "1 is not a text in quotes", 'write unit = "mol%"',
    ),
    "text where a list belongs": (
        with_edit('inert = ["nitrogen", "isobutane"]', 'inert = "nitrogen"'),
        "chemistry.inert", "'nitrogen' is not a list of texts", 'write inert = ["nitrogen"]',
    ),
    "a word that is not one of the choices": (
        with_edit('reactor = "packed bed"', 'reactor = "paked bed"'),
        "unit.reactor", "'paked bed' is not one of its words", "did you mean 'packed bed'?",
    ),
    "number out of range": (
        with_edit("relative_pct = 0.3, floor = 4", "relative_pct = 300, floor = 4"),
        "instrument[FI-201].random.relative_pct", "must be 0 to 100, got 300", "relative_pct = 0.5",
    ),
    "negative deadband": (
        with_edit("deadband = 0.3", "deadband = -0.3"),
        "watch[1].deadband", "must be at least 0, got -0.3", "write for example deadband = 0.3",
    ),
    "number where a time span belongs": (
        with_edit('starting_for = "4h"', "starting_for = 4"),
        "operating.starting_for", "4 is not a time span in quotes", 'write starting_for = "4h"',
    ),
    "a time span without unit": (
        with_edit('cell = "10min"', 'cell = "10"'),
        "unit.cell", "'10' is no time span", "write a number and s, min, h or d",
    ),
    "a time span out of range": (
        after("[[analyzer]]", 'dead_time = "4min"', 'dead_time = "40d"'),
        "analyzer[AI-220].dead_time", "must be 0 s to 7 d, got 40 d", 'write for example dead_time = "4min"',
    ),
    "a cell that divides neither hour nor day": (
        with_edit('cell = "10min"', 'cell = "7min"'),
        "unit.cell", "7 min divides neither an hour nor a day", 'write for example cell = "10min"',
    ),
    "a window that is no whole number of cells": (
        with_edit('cell = "10min"', 'cell = "10min"\nwindows = ["1h", "8h", "25min"]'),
        "unit.windows", "25 min is no whole number of cells", "write multiples of cell",
    ),
    "a window twice": (
        with_edit('cell = "10min"', 'cell = "10min"\nwindows = ["1h", "8h", "480min"]'),
        "unit.windows", "8 h stands twice", "name each window once",
    ),
    "unknown time zone": (
        with_edit('time_zone = "Europe/Berlin"', 'time_zone = "Europe/Berlim"'),
        "unit.time_zone", "'Europe/Berlim' is no time zone", "did you mean 'Europe/Berlin'?",
    ),
    "a time zone that is a path": (
        with_edit('time_zone = "Europe/Berlin" # for', 'time_zone = "../Berlin" # for'),
        "exports.time_zone", "'../Berlin' is no time zone", "did you mean",
    ),
    "a catalyst date without offset": (
        with_edit("2026-02-10T06:00:00+01:00", "2026-02-10T06:00:00"),
        "catalyst.charged", "is not a date and time with its offset", "2026-02-10T06:00:00+01:00",
    ),
    "range the wrong way round": (
        with_edit("range = [0, 12000]", "range = [12000, 0]"),
        "instrument[FI-201].range", "low 12000 is not below high 0", "write the lower number first",
    ),
    "range of one number": (
        with_edit("range = [0, 12000]", "range = [12000]"),
        "instrument[FI-201].range", "[12000] is not a pair of numbers", "write range = [0, 12000]",
    ),
    "a formula with an unknown symbol": (
        with_edit('nitrogen = "N2"', 'nitrogen = "Nx2"'),
        "chemistry.species.nitrogen", "'Nx' in 'Nx2' is no element", "standard atomic weight",
    ),
    "a charged species": (
        with_edit('water = "H2O"', 'water = "H3O+"'),
        "chemistry.species.water", "carries a charge", "write the neutral species",
    ),
    "a formula that is a number": (
        with_edit('nitrogen = "N2"', "nitrogen = 28"),
        "chemistry.species.nitrogen", "28 is not a formula in quotes", 'write it as water = "H2O"',
    ),
    "a species named like a sum": (
        DEMO.replace('"acetic acid"', '"all unwanted"'),
        "chemistry.species.all unwanted", "is what the program calls a sum", "choose another name",
    ),
    "a role for an undeclared species": (
        with_edit('wanted = "methacrolein"', 'wanted = "metacrolein"'),
        "chemistry.wanted", "'metacrolein' is no declared species", "did you mean 'methacrolein'?",
    ),
    "wanted is the key reactant": (
        with_edit('wanted = "methacrolein"', 'wanted = "isobutene"'),
        "chemistry.wanted", "'isobutene' is also key_reactant", "give each species one role",
    ),
    "inert and unwanted at once": (
        with_edit('unwanted = [', 'unwanted = ["isobutane", '),
        "chemistry.inert", "'isobutane' is also unwanted", "give each species one role",
    ),
    "a key element that is none": (
        with_edit('key_element = "C"', 'key_element = "carbon"'),
        "chemistry.key_element", "'carbon' is no element", 'write a symbol, for example "C"',
    ),
    "a key element that the key reactant lacks": (
        with_edit('key_element = "C"', 'key_element = "O"'),
        "chemistry.key_element", "'O' is not in isobutene, the key_reactant", "for example from C, H",
    ),
    "a stream with an undeclared species": (
        with_edit('species = ["oxygen", "nitrogen"]', 'species = ["oxygen", "nitrogen", "argon"]'),
        "stream[air].species", "'argon' is no declared species", "write one of 'isobutene'",
    ),
    "a stream without species": (
        more('[[stream]]\nname = "purge"\ndirection = "out"\nspecies = []\n'),
        "stream[purge].species", "holds no species", "name every species the stream may hold",
    ),
    "no stream goes out": (
        with_edit('direction = "out"', 'direction = "in"'),
        "stream", "no stream goes out", 'write direction = "out" for one',
    ),
    "the key reactant is not fed": (
        with_edit('species = ["isobutene", "isobutane"]', 'species = ["methacrolein", "isobutane"]'),
        "chemistry.key_reactant", "'isobutene' is in no stream that goes in", "a stream that goes in",
    ),
    "the wanted product leaves nowhere": (
        after('name = "outlet"', '"water", "methacrolein",', '"water",').replace("methacrolein = { tag", "# { tag").replace(
            'species = ["water"]', 'species = ["water", "methacrolein"]'
        ),
        "chemistry.wanted", "'methacrolein' is in no stream that goes out", "a stream that goes out",
    ),
    "an inert that cannot leave": (
        with_edit('nitrogen = "N2"', 'nitrogen = "N2"\nargon = "Ar"')
        .replace('inert = ["nitrogen",', 'inert = ["argon", "nitrogen",')
        .replace('species = ["oxygen", "nitrogen"]', 'species = ["oxygen", "nitrogen", "argon"]'),
        "chemistry.inert", "'argon' is in no stream that goes out", "a stream that goes out",
    ),
    "an element that cannot leave": (
        with_edit('nitrogen = "N2"', 'nitrogen = "N2"\nsulfide = "H2S"').replace(
            'species = ["water"]', 'species = ["water", "sulfide"]'
        ),
        "stream", "reacting species hold S only in streams that go in", "a species with S to a stream that goes out",
    ),
    "a species in no stream": (
        with_edit('nitrogen = "N2"', 'nitrogen = "N2"\nargon = "Ar"'),
        "chemistry.species.argon", "is in no stream", "add it to a stream or remove it",
    ),
    "two streams of one name": (
        more('[[stream]]\nname = "air"\ndirection = "in"\nspecies = ["oxygen"]\n'),
        "stream[air].name", "'air' already belongs to stream[air]", "give each its own name",
    ),
    "two instruments of one name": (
        with_edit('name = "TI-205"', 'name = "FI-201"', NO_POINT),
        "instrument[FI-201].name", "'FI-201' already belongs to instrument[FI-201]", "give each its own name",
    ),
    "an instrument named like a channel": (
        with_edit('name = "TI-205"', 'name = "AI-220 oxygen"', NO_POINT),
        "analyzer[AI-220].channel.oxygen.name", "'AI-220 oxygen' already belongs to", "give each its own name",
    ),
    "one tag twice": (
        with_edit('tag = "TI-205.PV"', 'tag = "TI-212.PV"'),
        "instrument[TI-205].tag", "'TI-212.PV' already belongs to instrument[TI-212]", "its own tag",
    ),
    "neither tag nor value": (
        with_edit('tag = "FI-203.PV"\n', ""),
        "instrument[FI-203]", "has neither tag nor value", 'write tag = "..." of the historian',
    ),
    "both tag and value": (
        with_edit('tag = "TI-205.PV"', 'tag = "TI-205.PV"\nvalue = 5', NO_POINT),
        "instrument[TI-205]", "has both tag and value", "remove one of them",
    ),
    "a declared signal": (
        more('[[instrument]]\nname = "S"\nkind = "signal"\nunit = ""\nvalue = 1\n'.replace('unit = ""', 'unit = "-"')),
        "instrument[S].value", "a signal is read from a tag", "write tag instead",
    ),
    "a tag without its cycle": (
        after("[[analyzer]]", 'cycle = "6min"\n', ""),
        "analyzer[AI-220].cycle", "missing (time between independent results)", 'write cycle = "6min"',
    ),
    "a declared value with timing": (
        after(DECLARED, "value = 20.95", 'value = 20.95\nmax_age = "5min"'),
        "instrument[oxygen in air].max_age", "a declared value has no timing", "remove it",
    ),
    "stale before it is new": (
        after("[[analyzer]]", 'max_age = "20min"', 'max_age = "5min"'),
        "analyzer[AI-220].max_age", "shorter than the cycle of 6 min", "write at least one cycle",
    ),
    "an interpolated composition": (
        after("[[analyzer]]", 'sampling = "held"', 'sampling = "interpolated"'),
        "analyzer[AI-220].sampling", "a composition is not interpolated", 'write sampling = "held"',
    ),
    "a largest step of nothing": (
        with_edit("range = [0, 12000]", "range = [0, 12000]\nlargest_step = 0"),
        "instrument[FI-201].largest_step", "must be at least 1e-09, got 0", "write for example largest_step = 5.0",
    ),
    "a status without its values": (
        with_edit("calibrating = [1], ", ""),
        "analyzer[AI-220].status.calibrating", "missing (numbers, or words of state_words", "write calibrating = [1, 2]",
    ),
    "a status without its age": (
        with_edit(', max_age = "26h" }', " }"),
        "analyzer[AI-220].status.max_age", "missing (how long a status stands", 'write max_age = "26h"',
    ),
    "a status value in words": (
        with_edit("calibrating = [1]", 'calibrating = ["on"]'),
        "analyzer[AI-220].status.calibrating", "'on' is no number and no word of exports.state_words", "state_words = { on = 1 }",
    ),
    "a status value outside a list": (
        with_edit("calibrating = [1]", "calibrating = 1"),
        "analyzer[AI-220].status.calibrating", "1 is not a list of numbers or words", "write calibrating = [1, 2]",
    ),
    "a status value that is neither number nor word": (
        with_edit("calibrating = [1]", "calibrating = [true]"),
        "analyzer[AI-220].status.calibrating", "true is not a number", "write calibrating = [1, 2]",
    ),
    "a word that stands for a number and for nothing": (
        with_edit('missing_words = [', 'state_words = { "no data" = 3 }\nmissing_words = ['),
        "exports.state_words", "'no data' also stands for no reading", "take it out of missing_words or of state_words",
    ),
    "a state word for a word": (
        with_edit('missing_words = [', 'state_words = { on = "1" }\nmissing_words = ['),
        "exports.state_words", "'1' is not a number", "write state_words = { Sample = 0, Calibrating = 1 }",
    ),
    "two state words that differ by capitals": (
        with_edit('missing_words = [', 'state_words = { On = 1, on = 2 }\nmissing_words = ['),
        "exports.state_words", "'on' stands twice, but for its capitals", "name each word once",
    ),
    "a status that is a tag alone": (
        with_edit('status = { tag = "AI-220.CAL", calibrating = [1], max_age = "26h" }', 'status = "AI-220.CAL"'),
        "analyzer[AI-220].status", "'AI-220.CAL' is no table", "write it under [status] or in braces",
    ),
    "a status whose tag is that of a channel": (
        with_edit('tag = "AI-220.CAL"', 'tag = "AI-220.O2"'),
        "analyzer[AI-220].status.tag", "'AI-220.O2' already belongs to analyzer[AI-220].channel.oxygen", "its own tag",
    ),
    "a certificate without tolerance": (
        with_edit("sum_band = [97, 103]", "certificate = { oxygen = 5, nitrogen = 83 }"),
        "analyzer[AI-220].certificate.tolerance_pct", "missing (how closely the channels read", "tolerance_pct = 2",
    ),
    "a certificate that everything is near to": (
        with_edit("sum_band = [97, 103]", "certificate = { oxygen = 5, nitrogen = 83, tolerance_pct = 80 }"),
        "analyzer[AI-220].certificate.tolerance_pct", "must be 0.01 to 50, got 80", "tolerance_pct = 2",
    ),
    "a certificate of one channel": (
        with_edit("sum_band = [97, 103]", "certificate = { oxygen = 5, tolerance_pct = 2 }"),
        "analyzer[AI-220].certificate", "one channel alone may read so by chance", "name two channels or more",
    ),
    "a certificate of what is no channel": (
        with_edit("sum_band = [97, 103]", "certificate = { oxygen = 5, nitrogn = 83, tolerance_pct = 2 }"),
        "analyzer[AI-220].certificate", "'nitrogn' is no channel of analyzer[AI-220]", "did you mean 'nitrogen'?",
    ),
    "a certificate in words": (
        with_edit("sum_band = [97, 103]", 'certificate = { oxygen = "5 %", nitrogen = 83, tolerance_pct = 2 }'),
        "analyzer[AI-220].certificate", "'5 %' is not a number", "write certificate = { oxygen = 5.0",
    ),
    "a sum over two units": (
        after("[analyzer.channel]", 'tag = "AI-220.ACE", range = [0, 2]', 'tag = "AI-220.ACE", unit = "ppm"'),
        "analyzer[AI-220].sum_band", "adds up channels in mol% and ppm", "give all channels one unit",
    ),
    "a sum band the wrong way round": (
        with_edit("sum_band = [97, 103]", "sum_band = [103, 97]"),
        "analyzer[AI-220].sum_band", "low 103 is not below high 97", "write the lower number first",
    ),
    "air told by nitrogen alone": (
        with_edit("sum_band = [97, 103]", "air_ingress = { nitrogen = [0, 1] }"),
        "analyzer[AI-220].air_ingress", "needs the channel of nitrogen (N2) and that of oxygen (O2)", "nitrogen = [0.3, 0.5]",
    ),
    "air told by another gas besides": (
        with_edit("sum_band = [97, 103]", "air_ingress = { nitrogen = [0, 1], oxygen = [0, 1], acetone = [0, 1] }"),
        "analyzer[AI-220].air_ingress", "each alone, and no other", "oxygen = [5.0, 6.5]",
    ),
    "air in a stream that holds as much nitrogen": (
        with_edit("sum_band = [97, 103]", "air_ingress = { nitrogen = [75, 85], oxygen = [1, 6] }"),
        "analyzer[AI-220].air_ingress.nitrogen", "air holds 78.08 mol% nitrogen, no more than the stream with 85", "remove air_ingress",
    ),
    "a band that is one number": (
        with_edit("sum_band = [97, 103]", "air_ingress = { nitrogen = 1, oxygen = [1, 6] }"),
        "analyzer[AI-220].air_ingress", "1 is not a pair of numbers", "write air_ingress = { nitrogen = [0.3, 0.5]",
    ),
    "a kind that is none": (
        after('name = "TI-205"', 'kind = "temperature"', 'kind = "temprature"'),
        "instrument[TI-205].kind", "'temprature' is not one of its words", "did you mean 'temperature'?",
    ),
    "a key of another kind": (
        after('name = "FI-201"', 'stream = "isobutene feed"', 'stream = "isobutene feed"\nspecies = ["isobutene"]'),
        "instrument[FI-201].species", "does not go with kind 'mass flow'", "remove it, or mend kind",
    ),
    "a composition without species": (
        after(DECLARED, 'species = ["oxygen"]\n', ""),
        "instrument[oxygen in air].species", "missing for kind 'mole fraction'", 'write species = ["oxygen"]',
    ),
    "a flow ratio without the other stream": (
        more(RATIO),
        "instrument[FFI-1].per_stream", "missing for kind 'flow ratio'", 'write per_stream = "air"',
    ),
    "a flow ratio of a stream to itself": (
        more(RATIO + 'per_stream = "air"\n'),
        "instrument[FFI-1].per_stream", "is the stream itself", "name the other stream",
    ),
    "an actual volume flow without its temperature": (
        with_edit('temperature = "TI-212"\n', ""),
        "instrument[FI-210].temperature", "missing for kind 'actual volume flow'", 'temperature = "TI-212"',
    ),
    "a differential pressure flow without its molar mass": (
        after('name = "FI-201"', 'kind = "mass flow"', 'kind = "differential pressure flow"'),
        "instrument[FI-201].design_molar_mass", "missing for kind 'differential pressure flow'", "write design_molar_mass = 18.0",
    ),
    "a molar mass in grams per gram": (
        after('name = "FI-201"', 'kind = "mass flow"', 'kind = "differential pressure flow"\ndesign_molar_mass = 0.056'),
        "instrument[FI-201].design_molar_mass", "must be 1 to 1000, got 0.056", "write for example design_molar_mass = 18.0",
    ),
    "a molar mass of a plain mass flow": (
        after('name = "FI-201"', 'kind = "mass flow"', 'kind = "mass flow"\ndesign_molar_mass = 56.1'),
        "instrument[FI-201].design_molar_mass", "does not go with kind 'mass flow'", "remove it, or mend kind",
    ),
    "a design without the temperature at hand": (
        after('name = "FI-201"', 'kind = "mass flow"', DESIGNED + 'design = "20 degC, 300 kPa"\npressure = "PI-211"'),
        "instrument[FI-201].temperature", "missing beside design and pressure", "or leave all three out",
    ),
    "a pressure without the design it is compared with": (
        after('name = "FI-201"', 'kind = "mass flow"', DESIGNED + 'pressure = "PI-211"\ntemperature = "TI-212"'),
        "instrument[FI-201].design", "missing beside pressure and temperature", 'write design = "180 degC, 350 kPa"',
    ),
    "a design in words": (
        after('name = "FI-201"', 'kind = "mass flow"', DESIGNED + 'design = "hot"\npressure = "PI-211"\ntemperature = "TI-212"'),
        "instrument[FI-201].design", "'hot' states no temperature and pressure", 'as design = "180 degC, 350 kPa"',
    ),
    "a design in gauge pressure": (
        after('name = "FI-201"', 'kind = "mass flow"', DESIGNED + 'design = "20 degC, 3 barg"\npressure = "PI-211"\ntemperature = "TI-212"'),
        "instrument[FI-201].design", "gauge pressure of no stated atmosphere", 'as design = "180 degC, 350 kPa"',
    ),
    "a mass at reference conditions": (
        after('name = "FI-201"', 'kind = "mass flow"', DESIGNED + 'reference = "0 degC, 101.325 kPa"'),
        "instrument[FI-201].reference", "a mass needs no reference", "remove it, or mend unit",
    ),
    "a design volume of no stated reference": (
        after('name = "FI-202"', 'kind = "volume flow"', DESIGNED.strip()).replace('reference = "0 degC, 101.325 kPa"\n', ""),
        "instrument[FI-202].unit", "'m3/h' states no reference conditions", '"0 degC, 101.325 kPa" (DIN 1343)',
    ),
    "a volume at flowing conditions without the design": (
        after('name = "FI-202"', 'kind = "volume flow"', DESIGNED.strip()).replace("0 degC, 101.325 kPa", "flowing"),
        "instrument[FI-202].unit", "'m3/h' at flowing conditions needs the design", 'write design = "180 degC, 350 kPa"',
    ),
    "a pressure that is a temperature": (
        with_edit('pressure = "PI-211"', 'pressure = "TI-212"'),
        "instrument[FI-210].pressure", "'TI-212' is no instrument of kind 'pressure'", "did you mean 'PI-211'?",
    ),
    "a volume flow without reference": (
        with_edit('reference = "0 degC, 101.325 kPa"\n', ""),
        "instrument[FI-202].reference", "missing for kind 'volume flow'", '"0 degC, 101.325 kPa" (DIN 1343)',
    ),
    "a reference in words": (
        with_edit('reference = "0 degC, 101.325 kPa"', 'reference = "normal"'),
        "instrument[FI-202].reference", "'normal' states no temperature and pressure", "(ISO 13443)",
    ),
    "a bare percent": (
        after("[[analyzer]]", 'unit = "mol%"', 'unit = "%"'),
        "analyzer[AI-220].unit", "'%' states no basis", "write 'mol%', 'vol%' or 'wt%'",
    ),
    "a unit of another kind": (
        after("[[analyzer]]", 'unit = "mol%"', 'unit = "kg/h"'),
        "analyzer[AI-220].unit", "'kg/h' does not fit kind 'mole fraction'", "write one of 'mol/mol', 'mol%'",
    ),
    "a gauge pressure of no stated atmosphere": (
        with_edit('unit = "kPa" # absolute', 'unit = "kPa gauge"'),
        "instrument[PI-211].unit", "gauge pressure of no stated atmosphere", 'atmosphere = "101.325 kPa"',
    ),
    "an atmosphere that is none": (
        with_edit('unit = "kPa" # absolute', 'unit = "kPa gauge"\natmosphere = "sea level"'),
        "instrument[PI-211].atmosphere", "'sea level' is no atmospheric pressure", 'atmosphere = "101.325 kPa"',
    ),
    "an atmosphere beside an absolute pressure": (
        with_edit('unit = "kPa" # absolute', 'unit = "kPa"\natmosphere = "101.325 kPa"'),
        "instrument[PI-211].unit", "'kPa' is absolute", "remove atmosphere",
    ),
    "a declared value outside its range": (
        after(DECLARED, "value = 20.95", "value = 20.95\nrange = [0, 1]"),
        "instrument[oxygen in air].value", "20.95 lies outside the range 0 to 1", "mend value or range",
    ),
    "a declared fraction above one": (
        after(DECLARED, 'unit = "mol%"', 'unit = "mol/mol"'),
        "instrument[oxygen in air].value", "20.95 mol/mol is no fraction", "mend value or unit",
    ),
    "a stream that is not declared": (
        after('name = "FI-203"', 'stream = "steam"', 'stream = "steem"'),
        "instrument[FI-203].stream", "'steem' is no declared stream", "did you mean 'steam'?",
    ),
    "a species that the stream does not hold": (
        after(DECLARED, 'species = ["oxygen"]', 'species = ["water"]'),
        "instrument[oxygen in air].species", "'water' is no species of stream 'air'", "'oxygen', 'nitrogen'",
    ),
    "a channel misspelt": (
        with_edit('acetone = { tag', 'aceton = { tag'),
        "analyzer[AI-220].channel.aceton.species", "'aceton' is no species of stream 'outlet'", "did you mean 'acetone'?",
    ),
    "a composition of no stated basis": (
        with_edit('basis = "dry"\n', ""),
        "analyzer[AI-220].basis", "missing, and 'outlet' holds water", 'write basis = "dry", "wet" or',
    ),
    "as analysed without saying how": (
        with_edit('basis = "dry"', 'basis = "as analysed"'),
        "analyzer[AI-220].left_out", 'missing for basis "as analysed"', 'write left_out = ["water"], or []',
    ),
    "dry and left out at once": (
        with_edit('basis = "dry"', 'basis = "dry"\nleft_out = ["water"]'),
        "analyzer[AI-220].left_out", 'does not go with basis "dry"', 'write basis = "as analysed"',
    ),
    "water measured in a dry sample": (
        with_edit("[[shared]]", "").replace('name = "AI-220 span"\nanalyzer = "AI-220"\nrelative_pct = 0.3\n', "").replace(
            CHANNEL, f'{CHANNEL}\nwater = "AI-220.H2O"'
        ),
        "analyzer[AI-220].channel.water", "counts water, which its basis leaves out", "mend species or basis",
    ),
    "an uncertainty that nobody stated": (
        with_edit("systematic = { relative_pct = 0.5, floor = 2 }\n", ""),
        "instrument[FI-201].systematic", "missing (an uncertainty is never invented)", "systematic = { relative_pct = 0.5 }",
    ),
    "a temperature of a flow without uncertainty": (
        after('name = "TI-212"', "random = { floor = 0.2 }\n", ""),
        "instrument[TI-212].random", "missing (an uncertainty is never invented)", "or {} for zero",
    ),
    "both uncertainties zero": (
        after(DECLARED, "systematic = { floor = 0.01 }", "systematic = {}"),
        "instrument[oxygen in air].systematic", "both uncertainties are zero", "write systematic = { relative_pct = 0.5 }",
    ),
    "a declared value that varies": (
        after(DECLARED, "random = {}", "random = { floor = 0.01 }"),
        "instrument[oxygen in air].random", "a declared value does not vary", "write random = {}",
    ),
    "a shared error of nothing": (
        with_edit('analyzer = "AI-220"\n', ""),
        "shared[AI-220 span]", "needs either instruments or analyzer", 'or analyzer = "..."',
    ),
    "a shared error of an analyzer that is not there": (
        with_edit('analyzer = "AI-220"\n', 'analyzer = "AI-202"\n'),
        "shared[AI-220 span].analyzer", "'AI-202' is no declared analyzer", "did you mean 'AI-220'?",
    ),
    "a shared error of one instrument": (
        with_edit('analyzer = "AI-220"\n', 'instruments = ["FI-201"]\n'),
        "shared[AI-220 span].instruments", "shared by fewer than two", "put it under systematic",
    ),
    "a shared error of a thermometer": (
        with_edit('analyzer = "AI-220"\n', 'instruments = ["FI-201", "TI-205"]\n'),
        "shared[AI-220 span].instruments", "'TI-205' is no instrument that enters the balance", "did you mean",
    ),
    "a load that is not there": (
        with_edit('load = "FI-201"', 'load = "FI-299"'),
        "operating.load", "'FI-299' is no instrument with a tag", "did you mean 'FI-2",
    ),
    "a load that never changes": (
        with_edit('load = "FI-201"', 'load = "oxygen in air"'),
        "operating.load", "'oxygen in air' is no instrument with a tag", "write one of 'FI-201'",
    ),
    "back before it is down": (
        with_edit("running_above = 2000", "running_above = 1000"),
        "operating.running_above", "1000 is not above down_below = 1000", "write a higher load",
    ),
    "turned down where it is down": (
        with_edit("turned_down_below = 4000", "turned_down_below = 500"),
        "operating.turned_down_below", "500 is not above down_below = 1000", "or leave it out",
    ),
    "votes that are no list": (
        with_edit('load = "FI-201"', 'load = "FI-201"\nvote = 3', NO_VOTES),
        "operating.vote", "3 is not a list of tables", "write vote = [{ instrument =",
    ),
    "a vote that is no table": (
        with_edit('load = "FI-201"', 'load = "FI-201"\nvote = ["FI-210"]', NO_VOTES),
        "operating.vote[1]", "'FI-210' is no table", "write it under [operating.vote]",
    ),
    "a vote of an instrument that is not there": (
        with_edit('instrument = "FI-210"', 'instrument = "FI-211"'),
        "operating.vote[FI-211].instrument", "'FI-211' is no instrument with a tag", "did you mean",
    ),
    "a vote of a certificate": (
        with_edit('instrument = "FI-210"', 'instrument = "oxygen in air"'),
        "operating.vote[oxygen in air].instrument", "is no instrument with a tag", "write one of 'FI-201'",
    ),
    "a second vote of the load": (
        with_edit('instrument = "FI-210"', 'instrument = "FI-201"'),
        "operating.vote[FI-201].instrument", "'FI-201' already belongs to operating.load", "one vote",
    ),
    "two votes of one signal": (
        with_edit('instrument = "FI-210"', 'instrument = "FI-203"'),
        "operating.vote[FI-203].instrument", "already belongs to operating.vote[FI-203]", "one vote",
    ),
    "a vote without limits": (
        with_edit("down_below = 9000\nrunning_above = 15500\n", ""),
        "operating.vote[FI-210]", "has no limits", "write down_below and running_above, or down_above and",
    ),
    "a vote with limits on both sides": (
        with_edit("running_above = 15500", "running_below = 15500"),
        "operating.vote[FI-210]", "has limits on both sides", "write down_below and running_above, or",
    ),
    "a vote that never says running": (
        with_edit("running_above = 15500\n", ""),
        "operating.vote[FI-210].running_above", "missing beside down_below", "write running_above = ... too",
    ),
    "a vote without room between its limits": (
        with_edit("running_above = 15500", "running_above = 9000"),
        "operating.vote[FI-210].running_above", "9000 is not above down_below = 9000", "leave room between",
    ),
    "a vote of the other side without room": (
        with_edit("running_below = 12", "running_below = 17"),
        "operating.vote[AI-220 oxygen].running_below", "17 is not below down_above = 16", "leave room",
    ),
    "a figure that is none": (
        with_edit('figure = "yield on feed"', 'figure = "yield on fed"'),
        "watch[1].figure", "'yield on fed' is no figure of this unit", "did you mean 'yield on feed'?",
    ),
    "a figure by the first word of its name": (
        with_edit('figure = "carbon closure"', 'figure = "yield"'),
        "watch[3].figure", "'yield' is no figure of this unit", "did you mean 'yield on feed'?",
    ),
    "a figure of a species that is not unwanted": (
        more(WATCH.replace("conversion", "share of isobutane")),
        "watch[5].figure", "'share of isobutane' is no figure of this unit", "did you mean 'share of ",
    ),
    "a budget for no figure": (
        with_edit('"yield on feed" = 83.0', '"yield on fed" = 83.0'),
        "budget.yield on fed", "'yield on fed' is no figure of this unit", "did you mean 'yield on feed'?",
    ),
    "a guarantee that is no number": (
        with_edit("conversion = 95.0", 'conversion = "95 %"'),
        "guarantee", "'95 %' is not a number", 'write for example "yield on feed" = 82.0',
    ),
    "a window that the unit does not have": (
        with_edit('window = "8h"', 'window = "12h"'),
        "watch[1].window", "12 h is not among the unit's windows", "write one of 1 h, 8 h, 24 h, 7 d",
    ),
    "a watch without limits": (
        more(WATCH.replace("low = 90\n", "")),
        "watch[5]", "has neither low nor high", "write low = ... or high = ...",
    ),
    "limits the wrong way round": (
        with_edit("high = 103.0", "high = 96"),
        "watch[3].low", "97 is not below high = 96", "write the lower limit as low",
    ),
    "a deadband larger than the band": (
        more(WATCH.replace("low = 90", "low = 90\nhigh = 91\ndeadband = 2")),
        "watch[5].deadband", "2 is not smaller than the band of 1", "smaller deadband or wider limits",
    ),
    "two watches that would have one name": (
        more(WATCH + WATCH),
        "watch[6].name", "'conversion 8 h' is the name of two watches", 'write name = "..." for one',
    ),
    "a test for drift with a limit": (
        more(WATCH.replace("low = 90", 'low = 90\ntest = "cusum"').replace("8h", "1h")),
        "watch[5].low", "a test for drift (cusum) has no limits", "leave low out",
    ),
    "a test for drift without a healthy period": (
        NO_HEALTHY.replace('test = "cusum"', "low = 1") + "\n" + WATCH.replace("low = 90", 'test = "ewma"'),
        "watch[5].test", "needs a healthy period to learn from", "write a section [healthy]",
    ),
    "a test for drift with windows that do not divide a day": (
        more(WATCH.replace("low = 90", 'test = "cusum"').replace("8h", "7d")),
        "watch[5].window", "7 d do not divide a day", 'write for example window = "1h"',
    ),
    "more windows counted than there are": (
        more(WATCH.replace("low = 90", "low = 90\ncount = 3\namong = 2")),
        "watch[5].count", "3 windows are more than among = 2", "write among = 3 or more",
    ),
    "half a window counted": (
        more(WATCH.replace("low = 90", "low = 90\ncount = 1.5\namong = 2")),
        "watch[5].count", "1.5 is no whole number", "write count = 2",
    ),
    "a healthy period that ends before it begins": (
        with_edit("to = 2026-03-27T00:00:00+01:00", "to = 2026-03-01T00:00:00+01:00"),
        "healthy.to", "2026-03-01T00:00:00+01:00 is not after from", "write a later moment",
    ),
    "a healthy period of a week": (
        with_edit("to = 2026-03-27T00:00:00+01:00", "to = 2026-03-09T12:00:00+01:00"),
        "healthy.to", "7.5 days are too few to learn from", "write at least 10 days",
    ),
    "a healthy period without its offset": (
        with_edit("from = 2026-03-02T00:00:00+01:00", "from = 2026-03-02T00:00:00"),
        "healthy.from", "is not a date and time with its offset", "write from = 2026-03-02T00:00:00+01:00",
    ),
    "an operating point that names a declared value": (
        with_edit('operating_point = ["TI-205"', 'operating_point = ["oxygen in air"'),
        "healthy.operating_point", "'oxygen in air' is no instrument with a tag", "write one of 'FI-201'",
    ),
    "an event of no kind that is known": (
        with_edit('kind = "planned"', 'kind = "plan"'),
        "event[more isobutene in the mixed feed].kind", "'plan' is not one of its words", "'planned'?",
    ),
    "a calibration of an instrument that is not there": (
        with_edit('instrument = "AI-220"', 'instrument = "AI-221"'),
        "event[AI-220 set right, methacrolein channel].instrument",
        "'AI-221' is no declared instrument or analyzer", "did you mean 'AI-220'?",
    ),
    "a note that names an instrument": (
        with_edit('kind = "planned"', 'kind = "note"\ninstrument = "TI-205"'),
        "event[more isobutene in the mixed feed].instrument", "a note concerns no single instrument",
        'write kind = "calibration", or leave it out',
    ),
    "a word list that names one twice": (
        with_edit('missing_words = [', 'missing_words = ["No Data", '),
        "exports.missing_words", "'No Data' stands twice", "name each once",
    ),
    "a quality that is none": (
        with_edit('missing_words = [', 'quality = "opc-ua"\nmissing_words = ['),
        "exports.quality", "'opc-ua' is not one of its words", "did you mean 'opc ua'?",
    ),
}  # fmt: skip


@pytest.mark.parametrize("case", BAD)
def test_one_fault_is_told_once_with_place_and_remedy(case: str, tmp_path: Path):
    text, place, what, remedy = BAD[case]
    [problem] = problems_of(tmp_path, text)
    assert problem.where == place
    assert what in problem.what
    assert remedy in problem.remedy


def test_five_faults_are_all_listed(tmp_path: Path):
    text = with_edit('cell = "10min"', 'cell = "7min"')
    text = with_edit('water = "H2O"', 'water = "H2o"', text)
    text = with_edit('name = "FI-203"', 'name = "FI-201"', text)
    text = with_edit("running_above = 2000", "running_above = 900", text)
    text = with_edit('figure = "carbon closure"', 'figure = "carbon closhure"', text)
    places = {problem.where for problem in problems_of(tmp_path, text)}
    assert places >= {
        "unit.cell",
        "chemistry.species.water",
        "instrument[FI-201].name",
        "operating.running_above",
        "watch[3].figure",
    }


def test_the_error_is_laid_out_as_one_line_per_fault(tmp_path: Path):
    text = with_edit('cell = "10min"', 'cell = "10"')
    with pytest.raises(
        UnitFileError, match=r"made\.toml: 1 problem\n  unit\.cell: '10' is no time span; "
    ) as caught:
        loaded(tmp_path, text)
    assert str(caught.value).endswith("\n  Mend what is named above.")


def test_a_fault_of_an_analyzer_is_told_once_not_once_per_channel(tmp_path: Path):
    assert len(problems_of(tmp_path, with_edit('basis = "dry"\n', ""))) == 1


@pytest.mark.parametrize("section", ["unit", "chemistry"])
def test_a_section_that_has_to_be_there_is_asked_for(section: str, tmp_path: Path):
    at = DEMO.index(f"[{section}]")
    text = (
        DEMO[:at]
        + DEMO[DEMO.index("\n[", DEMO.index("\n[chemistry.species]") + 1 if section == "chemistry" else at) :]
    )
    assert Problem(section, "missing", f"write a section [{section}]") in problems_of(tmp_path, text)


def test_an_empty_file_asks_for_what_a_reactor_needs(tmp_path: Path):
    assert [problem.where for problem in problems_of(tmp_path, "")] == ["unit", "chemistry", "stream"]


def test_a_file_without_instruments_is_refused(tmp_path: Path):
    text = DEMO[: DEMO.index("[[instrument]]")]
    assert [problem.where for problem in problems_of(tmp_path, text)] == ["instrument"]


def test_what_is_not_toml_is_refused_with_its_line(tmp_path: Path):
    [problem] = problems_of(tmp_path, with_edit('cell = "10min"', "cell = 10min"))
    assert "line 6" in problem.what
    assert "texts stand in quotes" in problem.remedy


def test_a_file_that_is_not_there_is_refused(tmp_path: Path):
    with pytest.raises(UnitFileError, match=r"absent\.toml: 1 problem\n  file: cannot be read"):
        unitfile.load(tmp_path / "absent.toml")


def test_a_file_that_is_not_utf_8_is_refused(tmp_path: Path):
    path = tmp_path / "latin.toml"
    path.write_bytes('name = "Süd"'.encode("latin-1"))
    with pytest.raises(UnitFileError, match=re.escape("is not UTF-8 text (byte 10); save it as UTF-8")):
        unitfile.load(path)


def test_a_file_name_that_cannot_name_a_unit_is_refused(tmp_path: Path):
    path = tmp_path / "line 3 (new).toml"
    path.write_text(DEMO, encoding="utf-8")
    with pytest.raises(
        UnitFileError, match=r"'line 3 \(new\)' cannot name a unit; use letters, digits, - and _"
    ):
        unitfile.load(path)


WORDS = sorted({word for word in re.findall(r"(?m)^\S.*$", DEMO) if "=" in word})


@pytest.mark.parametrize("line", WORDS)
def test_any_line_taken_away_gives_a_unit_or_an_error_in_words(line: str, tmp_path: Path):
    try:
        loaded(tmp_path, with_edit(line, "", DEMO))
    except UnitFileError as error:
        assert all(problem.remedy for problem in error.problems)  # noqa: PT017 -- either outcome is right


@pytest.mark.parametrize(
    "value", ["0", "-1", '""', "[]", "{}", "true", '"x"', "1e300", "2026-01-01", "[[1]]"]
)
@pytest.mark.parametrize("line", [word for word in WORDS if re.match(r"[a-z_]+ = ", word)][::3])
def test_any_value_put_in_place_gives_a_unit_or_an_error_in_words(line: str, value: str, tmp_path: Path):
    try:
        loaded(tmp_path, with_edit(line, f"{line.split(' = ', maxsplit=1)[0]} = {value}", DEMO))
    except UnitFileError as error:
        assert all(problem.remedy for problem in error.problems)  # noqa: PT017 -- either outcome is right
