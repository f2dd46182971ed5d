"""The repository as the structural tests read it: files, modules, functions, lines that hold code."""

from __future__ import annotations

import ast
import subprocess
from collections.abc import Iterator
from dataclasses import dataclass
from functools import cache
from pathlib import Path

ROOT = Path(__file__).resolve().parent.parent
PACKAGES = ("ingest", "demo_data", "monitor")
Function = ast.FunctionDef | ast.AsyncFunctionDef


@dataclass(frozen=True)
class Source:
    """One Python file: its place, dotted name, text and syntax tree."""

    path: Path
    module: str
    text: str
    tree: ast.Module

    @property
    def place(self) -> str:
        return self.path.relative_to(ROOT).as_posix()


@cache
def sources(*folders: str) -> tuple[Source, ...]:
    """Every Python file below the named folders (default: the three packages)."""
    paths = sorted(p for folder in folders or PACKAGES for p in (ROOT / folder).rglob("*.py"))
    texts = [(path, path.read_text(encoding="utf-8")) for path in paths]
    return tuple(Source(path, _module(path), text, ast.parse(text)) for path, text in texts)


def _module(path: Path) -> str:
    parts = path.relative_to(ROOT).with_suffix("").parts
    return ".".join(parts[:-1] if parts[-1] == "__init__" else parts)


def functions(source: Source) -> Iterator[tuple[str, Function]]:
    """Every function and method of a file with its dotted name, nested ones left to their outer one."""

    def walk(node: ast.AST, prefix: str) -> Iterator[tuple[str, Function]]:
        for child in ast.iter_child_nodes(node):
            if isinstance(child, ast.FunctionDef | ast.AsyncFunctionDef):
                yield prefix + child.name, child
            elif isinstance(child, ast.ClassDef):
                yield from walk(child, f"{prefix}{child.name}.")
            elif isinstance(child, ast.If | ast.Try | ast.With):
                yield from walk(child, prefix)

    yield from walk(source.tree, "")


def code_lines(source: Source, node: ast.AST | None = None) -> int:
    """How many lines hold code: neither blank, nor comment only, nor docstring."""
    first, last = (node.lineno, node.end_lineno) if node else (1, len(source.text.splitlines()))  # type: ignore[attr-defined]
    docs = _docstring_lines(source)
    lines = source.text.splitlines()
    return sum(
        1
        for number in range(first, last + 1)
        if number not in docs and (text := lines[number - 1].strip()) and not text.startswith("#")
    )


@cache
def _docstring_lines(source: Source) -> frozenset[int]:
    found: set[int] = set()
    for node in ast.walk(source.tree):
        if isinstance(node, ast.Module | ast.ClassDef | ast.FunctionDef | ast.AsyncFunctionDef) and node.body:
            first = node.body[0]
            if isinstance(first, ast.Expr) and isinstance(first.value, ast.Constant):
                found.update(range(first.lineno, (first.end_lineno or first.lineno) + 1))
    return frozenset(found)


@cache
def tracked() -> tuple[str, ...]:
    """Paths of the files that git tracks or would track, relative to the top."""
    listed = subprocess.run(
        ["git", "ls-files", "--cached", "--others", "--exclude-standard"],
        cwd=ROOT,
        capture_output=True,
        text=True,
        check=True,
    )
    return tuple(name for name in listed.stdout.splitlines() if (ROOT / name).is_file())
