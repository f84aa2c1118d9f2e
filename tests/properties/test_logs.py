"""Properties of reading: what must not change the log does not change a bit of it."""

import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import numpy as np
import pandas as pd
from hypothesis import given, settings
from hypothesis import strategies as st

from idlearn.logs import PlantLog, read_log

N = 30
NUMBERS = st.floats(allow_nan=False, allow_infinity=False)
CELLS = st.one_of(NUMBERS, NUMBERS, NUMBERS, NUMBERS, st.none())
# the first ten rows are whole, so that every log can be read
COLUMN = st.tuples(
    st.lists(NUMBERS, min_size=10, max_size=10), st.lists(CELLS, min_size=N - 10, max_size=N - 10)
).map(lambda parts: [*parts[0], *parts[1]])
SIGNALS = {"u": "actuator", "v": "actuator", "y": "output", "w": "disturbance"}
TABLE = st.fixed_dictionaries(dict.fromkeys(SIGNALS, COLUMN))
slow_disk = settings(max_examples=40, deadline=None)


@contextmanager
def folder() -> Iterator[Path]:
    with tempfile.TemporaryDirectory() as name:
        yield Path(name)


def csv_text(table: dict[str, list[float | None]], first: int = 0, last: int = N) -> str:
    names = ["t", *table]
    rows = [
        ",".join([str(k), *("" if c[k] is None else repr(c[k]) for c in table.values())])
        for k in range(first, last)
    ]
    return "\n".join([",".join(names), *rows]) + "\n"


def read(path: Path, text: str) -> PlantLog:
    path.write_text(text)
    return read_log(path, signals=SIGNALS, time="t", sample_time_s=1.0)


def same_bits(a: PlantLog, b: PlantLog) -> None:
    assert a.signals == b.signals
    assert a.rejected == b.rejected
    np.testing.assert_array_equal(a.segments, b.segments)
    for one, other in ((a.u, b.u), (a.y, b.y), (a.disturbance, b.disturbance)):
        assert one is not None
        assert other is not None
        np.testing.assert_array_equal(np.isnan(one), np.isnan(other))
        there = ~np.isnan(one)
        np.testing.assert_array_equal(one[there].view(np.int64), other[there].view(np.int64))


@given(table=TABLE)
@slow_disk
def test_text_is_read_to_the_last_bit(table: dict[str, list[float | None]]) -> None:
    with folder() as at:
        log = read(at / "a.csv", csv_text(table))
    expected = np.array([table["u"], table["v"]], dtype=float).T
    there = ~np.isnan(expected)
    np.testing.assert_array_equal(np.isnan(log.u), ~there)
    np.testing.assert_array_equal(log.u[there].view(np.int64), expected[there].view(np.int64))


@given(table=TABLE)
@slow_disk
def test_parquet_and_text_agree_to_the_last_bit(table: dict[str, list[float | None]]) -> None:
    with folder() as at:
        text = read(at / "a.csv", csv_text(table))
        columns = {name: np.array(cells, dtype=float) for name, cells in table.items()}
        pd.DataFrame({"t": np.arange(N), **columns}).to_parquet(at / "a.parquet")
        parquet = read_log(at / "a.parquet", signals=SIGNALS, time="t", sample_time_s=1.0)
    same_bits(text, parquet)


@given(table=TABLE)
@slow_disk
def test_the_careful_pass_agrees_with_the_fast_one(table: dict[str, list[float | None]]) -> None:
    text = csv_text(table)
    header, row, *rest = text.splitlines()
    # a leading plus sign is beyond the fast pass and changes no value
    careful = "\n".join([header, f"+{row}", *rest]) + "\n"
    with folder() as at:
        same_bits(read(at / "a.csv", text), read(at / "b.csv", careful))


@given(table=TABLE, order=st.permutations(list(SIGNALS)))
@slow_disk
def test_column_order_in_the_file_is_irrelevant(
    table: dict[str, list[float | None]], order: list[str]
) -> None:
    with folder() as at:
        first = read(at / "a.csv", csv_text(table))
        second = read(at / "b.csv", csv_text({name: table[name] for name in order}))
    same_bits(first, second)


@given(table=TABLE, cut=st.integers(10, N - 1))
@slow_disk
def test_a_log_in_two_files_has_the_same_rows(
    table: dict[str, list[float | None]], cut: int
) -> None:
    with folder() as at:
        whole = read(at / "a.csv", csv_text(table))
        (at / "b.csv").write_text(csv_text(table, 0, cut))
        (at / "c.csv").write_text(csv_text(table, cut, N))
        entries = [{"path": f"{n}.csv", "time": "t"} for n in "bc"]
        parts = read_log({"log": entries}, signals=SIGNALS, sample_time_s=1.0, base=at)
    assert parts.n_samples == whole.n_samples
    assert parts.n_source_rows == whole.n_source_rows == N
    np.testing.assert_array_equal(parts.u, whole.u)
    np.testing.assert_array_equal(parts.y, whole.y)
    assert not any(first < cut < last for first, last in parts.segments.tolist())


@given(table=TABLE, unit=st.sampled_from([1e-3, 0.5, 1.8, 60.0]))
@slow_disk
def test_a_change_of_unit_changes_no_segment(
    table: dict[str, list[float | None]], unit: float
) -> None:
    small = {n: [None if v is None else v * 1e-100 for v in c] for n, c in table.items()}
    scaled = {n: [None if v is None else v * unit for v in c] for n, c in small.items()}
    with folder() as at:
        first = read(at / "a.csv", csv_text(small))
        second = read(at / "b.csv", csv_text(scaled))
    np.testing.assert_array_equal(first.segments, second.segments)
    assert first.rejected == second.rejected


@given(
    missing=st.lists(st.booleans(), min_size=12, max_size=60),
    shares=st.lists(st.floats(0.3, 1.0), min_size=1, max_size=4),
)
@settings(deadline=None)
def test_split_loses_no_valid_sample_but_single_ones(
    missing: list[bool], shares: list[float]
) -> None:
    n = len(missing) + 200  # so that the smallest share is some samples
    u = np.arange(n, dtype=float)[:, None]
    u[: len(missing)][np.array(missing)] = np.nan
    log = PlantLog.from_arrays(u=u, y=np.ones((n, 1)), sample_time_s=1.0)
    fractions = np.array(shares) / sum(shares)
    parts = log.split(tuple(fractions))
    kept = np.concatenate([p.u[p.valid, 0] for p in parts])
    assert np.all(np.diff(kept) > 0)
    assert set(kept) <= set(log.u[log.valid, 0])
    # a cut can leave one sample on either side of itself
    assert log.n_valid - len(kept) <= 2 * (len(parts) - 1)
    assert sum(p.n_samples for p in parts) == n
