"""Unbroken stretches, worked out by hand."""

import numpy as np
import pytest

from idlearn.logs.segments import off_grid, rows_inside, unbroken


@pytest.mark.parametrize(
    ("valid", "cut", "expected"),
    [
        ("11111", "00000", [[0, 5]]),
        ("11111", "00100", [[0, 2], [2, 5]]),
        ("11011", "00000", [[0, 2], [3, 5]]),
        ("10111", "00000", [[2, 5]]),  # a single row is no segment
        ("11111", "01000", [[1, 5]]),
        ("00000", "00000", []),
        ("", "", []),
        ("11111", "10000", [[0, 5]]),  # row 0 follows on nothing anyway
    ],
)
def test_unbroken(valid: str, cut: str, expected: list[list[int]]) -> None:
    found = unbroken(
        np.array([c == "1" for c in valid], dtype=bool),
        np.array([c == "1" for c in cut], dtype=bool),
    )
    assert found.tolist() == expected
    assert found.shape == (len(expected), 2)


def test_a_step_within_one_percent_is_on_the_grid() -> None:
    steps = np.array([1.0, 1.009, 0.991, 1.011, 0.989, 2.0])
    elapsed = np.concatenate([[0.0], np.cumsum(steps)])
    assert off_grid(elapsed, 1.0).tolist() == [False, False, False, False, True, True, True]


def test_rows_inside_is_the_inverse() -> None:
    mask = rows_inside(np.array([[0, 2], [2, 4], [6, 7]]), 8)
    assert mask.tolist() == [True, True, True, True, False, False, True, False]
