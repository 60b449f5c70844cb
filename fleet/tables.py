"""The only door to Parquet: exact schemas derived from the table of columns, written and read back.

Owns the types in files (timestamp[us, UTC], float64, int64, bool, string, date32, decimal128(18, 4), lists)
and the stable types in memory. What the values must be is folder.py's and records.py's business.

In memory: time datetime64[us, UTC]; day datetime64[s] at midnight, no zone; number float64 (NaN = none);
whole Int64; flag bool, or boolean where values are missing; text, decimal and lists object (None = none).
"""

import io
from collections.abc import Callable, Sequence
from decimal import Decimal
from functools import cache
from pathlib import Path
from typing import Any, Final, Self

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.csv as pacsv
import pyarrow.parquet as pq

from fleet.csv_rows import csv_frame, csv_text, unreadable
from fleet.errors import FleetError
from fleet.schema import SCHEMA_VERSION, Column, Table
from sites.units import AnyArray

_ROW_GROUP: Final = 1 << 20
_QUICK_FROM: Final = 100_000
"""Characters from which a CSV goes to the fast reader first."""
_DAY_S: Final = 86_400
MONEY_DIGITS: Final = 18
MONEY_PLACES: Final = 4
_TYPES: Final[dict[str, Callable[[], Any]]] = {
    "text": lambda: pa.string(),
    "number": lambda: pa.float64(),
    "whole": lambda: pa.int64(),
    "flag": lambda: pa.bool_(),
    "time": lambda: pa.timestamp("us", tz="UTC"),
    "day": lambda: pa.date32(),
    "decimal": lambda: pa.decimal128(MONEY_DIGITS, MONEY_PLACES),
    "list_text": lambda: pa.list_(pa.string()),
    "list_number": lambda: pa.list_(pa.float64()),
}
_MEMORY: Final = {"number": "float64", "text": "object"}


def arrow_schema(table: Table) -> Any:
    """The pyarrow schema of a table's files, schema version and table name in its metadata."""
    fields = [
        pa.field(column.name, _TYPES[column.type](), nullable=column.required != "yes")
        for column in table.columns
    ]
    metadata = {
        "schema_version": str(SCHEMA_VERSION),
        "table": f"{table.folder}/{table.name}",
        "columns": ",".join(table.names),
    }
    return pa.schema(fields, metadata=metadata)


def write_parquet(frame: pd.DataFrame, path: Path, table: Table) -> None:
    """Write `frame` to `path` with exactly the table's schema, columns in the table's order.

    Raises FleetError where a column is missing or unknown, a required value is null, or a value does not fit.
    """
    known = set(table.names)
    unknown = [str(name) for name in frame.columns if name not in known]
    missing = [name for name in table.names if name not in frame.columns]
    if unknown or missing:
        raise FleetError(
            f"{path.name}: columns do not match table {table.folder}/{table.name}; "
            f"missing: {', '.join(missing) or 'none'}; unknown: {', '.join(unknown) or 'none'}"
        )
    schema = arrow_schema(table)
    if any(isinstance(frame[name].dtype, pd.CategoricalDtype) for name in table.names):
        with ParquetParts(path, table) as parts:
            parts.add(frame)
        return
    arrays = [_array(frame[column.name], column, path) for column in table.columns]
    # Through a file of Python's: its errors say in plain words what the system refused, and where.
    with path.open("wb") as out:
        pq.write_table(pa.Table.from_arrays(arrays, schema=schema), out, compression="zstd")


class ParquetParts:
    """A table written some rows at a time; texts may come as numbers of a short list, and are texts in the file.

    The same columns come so in every part. The caller closes it: a file without its end cannot be read.
    """

    def __init__(self, path: Path, table: Table) -> None:
        self._path, self._table = path, table
        self._coded: list[str] = []
        self._writer: Any = None
        self._schema = arrow_schema(table)

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *raised: object) -> None:
        self.close()

    def close(self) -> None:
        """End the file."""
        if self._writer is not None:
            self._writer.close()

    def add(self, frame: pd.DataFrame) -> None:
        """Write more rows, in row groups of their own; FleetError for a value that does not fit its column."""
        if self._writer is None:
            self._open(frame)
        for first in range(0, max(len(frame), 1), _ROW_GROUP):
            rows = frame.iloc[first : first + _ROW_GROUP]
            arrays = [
                _coded(rows[column.name], column, self._path)
                if column.name in self._coded
                else _array(rows[column.name], column, self._path)
                for column in self._table.columns
            ]
            whole = pa.Table.from_arrays(arrays, schema=self._schema)
            self._writer.write_table(whole, row_group_size=_ROW_GROUP)

    def _open(self, frame: pd.DataFrame) -> None:
        names = self._table.names
        self._coded = [name for name in names if isinstance(frame[name].dtype, pd.CategoricalDtype)]
        schema = self._schema
        for name in self._coded:
            kind = pa.dictionary(pa.int32(), pa.string())
            schema = schema.set(schema.get_field_index(name), schema.field(name).with_type(kind))
        plain = [column.name for column in self._table.columns if column.type not in ("number", "decimal")]
        self._schema = schema
        self._writer = pq.ParquetWriter(
            self._path,
            schema,
            compression="zstd",
            use_dictionary=plain,
            write_statistics=self._coded,
            store_schema=False,
        )
        self._writer.add_key_value_metadata(schema.metadata)


def _coded(series: pd.Series, column: Column, path: Path) -> Any:
    codes = series.cat.codes.to_numpy()
    gaps = codes < 0
    if column.required == "yes" and gaps.any():
        raise FleetError(
            f"{path.name}, column {column.name}: a row is null; the column must have a value in each row"
        )
    indices = pa.array(codes.astype(np.int32), mask=gaps if gaps.any() else None)
    return pa.DictionaryArray.from_arrays(indices, pa.array(series.cat.categories.array, pa.string()))


def read_parquet(path: Path, table: Table, names: Sequence[str] | None = None) -> pd.DataFrame:
    """Read a file written by `write_parquet` into the stable types in memory; `names`: these columns alone.

    A column that the table of columns did not have when the file was written comes with its default, or as
    missing; the file names the columns it was written with, so that one taken out of it shows.

    Raises FleetError where the file is missing, no Parquet, of another table or of a newer schema version.
    """
    found = _read(path, None if names is None else [name for name in names if name in table.names])
    metadata = {k.decode(): v.decode() for k, v in (found.schema.metadata or {}).items() if k != b"pandas"}
    name = metadata.get("table", "")
    if name != f"{table.folder}/{table.name}":
        raise FleetError(f"{path}: holds table {name or 'unknown'}; expected {table.folder}/{table.name}")
    version = int(metadata.get("schema_version", "0"))
    if version > SCHEMA_VERSION:
        raise FleetError(
            f"{path}: written with schema version {version}; this program reads up to {SCHEMA_VERSION}; "
            "update the program"
        )
    wanted = [column for column in table.columns if names is None or column.name in names]
    lacking = [column.name for column in wanted if column.name not in found.column_names]
    missing = [column for column in lacking if column in metadata.get("columns", column).split(",")]
    if missing:
        raise FleetError(f"{path}: column {', '.join(missing)} is missing; the file was changed or cut")
    count = found.num_rows
    columns = {
        column.name: _later(column, count) if column.name in lacking else _series(found[column.name], column)
        for column in wanted
    }
    return pd.DataFrame(columns)[[column.name for column in wanted]]


def _later(column: Column, count: int) -> pd.Series:
    """A column that did not exist when the file was written: its default, or missing values."""
    if column.default is None:
        return _series(pa.nulls(count, _TYPES[column.type]()), column)
    return _series(pa.array([column.default] * count, type=_TYPES[column.type]()), column)


def read_raw(path: Path, span: tuple[pd.Timestamp, pd.Timestamp] | None = None) -> pd.DataFrame:
    """An input table as it stands: CSV as text ("" = empty), Parquet (a file or a folder) in its own types.

    Headings lose spaces at their ends. CSV rows keep their file line number as index (heading = 1); Parquet
    rows count from 1. Blank CSV lines are left out. With `span`, Parquet rows whose interval_start carries a zone
    and lies outside [from, to) are left out too. Nested Parquet values come as bytes, which no column takes.
    Raises Refused where the file cannot be read as a table.
    """
    if path.is_dir():
        parts = sorted(path.glob("*.parquet"))
        if not parts:
            came, advice = "a folder without .parquet files", "put some there, or remove it"
            raise unreadable(path.name, None, came, "a table", advice)
    elif path.suffix == ".parquet":
        parts = [path]
    else:
        return _read_csv(path)
    frames, before = [], 1
    for part in parts:
        frame, count = _plain(part, span, before)
        frames.append(frame)
        before += count
    return pd.concat(frames)


TEXTS: Final = ("string", "large_string", "dictionary<values=string, indices=int32, ordered=0>")
"""Types of a column of texts, as pyarrow names them."""


class RowGroups:
    """A Parquet file read a row group at a time, texts as numbers of a short list; FleetError where it cannot be."""

    def __init__(self, path: Path) -> None:
        try:
            with pq.ParquetFile(path) as file:
                self._metadata, schema = file.metadata, file.schema_arrow
        except (pa.ArrowInvalid, OSError) as error:
            raise FleetError(f"{path}: is not a readable Parquet file ({error})") from error
        self._path = path
        self.types = {str(name): str(kind) for name, kind in zip(schema.names, schema.types)}
        self.count = int(self._metadata.num_row_groups)

    def rows(self, group: int) -> int:
        """How many rows a group has."""
        return int(self._metadata.row_group(group).num_rows)

    def bounds(self, group: int, name: str) -> tuple[Any, Any] | None:
        """Lowest and highest value of a column in a group, as its statistics have them; None = not known."""
        own = self._metadata.row_group(group).column(list(self.types).index(name)).statistics
        return None if own is None or not own.has_min_max else (own.min, own.max)

    def read(self, group: int, names: Sequence[str]) -> pd.DataFrame:
        """Some columns of a group; a handle of its own for each call, so that threads may read side by side."""
        coded = [name for name in names if self.types[name] in TEXTS]
        with pq.ParquetFile(self._path, metadata=self._metadata, read_dictionary=coded) as file:
            found = file.read_row_group(group, columns=list(names), use_threads=False)
        return pd.DataFrame(found.replace_schema_metadata(None).unify_dictionaries().to_pandas())


def empty_frame(table: Table) -> pd.DataFrame:
    """A frame of no rows with the table's columns in the stable types."""
    return _nothing(table).copy()


@cache
def _nothing(table: Table) -> pd.DataFrame:
    """Made once a table: a command opens a folder with a dozen of them left out."""
    return pd.DataFrame({column.name: _empty(column) for column in table.columns})[list(table.names)]


def stable(frame: pd.DataFrame, table: Table) -> pd.DataFrame:
    """`frame` with the table's columns in order and in the stable types; absent columns come as missing."""
    columns = {}
    for column in table.columns:
        if column.name in frame.columns:
            columns[column.name] = _series(_array(frame[column.name], column, None), column)
        else:
            nothing = pa.nulls(len(frame), _TYPES[column.type]())
            columns[column.name] = _series(nothing, column)
    made = pd.DataFrame(columns)
    made.index = frame.index
    return made[list(table.names)]


def _array(series: pd.Series, column: Column, path: Path | None) -> Any:
    """One column as a pyarrow array; null checks only where a path is given (a record is being written)."""
    place = f"{path.name if path else 'table'}, column {column.name}"
    try:
        array = _convert(series, column)
    except (pa.ArrowInvalid, pa.ArrowTypeError, ValueError, TypeError, ArithmeticError) as error:
        raise FleetError(f"{place}: a value is not {column.expected}: {error}") from error
    if path is not None and column.required == "yes" and array.null_count:
        row = int(np.flatnonzero(array.is_null().to_numpy(zero_copy_only=False))[0])
        raise FleetError(
            f"{place}: row {row} of {len(array)} is null; the column must have a value in each row"
        )
    return array


def _convert(series: pd.Series, column: Column) -> Any:
    kind = _TYPES[column.type]()
    if column.type == "time":
        return pa.array(as_utc(series), type=kind, from_pandas=True)
    if column.type == "number":
        numbers = series.to_numpy(dtype=np.float64, na_value=np.nan)
        if np.isinf(numbers).any():
            raise ValueError("infinite; leave the value empty where there is none")
        return pa.array(numbers, type=kind, from_pandas=True)
    if column.type == "whole" and isinstance(series.dtype, np.dtype) and series.dtype.kind == "i":
        return pa.array(series.to_numpy(), type=kind)
    if column.type == "whole":
        return pa.array(series.astype("Int64"), type=kind, from_pandas=True)
    if column.type == "flag":
        return pa.array(series.astype("boolean"), type=kind, from_pandas=True)
    if column.type == "text":
        return pa.array(series.astype(object).to_numpy(), type=kind, from_pandas=True)
    if column.type == "day":
        return _days(series, kind)
    return pa.array([_plain_value(value, column.type) for value in series.tolist()], type=kind)


def _plain_value(value: Any, kind: str) -> Any:
    if kind in ("list_text", "list_number"):
        if value is None or isinstance(value, str):
            return value
        convert = float if kind == "list_number" else str
        return [convert(item) for item in value]
    if value is None or value is pd.NaT or value is pd.NA or (isinstance(value, float) and np.isnan(value)):
        return None
    if kind == "decimal":
        return Decimal(str(value)).quantize(Decimal(1).scaleb(-MONEY_PLACES))
    return value


def _days(series: pd.Series, kind: Any) -> Any:
    """Local dates, the whole column at once; dates alone, with no zone and no time of day."""
    if series.dtype == np.dtype("datetime64[s]"):
        seconds = series.to_numpy().view(np.int64)
        whole = seconds // _DAY_S
        # NaT is no whole number of days, so that it goes the long way.
        if (whole * _DAY_S == seconds).all():
            return pa.array(whole.astype(np.int32)).view(kind)
    given = series.astype(object) if series.dtype.kind not in "MO" else series
    days = pd.to_datetime(given) if given.dtype.kind == "O" else given
    midnight = days.dt.normalize()
    odd = days.notna() & (days != midnight)
    if odd.any():
        raise ValueError(f"{days[odd].iloc[0]} is not a date alone")
    return pa.array(midnight.dt.tz_localize(None).to_numpy().astype("datetime64[D]"), type=kind)


def as_utc(series: pd.Series) -> pd.Series:
    """Times in datetime64[us, UTC]; a zone is converted, none is taken as UTC (the inside is UTC)."""
    times = series if isinstance(series.dtype, pd.DatetimeTZDtype) else pd.to_datetime(series, utc=True)
    return times.astype("datetime64[us, UTC]")


def _series(found: Any, column: Column) -> pd.Series:
    """One pyarrow array or chunked array in the stable type in memory."""
    array = found.combine_chunks() if isinstance(found, pa.ChunkedArray) else found
    if column.type == "time":
        return pd.Series(array.to_pandas()).astype("datetime64[us, UTC]")
    if column.type == "day":
        return pd.Series(array.cast(pa.timestamp("s")).to_pandas()).astype("datetime64[s]")
    if column.type in ("number", "text"):
        return pd.Series(array.to_numpy(zero_copy_only=False), dtype=_MEMORY[column.type])
    if column.type in ("whole", "flag"):
        gaps = array.is_null().to_numpy(zero_copy_only=False)
        values = array.fill_null(0 if column.type == "whole" else False).to_numpy(zero_copy_only=False)
        if column.type == "whole":
            return pd.Series(pd.arrays.IntegerArray(values.copy(), gaps.copy()))
        return pd.Series(pd.arrays.BooleanArray(values.copy(), gaps.copy()) if gaps.any() else values.copy())
    return pd.Series(array.to_pylist(), dtype=object)


def _empty(column: Column) -> pd.Series:
    return _series(pa.array([], type=_TYPES[column.type]()), column)


def _read(path: Path, names: Sequence[str] | None = None) -> Any:
    try:
        if names is None:
            return pq.read_table(path)
        with pq.ParquetFile(path) as file:
            return file.read(columns=[name for name in names if name in file.schema_arrow.names])
    except FileNotFoundError as error:
        raise FleetError(
            f"{path}: there is no such file; the record is incomplete or the path is wrong"
        ) from error
    except (pa.ArrowInvalid, OSError) as error:
        raise FleetError(
            f"{path}: is not a readable Parquet file ({error}); restore or export it again"
        ) from error


def _plain(
    path: Path, span: tuple[pd.Timestamp, pd.Timestamp] | None, first: int
) -> tuple[pd.DataFrame, int]:
    """Rows of a Parquet file (of a span), numbered from `first`, and how many the file holds."""
    try:
        found = _read(path)
    except FleetError as error:
        came, advice = f"no readable Parquet ({error.__cause__})", "export it again, or restore it"
        raise unreadable(path.name, None, came, "a whole Parquet file", advice) from error
    names = [name.strip() for name in found.column_names]
    columns = [_scalars(column) for column in found.columns]
    found = pa.Table.from_arrays(columns, names=names)
    rows = np.arange(first, first + found.num_rows)
    times = found["interval_start"] if span and names.count("interval_start") == 1 else None
    if span and times is not None and pa.types.is_timestamp(times.type) and times.type.tz:
        low, high = (pa.scalar(edge.to_pydatetime(), times.type) for edge in span)
        within = pc.and_(pc.greater_equal(times, low), pc.less(times, high))
        kept = np.flatnonzero(pc.fill_null(within, True).to_numpy())
        return _numbered(found.take(kept), rows[kept]), found.num_rows
    return _numbered(found, rows), found.num_rows


def _scalars(column: Any) -> Any:
    """The column itself; lists, structs and the like as the bytes of each value's text, which nothing takes."""
    if pa.types.is_dictionary(column.type):
        column = column.cast(column.type.value_type)
    if not pa.types.is_nested(column.type):
        return column
    texts = [None if value is None else str(value).encode() for value in column.to_pylist()]
    return pa.array(texts, type=pa.binary())


def _numbered(found: Any, rows: AnyArray) -> pd.DataFrame:
    """An arrow table as a frame without its saved index; `rows` becomes the index."""
    frame = pd.DataFrame(found.replace_schema_metadata(None).to_pandas())
    frame.index = pd.Index(rows)
    return frame


def _read_csv(path: Path) -> pd.DataFrame:
    text = csv_text(path)
    quick = _csv_quickly(text)
    return csv_frame(text, path.name) if quick is None else quick


def _csv_quickly(text: str) -> pd.DataFrame | None:
    """A CSV whose rows are its lines, by the fast reader; None where it needs the careful one."""
    if len(text) < _QUICK_FROM or '"' in text or "\n\n" in text or "\r\n\r\n" in text or text[0] in "\r\n":
        return None
    heading = text.split("\n", 1)[0].rstrip("\r").split(",")
    names = [f"{place}" for place in range(len(heading))]
    convert = pacsv.ConvertOptions(column_types=dict.fromkeys(names, pa.string()), strings_can_be_null=False)
    try:
        found = pacsv.read_csv(
            io.BytesIO(text.encode()), pacsv.ReadOptions(column_names=names, skip_rows=1), None, convert
        )
    except pa.ArrowInvalid:
        return None
    trimmed = {name: pc.utf8_trim_whitespace(found[name]).to_numpy() for name in names}
    frame = pd.DataFrame({name: pd.Series(cells, dtype=object) for name, cells in trimmed.items()})
    frame.columns = pd.Index([name.strip() for name in heading])
    frame.index = pd.RangeIndex(2, len(frame) + 2)
    kept: pd.DataFrame = frame[~(frame == "").all(axis=1)]
    return kept
