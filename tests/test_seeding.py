"""Named random streams and the budget of plant-steps."""

import numpy as np
import pytest

from idlearn.budget import Budget, BudgetSpent
from idlearn.seeding import sequence, stream


def test_a_stream_depends_on_seed_and_name_alone() -> None:
    first = stream(1, "noise", 3).standard_normal(5)
    stream(1, "noise", 2).standard_normal(1000)  # whoever else draws, and in which order
    stream(1, "reference")
    np.testing.assert_array_equal(first, stream(1, "noise", 3).standard_normal(5))


def test_streams_of_other_names_or_seeds_are_others() -> None:
    paths = [
        (1, "noise", 3), (2, "noise", 3), (1, "noise", 4), (1, "noise"), (1,), (1, "noise", "3"),
        (1, "noise3"), (1, 3, "noise"), (1, "noise", 3, 0), (1, "", "noise", 3),
    ]  # fmt: skip
    drawn = {tuple(stream(*p).integers(2**62, size=2).tolist()) for p in paths}  # type: ignore[arg-type]
    assert len(drawn) == len(paths)


def test_numpy_names_are_plain_names() -> None:
    # a loop over np.arange must not meet other noise than a loop over range
    a = stream(1, "noise", np.int64(3)).integers(2**62)  # type: ignore[arg-type]
    assert a == stream(1, "noise", 3).integers(2**62)
    assert stream(1, np.str_("noise"), 3).integers(2**62) == a


def test_streams_do_not_depend_on_the_process() -> None:
    # Python's own hash differs from process to process; SHA-256 of 'a' with its quotes does not
    # (the first 8 bytes, by any sha256 tool)
    assert sequence(7, "a").spawn_key == (2677164503, 932858857)


def test_neighbouring_streams_are_uncorrelated() -> None:
    n = 20000
    rows = np.stack([stream(1, "noise", i).standard_normal(n) for i in range(6)])
    correlation = np.corrcoef(rows)[np.triu_indices(6, 1)]
    assert np.abs(correlation).max() < 4.5 / np.sqrt(n)  # standard error 1 / sqrt(n), 15 pairs


def test_budget_counts_and_refuses_without_charging() -> None:
    budget = Budget(100)
    budget.charge(60)
    assert (budget.spent, budget.left) == (60, 40)
    assert budget.affords(40)
    assert not budget.affords(41)
    with pytest.raises(BudgetSpent, match="41 plant-steps asked for, 40 left of 100"):
        budget.charge(41)
    assert budget.spent == 60
    budget.charge(40)
    assert budget.left == 0
