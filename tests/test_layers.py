"""Imports go one way, and each library has owners: read off the syntax trees, nothing is run."""

from __future__ import annotations

import ast
from fnmatch import filter as filter_names
from fnmatch import fnmatch
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent
PACKAGE = ROOT / "xlplan"

ORDER = (
    "base",
    "schema",
    "workbook",
    "study",
    "network",
    "outages",
    "model",
    "solve",
    "evaluate",
    "compare",
    "report",
    "pipeline",
    "watch",
    "batch",
    "cli",
    "__main__",
)
"""Folders and top-level modules: each imports itself and what stands before it."""

ONLY = {"solve": {"model", "base"}}
"""Folders that import only these besides themselves."""

NEVER = {"report": {"model", "solve"}}
"""Folders that import none of these although they stand before them."""

OWNERS = {
    "openpyxl": (
        "workbook/*reader.py",
        "workbook/grid.py",
        "workbook/profile_columns.py",
        "workbook/sheet_facts.py",
        "workbook/triage.py",
    ),
    "defusedxml": ("workbook/*",),
    "jsonschema": ("schema/*", "workbook/*"),
    "xlsxwriter": (
        "workbook/template.py",
        "workbook/formats.py",
        "workbook/input_sheets.py",
        "workbook/live_checks.py",
        "workbook/start_sheet.py",
        "workbook/prompts.py",
        "workbook/sheet_writer.py",
        "report/*",
    ),
    "highspy": ("solve/highs.py",),
    "pulp": ("model/whole_tree.py", "model/tree_*.py", "solve/tree.py"),
    "pandas": ("compare/*", "report/*"),
    "rich": ("cli.py",),
}
"""Where a library may be imported: patterns of paths within the package."""


def imported_names(tree: ast.AST, module: str, is_package: bool) -> set[str]:
    """Absolute dotted names that a syntax tree imports, inside functions too.

    ``from xlplan import solve`` gives ``xlplan.solve``: what is imported may be a module.
    """
    package = module.split(".") if is_package else module.split(".")[:-1]
    names: set[str] = set()
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            names |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom):
            base = package[: len(package) - node.level + 1] if node.level else []
            start = ".".join([*base, *([node.module] if node.module else [])])
            names |= {f"{start}.{alias.name}" for alias in node.names}
    return names


def faults_of(path: str, source: str) -> list[str]:
    """What is wrong with the imports of one file; ``path`` is relative to the package."""
    parts = path.removesuffix(".py").split("/")
    is_package = parts[-1] == "__init__"
    layer = parts[0]
    module = ".".join(["xlplan", *(parts[:-1] if is_package else parts)])
    faults = []
    if path != "__init__.py" and layer not in ORDER:
        return [f"{path}: {layer} has no place in the order of layers"]
    for name in sorted(imported_names(ast.parse(source), module, is_package)):
        root, _, rest = name.partition(".")
        if root == "xlplan":
            target = rest.split(".")[0]
            if target == layer or target in ("", "__version__"):
                continue
            if path == "__init__.py" or target not in ORDER:
                faults.append(f"{path}: imports {name}")
            elif ORDER.index(target) > ORDER.index(layer):
                faults.append(f"{path}: {layer} comes before {target} ({name})")
            elif target not in ONLY.get(layer, {target}) or target in NEVER.get(layer, set()):
                faults.append(f"{path}: {layer} must not import {target} ({name})")
        elif root in OWNERS and not any(fnmatch(path, owner) for owner in OWNERS[root]):
            faults.append(f"{path}: {root} belongs to {', '.join(OWNERS[root])}")
    return faults


def test_package_keeps_its_layers() -> None:
    faults = []
    for file in sorted(PACKAGE.rglob("*.py")):
        faults += faults_of(file.relative_to(PACKAGE).as_posix(), file.read_text("utf-8"))
    assert not faults, "\n".join(faults)


def test_every_owner_exists() -> None:
    """A library whose owner was renamed would otherwise be free for all."""
    files = [file.relative_to(PACKAGE).as_posix() for file in PACKAGE.rglob("*.py")]
    missing = [
        owner for owners in OWNERS.values() for owner in owners if not filter_names(files, owner)
    ]
    assert not missing, missing


@pytest.mark.parametrize(
    ("path", "source"),
    [
        ("base/units.py", "import xlplan.study.study"),
        ("base/units.py", "from xlplan import study"),
        ("base/units.py", "from ..study import study"),
        ("base/units.py", "def f():\n    from xlplan.solve.highs import run"),
        ("network/__init__.py", "from ..outages import records"),
        ("solve/cuts.py", "from xlplan.network.feeder import Feeder"),
        ("report/tables.py", "from xlplan.model import layout"),
        ("report/tables.py", "from ..solve import result"),
        ("workbook/template.py", "import openpyxl"),
        ("model/subproblem.py", "import highspy"),
        ("evaluate/costs.py", "import pandas as pd"),
        ("pipeline.py", "from rich.progress import Progress"),
        ("pipeline.py", "from xlplan.cli import main"),
        ("helpers/text.py", ""),
        ("utils.py", "import math"),
        ("__init__.py", "from xlplan.cli import main"),
    ],
)
def test_planted_violation_is_found(path: str, source: str) -> None:
    assert faults_of(path, source)


@pytest.mark.parametrize(
    ("path", "source"),
    [
        ("study/build.py", "from xlplan.workbook.tables import Table"),
        ("study/build.py", "from . import study\nfrom .study import Study"),
        ("solve/highs.py", "import highspy\nfrom xlplan.model.linear_program import INF"),
        ("report/sheets/plan.py", "import xlsxwriter\nfrom xlplan.evaluate.results import X"),
        ("cli.py", "from xlplan import __version__, pipeline\nfrom rich.table import Table"),
    ],
)
def test_allowed_imports_pass(path: str, source: str) -> None:
    assert faults_of(path, source) == []
