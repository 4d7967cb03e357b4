"""Exports reopen with the same numbers, hostile texts stay inert, bad uploads are refused.

Kinds of check: "contract" = what stands in a file reopened by another reader (csv, json,
openpyxl, pandas); texts that start a formula: OWASP, CSV Injection (from memory).
"""

from __future__ import annotations

import csv
import io
import json
import zipfile

import numpy as np
import pandas as pd
import pytest

from converter_calc.balance.heats import heats_from_dict
from converter_calc.basis.errors import InputError
from converter_calc.planning.plan import plan
from converter_calc.reporting import exports, tables, uploads
from converter_calc.reporting.uploads import parse_table

from .conftest import DEMO

openpyxl = pytest.importorskip("openpyxl", reason="openpyxl is needed for workbooks")

HOSTILE = ["=1+1", "+cmd|'/c calc'!A1", "-2+3", "@SUM(A1)", "\t=1", "\r=1", "\n=1", "＝1"]


@pytest.fixture(scope="module")
def outcome():
    return plan(DEMO / "ordinary_low_carbon.toml")


@pytest.fixture
def mixed():
    return pd.DataFrame(
        {"name": [*HOSTILE, "plain"], "x": [-1.5, 1 / 3, np.nan, 1e-300, 0, 1, 2, 3, np.inf],
         "=bad": [True, False] * 4 + [None]}
    )  # fmt: skip


def test_workbook_reopens_with_the_same_numbers(outcome):
    """contract: every table of the heat; XLSX holds 16 digits."""
    book = openpyxl.load_workbook(io.BytesIO(exports.heat_xlsx(outcome)))
    sheets = exports.heat_sheets(outcome)
    assert book.sheetnames == list(sheets)
    assert "inputs used" in book.sheetnames
    for name, frame in sheets.items():
        rows = list(book[name].iter_rows(values_only=True))
        assert list(rows[0]) == list(frame.columns)
        assert len(rows) == len(frame) + 1
        for cells, given in zip(rows[1:], frame.itertuples(index=False), strict=True):
            for cell, value in zip(cells, given, strict=True):
                if isinstance(value, str):
                    assert (cell or "") == value
                else:
                    assert cell is None or isinstance(cell, int | float)
                    if np.isfinite(value):
                        assert cell == pytest.approx(value, rel=1e-15, abs=0.0)
                    else:
                        assert cell is None


def test_hostile_cells_stay_inert_in_a_workbook(mixed):
    """contract: no formula anywhere, neither as openpyxl sees it nor in the XML."""
    content = exports.xlsx_bytes({"=1+1": mixed, "a/b:c*[d]": mixed, "A/B:C*[D]": mixed})
    book = openpyxl.load_workbook(io.BytesIO(content))
    assert len(book.sheetnames) == len({name.casefold() for name in book.sheetnames}) == 3
    for sheet in book:
        for row in sheet.iter_rows():
            assert all(cell.data_type != "f" for cell in row)
        texts = [sheet.cell(k, 1).value for k in range(2, 10)]
        assert texts == ["'" + t.replace("\r", "\n") for t in HOSTILE]  # XML reads CR as LF
        assert sheet["C1"].value == "'=bad"
        assert sheet["B2"].value == -1.5
        assert sheet["B3"].value == 1 / 3
        assert sheet["B4"].value is None
        assert sheet["B10"].value is None
        assert sheet["C2"].value is True
    with zipfile.ZipFile(io.BytesIO(content)) as parts:
        texts = [parts.read(n) for n in parts.namelist() if n.startswith("xl/worksheets/")]
    assert texts
    assert all(b"<f>" not in text and b"<f " not in text for text in texts)


def test_control_characters_do_not_break_a_workbook():
    """contract: what XML cannot hold is left out; a long text is cut at the format's limit."""
    frame = pd.DataFrame({"text": ["a\x00b\x0bc", "\x01=1", "x" * 40000]})
    book = openpyxl.load_workbook(io.BytesIO(exports.xlsx_bytes({"t": frame})))
    cells = [row[0] for row in book["t"].iter_rows(min_row=2, values_only=True)]
    assert cells[0] == "abc"
    assert cells[1] == "'=1"
    assert len(cells[2]) == 32767
    assert exports.neutralised("\ud800=y") == "'=y"


def test_csv_reopens_with_the_same_numbers_and_inert_texts(mixed):
    """contract: read back by the csv module and by pandas."""
    text = exports.csv_text(mixed)
    rows = list(csv.reader(io.StringIO(text, newline="")))
    assert rows[0] == ["name", "x", "'=bad"]
    assert [row[0] for row in rows[1:-1]] == ["'" + cell for cell in HOSTILE]
    assert rows[-1][:2] == ["plain", ""]
    back = pd.read_csv(io.StringIO(text))
    np.testing.assert_array_equal(back["x"][:8], mixed["x"][:8])
    assert rows[1][1] == "-1.5"  # a negative number is no text


def test_results_table_goes_out_and_comes_back(outcome):
    """contract: results of a table of heats, by way of CSV."""
    frame = pd.DataFrame(outcome.columns())
    back = pd.read_csv(io.StringIO(exports.csv_text(frame)))
    numbers = frame.select_dtypes("number").columns
    np.testing.assert_array_equal(back[numbers].to_numpy(float), frame[numbers].to_numpy(float))


def test_json_holds_document_and_inputs(outcome, mixed):
    """contract: strict JSON, same numbers, NaN as null, texts untouched."""
    document = json.loads(exports.heat_json(outcome), parse_constant=pytest.fail)
    plain = outcome.document()
    assert document["recipe"] == plain["recipe"]
    assert document["end_point"] == json.loads(json.dumps(plain["end_point"]))
    assert document["inputs"]["hot_metal.mass_kg"] == {"value": 185000.0, "unit": "kg"}
    rows = json.loads(exports.json_text(mixed), parse_constant=pytest.fail)
    assert rows[2]["x"] is None
    assert rows[0] == {"name": "=1+1", "x": -1.5, "=bad": True}


def test_hostile_names_of_a_heat_reach_no_formula(plain_heat):
    """contract: from the user's own file to the workbook."""
    plain_heat["heat_id"] = "=HYPERLINK(1)"
    content = exports.heat_xlsx(plan(plain_heat))
    used = openpyxl.load_workbook(io.BytesIO(content))["inputs used"]
    assert used["B2"].value == "'=HYPERLINK(1)"
    assert used["B2"].data_type == "s"


def test_comma_table_is_read():
    """contract: point as decimal mark, blanks missing, texts kept, index = row of the file."""
    frame = parse_table(b"\xef\xbb\xbfheat_id, hot_metal_kg,hm_Si_pct,grade\n"
                        b"007,180000,0.45,S235JR\n\n8,1.8e5,,=1+1\n")  # fmt: skip
    assert frame.index.tolist() == [2, 4]
    assert frame["heat_id"].tolist() == ["007", "8"]
    assert frame["hot_metal_kg"].tolist() == [180000.0, 180000.0]
    assert np.isnan(frame["hm_Si_pct"].iloc[1])
    assert frame["grade"].tolist() == ["S235JR", "=1+1"]
    assert frame.attrs["read_as"] == "CSV, comma, decimal point, 2 rows"


@pytest.mark.parametrize("separator", [";", "\t"])
def test_decimal_comma_is_read_with_semicolon_or_tab(separator):
    """contract: 1350,5 is 1350.5, never 13505."""
    text = separator.join(["heat_id", "hot_metal_temp_C", "hm_Si_pct"]) + "\r\n"
    text += separator.join(["a", "1350,5", "0,45"]) + "\r\n"
    frame = parse_table(text.encode())
    assert frame["hot_metal_temp_C"].tolist() == [1350.5]
    assert frame["hm_Si_pct"].tolist() == [0.45]
    assert "decimal comma" in frame.attrs["read_as"]
    pointed = parse_table(b"heat_id;hm_Si_pct\na;0.45\n")
    assert pointed["hm_Si_pct"].tolist() == [0.45]


@pytest.mark.parametrize(
    ("content", "message"),
    [
        (b"", "empty"),
        (b" \n\n", "empty"),
        (b"heat_id,hm_Si_pct\n", "no heats"),
        (b"heat_id,hm_Si_pct\na,0,45\n", "decimal comma needs ;"),
        (b"heat_id;hm_Si_pct;hm_C_pct\na;0,45;4.5\n", "decimal comma and decimal point"),
        (b"heat_id;hot_metal_kg\na;185.000,5\n", "two marks"),
        (b"heat_id,heat_id\na,b\n", "column twice"),
        (b"heat_id,,x\na,b,c\n", "column 2 has no heading"),
        (b"heat_id\n\xff\xfe\n", "UTF-8"),
        (b"heat_id\na\x00b\n", "zero bytes"),
        (b'heat_id,x\n"a,1\n', "cannot be read"),
        (b"heat_id\n" + b"x" * 2000 + b"\n", "2000 signs"),
        (b"heat_id\n" + b"x\n" * 20001, "more than 20000 rows"),
        (",".join(f"c{k}" for k in range(400)).encode() + b"\n1\n", "more than 300 columns"),
        (b"x" * 5_000_001, "5 MB are allowed"),
        (b"\xd0\xcf\x11\xe0 old", "old or a locked"),
        (b"PK\x03\x04 cut off", "no workbook"),
        (b"heat_id\n" + b"y" * 200_000, "signs|cannot be read"),
    ],
    ids=lambda x: x if isinstance(x, str) else "",
)
def test_broken_tables_are_refused_in_words(content, message):
    """contract: InputError with the file's name and the trouble, never another error."""
    with pytest.raises(InputError, match=message) as caught:
        parse_table(content, "my\nheats.csv")
    assert all("\n" not in fault.line() for fault in caught.value.faults)


def workbook(rows) -> bytes:
    book = openpyxl.Workbook()
    for row in rows:
        book.active.append(row)
    file = io.BytesIO()
    book.save(file)
    return file.getvalue()


def test_workbook_is_read():
    """contract: numbers as numbers, a number in an id column as text, blank rows skipped."""
    content = workbook([["heat_id", "hot_metal_kg", "hm_Si_pct"], [7, 180000, 0.45], [],
                        ["b", 1.9e5, None]])  # fmt: skip
    frame = parse_table(content, "heats.bin")
    assert frame["heat_id"].tolist() == ["7", "b"]
    assert frame["hot_metal_kg"].tolist() == [180000.0, 190000.0]
    assert frame.index.tolist() == [2, 4]
    assert frame.attrs["read_as"] == "XLSX, first sheet, 2 rows"


def test_formula_in_an_uploaded_workbook_is_not_run():
    """contract: a formula without a stored value is a blank cell."""
    frame = parse_table(workbook([["heat_id", "hm_Si_pct"], ["a", "=1+1"]]))
    assert frame["hm_Si_pct"].isna().all()


def repacked(change) -> bytes:
    """A workbook with some parts changed."""
    source = zipfile.ZipFile(io.BytesIO(workbook([["heat_id"], ["a"]])))
    file = io.BytesIO()
    with zipfile.ZipFile(file, "w", zipfile.ZIP_DEFLATED) as target:
        for name in source.namelist():
            target.writestr(name, change(name, source.read(name)))
    return file.getvalue()


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (lambda n, x: b'<!DOCTYPE a [<!ENTITY b "c">]>' + x if "sheet1" in n else x, "entities"),
        (lambda n, x: (b'<!DOCTYPE a [<!ENTITY b "c">]>' + x).decode().encode("utf-16")
         if "sheet1" in n else x, "entities"),
        (lambda n, x: b"0" * 70_000_000 if "sheet1" in n else x, "unpacks to"),
        (lambda n, x: b"no xml" if "sheet1" in n else x, "no workbook"),
        (lambda n, x: b"<workbook/>" if n == "xl/workbook.xml" else x, "no workbook"),
        (lambda n, x: b"" if n == "[Content_Types].xml" else x, "no workbook"),
    ],
)  # fmt: skip
def test_hostile_workbooks_are_refused(change, message):
    """contract: XML entities, a zip that unpacks to much, broken parts."""
    with pytest.raises(InputError, match=message):
        parse_table(repacked(change), "bad.xlsx")


def test_workbook_with_a_far_row_is_refused_quickly():
    """contract: one cell in row 1 000 000 does not make a million rows."""

    def far(name, content):
        if "sheet1" not in name:
            return content
        row = b'<row r="1000000"><c r="A1000000"><v>1</v></c></row></sheetData>'
        return content.replace(b"</sheetData>", row)

    frame = parse_table(repacked(far), "far.xlsx")
    assert len(frame) <= 2


def test_uploaded_rows_are_named_in_faults():
    """contract: the planner names the row of the file."""
    from converter_calc.balance.heats import heats_from_frame

    frame = parse_table(b"heat_id,hot_metal_kg,hot_metal_temp_C\na,180000,1340\n\nb,=1+1,1340\n")
    with pytest.raises(InputError, match=r"hot_metal_kg: .*'=1\+1'.*row 4"):
        heats_from_frame(frame)


def test_limits_are_those_of_the_page():
    """contract: the server takes 5 MB."""
    assert uploads.MOST_BYTES == 5_000_000


def test_exported_inputs_are_those_of_the_heat(plain_heat):
    """contract: the table can be told apart from that of another heat by what differs."""
    one = tables.inputs_table(heats_from_dict(plain_heat))
    plain_heat["hot_metal"]["Si_pct"] = 0.7
    other = tables.inputs_table(heats_from_dict(plain_heat))
    changed = one.loc[one["value"].astype(str) != other["value"].astype(str), "field"].tolist()
    assert changed == ["hot_metal.Si_pct", "hot_metal.Fe_pct"]
