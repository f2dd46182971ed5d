"""Docstrings are numpy style, and a parameter they describe is a parameter the function has."""

from __future__ import annotations

import ast
import re

import pytest

from tests.source import Function, Source, functions, sources

CASES = [
    pytest.param(source, node, id=f"{source.module}.{name}")
    for source in sources("ingest", "monitor")
    for name, node in functions(source)
    if not any(part.startswith("_") for part in name.split("."))
]


def _is_command(node: Function) -> bool:
    """A click command: its docstring is the help text that people read."""
    return any(
        re.search(r"\.(command|group)\b", ast.unparse(d)) or "click." in ast.unparse(d)
        for d in node.decorator_list
    )


def _parameters(node: Function) -> list[str]:
    spec = node.args
    named = [a.arg for a in (*spec.posonlyargs, *spec.args)]
    named += [spec.vararg.arg] if spec.vararg else []
    named += [a.arg for a in spec.kwonlyargs]
    named += [spec.kwarg.arg] if spec.kwarg else []
    return [name for name in named if name not in ("self", "cls")]


def _described(doc: str) -> list[str]:
    """Names in the section Parameters; `a, b : type` describes two."""
    section = re.search(r"^Parameters\n-{3,}\n(.*?)(?=^\w[^\n]*\n-{3,}\n|\Z)", doc, re.DOTALL | re.MULTILINE)
    heads = re.findall(r"^(\*{0,2}\w[\w, *]*?) *:", section[1], re.MULTILINE) if section else []
    return [name.strip(" *") for head in heads for name in head.split(",")]


@pytest.mark.parametrize(("source", "node"), CASES)
def test_the_docstring_names_the_parameters_of_the_signature(source: Source, node: Function):
    doc = ast.get_docstring(node)
    assert doc, f"{source.place}:{node.lineno}: {node.name} has no docstring"
    if not _is_command(node):
        assert _described(doc) == _parameters(node), f"{source.place}:{node.lineno}: {node.name}"


@pytest.mark.parametrize(("source", "node"), CASES)
def test_the_first_line_is_one_sentence(source: Source, node: Function):
    first = (ast.get_docstring(node) or "").splitlines()[:2]
    assert first[0].rstrip().endswith((".", "?", ":")), f"{source.place}:{node.lineno}: end the first line"
    assert len(first) == 1 or not first[1].strip(), (
        f"{source.place}:{node.lineno}: one line, then a blank one"
    )
