"""How many rows of a log are used, and how regular its time is."""

from collections.abc import Iterator

import numpy as np

from idlearn.logs.plantlog import PlantLog
from idlearn.logs.segments import off_grid
from idlearn.logs.signals import Finding

MUCH_LOST = 0.2  # share of rejected rows that calls for care
MANY_PIECES = 0.1  # longest segment below this share of the valid samples calls for care


def audit_rows(log: PlantLog) -> Iterator[Finding]:
    """Yield rows used and rejected, segments, and irregular steps in time."""
    dt, used, total = log.sample_time_s, log.n_valid, log.n_source_rows
    lost = total - used
    yield Finding(
        "samples used",
        "note",
        f"{_hours(used * dt)} in {used} samples at {dt:g} s are used, of {total} rows.",
    )
    if lost:
        reasons = ", ".join(f"{r.reason} {r.rows}" for r in log.rejected)
        yield Finding(
            "samples rejected",
            "care" if lost > MUCH_LOST * total else "note",
            f"{lost} rows ({lost / total:.1%}, {_hours(lost * dt)}) are not used: {reasons}. "
            "They are left out, never filled in.",
        )
    if not used:
        return
    lengths = log.segments[:, 1] - log.segments[:, 0]
    longest = int(lengths.max())
    pieces = len(lengths)
    short = longest < MANY_PIECES * used
    yield Finding(
        "segments",
        "care" if short else "note",
        f"The valid samples form {pieces} unbroken segment{'s' if pieces > 1 else ''}, the longest "
        f"of {longest} samples ({_hours(longest * dt)})."
        + (" Such short pieces tell little about slow dynamics." if short else ""),
    )
    yield from _steps(log)


def _steps(log: PlantLog) -> Iterator[Finding]:
    steps = np.diff(log.elapsed_s)
    breaks = off_grid(log.elapsed_s, log.sample_time_s)[1:]
    if not breaks.any():
        return
    dt = log.sample_time_s
    gaps = steps[breaks & (steps > 1.5 * dt)]
    jitter = int(breaks.sum()) - len(gaps)
    share = breaks.mean()
    told = []
    if len(gaps):
        told.append(
            f"{len(gaps)} gap{'s' if len(gaps) > 1 else ''} with about "
            f"{int(np.rint(gaps / dt - 1).sum())} samples missing, the longest of "
            f"{_hours(float(gaps.max()))}"
        )
    if jitter:
        told.append(f"{jitter} step{'s' if jitter > 1 else ''} off the sample time by over 1 %")
    yield Finding(
        "irregular sample time",
        "care" if jitter > 0.01 * len(steps) or share > 0.05 else "note",
        f"Time is irregular: {' and '.join(told)}. A segment ends at each of them.",
    )


def _hours(seconds: float) -> str:
    """Return a duration in the unit that reads best."""
    if seconds < 120:
        return f"{seconds:.3g} s"
    if seconds < 7200:
        return f"{seconds / 60:.3g} min"
    return f"{seconds / 3600:.4g} h"
