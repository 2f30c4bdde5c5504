"""What is loaded when: the front desk and `--help` answer at once, whatever the report needs."""

from __future__ import annotations

import subprocess
import sys
import types
from collections import Counter

import pytest

import robustrm

HEAVY = {
    "click",
    "jinja2",
    "matplotlib",
    "openpyxl",
    "scikit_posthocs",
    "scipy.stats",
    "seaborn",
    "statsmodels",
}


def modules_loaded_by(statement: str) -> set[str]:
    """Return what a fresh interpreter has loaded after `statement`."""
    program = f"import sys\n{statement}\nprint('loaded:', *sorted(sys.modules), file=sys.stderr)"
    done = subprocess.run(
        [sys.executable, "-c", program], capture_output=True, text=True, check=False
    )
    assert done.returncode == 0, done.stderr
    last = done.stderr.strip().splitlines()[-1]
    assert last.startswith("loaded:")
    return set(last.split()[1:])


def test_the_front_desk_is_light():
    loaded = modules_loaded_by("import robustrm")
    assert "robustrm" in loaded
    assert loaded & HEAVY == set()


@pytest.mark.cli
def test_help_is_light():
    statement = """
from robustrm.cli import main
try:
    main(["--help"])
except SystemExit as stop:
    assert not stop.code, stop.code
"""
    loaded = modules_loaded_by(statement)
    assert loaded & HEAVY == {"click"}


@pytest.mark.parametrize("library", sorted(HEAVY))
def test_a_heavy_library_would_be_seen(library: str):
    pytest.importorskip(library, reason=f"{library} is not installed, so nothing can load it")
    assert library in modules_loaded_by(f"import {library}")


def test_all_lists_the_public_names():
    public = {
        name
        for name, value in vars(robustrm).items()
        if not name.startswith("_") and not isinstance(value, types.ModuleType)
    }
    assert public == {name for name in robustrm.__all__ if not name.startswith("_")}


def test_all_lists_each_name_once():
    assert [name for name, count in Counter(robustrm.__all__).items() if count > 1] == []


def test_no_public_name_is_a_module():
    # `robustrm.friedman` is the test, never the file it lives in.
    values = {name: getattr(robustrm, name) for name in robustrm.__all__}
    assert [n for n, value in values.items() if isinstance(value, types.ModuleType)] == []
