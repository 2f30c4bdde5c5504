"""What can go wrong, as one tree.

::

    RobustrmError
    ├── ArgumentError     exit 2   an argument or option breaks a stated rule
    │   └── BudgetError   exit 2   an exact answer was demanded beyond the work budget
    ├── PlanError         exit 2   a plan file is refused
    ├── TooFewError       exit 3   too few subjects or values for the method
    ├── DataError         exit 3   the data are refused, every problem listed
    └── LostWorkError     exit 1   a worker was lost, and its block with it, too often

Those with exit 2 or 3 refuse what was given: they are ValueErrors too.

There is no warning class: what a reader must know about a result travels with the
result as a :class:`robustrm.results.Note`, where no filter can lose it.
"""

from __future__ import annotations

from dataclasses import asdict, dataclass


class RobustrmError(Exception):
    """Base class of every error that robustrm raises on purpose."""


class ArgumentError(RobustrmError, ValueError):
    """An argument breaks a rule; the message names it, the rule, the value and the next step."""


class BudgetError(ArgumentError):
    """An exact null distribution was demanded whose cost is above the stated work budget."""


class PlanError(RobustrmError, ValueError):
    """A plan file holds something that is not understood; nothing of it was used."""


class TooFewError(RobustrmError, ValueError):
    """A method needs more subjects (or occasions) than the table has for it."""


class LostWorkError(RobustrmError):
    """Blocks were lost with their workers; what was finished can be resumed from its folder."""


@dataclass(frozen=True, slots=True)
class Problem:
    """One thing in the data that must be settled before anything is computed.

    Parameters
    ----------
    code : str
        Short stable name of the rule, such as ``"duplicate"``.
    message : str
        What was found, as a sentence.
    action : str
        What to do next, naming the option that settles it.
    row : int, optional
        Row of the file, counted from 1 with the first line of the file.
    column : str, optional
        Column heading, as written in the file.
    text : str, optional
        The text of the cell, as written.
    """

    code: str
    message: str
    action: str
    row: int | None = None
    column: str | None = None
    text: str | None = None

    def __str__(self) -> str:
        place = ", ".join(
            part
            for part in (
                f"row {self.row}" if self.row is not None else "",
                f"column {self.column!r}" if self.column is not None else "",
                f"text {self.text!r}" if self.text is not None else "",
            )
            if part
        )
        where = f" ({place})" if place else ""
        return f"[{self.code}]{where} {self.message} {self.action}".rstrip()

    def to_dict(self) -> dict[str, object]:
        """Return the problem as a plain dictionary."""
        return asdict(self)


class DataError(RobustrmError, ValueError):
    """The data are refused; `problems` lists everything found in one go.

    Parameters
    ----------
    problems : sequence of Problem
        At least one.
    source : str, optional
        Name of the file or object the data came from.
    """

    def __init__(self, problems: list[Problem] | tuple[Problem, ...], source: str = "") -> None:
        self.problems = tuple(problems)
        self.source = source
        super().__init__(self._summary())

    def _summary(self) -> str:
        count = len(self.problems)
        head = f"{count} problem{'s' if count != 1 else ''} to settle before anything is computed"
        head += f" in {self.source}:" if self.source else ":"
        return "\n".join([head, *(f"  {problem}" for problem in self.problems)])
