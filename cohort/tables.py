"""The only import of pyarrow: the schema of every table, and how parts are written, verified and read.

A part is one Parquet file of a table: whole or absent, with the same bytes for the same content. Its footer carries
the table's identity, the subjects it covers and a digest of its columns' values; a part is trusted only where all
three are as expected. Missing numbers (NaN) and words (-1) become true nulls here, and nowhere else.
"""

from __future__ import annotations

import contextlib
import hashlib
import io
import os
import re
import secrets
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
from numpy.typing import NDArray

from cohort.quantities import (
    CLAMP_OUTCOMES,
    COMPARISON_COLUMNS,
    CONVERGENCE_COLUMNS,
    COURSE_COLUMNS,
    CYCLE_OUTCOMES,
    DETECTION_COLUMNS,
    FORCED_OUTCOMES,
    INCIDENCE_COLUMNS,
    INPUT_PARAMETERS,
    KEY_COLUMNS,
    MAP_BORDER_COLUMNS,
    MAP_LOCKING_COLUMNS,
    MAP_REGION_COLUMNS,
    MAP_TONGUE_COLUMNS,
    MAP_WINDOW_COLUMNS,
    MEAL_OUTCOMES,
    PARAMETERS,
    POPULATION_COLUMNS,
    RANKING_COLUMNS,
    RECRUITMENT_COLUMNS,
    SENSITIVITY_COLUMNS,
    WEIGHT_COLUMNS,
    WINDOW_OUTCOMES,
    Column,
)
from cohort.stores import is_remote, put

Values = Mapping[str, NDArray[Any] | Sequence[str] | Sequence[str | None] | str]

_TYPES = {
    "int64": pa.int64(),
    "float64": pa.float64(),
    "bool": pa.bool_(),
    "text": pa.string(),
    "words": pa.string(),
}
FORMAT = b"cohort-part-1"
PART = re.compile(r"part-[0-9-]{6,40}\.parquet")


@dataclass(frozen=True)
class Schema:
    """The columns of one table, in order."""

    table: str
    columns: tuple[Column, ...]

    @property
    def arrow(self) -> pa.Schema:
        """The Arrow schema; every field carries its unit and meaning."""
        return pa.schema(
            [
                pa.field(c.name, _TYPES[c.kind], metadata={b"unit": c.unit.encode(), b"meaning": c.meaning.encode()})
                for c in self.columns
            ]
        )


def population_schema(laws: Sequence[str]) -> Schema:
    """population/: a row a draw, arm, schedule and stratum; `laws` are names of what the draws move."""
    known = PARAMETERS | INPUT_PARAMETERS
    moved = []
    for name in laws:
        unit = known[name].unit if name in known else "kg"
        moved += [
            Column(
                f"{name}_median",
                "float64",
                unit,
                f"median (of a normal law the mean) of {name} in this draw and stratum",
            ),
            Column(f"{name}_cv", "float64", "1", f"coefficient of variation of {name} in this draw and stratum"),
        ]
    return Schema("population", (*POPULATION_COLUMNS, *moved))


def subjects_schema(varied: Sequence[str], with_id: bool, with_person: bool = False) -> Schema:
    """subjects/: who was simulated, every varied parameter as integrated."""
    known = PARAMETERS | INPUT_PARAMETERS
    parameters = tuple(Column(p, "float64", known[p].unit, known[p].meaning) for p in varied)
    named = (*(("id",) if with_id else ()), *(("person",) if with_person else ()))
    keys = ("subject", *named, "stratum", "body_weight_kg")
    return Schema("subjects", (*(KEY_COLUMNS[k] for k in keys), *parameters))


def outcomes_schema(clamped: bool, forced: bool = False) -> Schema:
    """outcomes/<arm>/: a row a subject; with what clamps and periodic inputs add."""
    extra = (*(CLAMP_OUTCOMES if clamped else ()), *(FORCED_OUTCOMES if forced else ()))
    keys = tuple(KEY_COLUMNS[k] for k in ("subject", "arm", "model"))
    return Schema("outcomes", (*keys, *CYCLE_OUTCOMES, *WINDOW_OUTCOMES, *extra))


MEALS = Schema("meals", (KEY_COLUMNS["subject"], KEY_COLUMNS["arm"], *MEAL_OUTCOMES))
TIME_COURSES = Schema("time_courses", (KEY_COLUMNS["subject"], KEY_COLUMNS["arm"], *COURSE_COLUMNS))
OBSERVATIONS = Schema(
    "observations", (*(KEY_COLUMNS[k] for k in ("subject", "arm", "schedule", "analyte")), *DETECTION_COLUMNS)
)
DETECTIONS = Schema(
    "detections", (KEY_COLUMNS["id"], KEY_COLUMNS["analyte"], *DETECTION_COLUMNS, KEY_COLUMNS["refused"])
)
WEIGHTS = Schema("weights", WEIGHT_COLUMNS)
RECRUITMENT = Schema("recruitment", RECRUITMENT_COLUMNS)
INCIDENCE = Schema("incidence", INCIDENCE_COLUMNS)
SENSITIVITY = Schema("sensitivity", SENSITIVITY_COLUMNS)
CONVERGENCE = Schema("convergence", CONVERGENCE_COLUMNS)
COMPARISON = Schema("comparison", COMPARISON_COLUMNS)
MAP_WINDOWS = Schema("map/windows", MAP_WINDOW_COLUMNS)
MAP_REGION = Schema("map/region", MAP_REGION_COLUMNS)
MAP_BORDERS = Schema("map/borders", MAP_BORDER_COLUMNS)
MAP_LOCKING = Schema("map/locking", MAP_LOCKING_COLUMNS)
MAP_TONGUES = Schema("map/tongues", MAP_TONGUE_COLUMNS)


def ranking_schema(varied: Sequence[str], clamped: bool, meals: int) -> Schema:
    """ranking/: a row a run of the ranking; with the outcomes of clamps and meals where an arm of the study has them."""
    known = PARAMETERS | INPUT_PARAMETERS
    parameters = tuple(Column(p, "float64", known[p].unit, known[p].meaning) for p in varied)
    eaten = tuple(
        Column(f"meal_{k}.{c.name}", c.kind, c.unit, f"meal {k}: {c.meaning}")
        for k in range(1, meals + 1)
        for c in MEAL_OUTCOMES
        if c.name not in ("meal", "meal_time_min")
    )
    extra = CLAMP_OUTCOMES if clamped else ()
    weight = KEY_COLUMNS["body_weight_kg"]
    return Schema("ranking", (*RANKING_COLUMNS, weight, *parameters, *CYCLE_OUTCOMES, *WINDOW_OUTCOMES, *extra, *eaten))


# ---- numbers to Arrow --------------------------------------------------------------------------------------------


def to_arrow(schema: Schema, values: Values) -> pa.Table:
    """Build a table; a plain str fills its whole column. Raises KeyError for a missing column."""
    lengths = {len(v) for v in values.values() if not isinstance(v, str)}
    (n,) = lengths or {0}
    return pa.table([_array(c, values[c.name], n) for c in schema.columns], schema=schema.arrow)


def _array(column: Column, values: Any, n: int) -> pa.Array:
    if isinstance(values, str):
        return pa.repeat(pa.scalar(values), n)
    if column.kind == "text":
        return pa.array(values, pa.string())
    values = np.asarray(values)
    if column.kind == "float64":
        numbers = values.astype(np.float64)
        return pa.array(numbers, mask=np.isnan(numbers))
    if column.kind == "int64":
        whole = values.astype(np.int64)
        return pa.array(whole, mask=whole < 0)  # no whole number of ours is below 0
    if column.kind == "bool":
        return pa.array(values == 1, mask=values == -1)
    codes = pa.array(np.maximum(values, 0).astype(np.int32), mask=values < 0)
    return pa.DictionaryArray.from_arrays(codes, pa.array(column.words)).cast(pa.string())


def digest(table: pa.Table) -> str:
    """A digest of the columns' names and values, nulls apart from any value; the same for the same rows."""
    whole = hashlib.blake2b(digest_size=16)
    for name, column in zip(table.column_names, table.columns, strict=True):
        array = column.combine_chunks() if isinstance(column, pa.ChunkedArray) else column
        whole.update(f"{name}:{array.type}:{len(array)}\0".encode())
        missing = np.asarray(array.is_null())
        whole.update(np.packbits(missing).tobytes())
        if pa.types.is_string(array.type):
            coded = array.fill_null("").dictionary_encode()
            words = [str(w).encode() for w in coded.dictionary.to_pylist()]
            order = np.argsort(words, kind="stable") if words else np.empty(0, np.int64)
            rank = np.empty(len(words), np.int32)
            rank[order] = np.arange(len(words))
            whole.update(b"\0".join(sorted(words)) + b"\0")
            whole.update(rank[np.asarray(coded.indices)].astype("<i4").tobytes() if words else b"")
        else:
            filled = array.fill_null(False if pa.types.is_boolean(array.type) else 0)
            numbers = np.asarray(filled)
            whole.update(numbers.astype(numbers.dtype.newbyteorder("<")).tobytes())
    return whole.hexdigest()


# ---- parts -------------------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Stamp:
    """What a part's footer says: the table's identity and the subjects first..last-1 it covers."""

    identity: str
    first: int
    last: int


def write_part(path: Path, schema: Schema, values: Values, stamp: Stamp) -> None:
    """Write one part, whole or not at all. Raises OSError where the disk refuses."""
    table = to_arrow(schema, values)
    marks = {
        b"format": FORMAT,
        b"identity": stamp.identity.encode(),
        b"first": str(stamp.first).encode(),
        b"last": str(stamp.last).encode(),
        b"digest": digest(table).encode(),
    }
    write_bytes(path, _parquet(table.replace_schema_metadata(marks)))


def write_table(path: Path, schema: Schema, values: Values) -> None:
    """Write a small table that is made anew at each run, in the same safe way."""
    write_bytes(path, _parquet(to_arrow(schema, values)))


def _parquet(table: pa.Table) -> bytes:
    words = [f.name for f in table.schema if pa.types.is_string(f.type)]
    sink = io.BytesIO()
    pq.write_table(table, sink, use_dictionary=words, compression="zstd", compression_level=1, store_schema=True)
    return sink.getvalue()


def write_bytes(path: Path, data: bytes) -> None:
    """Write a file so that a crash leaves the old one or the new one: temporary, fsync, rename, fsync the folder; in a store,
    one PUT, read back."""
    if is_remote(path):
        put(path, data)
        return
    path.parent.mkdir(parents=True, exist_ok=True)
    # two hosts may both have this process number
    temporary = path.with_name(f".{path.name}.{secrets.token_hex(4)}.tmp")
    try:
        with temporary.open("xb") as file:
            file.write(data)
            file.flush()
            os.fsync(file.fileno())
        temporary.replace(path)
    except BaseException:
        temporary.unlink(missing_ok=True)
        raise
    folder = os.open(path.parent, os.O_RDONLY)
    try:
        os.fsync(folder)
    finally:
        os.close(folder)


def verify_part(path: Path, schema: Schema, stamp: Stamp) -> bool:
    """Whether the part can be trusted: readable, of this schema and stamp, its values those its digest was made of, and,
    where this very writer made it, its bytes those that writing it again gives (statistics and padding too)."""
    try:
        data = path.read_bytes()
        table = pq.read_table(pa.BufferReader(data), use_threads=False)
        writer = pq.ParquetFile(pa.BufferReader(data)).metadata.created_by
    except (OSError, pa.ArrowException, ValueError):
        return False
    if not table.schema.remove_metadata().equals(schema.arrow, check_metadata=True):
        return False
    marks = table.schema.metadata or {}
    expected = {b"identity": stamp.identity, b"first": str(stamp.first), b"last": str(stamp.last)}
    if any(marks.get(key, b"").decode(errors="replace") != value for key, value in expected.items()):
        return False
    if marks.get(b"format") != FORMAT or marks.get(b"digest", b"").decode(errors="replace") != digest(table):
        return False
    again = _parquet(table)
    return again == data or pq.ParquetFile(pa.BufferReader(again)).metadata.created_by != writer


def part_name(number: int) -> str:
    """part-000042.parquet"""
    return f"part-{number:06d}.parquet"


def part_paths(folder: Path) -> list[Path]:
    """The parts of a table, in order; other files there are none of ours."""
    return sorted(path for path in folder.glob("part-*.parquet") if PART.fullmatch(path.name))


def read_parts(folder: Path, columns: Sequence[str] | None = None) -> pa.Table:
    """All parts of a table as one, in order; chosen columns or all. Raises FileNotFoundError where there is none,
    ValueError where one cannot be read."""
    paths = part_paths(folder)
    if not paths:
        raise FileNotFoundError(f"no parts in {folder}")
    tables = [read_file(path, columns) for path in paths]
    try:
        return pa.concat_tables([t.replace_schema_metadata(None) for t in tables])
    except pa.ArrowException as error:
        raise ValueError(f"{folder}: {_first_line(error)}") from None


def read_part(folder: Path, number: int, columns: Sequence[str]) -> pa.Table:
    """One part of a table, with the chosen columns that it has. Raises ValueError where it cannot be read."""
    path = folder / part_name(number)
    with _named(path):
        file = _opened(path)
        known = set(file.schema_arrow.names)
        names = [c for c in columns if c in known]
        return file.read(names, use_threads=False).select(names)


def read_file(path: Path, columns: Sequence[str] | None) -> pa.Table:
    """Columns of one Parquet file, or all. Raises ValueError where it cannot be read or lacks one."""
    with _named(path):
        table = _opened(path).read(None if columns is None else list(columns), use_threads=False)
        return table if columns is None else table.select(list(columns))


def _opened(path: Path) -> pq.ParquetFile:
    """A Parquet file, opened where it is a plain file: a pipe would hang us, a device never end."""
    if not path.is_file():
        raise ValueError("is no plain file")
    return pq.ParquetFile(pa.BufferReader(path.read_bytes()) if is_remote(path) else path)


@contextlib.contextmanager
def _named(path: Path) -> Iterator[None]:
    """Whatever goes wrong with a file is a ValueError with its name."""
    try:
        yield
    except (OSError, pa.ArrowException, KeyError, ValueError, MemoryError) as error:
        raise ValueError(f"{path}: {_first_line(error)}") from None


def part_stamp(path: Path, schema: Schema, rows_each: int | None = 1, needed: Sequence[str] = ()) -> Stamp:
    """What a part's footer says of it, from the footer alone. Raises ValueError where it is no part of such a table: another
    format, other types, a needed column missing, other than `rows_each` rows a subject."""
    with _named(path):
        file = _opened(path)
        marks, rows = file.schema_arrow.metadata or {}, file.metadata.num_rows
        stamp = Stamp(
            marks.get(b"identity", b"").decode(), int(marks.get(b"first", b"0")), int(marks.get(b"last", b"-1"))
        )
        if marks.get(b"format") != FORMAT or not 0 <= stamp.first < stamp.last:
            raise ValueError("is no part of a run's table")
        if rows_each is not None and rows != (stamp.last - stamp.first) * rows_each:
            raise ValueError(f"holds {rows:,} rows for {stamp.last - stamp.first:,} subjects")
        types = {c.name: _TYPES[c.kind] for c in schema.columns}
        found = {f.name: f.type for f in file.schema_arrow}
        odd = [n for n, kind in types.items() if (n in found or n in needed) and found.get(n) != kind]
        if odd:
            raise ValueError(f"column {odd[0]!r} is missing or of another kind")
        return stamp


def check_digest(path: Path) -> None:
    """Raise ValueError where a part's values are not those it was written with."""
    with _named(path):
        table = _opened(path).read(use_threads=False)
        marks = table.schema.metadata or {}
        known = all(f.type in _TYPES.values() for f in table.schema)
        if not known or marks.get(b"digest", b"").decode(errors="replace") != digest(table):
            raise ValueError("its values are not those it was written with")


def read_table(path: Path) -> pa.Table:
    """One table file. Raises ValueError where it cannot be read."""
    return read_file(path, None)


def row_digest(table: pa.Table, keys: Sequence[str]) -> str:
    """A digest of a whole table sorted by its keys: equal for the same rows, however they were stored."""
    return digest(table.sort_by([(key, "ascending") for key in keys]))


def count_cells(data: bytes) -> int:
    """How many cells a Parquet file says it holds. Raises ValueError where it is none."""
    try:
        found = pq.read_metadata(pa.BufferReader(data))
        return int(found.num_rows) * int(found.num_columns)
    except (OSError, pa.ArrowException) as error:
        raise ValueError(_first_line(error)) from None


def read_columns(data: bytes) -> dict[str, list[object]]:
    """The columns of any Parquet file of numbers, texts and truth values as Python lists. Raises ValueError where it is none.

    Texts are read by their dictionary: a file of a few bytes may say one long text a million times.
    """
    try:
        schema = pq.read_schema(pa.BufferReader(data))
        odd = [f.name for f in schema if pa.types.is_nested(f.type) or isinstance(f.type, pa.BaseExtensionType)]
        if odd or len(set(schema.names)) < len(schema.names):
            raise ValueError(f"column {odd[0]!r} holds no plain values" if odd else "two columns have one name")
        words = [f.name for f in schema if pa.types.is_string(f.type) or pa.types.is_large_string(f.type)]
        table = pq.read_table(pa.BufferReader(data), use_threads=False, read_dictionary=words)
        table.validate(full=True)
        return {name: _cells(table.column(name)) for name in table.column_names}
    except (OSError, pa.ArrowException) as error:
        raise ValueError(_first_line(error)) from None


def _cells(column: pa.ChunkedArray) -> list[object]:
    if not pa.types.is_dictionary(column.type):
        return list(column.to_pylist())
    found: list[object] = []
    for chunk in column.chunks:
        words = chunk.dictionary.to_pylist()
        found += [None if i is None else words[i] for i in chunk.indices.to_pylist()]
    return found


def _first_line(error: BaseException) -> str:
    return (str(error).splitlines() or [type(error).__name__])[0]


def numbers(table: pa.Table, name: str) -> NDArray[np.float64]:
    """A numeric or boolean column as float64, NaN where null. Raises ValueError where it is missing."""
    if name not in table.column_names:
        raise ValueError(f"column {name!r} is missing")
    column = table.column(name).combine_chunks()
    if pa.types.is_boolean(column.type):
        column = column.cast(pa.int8())
    return np.asarray(column.cast(pa.float64()).fill_null(float("nan")))
