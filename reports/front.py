"""Page one: the verdict, the ratio with its interval, what to do next, cautions, title block."""

import math
from dataclasses import dataclass
from datetime import datetime

from idlearn.reports import wording
from idlearn.reports.blocks import Picture
from idlearn.reports.pictures_result import interval_panel
from idlearn.reports.runfiles import at, number_at, text_at
from idlearn.reports.view import View, at_row

WORDS = {
    "go": (
        "GO",
        "met",
        "Go means: fit for a supervised trial under the site's own procedures. It is no permit "
        "to put anything into service.",
    ),
    "no-go": (
        "NO-GO",
        "failed",
        "No-go means: something is worse beyond doubt, or a worthwhile gain is ruled out. Keep a "
        "classical controller.",
    ),
    "undecided": (
        "UNDECIDED",
        "open",
        "Undecided means: this log and these models show neither that a trial is worth while nor "
        "that it is not.",
    ),
}

CAUTIONS = (
    (
        "Simulated, not shown.",
        "Every figure here comes from simulation on models that were identified from the log named "
        "below. Nothing has been shown on the plant itself.",
    ),
    (
        "Not a safety function.",
        "No controller in this report may stand in for an interlock, a trip or an operator. "
        "Interlocks and trips stay as they are, outside every controller and above it.",
    ),
    (
        "People and rules come first.",
        "Local codes, functional-safety practice and licensed people decide whether, when and how "
        "anything is tried on the plant. This report decides none of that.",
    ),
    (
        "Nothing is written to a plant.",
        "The program reads log files and writes reports. It has no connection by which it could "
        "act on a plant.",
    ),
)


@dataclass(frozen=True)
class Front:
    """What page one shows.

    Attributes:
        word: the verdict.
        sign: "met", "failed" or "open".
        sentence: of the verdict.
        meaning: what such a verdict means.
        ratio: the ratio in words, or why there is none.
        picture: the ratio with its interval, None without one.
        next: what to do or what would settle it.
        cautions: heading and sentence each.
        plate: the title block: what and its value.
        title: of the page.
    """

    word: str
    sign: str
    sentence: str
    meaning: str
    ratio: str
    picture: Picture | None
    next: str
    cautions: tuple[tuple[str, str], ...]
    plate: tuple[tuple[str, str], ...]
    title: str


def front_of(view: View) -> Front:
    """Return page one."""
    verdict = view.run.verdict
    word, sign, meaning = WORDS.get(view.outcome, (view.outcome.upper(), "open", ""))
    study = wording.clean(text_at(verdict, "study", "name")) or "unnamed study"
    return Front(
        word=word,
        sign=sign,
        sentence=wording.clean(text_at(verdict, "sentence")),
        meaning=meaning,
        ratio=_ratio(view),
        picture=_picture(view),
        next=wording.clean(text_at(verdict, "next", "sentence")),
        cautions=CAUTIONS,
        plate=_plate(view, study),
        title=f"{word}: {study}",
    )


def _ratio(view: View) -> str:
    verdict = view.run.verdict
    if at(verdict, "ratio") is None:
        return "There is no cost ratio, because no candidate could be judged against a baseline."
    value, low, high = (number_at(verdict, "ratio", k) for k in ("estimate", "low", "high"))
    sure = f", {100 * view.confidence:.4g}{wording.THIN}% confidence" if view.confidence > 0 else ""
    return (
        f"Cost of {wording.clean(view.candidate)} relative to {wording.clean(view.baseline)}: "
        f"{wording.with_interval(value, low, high)}{sure}; that is "
        f"{wording.change(value, low, high)}. The cost is “{wording.clean(view.cost)}”; lower is "
        "better."
    )


def _picture(view: View) -> Picture | None:
    verdict = view.run.verdict
    if at(verdict, "ratio") is None:
        return None
    value, low, high = (number_at(verdict, "ratio", k) for k in ("estimate", "low", "high"))
    table = view.table("interval")
    parts = {
        name: (at_row(table, "low", i), at_row(table, "high", i))
        for i, name in enumerate(table.text("part"))
    }
    parts = {k: v for k, v in parts.items() if wording.is_known(*v) and min(v) > 0}
    if not (wording.is_known(value, low, high) and min(value, low, high) > 0):
        return None
    parts.setdefault("whole", (low, high))
    return Picture(
        title="The cost ratio and where its uncertainty comes from",
        message=_message(view, value, low, high),
        panels=[interval_panel(parts, value, view.worthwhile, view.baseline)],
        csv="interval",
        hint=(
            "The bar on top decides. Below it are its parts: what other seeds, other plausible "
            "plants and the error that studies on models are known to make would each do alone."
        ),
    )


def _message(view: View, value: float, low: float, high: float) -> str:
    width = high - low
    said = f"The cost ratio is {wording.with_interval(value, low, high)}; the whole interval "
    limit = view.worthwhile
    if not wording.is_known(limit):
        place = "lies below 1" if high < 1 else "lies above 1" if low > 1 else "straddles 1"
        return f"{said}{place}."
    mark = wording.number(limit, min(width, 0.2))
    if high <= limit:
        return f"{said}lies below {mark}, the ratio at which the gain is worthwhile."
    if low > limit:
        return f"{said}lies above {mark}, so a worthwhile gain is ruled out."
    if high < 1:
        return f"{said}lies below 1, but not wholly below {mark}, where the gain is worthwhile."
    return f"{said}straddles {mark}, the ratio at which the gain is worthwhile."


def _plate(view: View, study: str) -> tuple[tuple[str, str], ...]:
    verdict, manifest = view.run.verdict, view.run.manifest
    log = at(manifest, "log") or {}
    seed, hours = number_at(verdict, "study", "seed"), number_at(log, "hours_used")
    used = f"{wording.plain(hours)}{wording.THIN}h used" if wording.is_known(hours) else ""
    step = number_at(log, "sample_time_s")
    every = f"every {wording.duration(step)}" if step > 0 else ""
    start = text_at(log, "start")
    lines = [
        ("study", study),
        ("candidate", view.candidate or "none"),
        ("baseline", view.baseline or "none"),
        ("runs today", _incumbent(view)),
        ("log", ", ".join(t for t in (used, every, f"from {start}" if start else "") if t)),
        ("cost", _cost(view)),
        ("limits fixed", _fixed(view)),
        ("study finished", _moment(text_at(manifest, "finished"))),
        (
            "effort, seed",
            ", ".join(
                t
                for t in (
                    text_at(manifest, "effort"),
                    wording.count(seed) if math.isfinite(seed) else "",
                )
                if t
            ),
        ),
        ("idlearn", text_at(verdict, "study", "version") or text_at(manifest, "version")),
        ("sheet SHA-256", wording.short_digest(text_at(verdict, "study", "sheet_sha256"))),
    ]
    return tuple((k, wording.clean(v) or "not stated") for k, v in lines)


def _incumbent(view: View) -> str:
    names = [n for n in view.names if view.kind(n) == "incumbent"]
    return (
        wording.listed(names)
        or text_at(view.run.manifest, "incumbent")
        or ("not declared in the sheet")
    )


def _cost(view: View) -> str:
    said = text_at(view.run.manifest, "cost", "sentence")
    return f"{view.cost}: {said}" if said else view.cost


def _moment(stamp: str) -> str:
    return stamp.replace("T", " ")[:19] + (
        " UTC" if stamp.endswith(("Z", "+00:00")) else f" {stamp[19:]}" if len(stamp) > 19 else ""
    )


def _fixed(view: View) -> str:
    """Tell when the limits were fixed, and whether that was before the results."""
    stamp = text_at(view.run.manifest, "acceptance", "fixed_at")
    if not stamp:
        return ""
    try:
        before = datetime.fromisoformat(stamp) <= datetime.fromisoformat(
            text_at(view.run.manifest, "finished")
        )
    except (ValueError, TypeError):
        return f"{_moment(stamp)}; whether before the results is not shown"
    return f"{_moment(stamp)}, {'before' if before else 'AFTER'} the results"
