"""Make the messy spreadsheets of this folder: invented, seeded, untidy on purpose.

Nobody was measured; studies, people, assays and faults are made up. Each file has the faults
that its function names. Run ``python examples/messy/make_messy.py`` to write all of them again.
"""

from __future__ import annotations

import math
import random
from collections.abc import Callable, Iterator
from pathlib import Path
from statistics import NormalDist

SEED = 71
HERE = Path(__file__).parent
Grid = list[list[str]]


def values(
    draw: random.Random, n: int, *, typical: float, changes: list[float], spread: float = 0.7
) -> Iterator[list[float]]:
    """Yield one invented person after another: log-normal, with a change at each occasion."""

    def normal() -> float:
        # Only random() itself is promised to give the same numbers in every version of Python.
        return NormalDist().inv_cdf(1.0 - draw.random())

    for _ in range(n):
        own = typical * math.exp(spread * normal())
        yield [own * change * math.exp(0.3 * normal()) for change in changes]


def decimal_comma(draw: random.Random) -> Grid:
    """Semicolons, decimal commas, a row of units under the headings, values below a limit."""
    rows = [["runner", "before", "week 4", "week 8"], ["", "mg/L", "mg/L", "mg/L"]]
    people = values(draw, 12, typical=1.1, changes=[1.0, 0.8, 0.6], spread=1.0)
    for number, person in enumerate(people, start=1):
        cells = [f"{v:.1f}".replace(".", ",") if v >= 0.3 else "< 0,3" for v in person]
        rows.append([f"R{number:02d}", *cells])
    return rows


def title_and_footer(draw: random.Random) -> Grid:
    """Title lines above the headings, a blank line, and means under the data."""
    people = list(values(draw, 9, typical=24, changes=[1.0, 2.1, 3.0]))
    means = [sum(column) / len(people) for column in zip(*people, strict=True)]
    return [
        ["Iron tablets in blood donors (invented)", "", "", ""],
        ["ferritin in µg/L, entered by two people", "", "", ""],
        ["", "", "", ""],
        ["donor", "day 0", "day 28", "day 56"],
        *([f"D{i}", *(f"{v:.0f}" for v in person)] for i, person in enumerate(people, start=1)),
        ["", "", "", ""],
        ["mean", *(f"{mean:.1f}" for mean in means)],
    ]


def long_with_duplicates(draw: random.Random) -> Grid:
    """One row a sample; one sample was entered twice, with two results."""
    rows = [["swimmer", "visit", "IL-6 (pg/mL)"]]
    people = values(draw, 8, typical=2.4, changes=[1.0, 2.0, 1.1])
    for number, person in enumerate(people, start=1):
        for visit, value in zip(["rest", "finish", "next day"], person, strict=True):
            rows.append([f"S-{number}", visit, f"{value:.2f}"])
    again = next(row for row in rows if row[:2] == ["S-5", "finish"])
    return [*rows, [*again[:2], f"{4 * float(again[2]):.2f}"]]


def thousands_or_decimals(draw: random.Random) -> Grid:
    """Numbers such as 1,234 that may be one thousand or one and a bit."""
    rows = [["horse", "rest", "race", "recovery"]]
    people = values(draw, 8, typical=1500, changes=[1.0, 2.4, 1.2], spread=0.25)
    for number, person in enumerate(people, start=1):
        rows.append([f"H{number}", *(f"{max(v, 1001):,.0f}" for v in person)])
    return rows


def two_arms(draw: random.Random) -> Grid:
    """Two arms in one file, told apart by a column of their own."""
    rows = [["code", "arm", "month 0", "month 3", "month 6"]]
    arms = [("oat bran", [1.0, 0.8, 0.7]), ("usual diet", [1.0, 1.0, 0.95])]
    for number in range(1, 17):
        arm, changes = arms[number % 2]
        (person,) = values(draw, 1, typical=3.2, changes=changes)
        rows.append([f"{number:03d}", arm, *(f"{v:.2f}" for v in person)])
    return rows


def similar_ids(draw: random.Random) -> Grid:
    """Similar identifiers, perhaps of one person: a blank, a small letter, leading zeros."""
    ids = ["P1", "P2", "p2", "P3", "P4", " P4", "P5", "P6", "P007", "P7"]
    people = values(draw, len(ids), typical=55, changes=[1.0, 0.9, 0.8])
    rows = [["person", "spring", "summer", "autumn"]]
    return rows + [[i, *(f"{v:.0f}" for v in p)] for i, p in zip(ids, people, strict=True)]


def weeks_out_of_order(draw: random.Random) -> Grid:
    """One row a sample, weeks sorted as text: week 10 stands before week 2."""
    weeks = ["week 0", "week 2", "week 10"]
    people = list(values(draw, 10, typical=16, changes=[1.0, 0.85, 0.65]))
    rows = [
        [f"N{number}", week, f"{value:.1f}"]
        for number, person in enumerate(people, start=1)
        for week, value in zip(weeks, person, strict=True)
    ]
    return [["nurse", "week", "cortisone (nmol/L)"], *sorted(rows)]


def reasons_for_gaps(draw: random.Random) -> Grid:
    """Gaps with their reasons, values above the measuring range."""
    rows = [["volunteer", "day 1", "day 3", "day 7", "day 14"]]
    people = values(draw, 10, typical=210, changes=[1.0, 2.2, 1.6, 0.9], spread=0.6)
    for number, person in enumerate(people, start=1):
        rows.append([f"V{number}", *(f"{v:.0f}" if v <= 600 else ">600" for v in person)])
    rows[3][2], rows[5][4], rows[7][1] = "haemolysed", "missed", "QNS"
    return rows


def remarks_among_numbers(draw: random.Random) -> Grid:
    """Gaps as before, with a remark and a unit among the numbers."""
    rows = reasons_for_gaps(draw)
    rows[7][3] += " U/L"
    rows[9][3] = "repeat, see e-mail"
    return rows


def in_duplicate(draw: random.Random) -> Grid:
    """Every sample measured twice on one plate; one pair lies far apart."""
    rows = [["rower", "test", "well", "TNF (pg/mL)"]]
    people = values(draw, 7, typical=6, changes=[1.0, 1.5, 1.2], spread=0.4)
    for number, person in enumerate(people, start=1):
        for test, value in zip(["T1", "T2", "T3"], person, strict=True):
            wells = [value * (0.94 + 0.12 * draw.random()) for _ in range(2)]
            if (number, test) == (4, "T2"):
                wells[1] *= 1.7
            rows += [[f"B{number}", test, f"{w}", f"{v:.2f}"] for w, v in enumerate(wells, 1)]
    return rows


def two_sheets(draw: random.Random) -> dict[str, Grid]:
    """Two sheets in one file, and ND without a word on the limit of detection."""
    rows = [["child", "visit 1", "visit 2", "visit 3"]]
    people = values(draw, 11, typical=0.5, changes=[1.0, 0.7, 0.5], spread=0.9)
    for number, person in enumerate(people, start=1):
        cells = [f"{v:.2f}" if v >= 0.12 else "ND" for v in person]
        rows.append([f"C{number:02d}", *cells])
    notes = [["who", "when", "what"], ["lab", "after visit 2", "new reagent lot"]]
    return {"tryptase": rows, "remarks": notes}


TEXT_FILES: dict[str, tuple[Callable[[random.Random], Grid], str, str]] = {
    "crp_decimal_comma.csv": (decimal_comma, ";", "cp1252"),
    "ferritin_title_footer.csv": (title_and_footer, ",", "cp1252"),
    "il6_entered_twice.csv": (long_with_duplicates, ",", "utf-8"),
    "amyloid_a_thousands.csv": (thousands_or_decimals, ";", "utf-8"),
    "crp_two_arms.csv": (two_arms, ",", "utf-8-sig"),
    "vitamin_d_similar_ids.csv": (similar_ids, ",", "utf-8"),
    "cortisone_week_order.csv": (weeks_out_of_order, ",", "utf-8"),
    "ck_remarks.tsv": (remarks_among_numbers, "\t", "utf-8"),
    "ck_reasons.tsv": (reasons_for_gaps, "\t", "utf-8"),
    "tnf_in_duplicate.csv": (in_duplicate, ",", "utf-8"),
}
WORKBOOK = "tryptase_two_sheets.xlsx"


def text_files(seed: int = SEED) -> dict[str, bytes]:
    """Return the content of each text file by its name."""
    return {
        name: "".join(_line(row, mark) for row in make(random.Random(seed))).encode(encoding)
        for name, (make, mark, encoding) in TEXT_FILES.items()
    }


def _line(row: list[str], mark: str) -> str:
    return mark.join(f'"{cell}"' if mark in cell else cell for cell in row) + "\r\n"


def workbook_cells(seed: int = SEED) -> dict[str, list[list[str | float]]]:
    """Return the cells of each sheet of the workbook; what is a number is stored as one."""
    sheets = two_sheets(random.Random(seed))
    return {
        name: [[_stored(cell) for cell in row] for row in grid] for name, grid in sheets.items()
    }


def _stored(cell: str) -> str | float:
    return float(cell) if cell.replace(".", "", 1).isdigit() else cell


def write_workbook(target: Path) -> None:
    """Write the spreadsheet with two sheets."""
    from openpyxl import Workbook

    book = Workbook()
    book.remove(book.worksheets[0])
    for name, rows in workbook_cells().items():
        sheet = book.create_sheet(name)
        for row in rows:
            sheet.append(row)
    book.save(target)


def main() -> None:
    for name, content in text_files().items():
        (HERE / name).write_bytes(content)
    write_workbook(HERE / WORKBOOK)
    print(f"wrote {len(TEXT_FILES) + 1} files (invented data, seed {SEED})")


if __name__ == "__main__":
    main()
