"""Imports run one way: a file imports only from files that stand above it in ORDER."""

from __future__ import annotations

import ast
import subprocess
import sys

import pytest

from tests.source import PACKAGES, ROOT, Source, sources

ORDER = (
    "ingest.shown",
    "ingest.errors",
    "ingest.chemistry",
    "ingest.quantities",
    "ingest.unit",
    "ingest.keys",
    "ingest.entries",
    "ingest.draft",
    "ingest.instrumentrules",
    "ingest.analyzerrules",
    "ingest.noderules",
    "ingest.watchrules",
    "ingest.notifyrules",
    "ingest.unitrules",
    "ingest.unitfile",
    "ingest.columns",
    "ingest.account",
    "ingest.files",
    "ingest.lines",
    "ingest.timestamps",
    "ingest.readings",
    "ingest.values",
    "ingest.qualities",
    "ingest.clocks",
    "ingest.encodings",
    "ingest.layouts",
    "ingest.headings",
    "ingest.asides",
    "ingest.measures",
    "ingest.dialect",
    "ingest.textfiles",
    "ingest.parquets",
    "ingest.batches",
    "ingest.exports",
    "ingest.conditions",
    "ingest.channels",
    "ingest.stuck",
    "ingest.steps",
    "ingest.calibration",
    "ingest.samples",
    "ingest.checks",
    "ingest.screen",
    "ingest.votes",
    "ingest.cells",
    "ingest.instruments",
    "ingest.lag",
    "ingest.balance",
    "ingest.systems",
    "ingest.tangent",
    "ingest.iteration",
    "ingest.reconcile",
    "ingest.causes",
    "ingest.residuals",
    "ingest.suspects",
    "ingest.pairs",
    "ingest.parts",
    "ingest.episodes",
    "ingest.snapshot",
    "ingest.records",
    "ingest.migrations",
    "ingest.database",
    "ingest.journal",
    "ingest.documents",
    "ingest.outbox",
    "ingest.passes",
    "ingest.ledger",
    "ingest.archive",
    "ingest.found",
    "ingest.asked",
    "ingest.intake",
    "demo_data.kinetics",
    "demo_data.scenario",
    "demo_data.plant",
    "demo_data.meters",
    "demo_data.truth",
    "demo_data.exports",
    "monitor.raw",
    "monitor.formation",
    "monitor.amounts",
    "monitor.figures",
    "monitor.sums",
    "monitor.tallies",
    "monitor.windows",
    "monitor.runlengths",
    "monitor.trendtests",
    "monitor.noise",
    "monitor.expectation",
    "monitor.cusum",
    "monitor.ageing",
    "monitor.drift",
    "monitor.departure",
    "monitor.layout",
    "monitor.days",
    "monitor.months",
    "monitor.catchup",
    "monitor.drifting",
    "monitor.watched",
    "monitor.celltext",
    "monitor.wording",
    "monitor.axes",
    "monitor.series",
    "monitor.charts",
    "monitor.board",
    "monitor.witnesses",
    "monitor.fit",
    "monitor.suspicion",
    "monitor.coarse",
    "monitor.ridge",
    "monitor.coordinates",
    "monitor.healthy",
    "monitor.evidence",
    "monitor.hypotheses",
    "monitor.verdict",
    "monitor.losses",
    "monitor.onset",
    "monitor.settling",
    "monitor.explain",
    "monitor.verdicts",
    "monitor.tellverdict",
    "monitor.alerts",
    "monitor.register",
    "monitor.desk",
    "monitor.alerthealth",
    "monitor.tellalerts",
    "monitor.dossier",
    "monitor.shiftnote",
    "monitor.progress",
    "monitor.noticetext",
    "monitor.notices",
    "monitor.noticing",
    "monitor.run",
    "monitor.credentials",
    "monitor.envelope",
    "monitor.sending",
    "monitor.posting",
    "monitor.typical",
    "monitor.expected",
    "monitor.judge",
    "monitor.delays",
    "monitor.deliveries",
    "monitor.incoming",
    "monitor.store",
    "monitor.attendance",
    "monitor.strips",
    "monitor.firstchecks",
    "monitor.trials",
    "monitor.tryout",
    "monitor.telltrials",
    "monitor.trialchart",
    "monitor.summary.span",
    "monitor.summary.record",
    "monitor.summary.tonnes",
    "monitor.summary.results",
    "monitor.summary.differences",
    "monitor.summary.charge",
    "monitor.summary.exclusions",
    "monitor.summary.witness",
    "monitor.summary.shortfall",
    "monitor.summary.comparisons",
    "monitor.summary.table",
    "monitor.summary.terms",
    "monitor.summary.identity",
    "monitor.summary.making",
    "monitor.summary.issue",
    "monitor.summary.standing",
    "monitor.summary.digits",
    "monitor.summary.workbook",
    "monitor.summary.pictures",
    "monitor.summary.printed",
    "monitor.summary.report",
    "monitor.summary.files",
    "monitor.summary.batch",
    "monitor.summary.parcel",
    "monitor.page.launch",
    "monitor.page.data",
    "monitor.page.study",
    "monitor.page.shell",
    "monitor.page.details",
    "monitor.page.acts",
    "monitor.page.told",
    "monitor.page.opened",
    "monitor.page.trying",
    "monitor.page.shift",
    "monitor.page.spans",
    "monitor.page.now",
    "monitor.page.trend",
    "monitor.page.balance",
    "monitor.page.alerts",
    "monitor.page.instruments",
    "monitor.page.month",
    "monitor.page.intake",
    "monitor.page.app",
    "monitor.page.server",
    "monitor.aged",
    "monitor.tellnotices",
    "monitor.telling",
    "monitor.tellageing",
    "monitor.tellsummary",
    "monitor.tellexports",
    "monitor.follow",
    "monitor.commands.shared",
    "monitor.commands.running",
    "monitor.commands.asking",
    "monitor.commands.keeping",
    "monitor.commands.reporting",
    "monitor.commands.alerting",
    "monitor.commands.trying",
    "monitor.commands.notifying",
    "monitor.cli",
    "monitor.__main__",
)
MODULES = [s for s in sources() if s.path.name != "__init__.py"]


def _imported(source: Source) -> set[str]:
    """Every own module that a file imports, wherever in the file the import stands."""
    known = {s.module for s in sources()}
    found: set[str] = set()
    for node in ast.walk(source.tree):
        if isinstance(node, ast.Import):
            found.update(alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{source.place}:{node.lineno}: write the import with its full name"
            base = node.module or ""
            inner = {f"{base}.{alias.name}" for alias in node.names}
            found.update(inner & known or {base})
    return {name for name in found if name.split(".")[0] in PACKAGES}


def test_every_file_has_its_place_in_the_order_and_nothing_gone_has_one():
    assert sorted(ORDER) == sorted(s.module for s in MODULES)


@pytest.mark.parametrize("source", MODULES, ids=lambda s: s.place)
def test_a_file_imports_only_from_files_above_it(source: Source):
    if source.module not in ORDER:
        pytest.fail(f"{source.place} has no place in ORDER")
    above = set(ORDER[: ORDER.index(source.module)])
    assert _imported(source) <= above, f"{source.place} imports from below itself"


@pytest.mark.parametrize("source", MODULES, ids=lambda s: s.place)
def test_no_file_imports_the_init_of_a_package(source: Source):
    inits = {s.module for s in sources() if s.path.name == "__init__.py"}
    assert not _imported(source) & inits


def test_ingest_knows_neither_the_monitor_nor_the_demo_plant():
    for source in MODULES:
        if source.module.startswith("ingest."):
            assert {name.split(".")[0] for name in _imported(source)} <= {"ingest"}, source.place


def test_an_init_holds_a_docstring_and_nothing_else():
    for source in sources():
        if source.path.name == "__init__.py":
            assert ast.get_docstring(source.tree), f"{source.place} needs its one line"
            assert len(source.tree.body) == 1, f"{source.place} holds code"


def test_only_the_page_imports_streamlit():
    for source in MODULES:
        if not source.module.startswith("monitor.page."):
            names = [n for n in ast.walk(source.tree) if isinstance(n, ast.Import | ast.ImportFrom)]
            roots = {
                alias.name.split(".")[0] for n in names for alias in n.names if isinstance(n, ast.Import)
            }
            roots |= {(n.module or "").split(".")[0] for n in names if isinstance(n, ast.ImportFrom)}
            assert "streamlit" not in roots, source.place


def test_help_imports_no_heavy_library():
    # pandas 0.6 s, streamlit 0.5 s, pint 0.3 s to import: help must answer at once.
    script = (
        "import sys\n"
        "from monitor.cli import main\n"
        "sys.argv = ['outlet', '--help']\n"
        "try:\n    main()\nexcept SystemExit as stop:\n    assert not stop.code\n"
        "heavy = {'numpy', 'pandas', 'streamlit', 'pint', 'pyarrow', 'scipy', 'altair'}\n"
        "print(sorted(heavy & set(sys.modules)))\n"
    )
    done = subprocess.run(
        [sys.executable, "-c", script], cwd=ROOT, capture_output=True, text=True, check=True
    )
    assert done.stdout.splitlines()[-1] == "[]"
