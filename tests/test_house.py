"""The shape of the house: floors import only what lies below, no circles, no file too long for a head."""

from __future__ import annotations

import ast
from pathlib import Path

import steelyard

SOURCE = Path(steelyard.__file__).parent
# What each floor may import; a floor may always import itself.
BELOW = {
    "errors": set(),
    "keys": {"errors"},
    "plan": {"errors", "keys"},
    "plan_file": {"errors", "keys", "plan"},
    "data": {"errors", "plan"},
    "design": {"errors", "plan", "data"},
    "replicates": {"errors", "plan", "data", "design"},
    "estimate": {"errors", "plan", "data"},
    "exposure": {"errors", "plan", "data", "estimate"},
    "balance": {"errors", "plan", "data", "estimate", "exposure"},
    "outcome": {"errors", "plan", "data", "estimate", "exposure"},
    "results": {
        "errors",
        "keys",
        "plan",
        "data",
        "design",
        "replicates",
        "estimate",
        "exposure",
        "balance",
        "outcome",
    },
    "study": {
        "errors",
        "plan",
        "plan_file",
        "data",
        "design",
        "replicates",
        "estimate",
        "exposure",
        "balance",
        "outcome",
        "results",
    },
    "report": {"errors", "keys", "plan", "data", "results"},
    "app": {"errors", "plan", "data", "results", "study", "report"},
}


def modules():
    for path in sorted(SOURCE.rglob("*.py")):
        if path != SOURCE / "__init__.py":
            yield path, ".".join(["steelyard", *path.relative_to(SOURCE).with_suffix("").parts])


def imported(path):
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.ImportFrom) and node.module and node.module.startswith("steelyard"):
            yield node.module
            yield from (f"{node.module}.{alias.name}" for alias in node.names)
        elif isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names if alias.name.startswith("steelyard"))


def test_every_floor_imports_only_from_below():
    wrong = []
    for path, name in modules():
        floor = name.split(".")[1]
        wrong += [
            f"{name} imports {other}"
            for other in imported(path)
            if len(other.split(".")) > 1 and other.split(".")[1] not in BELOW[floor] | {floor}
        ]
    assert not wrong


def test_no_files_import_each_other_in_a_circle():
    names = {name: path for path, name in modules()}
    graph = {name: {other for other in imported(path) if other in names} for name, path in names.items()}
    done, walking = set(), []

    def visit(name):
        assert name not in walking, " -> ".join([*walking[walking.index(name) :], name])
        if name in done:
            return
        walking.append(name)
        for other in graph[name] - {name}:
            visit(other)
        done.add(walking.pop())

    for name in graph:
        visit(name)


def test_no_file_is_longer_than_400_lines():
    assert {name: n for path, name in modules() if (n := len(path.read_text().splitlines())) > 400} == {}
