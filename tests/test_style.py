"""House rules on shape: short functions and files, the drawn error tree, tools without complaint."""

from __future__ import annotations

import ast
import re
import statistics
import subprocess
import sys
import tomllib

import pytest

from ingest import errors
from tests.source import ROOT, Function, Source, code_lines, functions, sources, tracked

PROGRAM = [(source, name, node) for source in sources() for name, node in functions(source)]
TESTS = [(source, name, node) for source in sources("tests") for name, node in functions(source)]
FOLDERS = {"ingest", "monitor", "config", "demo_data", "tests"}
TOP_LEVEL = FOLDERS | {"README.md", "DEVELOPERS.md", "pyproject.toml", "LICENSE"}
# Each pattern is broken by a class of one letter so that this file does not match itself.
NOT_OURS_TO_TELL = {
    "a path of one machine": r"(?<![\w.])/(?:wor[k]|roo[t]|home/[a-z]\w*|Users/[A-Z]\w*)/",
    "a package registry's address": r"index-ur[l]|extra-inde[x]|pythonhosted\.or[g]|npmj[s]|pypi\.or[g]/",
    "work left undone": r"\b(?:TOD[O]|FIXM[E]|XX[X])\b|NotImplementedErro[r]",
}


def _positional(node: Function) -> int:
    names = [a.arg for a in (*node.args.posonlyargs, *node.args.args)]
    return len([name for name in names if name not in ("self", "cls")])


@pytest.mark.parametrize("found", [PROGRAM, TESTS], ids=["program", "tests"])
def test_no_function_has_more_than_60_lines_of_code(found: list[tuple[Source, str, Function]]):
    long = {
        f"{s.place}:{node.lineno} {name}": lines
        for s, name, node in found
        if (lines := code_lines(s, node)) > 60
    }
    assert not long


def test_functions_are_short_half_of_them_within_12_lines_and_nine_in_ten_within_30():
    lines = [code_lines(source, node) for source, _, node in PROGRAM]
    assert statistics.median(lines) <= 12
    assert statistics.quantiles(lines, n=10)[-1] <= 30


def test_no_file_has_more_than_300_lines_of_code():
    assert not {s.place: lines for s in sources() if (lines := code_lines(s)) > 300}


def test_no_function_takes_more_than_five_positional_arguments():
    many = {f"{s.place}:{n.lineno} {name}": count for s, name, n in PROGRAM if (count := _positional(n)) > 5}
    assert not many


def test_the_error_tree_is_drawn_as_it_is():
    drawn = [
        (len(line) - len(line.lstrip("│├└─ ")), line.strip("│├└─ ").split()[0])
        for line in (errors.__doc__ or "").splitlines()
        if re.match(r"[│├└─ ]*\w+Error\b", line)
    ]
    parents: dict[str, str] = {}
    for index, (depth, name) in enumerate(drawn):
        parents[name] = next((n for d, n in reversed(drawn[:index]) if d < depth), "Exception")
    defined = {
        name: thing.__base__.__name__
        for name, thing in vars(errors).items()
        if isinstance(thing, type) and issubclass(thing, Exception) and thing.__base__
    }
    assert parents == defined


def test_every_error_of_ours_is_in_the_tree():
    for source in sources():
        for node in ast.walk(source.tree):
            if isinstance(node, ast.ClassDef) and any("Error" in ast.unparse(base) for base in node.bases):
                assert source.module == "ingest.errors", f"{source.place}:{node.lineno}: {node.name}"


def test_only_the_edge_catches_everything():
    for source in sources():
        for node in ast.walk(source.tree):
            if isinstance(node, ast.ExceptHandler):
                caught = ast.unparse(node.type) if node.type else "everything"
                assert caught not in ("everything", "Exception", "BaseException"), (
                    f"{source.place}:{node.lineno}"
                )


def test_pytest_raises_always_says_what_the_message_is():
    for source in sources("tests"):
        for node in ast.walk(source.tree):
            if isinstance(node, ast.Call) and ast.unparse(node.func) == "pytest.raises":
                assert "match" in {k.arg for k in node.keywords}, f"{source.place}:{node.lineno}"


def test_the_top_level_is_fixed():
    top = {name.split("/")[0] for name in tracked()}
    assert {name for name in top if not name.startswith(".")} == TOP_LEVEL


@pytest.mark.parametrize("what", NOT_OURS_TO_TELL)
def test_no_tracked_file_holds(what: str):
    pattern = re.compile(NOT_OURS_TO_TELL[what])
    found = []
    for name in tracked():
        try:
            text = (ROOT / name).read_text(encoding="utf-8")
        except UnicodeDecodeError:
            continue  # a picture or a Parquet file
        found += [f"{name}: {line[:100]}" for line in text.splitlines() if pattern.search(line)]
    assert not found


def test_the_pinned_versions_are_plain_and_cover_what_the_project_asks_for():
    pins = [p for p in (ROOT / ".ci/constraints.txt").read_text(encoding="utf-8").splitlines() if p]
    assert [pin for pin in pins if not re.fullmatch(r"[a-z0-9-]+==[\w.]+", pin)] == []
    project = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    asked = [*project["dependencies"], *project["optional-dependencies"]["test"]]
    assert {re.split(r"[>=<\[]", line)[0] for line in asked} <= {pin.split("==")[0] for pin in pins}


@pytest.mark.parametrize(
    "command",
    [["ruff", "check", "--no-cache"], ["ruff", "format", "--check", "--no-cache"], ["mypy"]],
    ids=["ruff check", "ruff format", "mypy"],
)
def test_the_tool_has_no_complaint(command: list[str]):
    done = subprocess.run(
        [sys.executable, "-m", *command], cwd=ROOT, capture_output=True, text=True, check=False
    )
    assert done.returncode == 0, done.stdout + done.stderr
