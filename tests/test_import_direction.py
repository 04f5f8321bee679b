"""The one direction in which the rooms of ngbound may import, read from the syntax trees."""

import ast
from pathlib import Path

import pytest

import ngbound

PACKAGE = Path(ngbound.__file__).parent
ORDER = [
    {"blas", "constants", "errors", "rounding"},
    {"toml_file"},
    {"arc"},
    {"sky"},
    {"motion"},
    {"fit"},
    {"limits"},
    {"mass"},
    {"report"},
    {"case", "run", "simulate", "sweep"},
    {"cli"},
]
"""Rooms from left to right; a module imports from its own room or from rooms to its left."""
RANK = {room: rank for rank, rooms in enumerate(ORDER) for room in rooms}
WITHIN_LAST = {"case": {"case"}, "simulate": {"case", "simulate"}, "run": {"case", "run"}}
"""Inside the room of the whole job: what each of its modules may import."""

MODULES = sorted(path for path in PACKAGE.rglob("*.py") if path != PACKAGE / "__init__.py")


def room_of(path: Path) -> str:
    first = path.relative_to(PACKAGE).parts[0]
    return first.removesuffix(".py")


def package_imports(tree: ast.AST, path: Path) -> list[tuple[int, tuple[str, ...]]]:
    """Line and dotted parts (after ``ngbound``) of every import of the package's own modules."""
    found = []
    parents = ("ngbound", *path.relative_to(PACKAGE).parts[:-1])
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            found += [
                (node.lineno, tuple(alias.name.split(".")[1:]))
                for alias in node.names
                if alias.name.split(".")[0] == "ngbound"
            ]
        elif isinstance(node, ast.ImportFrom):
            parts = tuple((node.module or "").split(".")) if node.module else ()
            if node.level:
                parts = parents[: len(parents) - node.level + 1] + parts
            if parts[:1] == ("ngbound",):
                rests = [parts[1:]]
                if len(parts) == 1:
                    rests = [(alias.name,) for alias in node.names]
                found += [(node.lineno, rest) for rest in rests]
    return found


def offences(source: str, path: Path) -> list[str]:
    """Everything in one module that the import rules forbid, as sentences."""
    tree = ast.parse(source)
    room = room_of(path)
    wrong = []
    for node in ast.walk(tree):
        if isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef | ast.Lambda):
            for inner in ast.walk(node):
                if isinstance(inner, ast.Import | ast.ImportFrom):
                    wrong.append(f"line {inner.lineno}: import inside a function")
        if isinstance(node, ast.Name | ast.Attribute):
            name = node.id if isinstance(node, ast.Name) else node.attr
            if name == "TYPE_CHECKING":
                wrong.append(f"line {node.lineno}: TYPE_CHECKING")
    for line, rest in package_imports(tree, path):
        if not rest:
            if room != "cli":
                wrong.append(f"line {line}: imports the public names of ngbound itself")
            continue
        target = rest[0]
        if target == "__version__":
            continue
        if target not in RANK:
            wrong.append(f"line {line}: ngbound.{target} is no room of the design")
        elif RANK[target] > RANK[room]:
            wrong.append(f"line {line}: {room} imports {target}, which lies to its right")
        elif target == room and len(path.relative_to(PACKAGE).parts) == 1:
            wrong.append(f"line {line}: the module imports itself")
        elif target != room and len(rest) > 1:
            wrong.append(f"line {line}: reaches past the __init__ of {target}")
        elif room in WITHIN_LAST and RANK[target] == RANK[room]:
            if target not in WITHIN_LAST[room]:
                wrong.append(f"line {line}: {room} may not import {target}")
    return wrong


@pytest.mark.parametrize("path", MODULES, ids=lambda path: str(path.relative_to(PACKAGE)))
def test_module_imports_only_to_the_left(path):
    assert offences(path.read_text(encoding="utf-8"), path) == []


@pytest.mark.parametrize("path", MODULES, ids=lambda path: str(path.relative_to(PACKAGE)))
def test_module_says_what_it_is_for(path):
    assert ast.get_docstring(ast.parse(path.read_text(encoding="utf-8")))


@pytest.mark.parametrize(
    ("source", "where"),
    [
        ("from ngbound.motion import Orbit", "arc/observations.py"),
        ("from ngbound.arc.stations import station", "sky/observers.py"),
        ("def f():\n    import numpy", "arc/observations.py"),
        ("from typing import TYPE_CHECKING\nif TYPE_CHECKING:\n    pass", "sky/observers.py"),
        ("from ..fit import Fit", "motion/propagate.py"),
        ("import ngbound", "fit/solution.py"),
        ("from ngbound.run import run_case", "case.py"),
        ("from ngbound import limits", "fit/solution.py"),
    ],
)
def test_the_rules_catch_an_offender(source, where):
    assert offences(source, PACKAGE / where) != []


@pytest.mark.parametrize(
    ("source", "where"),
    [
        ("from ngbound.arc import Arc", "sky/observers.py"),
        ("from ngbound.arc.stations import station", "arc/observations.py"),
        ("from .stations import station", "arc/observations.py"),
        ("from ngbound.errors import ArcError", "arc/stations.py"),
        ("import ngbound as ng", "cli.py"),
        ("from ngbound.case import read_case", "run.py"),
    ],
)
def test_the_rules_let_honest_imports_pass(source, where):
    assert offences(source, PACKAGE / where) == []
