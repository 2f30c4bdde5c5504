"""Who may import whom, read from the source with `ast`: an arrow is added to the table on purpose.

Imports inside functions and under `if TYPE_CHECKING:` count like any other.
"""

from __future__ import annotations

import ast
import sys
from collections.abc import Iterator
from dataclasses import dataclass
from graphlib import TopologicalSorter
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[1]
PACKAGE = ROOT / "robustrm"
FILES = sorted(PACKAGE.rglob("*.py"))

COMMON = {"results", "_checks", "_format", "errors"}
TABLE = {"table", "records", "ledger", "ties"}
ANALYSIS = {"methods", "methods.registry", "advice", "plan", *TABLE}
TRIALS = {"simulation", "kernels", "advice.rule", "advice.record", *ANALYSIS}

# A room may import itself and what stands here. A file belongs to the longest name that fits it.
MAY_IMPORT: dict[str, set[str]] = {
    "errors": set(),
    "_checks": {"errors"},
    "_format": set(),
    "results": {"_checks", "_format", "errors"},
    "cells": {"_checks", "errors"},
    "ties": {"_checks", "errors"},
    "ledger": {"_checks", "_format", "errors"},
    "records": {"cells", "ledger", "ties", *COMMON},
    "table": {"cells", *TABLE, *COMMON},
    "reading": {"cells", *TABLE, *COMMON},
    "kernels": set(),
    "methods": {"kernels", "methods.registry", *TABLE, *COMMON},
    "methods.registry": COMMON,
    "plan": {"methods.registry", *COMMON},
    # view and describe alone see the table; what chooses sees the view's figures and the plan.
    "advice": {
        "advice.view", "advice.blind", "advice.describe", "advice.rule", "advice.advising",
        *COMMON,
    },
    "advice.view": {*TABLE, *COMMON},
    "advice.blind": {"advice.view", "kernels", "ties", *COMMON},
    "advice.describe": {"kernels", *TABLE, *COMMON},
    "advice.rule": {"advice.blind", "plan", *COMMON},
    "advice.record": {"advice.blind", "advice.rule", *COMMON},
    # hands the table on to the view; says beforehand what the planned tests can reach
    "advice.advising": {
        "advice.view", "advice.blind", "advice.describe", "advice.rule", "advice.record",
        "methods", "plan", "table", *COMMON,
    },
    "analysis": {*ANALYSIS, *COMMON},
    "sensitivity_analysis": {"kernels", "analysis", *ANALYSIS, *COMMON},
    # sends blocks out and keeps them; knows nothing of what they hold
    "work": {"_checks", "errors"},
    "simulation": {"kernels", *COMMON},
    # the level of the specification grid is that of the grid itself, table in and p out
    "trials": {"sensitivity_analysis", *TRIALS, *COMMON},
    "sizing": {"trials", "work", *TRIALS, *COMMON},
    "panels": {"reading", "cells", "work", "kernels", "analysis", *ANALYSIS, *COMMON},
    # figures draw what a result class holds: the rooms that own one, and nothing that computes.
    # A blind figure is made of what advice may see, so it takes the view.
    "figures": {
        "methods", "methods.registry", "advice", "advice.view", "advice.blind", "advice.describe",
        "analysis", "sensitivity_analysis", "trials", "sizing", "panels", *TABLE, *COMMON,
    },
    "demo": {"_checks", "errors"},
    "__init__": {
        "reading", "table", "methods", "methods.registry", "plan", "advice", "analysis",
        "sensitivity_analysis", "sizing", "panels", "results", "errors",
    },
}  # fmt: skip
MAY_IMPORT["report"] = set(MAY_IMPORT) - {"__init__"}
MAY_IMPORT["cli"] = set(MAY_IMPORT)
MAY_IMPORT["__main__"] = {"cli"}  # `python -m robustrm`, and nothing else

# The one named exception: an Analysis writes its own report, and asks for it when it does.
EXCEPTIONS = {
    ("analysis", "Analysis.to_dict", "report"),
    ("analysis", "Analysis.write_report", "report"),
}

# Libraries that cost a second: inside the function that uses them, or in the room built on them.
HEAVY = {
    "click": {"cli"},
    "jinja2": set(),
    "matplotlib": {"figures"},
    "openpyxl": set(),
    "pyarrow": set(),
    "scikit_posthocs": set(),
    "scipy.stats": set(),
    "seaborn": set(),
    "statsmodels": set(),
}


@dataclass(frozen=True)
class Imported:
    """One imported module: where, in which function or class, and whether for types alone."""

    target: str
    line: int
    scope: str
    inside_function: bool
    type_only: bool
    relative: bool


def is_module(name: str) -> bool:
    place = ROOT.joinpath(*name.split("."))
    known = name.removeprefix("robustrm.") in MAY_IMPORT
    return known or place.with_suffix(".py").exists() or (place / "__init__.py").exists()


def targets(node: ast.Import | ast.ImportFrom) -> list[str]:
    if isinstance(node, ast.Import):
        return [alias.name for alias in node.names]
    base = node.module or ""
    full = [f"{base}.{alias.name}" for alias in node.names]
    if base.split(".")[0] == "robustrm":
        return [name if is_module(name) else base for name in full]
    return full


def imports(
    node: ast.AST, scope: str = "", *, inside_function: bool = False, type_only: bool = False
) -> Iterator[Imported]:
    for child in ast.iter_child_nodes(node):
        if isinstance(child, ast.Import | ast.ImportFrom):
            relative = isinstance(child, ast.ImportFrom) and child.level > 0
            for target in targets(child):
                yield Imported(target, child.lineno, scope, inside_function, type_only, relative)
            continue
        function = isinstance(child, ast.FunctionDef | ast.AsyncFunctionDef)
        typing = isinstance(child, ast.If) and "TYPE_CHECKING" in ast.unparse(child.test)
        inner = scope
        if isinstance(child, ast.FunctionDef | ast.AsyncFunctionDef | ast.ClassDef):
            inner = f"{scope}.{child.name}".lstrip(".")
        yield from imports(
            child,
            inner,
            inside_function=inside_function or function,
            type_only=type_only or typing,
        )


def room_of(module: str) -> str | None:
    """Return the room of a dotted module name, None when the table does not know it."""
    if module in ("robustrm", "robustrm.__init__"):
        return "__init__"
    parts = module.split(".")[1:]
    names = (".".join(parts[:stop]) for stop in range(len(parts), 0, -1))
    return next((name for name in names if name in MAY_IMPORT), None)


def faults(module: str, source: str) -> list[str]:
    """Return every broken rule of one file, as `module:line: what`."""
    tree = ast.parse(source)
    room = room_of(module)
    if room is None:
        return [f"{module}: belongs to no room; add it to MAY_IMPORT on purpose"]
    found = []
    for item in imports(tree):
        found += [f"{module}:{item.line}: {fault}" for fault in import_faults(room, item)]
    found += [f"{module}:{line}: {fault}" for line, fault in call_faults(room, tree)]
    return found


def import_faults(room: str, item: Imported) -> Iterator[str]:
    if item.relative:
        yield "relative import; write the absolute name"
    elif item.target.split(".")[0] == "robustrm":
        target = room_of(item.target)
        allowed = target == room or target in MAY_IMPORT[room]
        if not allowed and (room, item.scope, target) not in EXCEPTIONS:
            yield f"{room} may not import {target} ({item.target})"
    elif room == "kernels":
        yield from kernel_faults(item)
    elif not item.inside_function and not item.type_only:
        for library, homes in HEAVY.items():
            if f"{item.target}.".startswith(f"{library}.") and room not in homes:
                yield f"{library} is heavy: import it inside the function that uses it"


def kernel_faults(item: Imported) -> Iterator[str]:
    library = item.target.split(".")[0]
    if library == "scipy":
        part = item.target.split(".")[1:2]
        if part in ([], ["stats"]):
            yield f"kernels take distribution functions from scipy.special, not {item.target}"
        elif part != ["special"] and not item.inside_function:
            yield f"{item.target} is heavy: import it inside the function that uses it"
    elif library == "warnings":
        yield "a kernel never warns"
    elif library != "numpy" and library not in sys.stdlib_module_names:
        yield f"kernels import NumPy, SciPy and kernels only, not {item.target}"


def call_faults(room: str, tree: ast.AST) -> Iterator[tuple[int, str]]:
    for node in ast.walk(tree):
        if not isinstance(node, ast.Call):
            continue
        name = ast.unparse(node.func)
        if name == "print" and room not in ("cli", "demo"):
            yield node.lineno, "print(): only the command line speaks to the terminal"
        hidden = name == "__import__" or name.split(".")[-1] == "import_module"
        if hidden and room != "methods.registry":
            yield node.lineno, f"{name}() hides an import from this test; only the registry may"


def module_name(path: Path) -> str:
    parts = path.relative_to(ROOT).with_suffix("").parts
    return ".".join(parts[:-1] if parts[-1] == "__init__" else parts)


@pytest.mark.parametrize("path", FILES, ids=lambda path: path.relative_to(ROOT).as_posix())
def test_every_file_keeps_to_its_room(path: Path):
    assert faults(module_name(path), path.read_text(encoding="utf-8")) == []


def test_the_package_was_found():
    assert PACKAGE / "errors.py" in FILES


def test_every_folder_with_code_is_a_package():
    folders = {path.parent for path in FILES}
    assert [folder for folder in sorted(folders) if not (folder / "__init__.py").exists()] == []


def test_only_the_command_line_may_see_the_front_desk_and_no_room_the_command_line():
    assert [room for room, allowed in MAY_IMPORT.items() if "cli" in allowed] == ["__main__"]
    assert [room for room, allowed in MAY_IMPORT.items() if "__init__" in allowed] == ["cli"]


def test_the_arrows_name_rooms_of_the_table():
    assert set().union(*MAY_IMPORT.values()) <= set(MAY_IMPORT)


def test_the_arrows_have_no_circle():
    # The files of one room see each other; between rooms the way of the data is one way.
    # `table` and `records` count as one room, and so do `advice` and its files.
    files = [room for room in MAY_IMPORT if room.startswith("advice.")]
    whole = {"records": "table", **dict.fromkeys(files, "advice")}
    arrows: dict[str, set[str]] = {}
    for room, allowed in MAY_IMPORT.items():
        name = whole.get(room, room)
        arrows.setdefault(name, set()).update(whole.get(target, target) for target in allowed)
    for name, allowed in arrows.items():
        allowed.discard(name)
    assert set(TopologicalSorter(arrows).static_order()) == set(arrows)


def test_there_is_no_room_for_leftovers():
    names = ("utils", "util", "helpers", "misc", "common")
    assert [path for path in FILES if path.stem in names or path.parent.name in names] == []


def is_front_desk_statement(node: ast.stmt) -> bool:
    """Docstring, import, or the assignment of a dunder name to a literal."""
    if isinstance(node, ast.Assign):
        names = [ast.unparse(target) for target in node.targets]
        literal = isinstance(node.value, ast.Constant | ast.List | ast.Tuple)
        return literal and all(name.startswith("__") for name in names)
    if isinstance(node, ast.Expr):
        return isinstance(node.value, ast.Constant)
    return isinstance(node, ast.Import | ast.ImportFrom)


def test_the_front_desk_has_no_logic():
    tree = ast.parse((PACKAGE / "__init__.py").read_text(encoding="utf-8"))
    assert [ast.unparse(node) for node in tree.body if not is_front_desk_statement(node)] == []


def test_the_methods_room_exports_nothing():
    tree = ast.parse((PACKAGE / "methods" / "__init__.py").read_text(encoding="utf-8"))
    assert [ast.unparse(node) for node in tree.body if not isinstance(node, ast.Expr)] == []


# The rules above are worth something only if they object: one offence a line.
OFFENCES = [
    ("kernels.ranks", "from robustrm.table import OccasionTable", "kernels may not import table"),
    ("kernels.ranks", "from robustrm import errors", "kernels may not import errors"),
    ("kernels.ranks", "from scipy import stats", "scipy.special, not scipy.stats"),
    ("kernels.ranks", "import scipy", "scipy.special, not scipy"),
    ("kernels.ranks", "from scipy.spatial import distance", "scipy.spatial.distance is heavy"),
    ("kernels.ranks", "import pandas as pd", "kernels import NumPy, SciPy and kernels only"),
    ("kernels.ranks", "import warnings", "never warns"),
    ("methods.friedman", "from . import quade", "relative import"),
    ("methods.friedman", "import robustrm as rm", "methods may not import __init__"),
    ("methods.friedman", "import statsmodels.api as sm", "statsmodels is heavy"),
    ("methods.friedman", "from scipy.stats import f", "scipy.stats is heavy"),
    ("methods.friedman", "def f():\n    from robustrm.cli import main", "may not import cli"),
    ("plan", "from robustrm.methods import friedman", "plan may not import methods"),
    ("advice.rule", "from robustrm.table import OccasionTable", "advice.rule may not import table"),
    ("advice.rule", "from robustrm.advice import describe", "may not import advice.describe"),
    ("table", "if TYPE_CHECKING:\n    from robustrm.analysis import Analysis", "import analysis"),
    ("analysis", "from robustrm.report import document", "analysis may not import report"),
    ("analysis", "def write_report():\n    import robustrm.report", "may not import report"),
    ("figures.steps", "from robustrm.kernels import ranks", "figures may not import kernels"),
    ("demo.make", "from robustrm.table import OccasionTable", "demo may not import table"),
    ("report.text", "print(1)", "print(): only the command line"),
    ("reading.files", "importlib.import_module('robustrm.cli')", "hides an import"),
    ("sundries", "x = 1", "belongs to no room"),
]


@pytest.mark.parametrize(
    ("module", "source", "fault"), OFFENCES, ids=[f"{o[0]}: {o[1]}" for o in OFFENCES]
)
def test_an_offence_is_seen(module: str, source: str, fault: str):
    found = faults(f"robustrm.{module}", source)
    assert len(found) == 1
    assert fault in found[0]


LAWFUL = [
    ("kernels.ranks", "from robustrm.kernels import scores"),
    ("kernels.ranks", "from scipy.special import ndtri"),
    ("kernels.ranks", "def hull():\n    from scipy.spatial import ConvexHull"),
    ("methods.friedman", "from robustrm.methods.follow_up import follow_up"),
    ("methods.friedman", "def f():\n    from scipy.stats import f"),
    ("plan", "from robustrm.methods import registry"),
    (
        "analysis",
        "class Analysis:\n    def to_dict(self):\n        import robustrm.report.document",
    ),
    ("cli", "import click\nimport robustrm as rm\nprint(1)"),
]


@pytest.mark.parametrize(("module", "source"), LAWFUL, ids=[f"{o[0]}: {o[1]}" for o in LAWFUL])
def test_a_lawful_import_passes(module: str, source: str):
    assert faults(f"robustrm.{module}", source) == []
