"""A report as a folder of files that appears whole or not at all.

Everything is written into a new folder beside the wanted one, which takes its place by a
rename at the end. An earlier report is renamed away, replaced and then removed; a folder
that holds anything else is never touched.
"""

from __future__ import annotations

import itertools
import json
import re
import shutil
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path

from robustrm._checks import check_choice
from robustrm._format import Style, listing
from robustrm.analysis import Analysis, Progress
from robustrm.errors import ArgumentError, RobustrmError
from robustrm.figures import Picture, pictures, sensitivity_pictures
from robustrm.report.document import SCHEMA, Document, document
from robustrm.report.html import Drawing, page
from robustrm.report.json_text import json_text
from robustrm.report.methods_text import methods_text
from robustrm.report.tables import csv_tables
from robustrm.sensitivity_analysis import Sensitivity

_FILES = frozenset({"report.html", "results.json", "methods.txt", "plan.toml"})
_FOLDERS = frozenset({"tables", "figures"})
# what earlier reports put into these folders; anything else is somebody's own
_WRITTEN = re.compile(
    r"(summary|comparisons|beside|effects|inclusion|ledger|cells"
    r"|specifications|left-out|limits|missing|tipping|margins)\.csv"
    r"|(trajectories|comparisons|null-distribution|specifications|missing-map"
    r"|(change|methods|without-one)-\d+)\.(svg|png)"
)


def write_report(
    analysis: Analysis,
    folder: str | Path,
    *,
    style: Style = "medical",
    sensitivity: Sensitivity | None = None,
    progress: Progress | None = None,
) -> Path:
    """Write the report of an analysis into a folder.

    Parameters
    ----------
    analysis : Analysis
        What was found.
    folder : str or Path
        A folder that does not exist, is empty, or holds an earlier report and nothing else;
        an earlier report is replaced.
    style : {"medical", "apa"}, default "medical"
        How p values are written in the page and the paragraphs.
    sensitivity : Sensitivity, optional
        Whether the conclusion holds: a section of the report, with its tables and figures.
    progress : callable, optional
        Called with (done, total) after each part.

    Returns
    -------
    Path
        The folder, with ``report.html``, ``results.json``, ``methods.txt``, ``plan.toml``,
        ``tables/*.csv`` and ``figures/*.svg`` and ``.png``.

    Raises
    ------
    ArgumentError
        When the folder holds something that is not an earlier report.
    RobustrmError
        When the file system refuses; nothing half written is left.

    Notes
    -----
    Equal analyses give equal bytes: no clock is read, and no file holds a date.
    """
    check_choice("style", style, ("medical", "apa"))
    target = Path(folder).resolve()
    try:
        _check_target(target)
        with _draft_of(target) as draft:
            _write_parts(analysis, sensitivity, draft, style, progress)
    except OSError as error:
        raise RobustrmError(
            f"The report cannot be written to {str(folder)!r}: {error.strerror or error}. "
            "Nothing was left there; free the place or name another folder."
        ) from error
    return Path(folder)


def _check_target(target: Path) -> None:
    """Refuse every place where the report would take something else away."""
    if Path.cwd().is_relative_to(target):
        raise ArgumentError(
            f"`folder` must not hold the current folder, got {target.name!r}. Name a new folder."
        )
    if not target.exists():
        return
    if not target.is_dir():
        raise ArgumentError(
            f"`folder` must be a folder, got the file {target.name!r}. Name a new folder."
        )
    found = [path for path in target.iterdir() if not path.name.startswith(".")]
    strange = sorted(path.name for path in found if not _is_ours(path))
    if strange or (found and not _is_report(target)):
        shown = listing(strange or sorted(path.name for path in found), 4)
        raise ArgumentError(
            f"`folder` must be new, empty or an earlier report and nothing else, got "
            f"{target.name!r}, which holds {shown}. Name a new folder."
        )


def _is_ours(path: Path) -> bool:
    if path.name in _FOLDERS and path.is_dir():
        return all(_WRITTEN.fullmatch(inner.name) for inner in path.iterdir())
    return path.name in _FILES and path.is_file()


def _is_report(folder: Path) -> bool:
    try:
        held = json.loads((folder / "results.json").read_text(encoding="utf-8"))
    except (OSError, ValueError):
        return False
    return isinstance(held, dict) and held.get("schema") == SCHEMA


@contextmanager
def _draft_of(target: Path) -> Iterator[Path]:
    """Give a new folder beside `target`; it takes its place if all goes well, else it goes."""
    target.parent.mkdir(parents=True, exist_ok=True)
    draft = _new_sibling(target, "part")
    try:
        yield draft
        _put(draft, target)
    except BaseException:
        shutil.rmtree(draft, ignore_errors=True)
        raise


def _new_sibling(target: Path, ending: str) -> Path:
    for count in itertools.count():
        sibling = target.with_name(f".{target.name}.{count}.{ending}")
        try:
            sibling.mkdir()
        except FileExistsError:
            continue
        return sibling
    raise AssertionError  # pragma: no cover  # the count does not end


def _put(draft: Path, target: Path) -> None:
    """Let `draft` take the place of `target`; what stood there comes back if that fails."""
    if not target.exists():
        draft.rename(target)
        return
    aside = _new_sibling(target, "old")
    earlier = aside / target.name
    try:
        target.rename(earlier)
        draft.rename(target)
    except BaseException:
        if earlier.exists() and not target.exists():
            earlier.rename(target)
        aside.rmdir()
        raise
    shutil.rmtree(aside, ignore_errors=True)


# ── the files ─────────────────────────────────────────────────────────────────────────────


def _write_parts(
    analysis: Analysis,
    sensitivity: Sensitivity | None,
    draft: Path,
    style: Style,
    progress: Progress | None,
) -> None:
    held = document(analysis, sensitivity)
    drawn = pictures(analysis)
    if sensitivity is not None:
        drawn += sensitivity_pictures(sensitivity)
    parts: list[Callable[[], None]] = [
        lambda: _write(draft / "results.json", json_text(held)),
        lambda: _write(draft / "plan.toml", analysis.plan.to_toml()),
        lambda: _write(draft / "methods.txt", methods_text(held, style)),
        lambda: _write_tables(draft / "tables", held),
        lambda: _write_figures(draft, held, drawn, style),
    ]
    for done, part in enumerate(parts, start=1):
        part()
        if progress is not None:
            progress(done, len(parts))


def _write(path: Path, text: str) -> None:
    path.write_text(text, encoding="utf-8", newline="\n")


def _write_tables(folder: Path, held: Document) -> None:
    folder.mkdir()
    for name, table in csv_tables(held).items():
        _write(folder / f"{name}.csv", table)


def _write_figures(draft: Path, held: Document, drawn: tuple[Picture, ...], style: Style) -> None:
    folder = draft / "figures"
    folder.mkdir()
    drawings = []
    for picture in drawn:
        svg = picture.to_bytes("svg")
        (folder / f"{picture.name}.svg").write_bytes(svg)
        (folder / f"{picture.name}.png").write_bytes(picture.to_bytes("png"))
        drawings.append(Drawing(picture.name, picture.title, picture.alt, svg.decode("utf-8")))
    _write(draft / "report.html", page(held, drawings, style))
