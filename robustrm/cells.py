"""One cell's text: a value, a value beyond a limit, a missing value, or refused with a reason.

Text comes first. A number keeps the decimal places in which it was written, ``<0.3`` stays a
fact about a limit, a missing value keeps its reason, and whatever can be read in two ways is
refused instead of guessed.
"""

from __future__ import annotations

import math
import re
from collections.abc import Iterable
from dataclasses import dataclass
from decimal import Decimal
from typing import Literal

Kind = Literal["value", "below", "above", "missing", "refused"]
Mark = Literal[".", ","]


def _words(text: str) -> frozenset[str]:
    return frozenset(text.split())


# Common practice of laboratory reports, no source: keys in the form made by `_key`.
_BELOW_WORDS = _words(
    "nd lod loq lloq lld mdl dl bdl blq bql bloq blod blloq nondetect notdetected notdetectable"
    " nondetectable undetectable undetected belowlod belowloq belowlloq belowdetection"
    " belowlimit belowdetectionlimit belowlimitofdetection belowlimitofquantification"
)
_ABOVE_WORDS = _words(
    "uloq uld alq aql auloq aboveuloq abovelimit aboverange overrange aboverangelimit"
)
_MISSING_WORDS = _words(
    "na n/a nan null none missing missed missedvisit notdone nottaken notmeasured notassessed"
    " notavailable notapplicable nosample nodata noresult noshow didnotattend dna insufficient"
    " insufficientsample insufficientvolume quantitynotsufficient qns haemolysed haemolyzed"
    " hemolysed hemolyzed haemolysis hemolysis haemolytic hemolytic lipaemic lipemic icteric"
    " clotted contaminated lost samplelost withdrawn withdrew dropout droppedout unknown"
)
_DASHES = frozenset({"", "-", "–", "—", "−", "--", "."})

_INVISIBLE = str.maketrans("", "", "\u200b\u200c\u200d\u2060\ufeff")
_THIN = "\u00a0\u2007\u2009\u202f"  # spaces that group digits, never part two numbers
_SIGN = re.compile(r"(<=|<|≤|⩽|>=|>|≥|⩾)\s*(.*)", re.DOTALL)
_FLAGS = "*†‡"
_NUMBER = re.compile(rf"([+-]?)([0-9.,'’{_THIN}]+)([eE][+-]?[0-9]{{1,3}})?")
_GROUPED = re.compile(
    rf"[0-9]{{1,3}}(?P<group>[.,'’{_THIN}])[0-9]{{3}}(?:(?P=group)[0-9]{{3}})*"
    r"(?:(?P<decimal>[.,])[0-9]+)?"
)
_UNGROUPED = re.compile(r"[0-9]+(?:(?P<decimal>[.,])[0-9]+|\.)?|(?P<bare>[.,])[0-9]+")
_MONTH = r"(?:jan|feb|mar|apr|may|jun|jul|aug|sep|oct|nov|dec)[a-z]*\.?"
_DATE = re.compile(
    r"[0-9]{1,4}([-/.])[0-9]{1,2}(\1[0-9]{1,4})?([ T][0-9:.]+)?"
    rf"|[0-9]{{1,2}}[-. /]+{_MONTH}([-. /]+[0-9]{{2,4}})?|{_MONTH}[-. /]+[0-9]{{1,4}}",
    re.IGNORECASE,
)
_UNIT_AFTER_NUMBER = re.compile(r"[+-]?[0-9][0-9.,]*\s*[a-zA-Z\u00b5\u03bc%°][\w/%^·. -]*")
_LONGEST = 60


@dataclass(frozen=True, slots=True)
class Cell:
    """What one cell says.

    Parameters
    ----------
    kind : {"value", "below", "above", "missing", "refused"}
        What it is.
    number : Decimal or None
        The value, or the limit of ``below`` and ``above``; None where none is written.
    places : int
        Decimal places in which the number was written: 2 for ``0.10``.
    token : str
        The text without blanks around it.
    reason : str
        For a refused cell, why; ``"flagged"`` for a number with an asterisk or dagger;
        ``"word"`` for a limit written as a word.
    """

    kind: Kind
    number: Decimal | None = None
    places: int = 0
    token: str = ""
    reason: str = ""


def parse_cell(text: str, *, decimal: Mark | None = None) -> Cell:
    """Return what one cell says.

    Parameters
    ----------
    text : str
        The cell as written.
    decimal : {".", ","}, optional
        The decimal mark where it is known. Without it ``1,234`` is refused as ambiguous,
        while ``0,45`` and ``1.234,5`` can be read in one way only.

    Returns
    -------
    Cell
        Never raises: what cannot be read has the kind ``"refused"`` and a reason.

    Examples
    --------
    >>> parse_cell("0,45").number, parse_cell("1.234,5").number
    (Decimal('0.45'), Decimal('1234.5'))
    >>> parse_cell("< 0.30").kind, parse_cell("< 0.30").number, parse_cell("ND").kind
    ('below', Decimal('0.30'), 'below')
    >>> parse_cell("haemolysed").kind, parse_cell("1,234").reason
    ('missing', 'ambiguous')
    """
    token = clean(text)
    sign, body, flagged = _peeled(token)
    if sign:
        return _limit(sign, body, token, decimal)
    if token in _DASHES or _key(token) in _MISSING_WORDS:
        return Cell("missing", token=token)
    if _key(token) in _BELOW_WORDS:
        return Cell("below", token=token, reason="word")
    if _key(token) in _ABOVE_WORDS:
        return Cell("above", token=token, reason="word")
    number = _number(body, decimal)
    if isinstance(number, str):
        return Cell("refused", token=token, reason=number)
    return Cell("value", number, _places(number), token, "flagged" if flagged else "")


def clean(text: str) -> str:
    """Return `text` without blanks around it and with the plain minus sign."""
    return text.translate(_INVISIBLE).strip().replace("−", "-")


def _key(token: str) -> str:
    return re.sub(r"[\s._-]+", "", token).casefold()


def _peeled(token: str) -> tuple[str, str, bool]:
    """Split a cell into its sign (``<`` or ``>``), the rest, and whether it carries a flag."""
    bare = token.strip(_FLAGS).strip()
    signed = _SIGN.fullmatch(bare)
    sign, body = signed.groups() if signed else ("", bare)
    return ("<" if sign and sign in "<=≤⩽" else sign and ">"), body, bare != token


def _limit(sign: str, body: str, token: str, decimal: Mark | None) -> Cell:
    kind: Kind = "below" if sign == "<" else "above"
    words = _BELOW_WORDS if sign == "<" else _ABOVE_WORDS
    if not body or _key(body) in words:
        return Cell(kind, token=token, reason="word")
    number = _number(body, decimal)
    if isinstance(number, str):
        return Cell("refused", token=token, reason=number)
    if number <= 0:
        return Cell("refused", token=token, reason="limit")
    return Cell(kind, number, _places(number), token)


def _number(body: str, decimal: Mark | None) -> Decimal | str:
    """Return the number, or the reason why there is none."""
    form = _form(body)
    if form is None:
        return _unreadable(body)
    digits = form.read(decimal)
    if digits is None:
        return "ambiguous" if form.either else "decimal mark"
    number = Decimal(digits)
    size = abs(float(number))
    if math.isinf(size) or (size == 0 and number != 0):
        return "size"
    return number


def _places(number: Decimal) -> int:
    exponent = number.as_tuple().exponent
    return max(0, -exponent) if isinstance(exponent, int) else 0


def _unreadable(body: str) -> str:
    if re.fullmatch(r"[+-]?(inf|infinity|∞)", body, re.IGNORECASE):
        return "infinite"
    if body.startswith("#"):
        return "spreadsheet error"
    if body.startswith("="):
        return "formula"
    if len(body) > _LONGEST:
        return "text"
    if _DATE.fullmatch(body):
        return "date"
    return "unit" if _UNIT_AFTER_NUMBER.fullmatch(body) else "text"


# ── decimal and thousands marks ───────────────────────────────────────────────────────


@dataclass(frozen=True, slots=True)
class _Form:
    """A number as written: its marks, and whether the only one can be read in two ways."""

    sign: str
    digits: str
    exponent: str
    decimal: str = ""
    grouping: str = ""
    either: bool = False

    def read(self, decimal: Mark | None) -> str | None:
        """Return the number as Python writes it, or None where the marks do not allow it."""
        if self.either:
            if decimal is None and self.decimal == ",":
                return None
            grouped = decimal is not None and decimal != self.decimal
            return self._plain("" if grouped else ".")
        if decimal is not None and self.decimal not in ("", decimal):
            return None
        return self._plain(".")

    def _plain(self, mark: str) -> str:
        digits = self.digits.replace(self.grouping, "") if self.grouping else self.digits
        if self.decimal:
            digits = digits.replace(self.decimal, mark)
        return f"{self.sign}{digits}{self.exponent}"


def _form(body: str) -> _Form | None:
    match = _NUMBER.fullmatch(body) if len(body) <= _LONGEST else None
    if match is None:
        return None
    sign, digits, exponent = match.groups(default="")
    grouped = _GROUPED.fullmatch(digits)
    if grouped and not digits.startswith("0"):
        group, decimal = grouped.group("group"), grouped.group("decimal") or ""
        if group == decimal:
            return None
        if not decimal and group in ".," and digits.count(group) == 1:
            return _Form(sign, digits, exponent, decimal=group, either=True)
        if not decimal and group in ".,":
            decimal = "," if group == "." else "."
        return _Form(sign, digits, exponent, decimal=decimal, grouping=group)
    plain = _UNGROUPED.fullmatch(digits)
    if plain is None:
        return None
    mark = plain.group("decimal") or plain.group("bare") or ("." if "." in digits else "")
    return _Form(sign, digits, exponent, decimal=mark)


@dataclass(frozen=True, slots=True)
class Marks:
    """The decimal and thousands marks that a set of cells shows beyond doubt."""

    decimals: frozenset[str] = frozenset()
    groupings: frozenset[str] = frozenset()

    def settle(self, mark: str) -> Mark | None:
        """Return the decimal mark by which a lone `mark` between digits is read, or None.

        A lone mark before three digits is the decimal mark where the other cells use it and
        no other as such. It groups thousands only where another cell shows it doing so.
        """
        other: Mark = "." if mark == "," else ","
        own: Mark = "," if mark == "," else "."
        if self.decimals == {mark}:
            return own
        if self.decimals == {other} and mark in self.groupings:
            return other
        return "." if mark == "." and not self.decimals else None


def marks_of(texts: Iterable[str]) -> Marks:
    """Return the marks that `texts` show beyond doubt.

    Examples
    --------
    >>> marks_of(["0,45", "1,234"]).settle(",")
    ','
    >>> marks_of(["1,234"]).settle(",") is None
    True
    """
    forms = [form for form in map(_form_of_text, texts) if form and not form.either]
    return Marks(
        frozenset(form.decimal for form in forms if form.decimal),
        frozenset(form.grouping for form in forms if form.grouping),
    )


def lone_mark(text: str) -> str:
    """Return the mark of a number such as ``1,234`` or ``1.234``; empty for any other text."""
    form = _form_of_text(text)
    return form.decimal if form and form.either else ""


def _form_of_text(text: str) -> _Form | None:
    return _form(_peeled(clean(text))[1])


# ── units ─────────────────────────────────────────────────────────────────────────────

_UNIT_WORDS = _words(
    "% ‰ au a.u. u iu g mg µg ng pg kg mol mmol µmol nmol pmol mm cm m ml l s min h mmhg kpa ppm"
    " ppb bpm °c score points ratio"
)
_UNIT_FRACTION = re.compile(
    r"[a-zµ%·×⁰¹²³⁴-⁹0-9^*. ]*[a-zµ×⁰¹²³⁴-⁹0-9]\s*/\s*[0-9.]*\s*[a-zµ][a-zµ0-9²³^. ]*",
    re.IGNORECASE,
)


def normal_unit(text: str) -> str:
    """Return a unit without brackets and with one micro sign.

    Examples
    --------
    >>> normal_unit(" [μg/L]") == normal_unit("µg/L")
    True
    """
    unit = clean(text).replace("\u03bc", "\u00b5")
    if len(unit) > 1 and (unit[0], unit[-1]) in {("(", ")"), ("[", "]"), ("{", "}")}:
        unit = unit[1:-1].strip()
    return unit


def looks_like_unit(text: str) -> bool:
    """Whether `text` is written as a unit is: ``mg/L``, ``[µg/mL]``, ``%``.

    Examples
    --------
    >>> [looks_like_unit(text) for text in ("mg/L", "(10^9/L)", "%", "N/A", "week 0", "12")]
    [True, True, True, False, False, False]
    """
    unit = normal_unit(text).casefold().replace("\u03bc", "\u00b5")
    if not unit or len(unit) > 20 or _key(unit) in _MISSING_WORDS | _BELOW_WORDS:
        return False
    return unit in _UNIT_WORDS or _UNIT_FRACTION.fullmatch(unit) is not None
