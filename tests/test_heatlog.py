"""The heat log: read, refused in words, written, read again.

Kinds of check: "contract" = columns, messages, nothing half taken; "other reader" = csv module,
pandas, pyarrow and openpyxl read what was written; numbers against Python's own float(), which
rounds correctly (IEEE 754), and times against datetime.fromisoformat (ISO 8601).
"""

from __future__ import annotations

import csv
import datetime as dt
import io
import zipfile

import numpy as np
import openpyxl
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from converter_calc.balance.heats import heats_from_frame
from converter_calc.balance.schema import parameters
from converter_calc.basis.errors import InputError
from converter_calc.basis.inert_text import guarded, unguarded
from converter_calc.heatlog import sources
from converter_calc.heatlog.columns import (
    find_column,
    fixed_columns,
    in_order,
    material_names,
    unknown_column,
)
from converter_calc.heatlog.reading import MOST_FAULTS, iter_log, read_log
from converter_calc.heatlog.writing import write_log
from tests.conftest import DEMO

#: The format as it was agreed, in its order; material columns stand after hm_Cr_pct.
AGREED = """heat_id tapped_at vessel grade hot_metal_kg hot_metal_temp_C hm_C_pct hm_Si_pct
hm_Mn_pct hm_P_pct hm_S_pct hm_Ti_pct hm_V_pct hm_Cr_pct oxygen_Nm3 wait_min blow_min aim_temp_C
aim_C_pct aim_P_pct end_temp_C end_C_pct end_Mn_pct end_P_pct end_S_pct end_O_ppm slag_CaO_pct
slag_SiO2_pct slag_MgO_pct slag_FeO_pct slag_MnO_pct slag_P2O5_pct slag_Al2O3_pct
steel_kg""".split()  # noqa: SIM905
ENDINGS = (".csv", ".parquet", ".xlsx")

COMMA = """heat_id,tapped_at,vessel,grade,hot_metal_kg,hm_C_pct,burnt_lime_kg,end_temp_C,end_P_pct
A1,2026-03-01T05:12:00+02:00,2,S235JR,180000,4.5,8000,1650.5,0.012
A2,2026-03-01,2,,181000.25,4.6,,,
"""


def log_file(tmp_path, text, name="log.csv", encoding="utf-8"):
    path = tmp_path / name
    path.write_bytes(text if isinstance(text, bytes) else text.encode(encoding))
    return path


def reasons(read):
    return {(line.row, line.field): line.reason for line in read.refused.itertuples()}


def test_columns_are_those_agreed():
    """contract."""
    assert list(fixed_columns()) == AGREED
    shuffled = [*reversed(AGREED), "heavy_scrap_kg"]
    ordered = in_order(shuffled)
    assert [name for name in ordered if name != "heavy_scrap_kg"] == AGREED
    assert ordered.index("heavy_scrap_kg") == ordered.index("hm_Cr_pct") + 1


def test_bounds_of_inputs_are_those_of_the_schema():
    """contract: no second copy of a bound; every number has two bounds and a source."""
    for name, column in fixed_columns().items():
        if column.kind == "number":
            assert np.isfinite([column.low, column.high]).all(), name
            assert column.low < column.high
            assert column.source
        if column.group == "input":
            assert (column.low, column.high) == (parameters()[name].low, parameters()[name].high)


def test_further_columns():
    """contract: elements, oxides, flat inputs and shop materials; no pins, no choices."""
    own = material_names(DEMO / "shop.toml")
    assert "ladle_skulls" in own
    assert "ladle_skulls" not in material_names()
    assert find_column("ladle_skulls_kg", own).unit == "kg"
    for name in ("hm_Nb_pct", "end_Cu_pct", "slag_TiO2_pct", "stirring_gas_Nm3", "aim_S_pct"):
        assert find_column(name, ()) is not None, name
    for name in ("pin_L_P", "scrap_kg", "hm_Xx_pct", "end_Qq_pct", "lime", "ladle_skulls_kg"):
        assert find_column(name, ()) is None, name
    assert "pin.L_P" in unknown_column("pin_L_P", ())
    assert "nearest: hm_Si_pct" in unknown_column("hm_si_pc", ())


def test_comma_log_is_read(tmp_path):
    """contract: blanks missing, times in UTC, texts kept, index = row of the file."""
    read = read_log(log_file(tmp_path, COMMA))
    frame = read.frame
    assert not len(read.refused)
    assert frame.index.tolist() == [2, 3]
    assert frame["heat_id"].tolist() == ["A1", "A2"]
    assert frame["vessel"].tolist() == ["2", "2"]
    assert frame["grade"].tolist() == ["S235JR", None]
    assert frame["tapped_at"].dtype == "datetime64[us]"
    assert frame["tapped_at"].tolist() == [
        pd.Timestamp("2026-03-01T03:12:00"), pd.Timestamp("2026-03-01T00:00:00")
    ]  # fmt: skip
    assert frame["hot_metal_kg"].tolist() == [180000.0, 181000.25]
    assert frame["burnt_lime_kg"].iloc[0] == 8000.0
    assert np.isnan(frame[["burnt_lime_kg", "end_temp_C", "end_P_pct"]].iloc[1]).all()


@pytest.mark.parametrize("separator", [";", "\t"])
@pytest.mark.parametrize("encoding", ["utf-8-sig", "utf-16", "utf-8"])
def test_separators_and_marks_of_encoding(tmp_path, separator, encoding):
    """contract: the same log, however a spreadsheet saved it."""
    text = COMMA.replace(",", separator).replace("\n", "\r\n")
    read = read_log(log_file(tmp_path, text, encoding=encoding))
    plain = read_log(log_file(tmp_path, COMMA, "plain.csv"))
    pd.testing.assert_frame_equal(read.frame, plain.frame)


def test_decimal_comma_is_refused_unless_it_is_stated(tmp_path):
    """contract: 1650,5 is never guessed; with the mark stated it is 1650.5 and a point is not."""
    text = "heat_id;end_temp_C;end_C_pct\na;1650,5;0,04\nb;1.650,5;\nc;1660.5;0,05\n"
    path = log_file(tmp_path, text)
    pointed = read_log(path)
    assert pointed.frame.empty
    assert "point as decimal mark" in reasons(pointed)[2, "end_temp_C"]
    assert "no mark for thousands" in reasons(pointed)[3, "end_temp_C"]
    comma = read_log(path, decimal_mark=",")
    assert comma.frame["end_temp_C"].tolist() == [1650.5]
    assert comma.frame["end_C_pct"].tolist() == [0.04]
    assert comma.refused["row"].tolist() == [3, 4]
    with pytest.raises(InputError, match="point or a comma"):
        read_log(path, decimal_mark=";")


@pytest.mark.parametrize(
    ("cell", "reason"),
    [
        ("NaN", "leave a cell blank"),
        ("n/a", "leave a cell blank"),
        ("-", "leave a cell blank"),
        ("#DIV/0!", "leave a cell blank"),
        ("1e400", "finite"),
        ("-inf", "finite"),
        ("9" * 400, "finite"),
        ("1_650", "must be a number"),
        ("0x672", "must be a number"),
        ("1650 C", "must be a number"),
        ("１６５０", "must be a number"),
        ("=1650", "must be a number"),
        ("TRUE", "must be a number"),
        ("1 650", "must be a number"),
        ("1\x00650", "must be a number"),
        ("😀", "must be a number"),
        ("1,650.5", "no mark for thousands"),
        ("1650,5", "no mark for thousands"),
        ("0", "leave a cell blank"),
        ("165", "must be 1400 to 1850"),
        ("1928.5", "is it in K"),
        ("3002", "is it in °F"),
        ("-1650", "must not be negative"),
    ],
)
def test_a_cell_that_is_no_such_number_refuses_its_row(tmp_path, cell, reason):
    """contract: only that row goes; the reason says what is wrong. By CSV and by DataFrame."""
    text = f'heat_id,end_temp_C,end_C_pct\ngood,1650,0.04\nbad,"{cell}",0.04\nlast,1651,0.05\n'
    read = read_log(log_file(tmp_path, text))
    assert read.frame["heat_id"].tolist() == ["good", "last"]
    assert read.refused["row"].tolist() == [3]
    line = read.refused.iloc[0]
    assert (line["heat_id"], line["field"]) == ("bad", "end_temp_C")
    assert reason in line["reason"]
    assert line["given"]
    table = pd.DataFrame({"heat_id": ["bad"], "end_temp_C": [cell]})
    assert reason in read_log(table).refused["reason"].iloc[0]


@pytest.mark.parametrize(
    "cell", [True, 10**400, float("inf"), [1], {"a": 1}, dt.date(2026, 1, 1), b"1650", 1650j]
)
def test_python_values_that_are_no_number(cell):
    """contract: a DataFrame may hold anything."""
    table = pd.DataFrame({"heat_id": ["a"], "end_temp_C": pd.Series([cell], dtype=object)})
    read = read_log(table)
    assert read.frame.empty
    assert read.refused["field"].tolist() == ["end_temp_C"]


@pytest.mark.parametrize(
    ("cell", "reason"),
    [
        ("2026-02-30T03:04:05Z", "calendar"),
        ("2026-02-29", "calendar"),
        ("2026-13-01", "calendar"),
        ("2026-03-01T24:30:00", "calendar"),
        ("2026-03-01T05:60", "calendar"),
        ("01.03.2026 05:12", "ISO 8601"),
        ("03/01/2026", "ISO 8601"),
        ("46082.5", "ISO 8601"),
        ("now", "ISO 8601"),
        ("20260301", "ISO 8601"),
        ("2026", "ISO 8601"),
        ("1926-03-01", "1950"),
        ("2126-03-01", "2100"),
    ],
)
def test_impossible_times_are_refused(tmp_path, cell, reason):
    """contract: no time is guessed."""
    read = read_log(log_file(tmp_path, f"heat_id,tapped_at\na,{cell}\nb,2026-03-01\n"))
    assert read.frame["heat_id"].tolist() == ["b"]
    assert reason in reasons(read)[2, "tapped_at"]


@given(
    moment=st.datetimes(dt.datetime(1951, 1, 1), dt.datetime(2099, 1, 1)),
    minutes=st.integers(-14 * 60, 14 * 60),
    mark=st.sampled_from("T "),
)
@settings(max_examples=50, deadline=None)
def test_times_are_those_of_the_standard_library(moment, minutes, mark):
    """ISO 8601 as datetime.fromisoformat reads it."""
    zone = dt.timezone(dt.timedelta(minutes=minutes))
    text = moment.replace(tzinfo=zone).isoformat(sep=mark)
    read = read_log(pd.DataFrame({"heat_id": ["a"], "tapped_at": [text]}))
    expected = dt.datetime.fromisoformat(text).astimezone(dt.UTC).replace(tzinfo=None)
    assert read.frame["tapped_at"].iloc[0].to_pydatetime() == expected


@given(st.lists(st.floats(0.01, 3.0), min_size=1, max_size=20), st.sampled_from("rgef"))
@settings(max_examples=50, deadline=None)
def test_numbers_are_rounded_as_python_does(numbers, form):
    """IEEE 754: float() rounds correctly; the text has up to 25 digits."""
    texts = [repr(x) if form == "r" else f"{x:.25{form}}" for x in numbers]
    ids = [str(k) for k in range(len(texts))]
    read = read_log(pd.DataFrame({"heat_id": ids, "end_C_pct": texts}))
    assert read.frame["end_C_pct"].tolist() == [float(text) for text in texts]


def test_heats_that_come_twice(tmp_path):
    """contract: the first good row stays; a refused row does not take the name."""
    text = "heat_id,end_temp_C\na,16500\na,1650\na,1651\n b ,1652\nb,1653\n,1654\n,\n"
    read = read_log(log_file(tmp_path, text))
    assert read.frame["heat_id"].tolist() == ["a", "b"]
    assert read.frame["end_temp_C"].tolist() == [1650.0, 1652.0]
    assert reasons(read)[4, "heat_id"] == "stands in row 3 already"
    assert reasons(read)[6, "heat_id"] == "stands in row 5 already"
    assert "needs its name" in reasons(read)[7, "heat_id"]
    assert read.rows_refused == 4  # the empty row is no heat and no fault


def test_rows_of_another_width(tmp_path):
    """contract: refused with their row number, blank and quoted lines counted as rows."""
    text = 'heat_id,grade,end_C_pct\na,x,0,04\n\nb,"x\ny",0.04\nc\nd,x,0.05\n'
    read = read_log(log_file(tmp_path, text))
    assert read.frame["heat_id"].tolist() == ["d"]
    assert read.frame.index.tolist() == [6]
    found = reasons(read)
    assert "write the decimal mark as a point" in found[2, "row"]
    assert "control character" in found[4, "grade"]
    assert "has 1 cells, the heading has 3" in found[5, "row"]
    open_quote = read_log(log_file(tmp_path, 'heat_id,end_C_pct\na,0.04\n"b,0.05\nc,0.06\n'))
    assert open_quote.frame["heat_id"].tolist() == ["a"]
    assert "quotation mark" in open_quote.refused["reason"].iloc[0]


def test_analyses_that_contradict_themselves():
    """contract: sums above 100 %, and hot metal that is none."""
    table = pd.DataFrame(
        {
            "heat_id": list("abcd"),
            "hm_C_pct": [4.5, 6.0, 4.5, 4.5],
            "hm_Mn_pct": [0.3, 10.0, 0.3, 0.3],
            "hm_Cr_pct": [0.1, 10.0, 0.1, 0.1],
            "hm_Nb_pct": [0.0, 10.0, 0.0, 0.0],
            "hm_Fe_pct": [np.nan, np.nan, np.nan, 93.0],
            "slag_CaO_pct": [50.0, 50.0, 70.0, 50.0],
            "slag_FeO_pct": [30.0, 30.0, 40.0, 30.0],
        }
    )
    read = read_log(table)
    assert read.frame["heat_id"].tolist() == ["a"]
    found = reasons(read)
    assert "leaves 64 % iron" in found[1, "hm_C_pct"]
    assert "adds up to 110 %" in found[2, "slag_CaO_pct"]
    assert "adds up to 97.9 % only" in found[3, "hm_Fe_pct"]


def test_what_is_read_can_be_predicted():
    """contract: the frame goes into a table of heats as it is."""
    row = {"heat_id": "a", "hot_metal_temp_C": 1340.0, "hm_C_pct": 4.4, "hot_metal_kg": 180e3,
           "ladle_skulls_kg": 2000.0, "end_temp_C": 1650.0, "tapped_at": "2026-03-01"}  # fmt: skip
    read = read_log(pd.DataFrame([row]), DEMO / "shop.toml")
    heats = heats_from_frame(read.frame, DEMO / "shop.toml")
    assert heats.masses_kg["ladle_skulls"].tolist() == [2000.0]
    with pytest.raises(InputError, match="ladle_skulls_kg"):
        read_log(pd.DataFrame([row]))
    assert len(read_log(pd.DataFrame([row]), materials=["ladle_skulls"]).frame) == 1


@pytest.mark.parametrize(
    ("content", "message"),
    [
        (b"", "is empty"),
        (b"\xef\xbb\xbf \n", "is empty"),
        (b"heat_id,heat_id\na,b\n", "column twice"),
        (b"heat_id,,end_C_pct\na,b,0.04\n", "column 2 has no heading"),
        (b"grade,end_C_pct\nx,0.04\n", "no such column"),
        (b"heat_id,hm_Si_pc,foo_kg\na,0.4,1\n", "hm_Si_pc: unknown column; nearest: hm_Si_pct"),
        (b"heat_id,hm_Si_pc,foo_kg\na,0.4,1\n", "foo_kg: unknown column: no material"),
        (b"heat_id,grade\na,\xff\xfe\xe4\n", "UTF-8"),
        (b"h\x00eat\n\x01", "no CSV, Parquet or XLSX"),
        (b"heat_id," + b"x," * 500 + b"\n", "columns; 400 are allowed"),
        (b"\xd0\xcf\x11\xe0 old", "old or a locked"),
        (b"\x1f\x8b gz", "gzip"),
        (b"%PDF-1.4", "PDF"),
        (b"SQLite format 3\x00", "is a database"),
        (b"PK\x03\x04 cut off", "no workbook"),
        (b"PAR1 cut off", "no Parquet"),
        (b"PAR1", "no Parquet"),
        (b"x" * (1 << 20), "no end of line"),
        (b'heat_id,"grade\na,b\n', "heading cannot be read"),
    ],
    ids=lambda x: x[:20] if isinstance(x, str) else "",
)
def test_broken_files_are_refused_in_words(tmp_path, content, message):
    """contract: InputError, one line a fault, never another error."""
    with pytest.raises(InputError, match=message) as caught:
        read_log(log_file(tmp_path, content))
    assert all("\n" not in fault.line() for fault in caught.value.faults)


def test_files_that_are_none(tmp_path):
    """contract."""
    for path, message in (
        (tmp_path / "none.csv", "no such file"),
        (tmp_path, "is a directory"),
        ("a\0b", "cannot be read"),
    ):
        with pytest.raises(InputError, match=message):
            read_log(path)
    for text in ("heat_id,end_C_pct", "heat_id,end_C_pct\n", "heat_id,end_C_pct\n,\n\n"):
        read = read_log(log_file(tmp_path, text))
        assert (len(read.frame), len(read.refused)) == (0, 0)
        assert "end_C_pct" in read.frame.columns


def test_unknown_columns_can_be_left_out(tmp_path):
    """contract: only where that is asked for, and told."""
    path = log_file(tmp_path, "heat_id,lance_no,end_C_pct\na,7,0.04\n")
    read = read_log(path, skip_unknown=True)
    assert read.skipped == ("lance_no",)
    assert list(read.frame.columns) == ["heat_id", "tapped_at", "vessel", "grade", "end_C_pct"]


@given(st.binary(max_size=300))
@settings(max_examples=150, deadline=None, suppress_health_check=[HealthCheck.too_slow])
def test_any_bytes_are_read_or_refused(tmp_path_factory, content):
    """contract: no file, however broken, raises anything but InputError."""
    path = tmp_path_factory.getbasetemp() / "any.bin"
    for start in (b"", b"heat_id,end_C_pct,tapped_at\n", b"PK\x03\x04", b"PAR1"):
        path.write_bytes(start + content)
        try:
            read = read_log(path)
        except InputError:
            continue
        assert read.frame["heat_id"].is_unique


names = st.text(st.characters(exclude_categories=["C", "Zl", "Zp"]), min_size=1, max_size=12)
texts = st.one_of(
    names.map(str.strip).filter(bool),
    st.sampled_from(
        ["=1+1", "+x", "-5", "@a", "'=1", "''=1", "'x", "007", "1e5", "=", "＝1", "1.0"]
    ),
)
times = st.datetimes(dt.datetime(1951, 1, 1), dt.datetime(2099, 1, 1))


def number(name):
    column = fixed_columns()[name]
    return st.one_of(st.just(np.nan), st.floats(column.low, column.high))


rows = st.lists(
    st.fixed_dictionaries(
        {
            "heat_id": texts,
            "tapped_at": st.one_of(st.none(), times),
            "grade": st.one_of(st.none(), texts),
            "hot_metal_kg": number("hot_metal_kg"),
            "burnt_lime_kg": st.one_of(st.just(np.nan), st.floats(0, 6e5)),
            "end_temp_C": number("end_temp_C"),
            "end_P_pct": number("end_P_pct"),
        }
    ),
    min_size=1, max_size=6, unique_by=lambda row: row["heat_id"],
)  # fmt: skip


@given(rows)
@settings(max_examples=25, deadline=None, suppress_health_check=[HealthCheck.too_slow])
def test_a_log_goes_out_and_comes_back_to_the_last_digit(tmp_path_factory, given_rows):
    """contract: CSV, Parquet and XLSX, any text, any double."""
    read = read_log(pd.DataFrame(given_rows))
    assert not len(read.refused), read.refused
    folder = tmp_path_factory.getbasetemp()
    for ending in ENDINGS:
        path = folder / f"back{ending}"
        write_log(read.frame, path)
        back = read_log(path)
        assert not len(back.refused), back.refused
        pd.testing.assert_frame_equal(
            back.frame.reset_index(drop=True), read.frame, check_exact=True
        )


@given(st.text(max_size=10))
@settings(max_examples=100, deadline=None)
def test_a_guard_is_taken_off_exactly(text):
    """identity; what is guarded does not start like a formula."""
    assert unguarded(guarded(text)) == text
    assert not guarded(text).startswith(("=", "+", "-", "@", "\t", "\r", "\n"))


@pytest.fixture
def hostile():
    ids = ["=1+1", "+cmd|'/c calc'!A1", "-2+3", "@SUM(A1)", "<b>&amp;", "plain", 'q"q,;']
    table = pd.DataFrame({"heat_id": ids, "end_temp_C": 1600.0 + np.arange(7) / 3.0})
    table["tapped_at"] = dt.datetime(2026, 3, 1, 5, 12)
    return read_log(table).frame


def test_written_logs_by_other_readers(tmp_path, hostile):
    """other reader: csv, pandas, pyarrow and openpyxl see the same; no cell is a formula."""
    temps = hostile["end_temp_C"].tolist()
    for ending in ENDINGS:
        write_log(hostile, tmp_path / f"log{ending}")
    with (tmp_path / "log.csv").open(newline="", encoding="utf-8") as file:
        lines = list(csv.DictReader(file))
    assert [float(line["end_temp_C"]) for line in lines] == temps
    assert [line["heat_id"] for line in lines] == [guarded(name) for name in hostile["heat_id"]]
    assert lines[0]["tapped_at"] == "2026-03-01T05:12:00Z"
    assert lines[0]["grade"] == ""
    by_pandas = pd.read_csv(tmp_path / "log.csv")["end_temp_C"]
    np.testing.assert_allclose(by_pandas, temps, rtol=1e-15)
    table = pq.read_table(tmp_path / "log.parquet")
    assert table["heat_id"].to_pylist() == hostile["heat_id"].tolist()
    assert table["end_temp_C"].to_pylist() == temps
    assert str(table.schema.field("tapped_at").type) == "timestamp[us, tz=UTC]"
    sheet = openpyxl.load_workbook(tmp_path / "log.xlsx").active
    cells = list(sheet.iter_rows(values_only=True))
    place = cells[0].index("end_temp_C")
    assert [row[place] for row in cells[1:]] == temps
    assert [row[0] for row in cells[1:]] == [guarded(name) for name in hostile["heat_id"]]
    assert all(cell.data_type != "f" for row in sheet.iter_rows() for cell in row)
    with zipfile.ZipFile(tmp_path / "log.xlsx") as parts:
        assert b"<f>" not in parts.read("xl/worksheets/sheet1.xml")


def test_a_log_is_replaced_only_when_complete(tmp_path, hostile):
    """contract: a refused write leaves the old file and no other."""
    path = tmp_path / "log.csv"
    write_log(hostile, path)
    before = path.read_bytes()
    for broken, message in (
        (hostile.assign(end_C_pct="much"), "must hold numbers"),
        (hostile.drop(columns="heat_id"), "no such column"),
    ):
        with pytest.raises(InputError, match=message):
            write_log(broken, path)
    for name, message in (("log.txt", "must end in"), ("no/log.csv", "cannot be written")):
        with pytest.raises(InputError, match=message):
            write_log(hostile, tmp_path / name)
    assert path.read_bytes() == before
    assert [file.name for file in tmp_path.iterdir()] == ["log.csv"]


def test_workbooks_of_other_programs(tmp_path):
    """contract: numbers as numbers or text, real dates, whole-number names; blanks are missing."""
    book = openpyxl.Workbook()
    for row in (
        ["heat_id", "tapped_at", "hot_metal_kg", "end_C_pct", None],
        [1001, dt.datetime(2026, 3, 1, 5, 12), 180000, "0.04", None],
        [1002.0, "2026-03-01T05:12:00Z", "185.000,5", None, None],
        [None] * 5,
        ["1003", dt.date(2026, 3, 1), True, 0.04, None],
        ["=1+1", 46082.5, 180000, 0.04, None],
        ["1004", None, 180000, 0.04, "x"],
        ["1005", None, 180000],
    ):
        book.active.append(row)
    book.save(tmp_path / "log.xlsx")
    read = read_log(tmp_path / "log.xlsx")
    assert read.frame["heat_id"].tolist() == ["1001", "1005"]
    assert read.frame.index.tolist() == [2, 8]
    assert read.frame["tapped_at"].iloc[0] == pd.Timestamp("2026-03-01T05:12:00")
    found = reasons(read)
    assert "no mark for thousands" in found[3, "hot_metal_kg"]
    assert found[5, "hot_metal_kg"] == "must be a number"
    assert (6, "heat_id") in found  # a formula without a stored value
    assert "has 5 cells" in found[7, "row"]


def test_workbooks_that_unpack_to_too_much(tmp_path, monkeypatch, hostile):
    """contract: told before anything is unpacked; XML entities are not read."""
    path = tmp_path / "log.xlsx"
    write_log(hostile, path)
    with zipfile.ZipFile(path) as parts:
        kept = {name: parts.read(name) for name in parts.namelist()}
    sheet = "xl/worksheets/sheet1.xml"

    def saved(content):
        file = io.BytesIO()
        with zipfile.ZipFile(file, "w", zipfile.ZIP_DEFLATED) as parts:
            for name, text in {**kept, sheet: content}.items():
                parts.writestr(name, text)
        return file.getvalue()

    monkeypatch.setattr(sources, "MOST_UNPACKED_BYTES", 1_000_000)
    bomb = log_file(tmp_path, saved(b" " * 50_000_000), "bomb.xlsx")
    assert bomb.stat().st_size < 100_000
    with pytest.raises(InputError, match="unpacks to"):
        read_log(bomb)
    entities = b'<!DOCTYPE x [<!ENTITY a "aaaa">]>' + kept[sheet]
    with pytest.raises(InputError, match="XML entities"):
        read_log(log_file(tmp_path, saved(entities), "entities.xlsx"))
    monkeypatch.setattr(sources, "MOST_WORKBOOK_ROWS", 3)
    with pytest.raises(InputError, match="more than 3 rows"):
        read_log(path)


def test_parquet_of_other_programs(tmp_path):
    """contract: whole numbers, decimals, categories, zones; lists are refused."""
    table = pa.table(
        {
            "heat_id": pa.array([1, 2, 2]),
            "tapped_at": pa.array([dt.datetime(2026, 3, 1, 5)] * 3).cast(
                pa.timestamp("ns", tz="Europe/Vienna")
            ),
            "grade": pa.array(["a", "b", "b"]).dictionary_encode(),
            "hot_metal_kg": pa.array([180000, None, 2**62], type=pa.int64()),
            "end_C_pct": pa.array(["0.04", "", "x"]),
            "end_temp_C": pa.array([1650.0, np.nan, np.inf]),
            "burnt_lime_kg": pa.array([True, None, None]),
        }
    )
    pq.write_table(table, tmp_path / "log.parquet")
    read = read_log(tmp_path / "log.parquet")
    assert read.frame["heat_id"].tolist() == ["2"]
    assert read.frame["tapped_at"].tolist() == [pd.Timestamp("2026-03-01T05:00:00")]
    assert read.refused["row"].tolist() == [1, 3, 3, 3]
    assert "holds bool" in reasons(read)[1, "burnt_lime_kg"]
    pq.write_table(pa.table({"heat_id": [["a"]]}), tmp_path / "list.parquet")
    with pytest.raises(InputError, match="holds list"):
        read_log(tmp_path / "list.parquet")
    pq.write_table(table.slice(0, 0), tmp_path / "empty.parquet")
    assert len(read_log(tmp_path / "empty.parquet").frame) == 0


@pytest.mark.parametrize("rows", [1, 7, 40, 1000])
@pytest.mark.parametrize("ending", [".csv", ".parquet"])
def test_pieces_are_the_whole(tmp_path, monkeypatch, rows, ending):
    """identity: iter_log gives what read_log gives, doubles across pieces included."""
    monkeypatch.setattr(sources, "BLOCK_BYTES", 400)
    n = 100
    frame = read_log(
        pd.DataFrame({"heat_id": [f"h{k}" for k in range(n)], "end_temp_C": 1600.0 + np.arange(n)})
    ).frame
    frame.loc[[5, 50], "end_temp_C"] = 9999.0
    frame.loc[99, "heat_id"] = "h0"
    path = tmp_path / f"log{ending}"
    write_log(frame, path)
    if ending == ".csv":
        with path.open("a") as file:
            file.write("h200,too,many,cells,here,now\nh201,,,,1650\n")
    whole = read_log(path)
    pieces = list(iter_log(path, rows))
    pd.testing.assert_frame_equal(pd.concat([p.frame for p in pieces]), whole.frame)
    faults = pd.concat([p.refused for p in pieces], ignore_index=True)
    pd.testing.assert_frame_equal(faults, whole.refused, check_dtype=False)
    assert {5, 50, 99} <= {row - (2 if ending == ".csv" else 1) for row in whole.refused["row"]}
    good = n - 3 + (ending == ".csv")
    assert [len(p.frame) for p in pieces[:-1]] == [rows] * (len(pieces) - 1)
    assert sum(len(p.frame) for p in pieces) == good
    with pytest.raises(InputError, match="1 or more"):
        next(iter_log(path, 0))


def test_faults_beyond_count_are_listed_once_a_row(monkeypatch):
    """contract: a log that is wrong throughout does not fill the memory, and no row is lost."""
    assert MOST_FAULTS == 100_000
    monkeypatch.setattr("converter_calc.heatlog.reading.MOST_FAULTS", 12)
    table = pd.DataFrame({"heat_id": [f"h{k}" for k in range(10)]})
    for name in ("end_temp_C", "end_C_pct", "end_P_pct"):
        table[name] = "1,5"
    read = read_log(table)
    assert read.frame.empty
    assert read.rows_refused == 10
    assert len(read.refused) < 30


def test_a_long_log_is_quick(tmp_path):
    """scale: 100,000 heats of 11 columns; CPU time, so that other programs do not count."""
    import time

    n = 100_000
    rng = np.random.default_rng(7)
    table = {"heat_id": [f"h{k}" for k in range(n)]}
    for name in ("hot_metal_kg", "end_temp_C", "end_C_pct", "end_P_pct", "slag_CaO_pct",
                 "slag_FeO_pct", "steel_kg", "oxygen_Nm3", "blow_min", "end_S_pct"):  # fmt: skip
        column = fixed_columns()[name]
        table[name] = rng.uniform(column.low, min(column.high, column.low + 50.0), n)
    write_log(read_log(pd.DataFrame(table)).frame, tmp_path / "log.csv")
    start = time.process_time()
    read = read_log(tmp_path / "log.csv")
    assert time.process_time() - start < 5.0
    np.testing.assert_array_equal(read.frame["end_P_pct"], table["end_P_pct"])
