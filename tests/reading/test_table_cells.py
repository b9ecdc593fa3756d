"""Cells of tables: numbers, places, delimiters, and damaged workbooks."""

import datetime
import io
import random

import openpyxl
import pytest
from hypothesis import given
from hypothesis import strategies as st
from openpyxl.worksheet.formula import ArrayFormula, DataTableFormula

from glidefit.errors import InputError
from glidefit.reading.table_cells import (
    Cells,
    csv_header,
    formula_errors,
    has_decimal_comma,
    number,
    read_csv,
    read_workbook,
)


@given(value=st.floats(allow_nan=False, allow_infinity=False))
def test_every_finite_number_comes_back_from_its_text(value):
    assert number(repr(value)) == value
    assert number(f" {value:+.17g} ") == value


@pytest.mark.parametrize(
    "text", ["5", "+5.", " 5.0 ", "\u200b5\ufeff", "0.5e1", "50E-1", "\u00a05"]
)
def test_forms_of_five(text):
    assert number(text) == 5


@pytest.mark.parametrize(
    "text", ["", " ", ".", "-", "5 µm", "0,5", "1_0", "nan", "inf", "1e999", "٥", "0x5", "1e", "5,"]
)
def test_what_is_no_number(text):
    assert number(text) is None


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("0,5", True),
        (" -1,25 ", True),
        (",5", True),
        ("1,2,3", False),
        ("5,", False),
        ("a,5", False),
        ("0.5", False),
        ("", False),
    ],
)
def test_a_decimal_comma(text, expected):
    assert has_decimal_comma(text) is expected


def cells(*, delimiter, header=("a", "")):
    return Cells(
        file="f", header=header, header_row=1, row_numbers=(), rows=(), delimiter=delimiter
    )


@pytest.mark.parametrize(
    ("column", "letters"),
    [(0, "A"), (25, "Z"), (26, "AA"), (51, "AZ"), (52, "BA"), (701, "ZZ"), (702, "AAA")],
)
def test_columns_of_a_workbook_are_letters(column, letters):
    assert openpyxl.utils.get_column_letter(column + 1) == letters
    assert cells(delimiter="").place(7, column) == f"f, cell {letters}7"


def test_columns_of_a_csv_file_are_names_or_numbers():
    places = [cells(delimiter=",").place(7, column) for column in range(3)]
    assert places == ["f, row 7, column 'a'", "f, row 7, column 2", "f, row 7, column 3"]


@pytest.mark.parametrize(
    ("header", "delimiter"),
    [
        ("track,frame", ","),
        ("track;frame", ";"),
        ("track", ","),
        ("one,two;three", ","),
        ("track;frame;a,b,c,d,e", ";"),
        ('"track";"a,b,c"', ";"),
        ('"track, all",frame', ","),
        ("a;b;c;track,frame", ","),
    ],
)
def test_the_delimiter_is_the_one_that_finds_known_names(tmp_path, header, delimiter):
    path = tmp_path / "t.csv"
    path.write_text(f"{header}\n")
    found = read_csv(path, called="t.csv", expected="a table", known=["track", "frame"])
    assert found.delimiter == delimiter


@pytest.mark.parametrize("target", ["gone.csv", "a.csv"])
def test_a_link_that_leads_nowhere(tmp_path, target):
    (tmp_path / "a.csv").symlink_to(tmp_path / target)
    with pytest.raises(InputError) as caught:
        read_csv(tmp_path / "a.csv", called="a.csv", expected="a table", known=["day"])
    assert str(caught.value) == (
        f"a.csv: there is no such file in {tmp_path}; expected a table. "
        "It is a link that leads to no file; correct the link."
    )


def test_the_header_alone_is_read_of_a_long_file(tmp_path):
    path = tmp_path / "a.csv"
    path.write_bytes(b"\xef\xbb\xbf\n day ; b\n" + "µ;1\n".encode() * 30_000 + b"\xff")
    read = csv_header(path, called="a.csv", expected="a table", known=["day"])
    assert read == ("day", "b")
    path.write_bytes(b" \n")
    with pytest.raises(InputError, match="the file is empty; expected a table"):
        csv_header(path, called="a.csv", expected="a table", known=["day"])


def test_a_formula_that_fills_a_range_is_one(tmp_path):
    book = openpyxl.Workbook()
    book.active.append(["recording"])
    book.active["A2"] = ArrayFormula("A2:A3", "=B2:B3*2")
    book.active["A4"] = DataTableFormula("A4:A5")
    book.active["A6"] = datetime.timedelta(hours=1, minutes=5)
    book.save(tmp_path / "t.xlsx")
    found = read_workbook(tmp_path / "t.xlsx", called="t.xlsx", expected="a table")
    assert found.rows == [["=B2:B3*2"], ["={…}"], ["1:05:00"]]
    assert [str(error).split(";")[0] for error in formula_errors(found)] == [
        't.xlsx, cell A2: holds the formula "=B2:B3*2"',
        't.xlsx, cell A4: holds the formula "={…}"',
    ]


def test_a_byte_without_a_sign_is_named_by_its_number(tmp_path):
    (tmp_path / "t.csv").write_bytes(b"recording\na\x81.tif\n")
    with pytest.raises(InputError) as caught:
        read_csv(tmp_path / "t.csv", called="t.csv", expected="a table", known=["recording"])
    assert str(caught.value) == (
        "t.csv: line 2 holds the byte 0x81, which is not UTF-8; expected text in UTF-8. "
        "In the spreadsheet program, save it as 'CSV UTF-8'."
    )


def workbook():
    book = openpyxl.Workbook()
    book.active.append(["recording", "condition"])
    book.active.append(["a.tif", "k"])
    data = io.BytesIO()
    book.save(data)
    return data.getvalue()


def test_a_damaged_workbook_is_read_or_refused_in_words(tmp_path):
    whole = workbook()
    path = tmp_path / "assay.xlsx"
    rng = random.Random(5)
    refused = 0
    for i in range(300):
        data = bytearray(whole)
        if i % 2:
            del data[rng.randrange(1, len(data)) :]
        else:
            for _ in range(10):
                data[rng.randrange(len(data))] = rng.randrange(256)
        path.write_bytes(data)
        try:
            read_workbook(path, called="assay.xlsx", expected="an assay sheet")
        except InputError as error:
            refused += 1
            assert str(error) == (  # noqa: PT017
                "assay.xlsx: the file is not a readable XLSX workbook (damaged, or locked with a "
                "password); expected an assay sheet. "
                "Open it in the spreadsheet program and save it anew as XLSX."
            )
    assert refused > 200
