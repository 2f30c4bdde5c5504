"""What sizing answers as a folder of files."""

from __future__ import annotations

import tempfile
from pathlib import Path

from robustrm.errors import ArgumentError, RobustrmError
from robustrm.figures import figure_bytes, power
from robustrm.report.json_text import json_text
from robustrm.sizing.result import Sizing


def write_sizing(sizing: Sizing, folder: str | Path) -> Path:
    """Write what sizing answers into a new or empty folder, whole or not at all.

    Parameters
    ----------
    sizing : Sizing
        What was found.
    folder : str or Path
        A folder that does not exist or is empty.

    Returns
    -------
    Path
        The folder, with ``power.csv``, ``widths.csv``, ``attainable.csv``, ``power.svg``,
        ``power.png``, ``sizing.txt``, ``sizing.json`` and ``plan.toml``.

    Raises
    ------
    ArgumentError
        When the folder holds something.
    RobustrmError
        When the file system refuses.
    """
    target = Path(folder)
    if target.exists() and (not target.is_dir() or any(target.iterdir())):
        raise ArgumentError(
            f"`folder` must be new or empty, got {target.name!r}, which holds something. Name a "
            "new folder."
        )
    figure = power(sizing).get_figure(root=True)
    assert figure is not None
    files: dict[str, bytes] = {
        f"power.{kind}": figure_bytes(figure, kind) for kind in ("svg", "png")
    }
    texts = {
        "power.csv": sizing.table.to_csv(index=False, lineterminator="\n"),
        "widths.csv": sizing.widths.to_csv(index=False, lineterminator="\n"),
        "attainable.csv": sizing.attainable.to_csv(index=False, lineterminator="\n"),
        "sizing.txt": f"{sizing}\n",
        "sizing.json": json_text(sizing.to_dict()),
        "plan.toml": sizing.study.plan.to_toml(),
    }
    files |= {name: text.encode() for name, text in texts.items()}
    try:
        target.parent.mkdir(parents=True, exist_ok=True)
        with tempfile.TemporaryDirectory(dir=target.parent, prefix=f".{target.name}.") as room:
            draft = Path(room) / "draft"
            draft.mkdir()
            for name, content in files.items():
                (draft / name).write_bytes(content)
            if target.exists():
                target.rmdir()
            draft.rename(target)
    except OSError as error:
        raise RobustrmError(
            f"The files cannot be written to {str(folder)!r}: {error.strerror or error}. Free the "
            "place or name another folder."
        ) from error
    return target
