"""Documents tell what is there and nothing that is gone; README's commands are run."""

from __future__ import annotations

import re
import shlex
import subprocess
import sys
from dataclasses import replace
from functools import cache
from pathlib import Path

import click
import pytest

from demo_data.exports import UNIT_FILE
from ingest import keys
from ingest.unit import HoldUp
from ingest.unitfile import load
from monitor.cli import outlet
from monitor.days import plan_of
from tests.loops_made import oxide_readings, oxide_text
from tests.source import PACKAGES, ROOT, sources
from tests.test_layers import ORDER
from tests.unitfiles_made import loaded

DOCUMENTS = ("README.md", "DEVELOPERS.md", "config/README.md")
COMMAND = re.compile(r"\boutlet ([a-z][a-z-]*)((?: +[^\s`|]+)*)")


@cache
def text(name: str) -> str:
    return (ROOT / name).read_text(encoding="utf-8")


def section(name: str, heading: str) -> str:
    """What stands under a heading of the second level."""
    return text(name).split(f"\n## {heading}\n")[1].split("\n## ")[0]


def shown_commands() -> list[tuple[str, str, str]]:
    """Each `outlet NAME ...` between back-quotes or in a shell block of a document."""
    found = []
    for name in DOCUMENTS:
        pieces = re.findall(r"```sh\n(.*?)```|`([^`\n]+)`", text(name), re.DOTALL)
        for block, inline in pieces:
            found += [(name, command, rest) for command, rest in COMMAND.findall(block or inline)]
    return found


def options_of(command: click.Command) -> set[str]:
    """The options of a command; of a command that has commands, theirs."""
    inner = command.commands.values() if isinstance(command, click.Group) else ()
    own = {flag for parameter in command.params for flag in (*parameter.opts, *parameter.secondary_opts)}
    return own.union(*map(options_of, inner))


def meant(command: str, rest: str) -> click.Command:
    """The command that words of a document mean, which may be one of a command that has commands."""
    found = outlet.commands[command]
    if isinstance(found, click.Group) and (word := rest.split(maxsplit=1)[:1]):
        return found.commands[word[0]]
    return found


@pytest.mark.parametrize("command", sorted(outlet.commands))
def test_every_command_stands_in_the_readme(command: str):
    assert f"| `outlet {command}" in text("README.md")


def test_every_command_of_a_command_stands_in_the_readme():
    groups = {name: one for name, one in outlet.commands.items() if isinstance(one, click.Group)}
    for name, group in groups.items():
        for inner in group.commands:
            assert f"`outlet {name} {inner}" in text("README.md"), f"outlet {name} {inner}"


@pytest.mark.parametrize("command", sorted(outlet.commands))
def test_every_option_of_a_command_stands_in_the_readme(command: str):
    flags = {flag for flag in options_of(outlet.commands[command]) if flag.startswith("--")}
    assert not {flag for flag in flags if flag not in section("README.md", "Use it on your own reactor")}


def test_no_document_shows_a_command_or_an_option_that_is_gone():
    for name, command, rest in shown_commands():
        assert command in outlet.commands, f"{name}: outlet {command}"
        flags = set(re.findall(r"--[a-z-]+", rest))
        assert flags <= options_of(meant(command, rest)) | {"--help"}, f"{name}: outlet {command}{rest}"


def test_no_message_of_the_program_names_a_command_that_is_gone():
    for source in sources():
        for command in re.findall(r"[`']outlet ([a-z][a-z-]*)", source.text):
            assert command in outlet.commands, f"{source.place}: outlet {command}"


def test_every_figure_stands_in_the_readme_and_none_that_is_gone(tmp_path: Path):
    told = set(re.findall(r"^\| ([^|]+?) \|", section("README.md", "Figures"), re.MULTILINE)) - {
        "figure",
        "---",
    }
    unit = load(UNIT_FILE)
    products = {unit.wanted: "P", **dict.fromkeys(unit.unwanted, "U")}
    looped = loaded(tmp_path, oxide_text(oxide_readings()))
    # what a unit with nodes or a stated hold-up has besides; the rest is named for the demo plant's products
    there = {one.name for one in plan_of(looped).figures if "pass" in one.name or "recycle" in one.name}
    for figure in plan_of(replace(unit, hold_up=HoldUp(1.0, 0.1))).figures:
        words = figure.name
        for product, letter in products.items():
            words = re.sub(rf"\b{re.escape(product)}$", f"*{letter}*", words)
        there.add(words.replace("carbon closure", "*element* closure").replace("make of *U*", "make of *P*"))
    assert told == there


def test_every_unit_file_key_stands_in_its_section_of_the_reference_and_none_that_is_gone():
    told: dict[str, set[str]] = {}
    heading = ""
    for line in text("config/README.md").splitlines():
        if line.startswith("#"):
            heading = line.strip("# `[]")
        elif (key := re.match(r"\| `([a-z_]+)` \|", line)) is not None:
            told.setdefault(heading, set()).add(key[1])
    known: dict[str, set[str]] = {}
    for row in keys.TABLE:
        known.setdefault(row.section, set()).add(row.key)
    assert told == known


def test_every_file_of_the_program_has_its_line_in_developers_md_in_the_order_of_imports():
    listed = re.findall(r"^\| `([a-z_/]+\.py)` \|", section("DEVELOPERS.md", "Files"), re.MULTILINE)
    assert listed == [module.replace(".", "/") + ".py" for module in ORDER]


def test_every_path_that_a_document_names_is_there():
    pattern = re.compile(
        rf"(?<![\w/.-])((?:{'|'.join((*PACKAGES, 'config', 'tests', '.ci'))})/[\w./-]*[\w/])"
    )
    for name in DOCUMENTS:
        for path in pattern.findall(text(name)):
            invented = path.startswith("config/") and path.endswith("line3.toml")
            assert invented or (ROOT / path).exists(), f"{name}: {path}"


def test_the_links_of_the_documents_lead_somewhere():
    for name in DOCUMENTS:
        for target in re.findall(r"\]\(([^)#]+)\)", text(name)):
            assert target.startswith("http") or ((ROOT / name).parent / target).exists(), f"{name}: {target}"


def shell_blocks() -> list[str]:
    blocks = re.findall(r"```sh\n(.*?)```", text("README.md"), re.DOTALL)
    return [line for block in blocks for line in block.splitlines() if line]


def test_the_readme_sets_up_with_two_commands_runs_with_one_and_tests_with_one():
    assert len(shell_blocks()) == 4


def test_the_script_for_all_checks_does_what_the_readme_says():
    script = text(".ci/run")
    packages, pip, run, tests = shell_blocks()
    for package in shlex.split(packages.split("install -y")[1]):
        assert package == "git" or package in script
    assert pip.split("python -m pip install ")[1].strip().replace('"', "'") in script
    assert tests in script
    assert run == ".venv/bin/outlet demo"


def outlet_run(*words: str, folder: Path) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, "-m", "monitor", *words], cwd=folder, capture_output=True, text=True, check=False,
        env={"PYTHONPATH": str(ROOT), "PATH": "/usr/bin:/bin"},
    )  # fmt: skip


def test_the_commands_of_the_readme_work_in_their_order(tmp_path: Path):
    made = outlet_run("demo", "--no-page", folder=tmp_path)
    assert made.returncode == 0, made.stderr
    names = {"config/line3.toml": str(UNIT_FILE), "march.csv": "", "april.parquet": ""}
    for name, path in zip(
        ("march.csv", "april.parquet"), sorted((tmp_path / "demo-plant").glob("larkmoor*")), strict=False
    ):
        names[name] = str(path)
    steps = section("README.md", "Use it on your own reactor")
    commands = [
        c
        for c in re.findall(r"`outlet ([^`]+)`", steps.split("| command |")[0])
        if not c.startswith(("page", "follow"))  # these two stay until they are ended
    ]
    assert len(commands) >= 3
    for command in commands:
        words = [names.get(word, word) for word in shlex.split(command)]
        done = outlet_run(*words, folder=tmp_path)
        assert done.returncode == 0, f"outlet {command}: {done.stderr}"
