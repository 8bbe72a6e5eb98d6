"""The cell sheet: what is accepted, what is refused, and that nothing is ever misread."""

from __future__ import annotations

import csv
import io
import math
import string
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from tfm.batch.problems import Problem, SheetError
from tfm.batch.schema import reserved_names
from tfm.batch.settings import RowValues
from tfm.batch.sheet import Sheet, read_sheet
from tfm.errors import TfmError

HEAD = "field,stressed,relaxed,youngs_modulus,poisson"
GOOD = "a,s.tif,r.tif,5 kPa,0.45"


def _read(folder: Path, data: str | bytes) -> Sheet:
    path = folder / "sheet.csv"
    path.write_bytes(data.encode() if isinstance(data, str) else data)
    return read_sheet(path, reserved=reserved_names())


def _sheet(*rows: str, head: str = HEAD) -> str:
    return "\n".join([head, *rows]) + "\n"


@pytest.mark.parametrize(
    "data",
    [
        _sheet(GOOD).encode(),
        b"\xef\xbb\xbf" + _sheet(GOOD).encode(),
        _sheet(GOOD).replace("\n", "\r\n").encode(),
        _sheet(GOOD).replace("\n", "\r").encode(),
        _sheet(GOOD).replace(",", ";").encode(),
        _sheet(GOOD).replace(",", "\t").encode(),
        b"sep=;\r\n" + _sheet(GOOD).replace(",", ";").encode(),
        _sheet("", ",,,,", GOOD, "", " , ,,,").encode(),
        _sheet(GOOD + ",,,").encode(),
        _sheet(GOOD + ",,", head=HEAD + ",,").encode(),
        _sheet('"a","s.tif","r.tif","5 kPa","0.45"').encode(),
        _sheet(" a , s.tif ,r.tif, 5\u00a0kPa ,0.45").encode(),
        _sheet("a,s.tif,r.tif,5,0.45", head=HEAD.replace("modulus", "modulus [kPa]")).encode(),
        _sheet("a,s.tif,r.tif,5000 N/m^2,.45").encode(),
        _sheet("a,s.tif,r.tif,0.005 MPa,4.5e-1").encode(),
        (HEAD + "\n" + GOOD).encode(),
    ],
)
def test_spreadsheet_dialects_read_alike(tmp_path: Path, data: bytes) -> None:
    (row,) = _read(tmp_path, data).rows
    assert (row.field, row.stressed, row.relaxed) == ("a", "s.tif", "r.tif")
    assert row.youngs_modulus == 5000.0
    assert row.poisson == 0.45


# code, row, column, text of the sheet
BAD_SHEETS: list[tuple[str, int | None, str, str | bytes]] = [
    ("empty-sheet", None, "", b""),
    ("empty-sheet", None, "", b"\n\n , \n"),
    ("empty-sheet", None, "", b"\xef\xbb\xbf"),
    ("empty-sheet", None, "", HEAD),
    ("not-csv", None, "", b"PK\x03\x04rest of a workbook"),
    ("not-csv", None, "", b"\xd0\xcf\x11\xe0 old workbook"),
    ("not-csv", None, "", b"II*\x00 a TIFF"),
    ("not-csv", None, "", b"\x89HDF\r\n"),
    ("not-csv", None, "", b"%PDF-1.7"),
    ("not-csv", 2, "", _sheet("a\x00,s.tif,r.tif,5 kPa,0.45")),
    ("wrong-encoding", None, "", _sheet(GOOD).encode("utf-16")),
    ("wrong-encoding", 2, "", _sheet("z\u00e9ro,s.tif,r.tif,5 kPa,0.45").encode("latin-1")),
    ("wrong-encoding", 2, "", _sheet("a,s.tif,r.tif,5 kPa,0.45,30 \u00b5m", head=HEAD + ",thickness").encode("cp1252")),
    ("bad-quotes", None, "", _sheet('"a,s.tif,r.tif,5 kPa,0.45')),
    ("bad-quotes", None, "", _sheet('"a"x,s.tif,r.tif,5 kPa,0.45')),
    ("ragged-row", 2, "", _sheet("a,s.tif,r.tif,5,5 kPa,0.45")),
    ("ragged-row", 2, "", _sheet("a,s.tif,r.tif,5 kPa")),
    ("ragged-row", 3, "", _sheet(GOOD, "b,s.tif")),
    ("ragged-row", 2, "", HEAD.replace(",", ";") + "\n" + GOOD),
    ("missing-column", 1, "field", _sheet("s.tif,r.tif,5 kPa,0.45", head="stressed,relaxed,youngs_modulus,poisson")),
    ("missing-column", 1, "stressed", _sheet("a,5 kPa,0.45", head="field,youngs_modulus,poisson")),
    ("missing-column", 1, "relaxed", _sheet("a,s.tif,5 kPa,0.45", head="field,stressed,youngs_modulus,poisson")),
    ("missing-column", 1, "youngs_modulus", _sheet("a,s.tif,r.tif,0.45", head="field,stressed,relaxed,poisson")),
    ("missing-column", 1, "poisson", _sheet("a,s.tif,r.tif,5 kPa", head="field,stressed,relaxed,youngs_modulus")),
    ("near-miss-column", 1, "Field", _sheet(GOOD, head=HEAD.replace("field", "Field"))),
    ("near-miss-column", 1, "young's modulus", _sheet(GOOD, head=HEAD.replace("youngs_", "young's "))),
    ("near-miss-column", 1, "youngs_modulus_kPa", _sheet(GOOD, head=HEAD.replace("modulus", "modulus_kPa"))),
    ("near-miss-column", 1, "youngs_modulus (kPa)", _sheet(GOOD, head=HEAD.replace("modulus", "modulus (kPa)"))),
    ("near-miss-column", 1, "poison", _sheet(GOOD, head=HEAD.replace("poisson", "poison"))),
    ("near-miss-column", 1, "nu", _sheet(GOOD, head=HEAD.replace("poisson", "nu"))),
    ("near-miss-column", 1, "thicknes", _sheet(GOOD + ",30 um", head=HEAD + ",thicknes")),
    ("near-miss-column", 1, "pixel_size", _sheet(GOOD + ",1 um", head=HEAD + ",pixel_size")),
    ("near-miss-column", 1, "outlines", _sheet(GOOD + ",o.tif", head=HEAD + ",outlines")),
    ("duplicate-column", 1, "poisson", _sheet(GOOD + ",0.4", head=HEAD + ",poisson")),
    ("duplicate-column", 1, "thickness", _sheet(GOOD + ",1,2", head=HEAD + ",thickness [um],thickness [nm]")),
    ("unnamed-column", 1, "", _sheet(GOOD + ",lost", head=HEAD + ",")),
    ("wrong-unit", 1, "youngs_modulus", _sheet(GOOD, head=HEAD.replace("modulus", "modulus [um]"))),
    ("wrong-unit", 1, "poisson", _sheet(GOOD, head=HEAD.replace("poisson", "poisson [kPa]"))),
    ("wrong-unit", 1, "condition", _sheet(GOOD + ",x", head=HEAD + ",condition [um]")),
    ("wrong-unit", 1, "thickness", _sheet(GOOD + ",30", head=HEAD + ",thickness [furlongs per week]")),
    ("duplicate-field", 3, "field", _sheet(GOOD, GOOD)),
    ("duplicate-field", 3, "field", _sheet(GOOD.replace("a,", "\u00e9,", 1), GOOD.replace("a,", "e\u0301,", 1))),
    ("empty-cell", 2, "field", _sheet(GOOD.replace("a,", ",", 1))),
    ("bad-name", 2, "field", _sheet(GOOD.replace("a,", "x" * 201 + ",", 1))),
    ("bad-name", 2, "field", _sheet('"a\nb",s.tif,r.tif,5 kPa,0.45')),
    ("bad-name", 2, "field", _sheet("a\u202egnp,s.tif,r.tif,5 kPa,0.45")),
    ("bad-name", 2, "field", _sheet("a\x1b[31m,s.tif,r.tif,5 kPa,0.45")),
    ("which-source", 2, "stressed", _sheet("a,,,5 kPa,0.45")),
    ("which-source", 2, "stressed", _sheet(GOOD + ",u.csv", head=HEAD + ",displacement")),
    ("which-source", 2, "relaxed", _sheet("a,,r.tif,5 kPa,0.45,u.csv", head=HEAD + ",displacement")),
    ("empty-cell", 2, "relaxed", _sheet("a,s.tif,,5 kPa,0.45")),
    ("empty-cell", 2, "youngs_modulus", _sheet("a,s.tif,r.tif,,0.45")),
    ("empty-cell", 2, "poisson", _sheet("a,s.tif,r.tif,5 kPa,")),
    ("two-moduli", 2, "shear_modulus", _sheet(GOOD + ",2 kPa", head=HEAD + ",shear_modulus")),
    ("sd-alone", 2, "thickness_sd", _sheet(GOOD + ",1 um", head=HEAD + ",thickness_sd")),
    ("bare-number", 2, "youngs_modulus", _sheet("a,s.tif,r.tif,5,0.45")),
    ("bare-number", 2, "thickness", _sheet(GOOD + ",30", head=HEAD + ",thickness")),
    ("bare-number", 2, "pixel", _sheet(GOOD + ",0.2", head=HEAD + ",pixel")),
    ("wrong-unit", 2, "youngs_modulus", _sheet("a,s.tif,r.tif,5 um,0.45")),
    ("wrong-unit", 2, "youngs_modulus", _sheet("a,s.tif,r.tif,5 kpa,0.45")),
    ("wrong-unit", 2, "youngs_modulus", _sheet("a,s.tif,r.tif,5 kPa per cell,0.45")),
    ("wrong-unit", 2, "youngs_modulus", _sheet("a,s.tif,r.tif,5 Pa**9**9**9**9,0.45")),
    ("wrong-unit", 2, "youngs_modulus", _sheet("a,s.tif,r.tif,5 __import__('os'),0.45")),
    ("wrong-unit", 2, "poisson", _sheet("a,s.tif,r.tif,5 kPa,45 %")),
    (
        "two-units",
        2,
        "youngs_modulus",
        _sheet("a,s.tif,r.tif,5 Pa,0.45", head=HEAD.replace("modulus", "modulus [kPa]")),
    ),
    ("decimal-comma", 2, "youngs_modulus", _sheet('a,s.tif,r.tif,"5,5 kPa",0.45')),
    (
        "decimal-comma",
        2,
        "poisson",
        _sheet(GOOD.replace(",", ";").replace("0.45", "0,45"), head=HEAD.replace(",", ";")),
    ),
    ("decimal-comma", 2, "youngs_modulus", _sheet('a,s.tif,r.tif,"5,000 Pa",0.45')),
    ("bad-number", 2, "youngs_modulus", _sheet("a,s.tif,r.tif,soft,0.45")),
    ("bad-number", 2, "youngs_modulus", _sheet("a,s.tif,r.tif,~5 kPa,0.45")),
    ("bad-number", 2, "youngs_modulus", _sheet("a,s.tif,r.tif,nan,0.45")),
    ("bad-number", 2, "youngs_modulus", _sheet("a,s.tif,r.tif,#REF!,0.45")),
    ("bad-number", 2, "thickness", _sheet(GOOD + ",inf", head=HEAD + ",thickness")),
    ("bad-number", 2, "poisson", _sheet("a,s.tif,r.tif,5 kPa,n/a")),
    ("bad-number", 2, "bead_channel", _sheet(GOOD + ",red", head=HEAD + ",bead_channel")),
    ("bad-number", 2, "bead_channel", _sheet(GOOD + ",-1", head=HEAD + ",bead_channel")),
    ("bad-number", 2, "z", _sheet(GOOD + ",top", head=HEAD + ",z")),
    ("bad-number", 2, "z", _sheet(GOOD + ",1.5", head=HEAD + ",z")),
    ("out-of-range", 2, "poisson", _sheet("a,s.tif,r.tif,5 kPa,0.6")),
    ("out-of-range", 2, "poisson", _sheet("a,s.tif,r.tif,5 kPa,-0.1")),
    ("out-of-range", 2, "poisson", _sheet("a,s.tif,r.tif,5 kPa,45")),
    ("out-of-range", 2, "youngs_modulus", _sheet("a,s.tif,r.tif,0 kPa,0.45")),
    ("out-of-range", 2, "youngs_modulus", _sheet("a,s.tif,r.tif,-5 kPa,0.45")),
    ("out-of-range", 2, "youngs_modulus", _sheet("a,s.tif,r.tif,5 mPa,0.45")),
    ("out-of-range", 2, "youngs_modulus", _sheet("a,s.tif,r.tif,1e999 kPa,0.45")),
    ("out-of-range", 2, "pixel", _sheet(GOOD + ",0.2 m", head=HEAD + ",pixel")),
    ("out-of-range", 2, "thickness", _sheet(GOOD + ",30 m", head=HEAD + ",thickness")),
    ("out-of-range", 2, "frame_interval", _sheet(GOOD + ",0 s", head=HEAD + ",frame_interval")),
    ("bad-path", 2, "stressed", _sheet('a,"s\n.tif",r.tif,5 kPa,0.45')),
]


@pytest.mark.parametrize(("code", "row", "column", "data"), BAD_SHEETS)
def test_bad_sheet_is_refused_in_one_line(
    tmp_path: Path, code: str, row: int | None, column: str, data: str | bytes
) -> None:
    with pytest.raises(SheetError) as caught:
        _read(tmp_path, data)
    match = [p for p in caught.value.problems if (p.code, p.row, p.column) == (code, row, column)]
    assert match, [str(p) for p in caught.value.problems]
    for problem in caught.value.problems:
        assert problem.remedy
        assert "\n" not in str(problem)
        assert str(problem).isprintable()
        assert str(problem).startswith(str(tmp_path / "sheet.csv"))


def test_each_bad_sheet_says_nothing_beside_the_point(tmp_path: Path) -> None:
    for _, _, _, data in BAD_SHEETS:
        with pytest.raises(SheetError) as caught:
            _read(tmp_path, data)
        assert len(caught.value.problems) <= 2, [str(p) for p in caught.value.problems]


def test_all_problems_are_said_at_once_in_order(tmp_path: Path) -> None:
    rows = [f"f{i},s.tif,r.tif,{i},{i}" for i in range(1, 31)]
    with pytest.raises(SheetError, match="and 59 more") as caught:
        _read(tmp_path, _sheet(*rows))
    assert [(p.row, p.column) for p in caught.value.problems[:3]] == [
        (2, "youngs_modulus"),
        (2, "poisson"),
        (3, "youngs_modulus"),
    ]


def test_unknown_columns_are_copied_and_kept_apart_from_the_tables(tmp_path: Path) -> None:
    head = HEAD + ",donor,notes,passage [day]"
    sheet = _read(tmp_path, _sheet(GOOD + ",D7,ok?,3", head=head))
    assert sheet.extra_columns == ("donor", "sheet_notes", "passage [day]")
    assert sheet.rows[0].extra == {"donor": "D7", "sheet_notes": "ok?", "passage [day]": "3"}
    assert sheet.raw[0]["notes"] == "ok?"


def test_a_standard_deviation_may_be_a_percentage(tmp_path: Path) -> None:
    sheet = _read(tmp_path, _sheet(GOOD + ",10 %,0.02", head=HEAD + ",youngs_modulus_sd,poisson_sd"))
    assert sheet.rows[0].youngs_modulus_sd == 500.0
    assert sheet.rows[0].poisson_sd == 0.02


def test_rows_are_counted_as_a_spreadsheet_counts(tmp_path: Path) -> None:
    # A quoted cell with a line end is one row, a blank line is one too.
    with pytest.raises(SheetError) as caught:
        _read(
            tmp_path,
            _sheet('a,s.tif,r.tif,5 kPa,0.45,"two\nlines"', "", "b,s.tif,r.tif,5,0.45,", head=HEAD + ",remark"),
        )
    assert [p.row for p in caught.value.problems] == [4]


@pytest.mark.parametrize("what", ["folder", "nothing", "pipe"])
def test_a_sheet_that_is_no_file(tmp_path: Path, what: str) -> None:
    import os

    path = tmp_path / "sheet.csv"
    if what == "folder":
        path.mkdir()
    elif what == "pipe":
        os.mkfifo(path)
    with pytest.raises(SheetError) as caught:
        read_sheet(path)
    assert caught.value.code == ("missing-file" if what == "nothing" else "not-a-file")


@given(st.binary(max_size=400))
@settings(derandomize=True, max_examples=150, deadline=None)
def test_no_bytes_whatever_cause_another_error(tmp_path_factory: pytest.TempPathFactory, data: bytes) -> None:
    folder = tmp_path_factory.mktemp("bytes")
    with pytest.raises(TfmError):
        _read(folder, data)


CELL = st.text(st.characters(codec="utf-8", exclude_characters="\x00"), max_size=12)


@given(st.lists(st.lists(CELL, min_size=5, max_size=5), min_size=1, max_size=4), st.sampled_from(",;\t"))
@settings(derandomize=True, max_examples=150, deadline=None)
def test_any_cells_are_read_or_refused_in_words(
    tmp_path_factory: pytest.TempPathFactory, rows: list[list[str]], delimiter: str
) -> None:
    stream = io.StringIO(newline="")
    csv.writer(stream, delimiter=delimiter).writerows([HEAD.split(","), *rows])
    folder = tmp_path_factory.mktemp("cells")
    problems: tuple[Problem, ...] = ()
    rows_read: tuple[RowValues, ...] = ()
    try:
        rows_read = _read(folder, stream.getvalue()).rows
    except SheetError as error:
        problems = error.problems
    assert bool(problems) != bool(rows_read)
    assert all(str(p).isprintable() and p.remedy and p.code for p in problems)
    assert all(row.field and row.youngs_modulus for row in rows_read)


@given(
    value=st.floats(1e-2, 1e3),
    unit=st.sampled_from([("Pa", 1.0), ("kPa", 1e3), ("MPa", 1e6), ("N/m**2", 1.0)]),
    in_header=st.booleans(),
    name=st.text(string.ascii_letters + string.digits + "-_ .", min_size=1, max_size=30).filter(str.strip),
)
@settings(derandomize=True, max_examples=80, deadline=None)
def test_a_number_with_its_unit_comes_out_in_si(
    tmp_path_factory: pytest.TempPathFactory, value: float, unit: tuple[str, float], in_header: bool, name: str
) -> None:
    word, factor = unit
    if value * factor < 1.0:
        return
    head = HEAD.replace("youngs_modulus", f"youngs_modulus [{word}]") if in_header else HEAD
    cell = repr(value) if in_header else f"{value!r} {word}"
    sheet = _read(tmp_path_factory.mktemp("units"), _sheet(f"{name},s.tif,r.tif,{cell},0.45", head=head))
    modulus = sheet.rows[0].youngs_modulus
    assert modulus is not None
    assert math.isclose(modulus, value * factor, rel_tol=1e-12)
    assert sheet.rows[0].field == name.strip()
