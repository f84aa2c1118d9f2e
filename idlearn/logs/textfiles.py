"""Text log files: one fast pass for clean files, one careful pass that finds the faulty cell.

The fast pass is Arrow's CSV reader, whose float parsing is correctly rounded. The careful pass
reads cell by cell and decides alone what is an error; it also accepts what only the fast pass
cannot take, such as "+1.5" or a line break within quotes.
"""

import csv
import io
import re
from collections.abc import Iterator
from typing import TYPE_CHECKING, Any

import numpy as np

from idlearn.errors import LogError
from idlearn.logs.rawtable import (
    RawTable,
    Stamps,
    Wanted,
    check_columns,
    infinite,
    not_a_number,
)
from idlearn.logs.stamps import stamps_from_arrow, stamps_from_texts

if TYPE_CHECKING:
    import pyarrow as pa

DELIMITERS = (",", ";", "\t")
MISSING = ("", "nan", "NaN", "NAN", "Nan", "NA", "na")
_NUMBER = re.compile(r"[+-]?(\d+(\.\d*)?|\.\d+)([eE][+-]?\d+)?", re.ASCII)
_NAN = re.compile(r"[+-]?nan|na|", re.IGNORECASE)
_INFINITE = re.compile(r"[+-]?inf(inity)?", re.IGNORECASE)


def read_text(file: str, raw: bytes, wanted: Wanted) -> RawTable:
    """Read a CSV or TSV file; the delimiter is the one of , ; tab that splits the header.

    Args:
        file: name for messages.
        raw: the file's bytes.
        wanted: columns to read.

    Raises:
        LogError: with file, row, column and the text found.
    """
    names, delimiter, line = _header(file, raw, wanted.decimal)
    check_columns(file, names, wanted)
    fast = _read_fast(file, raw, wanted, names, delimiter, line)
    return fast if fast is not None else _read_careful(file, raw, wanted, names, delimiter)


def _header(file: str, raw: bytes, decimal: str) -> tuple[list[str], str, int]:
    """Return the column names, the delimiter and the header's last line."""
    if not raw or raw.isspace():
        raise LogError(f"{file} is empty; give a log with a header and rows")
    if b"\0" in raw:
        raise LogError(
            f"{file} is a binary file, neither text nor Parquet nor Feather; export it as CSV"
        )
    head = raw[: 1 << 20]
    text = _decode(file, head[: head.rfind(b"\n") + 1] if len(head) < len(raw) else head)
    split = []
    for delimiter in DELIMITERS if decimal == "." else DELIMITERS[1:]:
        records = _records(file, text, delimiter)
        line, names = next(records)
        _, row = next(records, (0, names))
        # the delimiter is the one that gives the first row as many fields as the header
        split.append((len(row) == len(names), len(names), delimiter, line, names))
    _, _, delimiter, line, names = max(split, key=lambda s: s[:2])
    names = [name.strip() for name in names]
    if all(_NUMBER.fullmatch(name) for name in names):
        raise LogError(
            f"{file}, row {line}: the first line holds numbers only; add a line of column names"
        )
    return names, delimiter, line


def _decode(file: str, raw: bytes) -> str:
    try:
        return raw.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        row = raw.count(b"\n", 0, error.start) + 1
        raise LogError(
            f"{file}, row {row}: the byte 0x{raw[error.start]:02x} is not UTF-8 text; "
            "save the file as UTF-8"
        ) from None


def _records(file: str, text: str, delimiter: str) -> Iterator[tuple[int, list[str]]]:
    """Yield (line, fields) of each record that is not blank."""
    reader = csv.reader(io.StringIO(text, newline=""), delimiter=delimiter)
    try:
        for fields in reader:
            if fields:
                yield reader.line_num, fields
    except csv.Error as error:
        raise LogError(
            f"{file}, row {reader.line_num}: the line cannot be split into fields ({error}); "
            "mend it"
        ) from None


def _read_fast(
    file: str, raw: bytes, wanted: Wanted, names: list[str], delimiter: str, line: int
) -> RawTable | None:
    """Read with Arrow; None where the careful pass has to look."""
    import pyarrow as pa
    import pyarrow.csv as pc

    types: dict[str, Any] = dict.fromkeys(wanted.numbers, pa.float64())
    types.update(dict.fromkeys(wanted.texts, pa.string()))
    try:
        table = pc.read_csv(
            pa.BufferReader(raw),
            read_options=pc.ReadOptions(column_names=names, skip_rows=line),
            parse_options=pc.ParseOptions(delimiter=delimiter),
            convert_options=pc.ConvertOptions(
                include_columns=list(wanted.columns),
                column_types=types,
                null_values=list(MISSING),
                strings_can_be_null=True,
                decimal_point=wanted.decimal,
            ),
        )
    except pa.ArrowInvalid:
        return None
    n = table.num_rows
    if not n:
        return None
    numbers = np.empty((n, len(wanted.numbers)), order="F")
    for i, name in enumerate(wanted.numbers):
        numbers[:, i] = table.column(name).to_numpy()
    # a finite sum rules out infinite values at a quarter of the price of looking at each
    with np.errstate(over="ignore", invalid="ignore"):
        total = numbers.sum()
    if not np.isfinite(total) and np.isinf(numbers).any():
        return None
    stamps = None
    if wanted.time:
        stamps = stamps_from_arrow(table.column(wanted.time))
        if stamps is None:
            return None

    def row_of(row: int) -> int:
        # blank lines and line breaks within quotes shift the count
        if raw.rstrip(b"\r\n").count(b"\n") + 1 == n + line:
            return row + line + 1
        records = _records(file, _decode(file, raw), delimiter)
        next(records)
        return next(at for i, (at, _) in enumerate(records) if i == row)

    return RawTable(
        file=file,
        numbers=numbers,
        texts={name: _objects(table.column(name)) for name in wanted.texts},
        stamps=stamps,
        row_of=row_of,
    )


def _objects(column: "pa.ChunkedArray") -> np.ndarray[Any, np.dtype[np.object_]]:
    return np.array(column.to_pylist(), dtype=object)


def _read_careful(
    file: str, raw: bytes, wanted: Wanted, names: list[str], delimiter: str
) -> RawTable:
    """Read cell by cell, so that the first fault can be named."""
    where = [names.index(name) for name in wanted.numbers]
    kept = {name: names.index(name) for name in (*wanted.texts, *filter(None, [wanted.time]))}
    rows: list[list[float]] = []
    texts: dict[str, list[str | None]] = {name: [] for name in kept}
    lines: list[int] = []
    records = _records(file, _decode(file, raw), delimiter)
    next(records)
    for line, fields in records:
        if len(fields) != len(names):
            raise LogError(
                f"{file}, row {line}: the row has {len(fields)} fields and the header has "
                f"{len(names)}; mend or remove the row"
            )
        rows.append(
            [
                _number(file, line, column, fields[i], wanted.decimal)
                for column, i in zip(wanted.numbers, where, strict=True)
            ]
        )
        for name, i in kept.items():
            cell = fields[i].strip()
            texts[name].append(None if _NAN.fullmatch(cell) else cell)
        lines.append(line)
    if not rows:
        raise LogError(f"{file} has a header but no rows; give a log with rows")
    stamps: Stamps | None = None
    if wanted.time:
        stamps = _stamps(file, wanted, texts[wanted.time], lines)
    return RawTable(
        file=file,
        numbers=np.array(rows, dtype=np.float64).reshape(len(rows), len(where)),
        texts={name: np.array(texts[name], dtype=object) for name in wanted.texts},
        stamps=stamps,
        row_of=lines.__getitem__,
    )


def _number(file: str, line: int, column: str, text: str, decimal: str) -> float:
    cell = text.strip()
    if decimal == ",":
        cell = cell.replace(".", "?").replace(",", ".")
    if _NUMBER.fullmatch(cell):
        value = float(cell)
        if np.isfinite(value):
            return value
        raise infinite(file, line, column, text.strip())
    if _NAN.fullmatch(cell):
        return float("nan")
    if _INFINITE.fullmatch(cell):
        raise infinite(file, line, column, text.strip())
    raise not_a_number(file, line, column, text.strip(), decimal)


def _stamps(file: str, wanted: Wanted, cells: list[str | None], lines: list[int]) -> Stamps:
    present = [cell for cell in cells if cell is not None]
    plain = [c.replace(",", ".") if wanted.decimal == "," else c for c in present]
    if not all(_NUMBER.fullmatch(c) or _INFINITE.fullmatch(c) for c in plain):
        return stamps_from_texts(file, wanted.time, cells, lines.__getitem__)
    values = np.array(
        [
            np.nan if c is None else _number(file, line, wanted.time, c, wanted.decimal)
            for c, line in zip(cells, lines, strict=True)
        ]
    )
    return Stamps(kind="elapsed", values=values, missing=np.isnan(values))
