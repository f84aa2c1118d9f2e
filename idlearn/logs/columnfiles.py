"""Column-wise log files: Parquet and Feather."""

from typing import TYPE_CHECKING

import numpy as np

from idlearn.errors import LogError
from idlearn.logs.rawtable import (
    RawTable,
    Stamps,
    Wanted,
    check_columns,
    infinite,
    not_a_number,
    place,
)
from idlearn.logs.stamps import stamps_from_arrow, stamps_from_texts

if TYPE_CHECKING:
    import pyarrow as pa

PARQUET, FEATHER = b"PAR1", b"ARROW1"


def is_columnar(raw: bytes) -> bool:
    """Return whether the bytes are a Parquet or Feather file."""
    return raw.startswith((PARQUET, FEATHER))


def read_columnar(file: str, raw: bytes, wanted: Wanted) -> RawTable:
    """Read a Parquet or Feather file.

    Args:
        file: name for messages.
        raw: the file's bytes.
        wanted: columns to read.

    Raises:
        LogError: with file, row (the first one is row 1), column and what was found.
    """
    table = _table(file, raw, wanted)
    if not table.num_rows:
        raise LogError(f"{file} has columns but no rows; give a log with rows")
    numbers = np.empty((table.num_rows, len(wanted.numbers)))
    for i, name in enumerate(wanted.numbers):
        numbers[:, i] = _numbers(file, name, table.column(name))
    return RawTable(
        file=file,
        numbers=numbers,
        texts={
            name: np.array(
                [None if v is None else str(v) for v in table.column(name).to_pylist()],
                dtype=object,
            )
            for name in wanted.texts
        },
        stamps=_stamps(file, wanted.time, table.column(wanted.time)) if wanted.time else None,
        row_of=_count_from_one,
    )


def _count_from_one(row: int) -> int:
    return row + 1


def _table(file: str, raw: bytes, wanted: Wanted) -> "pa.Table":
    import pyarrow as pa

    buffer = pa.BufferReader(raw)
    try:
        if raw.startswith(PARQUET):
            import pyarrow.parquet as pq

            source = pq.ParquetFile(buffer)
            check_columns(file, list(source.schema_arrow.names), wanted)
            return source.read(columns=list(wanted.columns))
        reader = pa.ipc.open_file(buffer)
        check_columns(file, list(reader.schema.names), wanted)
        return reader.read_all().select(list(wanted.columns))
    except (pa.ArrowException, OSError) as error:
        kind = "Parquet" if raw.startswith(PARQUET) else "Feather"
        told = " ".join(str(error).split())[:120]
        raise LogError(
            f"{file} is a damaged {kind} file ({told.rstrip('.')}); export it again"
        ) from None


def _numbers(file: str, name: str, column: "pa.ChunkedArray") -> np.ndarray:
    import pyarrow as pa

    kind = column.type
    if pa.types.is_dictionary(kind):
        column = column.cast(kind.value_type)
        kind = column.type
    if pa.types.is_string(kind) or pa.types.is_large_string(kind):
        cells = column.to_pylist()
        row = next((i for i, cell in enumerate(cells) if cell is not None), None)
        if row is not None:
            raise not_a_number(file, row + 1, name, cells[row])
        return np.full(len(cells), np.nan)
    if pa.types.is_boolean(kind):
        column = column.cast(pa.int8())
    try:
        values = np.asarray(column.cast(pa.float64(), safe=False).to_numpy(), dtype=np.float64)
    except (pa.ArrowInvalid, pa.ArrowNotImplementedError):
        raise LogError(
            f"{place(file, 1, name)}: the column holds {kind}, not numbers; "
            "store numbers or give the column the role ignore"
        ) from None
    endless = np.flatnonzero(np.isinf(values))
    if len(endless):
        raise infinite(file, int(endless[0]) + 1, name, str(values[endless[0]]))
    return values


def _stamps(file: str, name: str, column: "pa.ChunkedArray") -> Stamps:
    import pyarrow as pa

    if pa.types.is_dictionary(column.type):
        column = column.cast(column.type.value_type)
    if pa.types.is_string(column.type) or pa.types.is_large_string(column.type):
        return stamps_from_texts(file, name, column.to_pylist(), _count_from_one)
    stamps = stamps_from_arrow(column)
    if stamps is None:
        raise LogError(
            f"{place(file, 1, name)}: the column holds {column.type} and is no time this program "
            "can read; store time stamps, ISO 8601 texts or elapsed seconds"
        )
    return stamps
