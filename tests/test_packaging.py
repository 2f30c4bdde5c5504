"""The repository as a reader and an installer meet it."""

from __future__ import annotations

import ast
import re
import subprocess
import sys
import tomllib
from pathlib import Path

import pytest

import robustrm

ROOT = Path(__file__).resolve().parents[1]
PROJECT = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]
TOP_LEVEL = {
    "README.md",
    "DEVELOPERS.md",
    "pyproject.toml",
    "robustrm",
    "tests",
    "examples",
    "docs",
}
# Names under which a library is imported, where they differ from the one it is installed by.
IMPORT_NAMES = {
    "dask": "distributed",  # dask[distributed] brings it
    "scikit-posthocs": "scikit_posthocs",
    "tomli-w": "tomli_w",
}


def repository_files() -> list[Path]:
    """Return the files of the repository; without Git, every file that is not hidden."""
    listed = subprocess.run(
        ["git", "ls-files", "-z", "--cached", "--others", "--exclude-standard"],
        cwd=ROOT, capture_output=True, text=True, check=False,
    )  # fmt: skip
    if listed.returncode == 0:
        return [ROOT / name for name in listed.stdout.split("\0") if (ROOT / name).is_file()]
    left_by_readme = {"__pycache__", "demo"}
    shown = (
        p
        for p in ROOT.rglob("*")
        if p.is_file()
        and "__pycache__" not in p.parts
        and p.relative_to(ROOT).parts[0] not in left_by_readme
    )
    hidden = [ROOT / name for name in (".ci/run", ".gitignore", ".pre-commit-config.yaml")]
    return [*hidden, *(p for p in shown if not is_hidden(p))]


def is_hidden(path: Path) -> bool:
    return any(part.startswith(".") for part in path.relative_to(ROOT).parts)


def readme_block(name: str) -> list[str]:
    """Return the command lines between `<!-- name -->` and `<!-- /name -->` of README.md."""
    readme = (ROOT / "README.md").read_text(encoding="utf-8")
    blocks = re.findall(rf"<!-- {name} -->\s*```bash\n(.*?)```\s*<!-- /{name} -->", readme, re.S)
    assert len(blocks) == 1, f"README.md needs one bash block between the `{name}` marks"
    return [line for line in blocks[0].splitlines() if line.strip()]


def installed_name(requirement: str) -> str:
    return re.split(r"[<>=\[; ]", requirement, maxsplit=1)[0]


def test_the_readme_says_how_to_test():
    assert readme_block("test-command") == [
        "python3 -m venv .venv && .venv/bin/pip install -e '.[test]' && .venv/bin/pytest"
    ]


def test_the_readme_says_how_to_run():
    commands = readme_block("run-command")
    # One command, whose every step must succeed: its exit code is that of the step that failed.
    assert len(commands) == 1
    steps = commands[0].split(" && ")
    assert steps[:2] == ["python3 -m venv .venv", ".venv/bin/pip install ."]
    assert any("robustrm demo" in step for step in steps)
    assert any("robustrm analyze" in step for step in steps)


def test_the_top_level_holds_the_fixed_names_only():
    names = {path.relative_to(ROOT).parts[0] for path in repository_files()}
    assert {name for name in names if not name.startswith(".")} == TOP_LEVEL


def test_the_version_is_told_once():
    assert robustrm.__version__ == PROJECT["version"]


def test_bounds_are_lower_bounds():
    # SPEC 0: a cap in a library breaks its users' environments. .ci/run installs the bounds.
    odd = [need for need in PROJECT["dependencies"] if not re.fullmatch(r"[\w-]+>=[\d.]+", need)]
    assert odd == []


def third_party_imports() -> set[str]:
    names = set()
    for path in sorted((ROOT / "robustrm").rglob("*.py")):
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
            if isinstance(node, ast.Import):
                names |= {alias.name.split(".")[0] for alias in node.names}
            elif isinstance(node, ast.ImportFrom) and node.module and not node.level:
                names.add(node.module.split(".")[0])
    return names - set(sys.stdlib_module_names) - {"robustrm"}


def test_what_is_imported_is_declared():
    extras = PROJECT["optional-dependencies"]
    optional = {name for name in extras if name not in ("test", "dev")}
    declared = [*PROJECT["dependencies"], *(need for name in optional for need in extras[name])]
    names = {installed_name(need) for need in declared}
    assert third_party_imports() - {IMPORT_NAMES.get(name, name) for name in names} == set()


@pytest.mark.parametrize("extra", sorted(PROJECT["optional-dependencies"]))
def test_every_extra_is_explained(extra: str):
    pages = [ROOT / "README.md", ROOT / "DEVELOPERS.md", *(ROOT / "docs").rglob("*.md")]
    text = "\n".join(page.read_text(encoding="utf-8") for page in pages)
    assert f"[{extra}]" in text, f"no page tells what `robustrm[{extra}]` installs"


def test_the_license_is_the_one_declared():
    assert PROJECT["license"] == "BSD-3-Clause"
    for name in PROJECT["license-files"]:
        assert "BSD 3-Clause" in (ROOT / name).read_text(encoding="utf-8")


def test_the_command_line_is_installed():
    assert PROJECT["scripts"] == {"robustrm": "robustrm.cli:main"}


def test_the_types_are_shipped():
    assert (ROOT / "robustrm" / "py.typed").exists()


# Groups that hide a letter keep this file from being its own first finding.
OUT_OF_PLACE = {
    "a path of one machine": r"(?<![\w.:/])/(?:work|tmp|root|home|Users)\b|\b[A-Z]:\\+Users\b",
    "a word from outside the project": r"\b(?:l[e]cture|tr[a]nscript)s?\b",
}


def findings(text: str) -> list[tuple[int, str, str]]:
    return [
        (number, what, line.strip())
        for number, line in enumerate(text.splitlines(), start=1)
        for what, pattern in OUT_OF_PLACE.items()
        if re.search(pattern, line, re.IGNORECASE)
    ]


def test_no_file_holds_what_is_out_of_place():
    found = {}
    for path in repository_files():
        try:
            text = path.read_text(encoding="utf-8")
        except UnicodeDecodeError:
            continue
        if hits := findings(text):
            found[path.relative_to(ROOT).as_posix()] = hits
    assert found == {}


@pytest.mark.parametrize(
    "line",
    ["see ~tmp/x.csv", "~home/me", r"C:~~Users~~me", "the le~ctures", "a Tran~script"],
)
def test_what_is_out_of_place_is_seen(line: str):
    # The mark stands for a separator, or for nothing: spelled out, this file would find itself.
    mark = "\\" if ":" in line else "/" if "/" in line else ""
    assert len(findings(line.replace("~", mark))) == 1
