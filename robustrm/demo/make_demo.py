"""Make the demo data set: invented, seeded, and the same bytes on every machine.

Nobody was measured. Fourteen invented clinic patients follow a diet for twelve weeks; faecal
calprotectin (µg/g) is measured at weeks 0, 2, 6 and 12 with an invented assay that reports
whole numbers and nothing below 30. The values follow a multiplicative model::

    log value = log 190 + person + change at that week + noise

Persons are normal (SD 0.95). The noise is mostly small (SD 0.30), and in one cell out of eight
large (SD 0.85), as in an intercurrent infection: this gives the long tail. The typical value
falls by a factor of 0.92, 0.74 and 0.60 at weeks 2, 6 and 12. One visit is missed. The seed was
chosen so that three values fall below the limit and the example is neither trivial nor extreme.

Run ``python -m robustrm.demo.make_demo`` to write the file again beside this script.
"""

from __future__ import annotations

import csv
import io
import math
import random
from pathlib import Path
from statistics import NormalDist

SEED = 2160
N_PATIENTS = 14
CHANGES = {"week 0": 1.0, "week 2": 0.92, "week 6": 0.74, "week 12": 0.60}
TYPICAL = 190.0
LOWER_LIMIT = 30
MISSED = ("K09", "week 6")

_STANDARD = NormalDist()


def demo_text(seed: int = SEED) -> str:
    """Return the data set as CSV text, one row a patient and one column a week."""
    draw = random.Random(seed)
    target = io.StringIO()
    writer = csv.writer(target, lineterminator="\n")
    writer.writerow(["patient", *CHANGES])
    for number in range(1, N_PATIENTS + 1):
        patient = f"K{number:02d}"
        person = 0.95 * _normal(draw)
        cells = [_cell(person, change, draw) for change in CHANGES.values()]
        if patient == MISSED[0]:
            cells[list(CHANGES).index(MISSED[1])] = "missed"
        writer.writerow([patient, *cells])
    return target.getvalue()


def _normal(draw: random.Random) -> float:
    # Only random() itself is promised to give the same numbers in every version of Python.
    return _STANDARD.inv_cdf(1.0 - draw.random())


def _cell(person: float, change: float, draw: random.Random) -> str:
    spread = 0.85 if draw.random() < 1 / 8 else 0.30
    value = round(TYPICAL * change * math.exp(person + spread * _normal(draw)))
    return str(value) if value >= LOWER_LIMIT else f"<{LOWER_LIMIT}"


def main() -> None:
    """Write the data set beside this script."""
    target = Path(__file__).with_name("calprotectin.csv")
    target.write_text(demo_text(), encoding="utf-8", newline="\n")
    print(f"wrote {target.name} (invented data, seed {SEED})")


if __name__ == "__main__":
    main()
