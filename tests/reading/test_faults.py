"""Every shape seen in practice is read right, or stops with a sentence that names the place.

One entry a fault. Values, names and identifiers are invented.
"""

from __future__ import annotations

import io
from dataclasses import dataclass, field
from pathlib import Path

import pytest

from robustrm.errors import DataError
from robustrm.reading import read_table
from robustrm.results import note_codes
from robustrm.table import OccasionTable

WIDE = {"subject": "id", "occasions": ["week 0", "week 2", "week 6"]}
LONG = {"subject": "id", "occasion": "visit", "value": "CRP", "order": ["T1", "T2", "T10"]}


@dataclass(frozen=True)
class Fault:
    """A file with a fault: what it must give, or the sentences with which it must stop."""

    name: str
    file: str | bytes
    options: dict = field(default_factory=lambda: WIDE)
    values: list = field(default_factory=list)
    stops: tuple[str, ...] = ()
    row: int | None = None
    notes: tuple[str, ...] = ()
    ledger: str = ""
    unit: str | None = None


def stopping(name, file, *stops, row=None, options=WIDE) -> Fault:
    return Fault(name, file, options, stops=stops, row=row)


nan = float("nan")
TWO = [[3.1, 2.0, 1.5], [0.45, 0.5, 0.7]]
BODY = "id,week 0,week 2,week 6\nP1,3.1,2.0,1.5\nP2,0.45,0.5,0.7\n"
LONG_BODY = "id,visit,CRP\nP1,T1,3.1\nP1,T2,2.0\nP1,T10,1.5\nP2,T1,0.45\nP2,T2,0.5\nP2,T10,0.7\n"

READ = [
    Fault("wide, one marker", BODY, values=TWO),
    Fault(
        "wide, many markers",
        "id,IL6_wk0,IL6_wk2,FER_wk0,FER_wk2\nP1,3.1,2.0,88,90\nP2,0.45,0.5,40,35\n",
        {"subject": "id", "occasions": ["FER_wk0", "FER_wk2"], "marker": "ferritin"},
        values=[[88, 90], [40, 35]],
    ),
    Fault("long", LONG_BODY, LONG, values=TWO),
    Fault(
        "long with replicates",
        "id,visit,rep,CRP\nP1,T1,1,1\nP1,T1,2,2\nP1,T2,1,4\nP1,T2,2,4\n",
        {**LONG, "order": ["T1", "T2"], "replicates": "mean"},
        values=[[1.5, 4]],
        notes=("replicates",),
        ledger="4 cells became 2 by the arithmetic mean of replicates",
    ),
    Fault(
        "unit row under the headings",
        "id,age,week 0,week 2,week 6\n,years,mg/L,mg/L,mg/L\nP1,50,3.1,2.0,1.5\n"
        "P2,61,0.45,0.5,0.7\n",
        values=TWO,
        unit="mg/L",
        ledger="row 2 holds units: set aside as unit row",
    ),
    Fault(
        "unit in the heading",
        LONG_BODY.replace("CRP", "CRP [\u03bcg/L]"),
        {**LONG, "value": "CRP [\u03bcg/L]"},
        values=TWO,
        unit="\u00b5g/L",
        ledger="unit '\u00b5g/L' taken from row 1",
    ),
    Fault(
        "unit column",
        LONG_BODY.replace("\n", ",mg/L\n").replace("CRP,mg/L", "CRP,unit"),
        LONG,
        values=TWO,
        unit="mg/L",
    ),
    Fault(
        "title rows above",
        "CRP study,,,\nprinted 3 May,,,\n,,,\n" + BODY,
        values=TWO,
        ledger="row 2 above the headings: set aside as title",
    ),
    Fault(
        "results at the foot",
        BODY + ",,,\nMean,1.8,1.3,1.1\nSD:,1.9,1.1,0.6\nn,2,2,2\n* one sample thawed twice,,,\n",
        values=TWO,
        notes=("footer",),
        ledger="row 5 stands at the foot: set aside as footer",
    ),
    Fault("trailing blank rows and columns", BODY.replace("\n", ",,\n") + ",,,,,\n,,,,,\n",
          values=TWO),
    Fault("comment rows", BODY.replace("P2", "# P2 was measured twice\nP2"), values=TWO,
          ledger="row 3 begins with #: set aside as comment"),
    Fault(
        "semicolons and decimal commas",
        BODY.replace(",", ";").replace(".", ","),
        values=TWO,
        notes=("decimal",),
    ),
    Fault("tabs", BODY.replace(",", "\t"), values=TWO),
    Fault("a stated separator", "sep=;\r\n" + BODY.replace(",", ";"), values=TWO),
    Fault(
        "thousands and decimal marks",
        "id;week 0;week 2;week 6\nP1;1.234,5;2.000,0;999,5\n",
        values=[[1234.5, 2000, 999.5]],
        notes=("decimal",),
    ),
    Fault(
        "a lone comma settled by the option",
        "id;week 0;week 2;week 6\nP1;1,234;2,001;1,500\n",
        {**WIDE, "decimal": ","},
        values=[[1.234, 2.001, 1.5]],
        notes=("decimal",),
    ),
    Fault("byte order mark", b"\xef\xbb\xbf" + BODY.encode(), values=TWO),
    Fault("UTF-16", BODY.encode("utf-16"), values=TWO),
    Fault(
        "Windows-1252 with a micro sign",
        ("id,week 0,week 2,week 6\n,\u00b5g/L,\u00b5g/L,\u00b5g/L\nP1,3.1,2.0,1.5\n"
         "P2,0.45,0.5,0.7\n").encode("cp1252"),
        values=TWO,
        notes=("encoding",),
        unit="\u00b5g/L",
    ),
    Fault(
        "limits on both sides",
        "id;week 0;week 2;week 6\nP1;<0.3;< 0,3;>20\nP2;1;2;3\n",
        values=[[0.3, 0.3, 20], [1, 2, 3]],
        notes=("decimal",),
        ledger="lower limit 0.3 is the only one written",
    ),
    Fault(
        "words for below the limit",
        "id,week 0,week 2,week 6\nP1,<LOD,ND,n.d.\nP2,BLQ,2,3\n",
        {**WIDE, "lower_limit": 0.3},
        values=[[0.3, 0.3, 0.3], [0.3, 2, 3]],
        notes=("limit words",),
    ),
    Fault("zero for a value below the limit", "id,week 0,week 2,week 6\nP1,0,2,3\n",
          values=[[0, 2, 3]], notes=("zero",)),
    Fault("a mark beside the number", "id,week 0,week 2,week 6\nP1,0.9*,2,3\n",
          values=[[0.9, 2, 3]], notes=("flagged",)),
    Fault(
        "reasons for missing",
        "id,week 0,week 2,week 6\nP1,-,.,NA\nP2,missed,haemolysed,1\n",
        values=[[nan, nan, nan], [nan, nan, 1]],
        ledger="1 cell written 'haemolysed': P2 at week 2",
    ),
    Fault(
        "identifiers are text",
        "id,week 0,week 2,week 6\nNA,3.1,2.0,1.5\nP-7,0.45,0.5,0.7\n",
        values=TWO,
    ),
    Fault(
        "identifiers that look alike, one row each",
        "id,week 0,week 2,week 6\n007,3.1,2.0,1.5\n7,0.45,0.5,0.7\n P7,1,2,3\nP7,1,2,4\n"
        "p7,2,2,2\n",
        values=[*TWO, [1, 2, 3], [1, 2, 4], [2, 2, 2]],
        notes=("possible duplicate", "possible duplicate", "possible duplicate"),
    ),
    Fault("blanks around an identifier", BODY.replace("P2", " P2 "), values=TWO,
          notes=("identifier blanks",)),
    Fault("T10 before T2", "\n".join([LONG_BODY.split("\n")[0], *LONG_BODY.split("\n")[:0:-1]]),
          LONG, values=TWO[::-1]),
    Fault(
        "dates as occasions",
        "id,day,CRP\nP1,2026-03-01,2\nP1,2026-02-01,1\n",
        {"subject": "id", "occasion": "day", "value": "CRP",
         "order": ["2026-02-01", "2026-03-01"]},
        values=[[1, 2]],
    ),
    Fault(
        "covariates and personal details",
        "id,patient name,DOB,sex,week 0,week 2,week 6\nP1,Ann Bell,1970-01-01,f,3.1,2.0,1.5\n"
        "P2,Cy Dow,1981-05-09,m,0.45,0.5,0.7\n",
        values=TWO,
        notes=("personal columns",),
    ),
    Fault(
        "one arm chosen",
        "id,arm,week 0,week 2,week 6\nP1,diet,3.1,2.0,1.5\nP9,control,1,2,3\n"
        "P2,diet,0.45,0.5,0.7\n",
        {**WIDE, "where": "arm=diet"},
        values=TWO,
        ledger="2 of 3 rows kept, where 'arm' is 'diet'",
    ),
    Fault(
        "one marker chosen",
        LONG_BODY.replace("id,", "analyte,id,").replace("\nP", "\nCRP,P") + "IL-6,P1,T1,5\n",
        {**LONG, "where": {"analyte": "CRP"}},
        values=TWO,
    ),
    Fault("a tenfold jump", "id,week 0,week 2,week 6\nP1,1.1,11,1.2\n", values=[[1.1, 11, 1.2]],
          notes=("jump",)),
]  # fmt: skip

STOP = [
    stopping(
        "two heading rows, marker above visit",
        "id,IL6,IL6,FER,FER\n,wk0,wk2,wk0,wk2\nP1,1,2,3,4\n",
        "[duplicate heading] (column 'wk0') 2 columns have the heading 'wk0'.",
        "[no column] (column 'id') there is no column 'id'.",
        options={"subject": "id", "occasions": ["wk0", "wk2"]},
    ),
    stopping(
        "two occasions in one heading",
        BODY.replace("week 2", "week 0"),
        "[duplicate heading] (column 'week 0') 2 columns have the heading 'week 0'.",
        "[no column] (column 'week 2') there is no column 'week 2'.",
    ),
    stopping(
        "merged identifiers",
        LONG_BODY.replace("P1,T2", ",T2").replace("P1,T10", ",T10"),
        "the row has values and no identifier. Write the identifier in every row (cells merged",
        row=3,
        options=LONG,
    ),
    stopping(
        "results among the subjects",
        BODY.replace("P2", "Mean,1,1,1\nP2"),
        "'Mean' reads like a row of results among the subjects.",
        row=3,
    ),
    stopping(
        "headings again",
        BODY + BODY,
        "the headings stand there again.",
        row=4,
    ),
    stopping(
        "a decimal comma among comma separators",
        "id,week 0,week 2,week 6\nP1,0,45,2,3\n",
        "the row has 5 fields under 4 headings. Look for a decimal comma",
        row=2,
    ),
    stopping(
        "a lone comma",
        "id;week 0;week 2;week 6\nP1;1,234;2;3\n",
        "'1,234' of P1 at week 0 can be read as 1.234 or 1234 (1 cell like it).",
        "--decimal , or --decimal .",
        row=2,
    ),
    stopping(
        "a lone point among decimal commas",
        "id;week 0;week 2;week 6\nP1;1.234;2,5;3\n",
        "'1.234' of P1 at week 0 can be read as 1.234 or 1234",
        row=2,
    ),
    stopping(
        "a word for below a limit, none declared",
        "id,week 0,week 2,week 6\nP1,ND,2,3\n",
        "'ND' of P1 at week 0 lies below a limit that is written nowhere (1 cell like it).",
        "--lower-limit NUMBER",
        row=2,
    ),
    stopping(
        "a word for above a limit, none declared",
        "id,week 0,week 2,week 6\nP1,>ULOQ,2,3\n",
        "'>ULOQ' of P1 at week 0 lies above a limit",
        "--upper-limit NUMBER",
        row=2,
    ),
    stopping(
        "two limits",
        "id,week 0,week 2,week 6\nP1,<0.3,<0.8,1\n",
        "lower limits 0.3 and 0.8 are written, and none is declared.",
        "--lower-limit A,B,...",
        row=2,
    ),
    stopping(
        "codes for missing",
        "id,week 0,week 2,week 6\nP1,-99,2,3\nP2,1,999,2\n",
        "'-99' of P1 at week 0 looks like a code for missing: the other values lie between 1 "
        "and 3.",
        "'999' of P2 at week 2 looks like a code for missing",
        row=2,
    ),
    stopping(
        "free text among the values",
        "id,week 0,week 2,week 6\nP1,see note,2,3\n",
        "(row 2, column 'week 0', text 'see note') 'see note' of P1 at week 0 is no number",
        row=2,
    ),
    stopping(
        "a number turned into a date",
        "id,week 0,week 2,week 6\nP1,01-Feb,2,3\nP2,1-2,2,3\n",
        "'01-Feb' of P1 at week 0 is a date where a value was expected.",
        "'1-2' of P2 at week 0 is a date",
        row=2,
    ),
    stopping(
        "a unit beside the number",
        "id,week 0,week 2,week 6\nP1,3.1 mg/L,2,3\n",
        "'3.1 mg/L' of P1 at week 0 holds more than a number.",
        row=2,
    ),
    stopping(
        "mixed units in a unit column",
        "id,visit,CRP,unit\nP1,T1,3.1,mg/L\nP1,T2,0.3,mg/dL\n",
        "the values are in different units: 'mg/L' and 'mg/dL'.",
        row=3,
        options={**LONG, "order": ["T1", "T2"]},
    ),
    stopping(
        "mixed units in the unit row",
        "id,week 0,week 2,week 6\n,mg/L,mg/dL,mg/L\nP1,1,2,3\n",
        "the values are in different units: 'mg/L' and 'mg/dL'.",
        row=2,
    ),
    stopping(
        "another unit than declared",
        "id,week 0,week 2,week 6\n,mg/L,mg/L,mg/L\nP1,1,2,3\n",
        "the unit is declared as 'mg/dL' and the file says 'mg/L'.",
        row=2,
        options={**WIDE, "unit": "mg/dL"},
    ),
    stopping(
        "an identifier with a blank in some rows",
        LONG_BODY.replace("P1,T2", " P1,T2"),
        "'P1' (row 2) and ' P1' (row 3) differ in blanks alone: one subject or two?",
        row=3,
        options=LONG,
    ),
    stopping(
        "an identifier in two spellings that complete each other",
        LONG_BODY.replace("P1,T2", "p1,T2"),
        "'P1' and 'p1' look alike and never have the same occasion: one subject or two?",
        row=3,
        options=LONG,
    ),
    stopping(
        "one identifier in two arms",
        "id,arm,week 0,week 2,week 6\nP1,diet,1,2,3\nP1,control,1,2,3\n",
        "'P1' stands in 2 arms: diet (row 2) and control (row 3).",
        "'P1' has 2 values at 'week 0' (1; 1; rows 2, 3).",
        row=3,
    ),
    stopping(
        "an identifier twice",
        BODY + "P1,5,6,7\n",
        "'P1' has 2 values at 'week 0' (3.1; 5; rows 2, 4). Not averaged.",
        row=4,
    ),
    stopping(
        "undeclared replicates",
        LONG_BODY + "P2,T10,4.8\n",
        "'P2' has 2 values at 'T10' (0.7; 4.8; rows 7, 8). Not averaged.",
        "--replicates mean or --replicates geometric",
        row=8,
        options=LONG,
    ),
    stopping(
        "two arms",
        "id,Treatment_Group,week 0,week 2,week 6\nP1,diet,1,2,3\nP2,usual care,1,2,3\n",
        "column 'Treatment_Group' has 2 values (diet and usual care). A within-subject analysis "
        "would pool the arms.",
        "--where Treatment_Group=diet or --where 'Treatment_Group=usual care'",
    ),
    stopping(
        "several markers",
        LONG_BODY.replace("id,", "analyte,id,").replace("\nP", "\nCRP,P") + "IL-6,P1,T1,5\n",
        "column 'analyte' has 2 values (CRP and IL-6): one table holds one marker.",
        "--where analyte=CRP or --where analyte=IL-6",
        options=LONG,
    ),
    stopping(
        "an undeclared order",
        LONG_BODY,
        "the order in time of the 3 occasions is not declared; nothing is sorted silently.",
        "--order T1,T2,T10",
        options={"subject": "id", "occasion": "visit", "value": "CRP"},
    ),
    stopping(
        "a misspelt occasion",
        LONG_BODY.replace("P2,T1,", "P2,T 1,"),
        "'T 1' is not among the declared occasions (row 5). Did you mean 'T1'?",
        row=5,
        options=LONG,
    ),
    stopping(
        "a declared occasion without a row",
        LONG_BODY,
        "no row has the declared occasion 'T12'.",
        options={**LONG, "order": ["T1", "T2", "T10", "T12"]},
    ),
    stopping(
        "a row without an occasion",
        LONG_BODY.replace("P2,T2", "P2,"),
        "the row of 'P2' with '0.5' names no occasion.",
        row=6,
        options=LONG,
    ),
    stopping(
        "one occasion only",
        "id,visit,CRP\nP1,T1,1\nP2,T1,2\n",
        "the column of occasions holds only 'T1'",
        options={"subject": "id", "occasion": "visit", "value": "CRP"},
    ),
    stopping(
        "misspelt columns",
        BODY,
        "there is no column 'ID'. Did you mean 'id'?",
        "there is no column 'week2'. Did you mean 'week 2'?",
        options={"subject": "ID", "occasions": ["week 0", "week2"]},
    ),
    stopping(
        "a condition that no row meets",
        "id,arm,week 0,week 2,week 6\nP1,diet,1,2,3\n",
        "no row has 'Diet'. Did you mean 'diet'? The column holds 'diet'.",
        options={**WIDE, "where": {"arm": "Diet"}},
    ),
    stopping(
        "no layout, wide",
        "id,age,week 10,week 0,week 2\nP1,50,3,1,2\nP2,61,3,1,2\n",
        "--subject id --occasions 'week 0,week 2,week 10'",
        options={},
    ),
    stopping(
        "no layout, wide with two markers",
        "id,IL6_wk0,IL6_wk2,FER_wk0,FER_wk2\nP1,3.1,2.0,88,90\n",
        "--subject id --occasions IL6_wk0,IL6_wk2  or  --subject id --occasions FER_wk0,FER_wk2",
        options={},
    ),
    stopping(
        "no layout, long",
        LONG_BODY,
        "--subject id --occasion visit --value CRP --order T1,T2,T10",
        options={},
    ),
    stopping("an empty file", "", "the file is empty.", options=WIDE),
    stopping("blank cells only", ",,\n,,\n", "every field of the file is empty.", row=1),
    stopping("headings only", "id,week 0,week 2,week 6\n", "headings and no row of data", row=1),
    stopping("a binary file", b"\x01\x00\x02junk", "the file is not text."),
    stopping("bytes of no encoding", b"id,w\x81\x8d\n\xff,1\n", "encoding of the file is unknown"),
    stopping("an old workbook", b"\xd0\xcf\x11\xe0\xa1\xb1", "an old or a password-protected"),
    stopping("a PDF", b"%PDF-1.7", "a PDF document, not a table."),
    stopping("a damaged workbook", b"PK\x03\x04 no zip", "cannot be opened as one."),
    stopping(
        "a quotation mark never closed",
        'id,week 0,week 2,week 6\nP1,"1,2,3\nP2,1,2,3\n',
        "the row cannot be taken apart",
        row=2,
    ),
    stopping("too many columns", "id," * 10_001 + "\n1,2\n", "more than 10000", row=1),
]


def read(fault: Fault) -> OccasionTable:
    data = fault.file.encode() if isinstance(fault.file, str) else fault.file
    return read_table(io.BytesIO(data), **fault.options)


@pytest.mark.parametrize("fault", READ, ids=lambda fault: fault.name)
def test_the_file_is_read(fault: Fault):
    table = read(fault)
    assert str(table.values.tolist()) == str([[float(v) for v in row] for row in fault.values])
    assert note_codes(table.notes) == fault.notes
    assert fault.ledger in str(table.ledger)
    assert table.unit == fault.unit


@pytest.mark.parametrize("fault", STOP, ids=lambda fault: fault.name)
def test_the_file_stops_with_a_sentence(fault: Fault):
    with pytest.raises(DataError) as caught:
        read(fault)
    for sentence in fault.stops:
        assert sentence in str(caught.value)
    if fault.row is not None:
        assert fault.row in [problem.row for problem in caught.value.problems]
    assert all(problem.action for problem in caught.value.problems)


def test_every_fault_has_a_name_of_its_own():
    names = [fault.name for fault in [*READ, *STOP]]
    assert len(set(names)) == len(names)


@pytest.mark.parametrize("personal", ["Ann Bell", "1970-01-01", "patient name"])
def test_personal_details_do_not_reach_the_table(personal: str):
    (fault,) = [fault for fault in READ if fault.name == "covariates and personal details"]
    table = read(fault)
    held = repr(table) + str(table.to_long()) + str(table.ledger.to_dict()) + str(table.source)
    assert personal not in held


def test_rows_with_another_separator_than_the_headings_are_refused(tmp_path: Path):
    path = tmp_path / "two marks.csv"
    path.write_text("id,w0,w1,w2\nP1;12;8;3\nP2;10;9;4\n", encoding="utf-8")
    with pytest.raises(DataError) as caught:
        read_table(path, subject="id", occasions=["w0", "w1", "w2"])
    assert [(p.code, p.row) for p in caught.value.problems][:2] == [
        ("too few fields", 2), ("too few fields", 3)
    ]  # fmt: skip
