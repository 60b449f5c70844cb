from decimal import Decimal

import duckdb
import numpy as np
import pandas as pd
import polars
import pyarrow.parquet as pq
import pytest

from fleet.errors import FleetError
from fleet.schema import table as table_of
from fleet.schema import tables
from fleet.tables import empty_frame, read_parquet, read_raw, stable, write_parquet

TIME = pd.Timestamp("2026-07-14T13:00:00", tz="UTC")


def value_of(column):
    """A value of the column's type that is inside its bounds."""
    if column.choices:
        return column.choices[0]
    low = column.low if column.low is not None else -2.5
    number = low if column.high is None or low <= column.high else column.high
    return {
        "text": 'Häuser, "a"\n1',
        "number": number,
        "whole": int(np.ceil(number)),
        "flag": True,
        "time": TIME,
        "day": pd.Timestamp("2026-07-14"),
        "decimal": Decimal("-12.3456"),
        "list_text": ["C-1", "C-2"],
        "list_number": [1.5, -2.25, 1e-12],
    }[column.type]


def frame_of(table):
    """Two rows: all values, and only the required ones."""
    full = {column.name: value_of(column) for column in table.columns}
    lean = {n: v if table.column(n).required == "yes" else None for n, v in full.items()}
    return pd.DataFrame([full, lean])


ALL = [(folder, name) for folder in ("fleet", "call", "settlement") for name in tables(folder)]


@pytest.mark.parametrize(("folder", "name"), ALL)
def test_round_trip_of_every_table(tmp_path, folder, name):
    table = table_of(folder, name)
    path = tmp_path / f"{name}.parquet"
    frame = frame_of(table)
    write_parquet(frame, path, table)
    back = read_parquet(path, table)
    assert tuple(back.columns) == table.names
    for column in table.columns:
        given, found = frame[column.name].tolist(), back[column.name].tolist()
        assert found[0] == given[0], column.name
        if column.required == "yes":
            assert found[1] == given[1], column.name
        elif column.type not in ("list_text", "list_number"):
            assert pd.isna(found[1]), column.name
    write_parquet(back, tmp_path / "again.parquet", table)
    pd.testing.assert_frame_equal(read_parquet(tmp_path / "again.parquet", table), back)


def test_types_in_the_file_are_exactly_those_promised(tmp_path):
    for folder, name in ALL:
        write_parquet(frame_of(table_of(folder, name)), tmp_path / "t.parquet", table_of(folder, name))
        schema = pq.read_schema(tmp_path / "t.parquet")
        promised = {
            "text": "string",
            "number": "double",
            "whole": "int64",
            "flag": "bool",
            "time": "timestamp[us, tz=UTC]",
            "day": "date32[day]",
            "decimal": "decimal128(18, 4)",
            "list_text": "list<element: string>",
            "list_number": "list<element: double>",
        }
        for column in table_of(folder, name).columns:
            assert str(schema.field(column.name).type) == promised[column.type], (name, column.name)
        assert schema.metadata[b"schema_version"] == b"1"
        assert schema.metadata[b"table"] == f"{folder}/{name}".encode()


def test_types_in_memory_are_stable_also_for_an_empty_table(tmp_path):
    for folder, name in ALL:
        table = table_of(folder, name)
        write_parquet(empty_frame(table), tmp_path / "e.parquet", table)
        back = read_parquet(tmp_path / "e.parquet", table)
        assert len(back) == 0
        promised = {
            "number": "float64",
            "whole": "Int64",
            "flag": "bool",
            "time": "datetime64[us, UTC]",
            "day": "datetime64[s]",
        }
        for column in table.columns:
            assert str(back[column.name].dtype) == promised.get(column.type, "object"), column.name


def test_plain_pandas_duckdb_and_polars_read_a_record_with_no_help(tmp_path):
    for folder, name in ALL:
        table = table_of(folder, name)
        path = tmp_path / f"{name}.parquet"
        write_parquet(frame_of(table), path, table)
        first = {column.name: value_of(column) for column in table.columns}
        plain = pd.read_parquet(path)
        poles = polars.read_parquet(path)
        duck = duckdb.sql(f"select * from read_parquet('{path}')")
        assert tuple(plain.columns) == tuple(poles.columns) == tuple(duck.columns) == table.names
        row = dict(zip(duck.columns, duck.fetchall()[0]))
        for column in table.columns:
            given = first[column.name]
            cell = plain[column.name].tolist()[0]
            if column.type == "time":
                assert str(plain[column.name].dtype) == "datetime64[us, UTC]"
                assert poles.schema[column.name] == polars.Datetime("us", "UTC")
                assert pd.Timestamp(row[column.name]) == cell == given == poles[column.name][0]
            elif column.type == "day":
                assert str(cell) == str(row[column.name]) == str(poles[column.name][0]) == "2026-07-14"
            elif column.type.startswith("list"):
                assert list(cell) == row[column.name] == poles[column.name][0].to_list() == given
            else:
                assert cell == row[column.name] == poles[column.name][0] == given


def test_text_columns_of_the_str_dtype_and_numpy_lists_are_taken(tmp_path):
    table = table_of("call", "quotes")
    frame = frame_of(table)
    frame["site_id"] = frame["site_id"].astype("str")
    frame["change_kw"] = [np.array([1.0, 2.0]), np.array([], dtype=float)]
    write_parquet(frame, tmp_path / "q.parquet", table)
    assert read_parquet(tmp_path / "q.parquet", table)["change_kw"].tolist() == [[1.0, 2.0], []]


def test_times_of_another_zone_are_the_same_instant_in_the_file(tmp_path):
    table = table_of("call", "usual")
    frame = frame_of(table)
    frame["interval_start"] = [TIME.tz_convert("Europe/Athens")] * 2
    write_parquet(frame, tmp_path / "u.parquet", table)
    assert pd.read_parquet(tmp_path / "u.parquet")["interval_start"].tolist() == [TIME, TIME]


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (
            lambda f: f.drop(columns="usual_kw").assign(usual=1.0),
            "u.parquet: columns do not match table call/usual; missing: usual_kw; unknown: usual",
        ),
        (
            lambda f: f.assign(usual_kw=[1.0, None]),
            "u.parquet, column usual_kw: row 1 of 2 is null; the column must have a value in each row",
        ),
        (
            lambda f: f.assign(usual_kw=[1.0, np.inf]),
            "u.parquet, column usual_kw: a value is not a number in kW: infinite; "
            "leave the value empty where there is none",
        ),
        (
            lambda f: f.assign(site_id=[None, "a"]),
            "u.parquet, column site_id: row 0 of 2 is null; the column must have a value in each row",
        ),
    ],
)
def test_what_does_not_fit_the_table_is_not_written(tmp_path, change, message):
    table = table_of("call", "usual")
    with pytest.raises(FleetError) as caught:
        write_parquet(change(frame_of(table)), tmp_path / "u.parquet", table)
    assert str(caught.value) == message
    assert not (tmp_path / "u.parquet").exists()


@pytest.mark.parametrize(
    ("name", "column", "value"),
    [("windows", "site_id", 7), ("windows", "committed_kwh", "x"), ("request", "supersedes", 1.5)],
)
def test_values_of_another_type_are_refused(tmp_path, name, column, value):
    table = table_of("call", name)
    frame = frame_of(table)
    frame[column] = pd.Series([value, value], dtype=object)
    with pytest.raises(FleetError, match=rf"^w.parquet, column {column}: a value is not "):
        write_parquet(frame, tmp_path / "w.parquet", table)


def test_money_keeps_four_places_exactly(tmp_path):
    table = table_of("settlement", "postings")
    frame = frame_of(table)
    frame["amount"] = [Decimal("0.1"), Decimal("12345678901234.5678")]
    write_parquet(frame, tmp_path / "p.parquet", table)
    assert read_parquet(tmp_path / "p.parquet", table)["amount"].tolist() == [
        Decimal("0.1000"),
        Decimal("12345678901234.5678"),
    ]


def test_reading_a_missing_cut_foreign_or_newer_file_says_so(tmp_path):
    table = table_of("call", "usual")
    path = tmp_path / "u.parquet"
    with pytest.raises(FleetError, match=r"u.parquet: there is no such file; the record is incomplete"):
        read_parquet(path, table)
    path.write_bytes(b"PAR1 nothing")
    with pytest.raises(FleetError, match=r"u.parquet: is not a readable Parquet file"):
        read_parquet(path, table)
    write_parquet(frame_of(table_of("call", "nodes")), path, table_of("call", "nodes"))
    with pytest.raises(FleetError, match=r"u.parquet: holds table call/nodes; expected call/usual"):
        read_parquet(path, table)
    write_parquet(frame_of(table), path, table)
    newer = pq.read_table(path)
    pq.write_table(newer.replace_schema_metadata({"schema_version": "2", "table": "call/usual"}), path)
    with pytest.raises(FleetError, match=r"written with schema version 2; this program reads up to 1"):
        read_parquet(path, table)
    cut = newer.drop_columns(["rest_kw"]).replace_schema_metadata(newer.schema.metadata)
    pq.write_table(cut, path)
    with pytest.raises(FleetError, match=r"column rest_kw is missing; the file was changed or cut"):
        read_parquet(path, table)


def test_a_column_that_came_later_is_missing_in_an_older_file(tmp_path):
    table = table_of("call", "usual")
    path = tmp_path / "u.parquet"
    write_parquet(frame_of(table), path, table)
    whole = pq.read_table(path)
    known = whole.schema.metadata[b"columns"].replace(b",rest_kw", b"")
    older = whole.drop_columns(["rest_kw"]).replace_schema_metadata(
        {**whole.schema.metadata, b"columns": known}
    )
    pq.write_table(older, path)
    read = read_parquet(path, table)
    assert read["rest_kw"].isna().all()
    assert read["usual_kw"].tolist() == frame_of(table)["usual_kw"].tolist()


def test_raw_csv_with_byte_order_mark_spaces_and_blank_rows(tmp_path):
    path = tmp_path / "nodes.csv"
    path.write_bytes("\ufeffnode_id , parent_id\r\nA,\r\n\r\n  B ,A \r\n,\r\nNA,A\r\n".encode())
    frame = read_raw(path)
    assert frame.columns.tolist() == ["node_id", "parent_id"]
    assert frame.to_numpy().tolist() == [["A", ""], ["B", "A"], ["NA", "A"]]
    assert frame.index.tolist() == [2, 4, 6]


def test_raw_csv_with_a_quoted_line_break_keeps_its_cell(tmp_path):
    path = tmp_path / "sites.csv"
    path.write_text('site_id,site_words\nA,"one\ntwo"\nB,x\n', encoding="utf-8")
    frame = read_raw(path)
    assert frame["site_words"].tolist() == ["one\ntwo", "x"]
    assert frame.index.tolist() == [2, 4]


def test_raw_folder_of_parquet_files_is_read_in_order_of_names(tmp_path):
    folder = tmp_path / "meters"
    folder.mkdir()
    pd.DataFrame({"meter_id": ["b"]}).to_parquet(folder / "2026-02.parquet")
    pd.DataFrame({"meter_id": ["a"]}).to_parquet(folder / "2026-01.parquet")
    assert read_raw(folder)["meter_id"].tolist() == ["a", "b"]
    (tmp_path / "empty").mkdir()
    with pytest.raises(FleetError) as caught:
        read_raw(tmp_path / "empty")
    assert (
        str(caught.value)
        == "empty: came a folder without .parquet files; expected a table; put some there, or remove it"
    )


@pytest.mark.parametrize(
    ("content", "message"),
    [
        (
            "site_id\nGr\xfcn\n".encode("latin-1"),
            "sites.csv: came bytes that are not UTF-8 (invalid start byte); expected text in UTF-8; "
            "save it as CSV UTF-8",
        ),
        (
            b"a,b\n1,2\n1,2,3\n1\n",
            "sites.csv, row 3: came 3 cells; expected 2 as in the heading (rows like this: 2); put quotes around "
            "a text that holds a comma, and write numbers with a decimal point",
        ),
        (
            b"\n  \n",
            "sites.csv: came an empty file; expected a heading at least; give it its heading and rows, or remove it",
        ),
        (
            b"a,b\n1,2\n\x001,2\n",
            "sites.csv, row 3: came a zero byte, as UTF-16 text has them; expected text in UTF-8; "
            "save it as CSV UTF-8",
        ),
        (
            b"site_id;node_id\nA;N\n",
            "sites.csv, row 1: came cells parted by semicolons; expected cells parted by commas; "
            "save it with commas and decimal points",
        ),
        (
            b'a,b\n1,"2\n',
            "sites.csv, row 2: came unexpected end of data; expected a row of CSV; mend the quotes of that row, "
            "or save the file again as CSV",
        ),
    ],
)
def test_raw_csv_of_another_encoding_or_shape_is_refused(tmp_path, content, message):
    path = tmp_path / "sites.csv"
    path.write_bytes(content)
    with pytest.raises(FleetError) as caught:
        read_raw(path)
    assert str(caught.value) == message


def test_stable_fills_absent_columns_with_missing_values_and_keeps_the_index():
    table = table_of("fleet", "holidays")
    frame = stable(pd.DataFrame({"date": ["2026-08-15"]}, index=[7]), table)
    assert tuple(frame.columns) == table.names
    assert frame.index.tolist() == [7]
    assert frame["date"].tolist() == [pd.Timestamp("2026-08-15")]
    assert frame["name"].tolist() == [None]
