"""Chapters on the record: training runs, log, fairness."""

import numpy as np

from idlearn.reports import drawing, wording
from idlearn.reports.blocks import Block, Cell, Grid, Picture, Points, Section, Text, absent
from idlearn.reports.chapters_models import MOST_CURVES, more
from idlearn.reports.pictures_loop import read_limits
from idlearn.reports.pictures_record import MOST_TRACKS, learning_panel, log_panel
from idlearn.reports.runfiles import Table, at, number_at, text_at
from idlearn.reports.view import View, at_row, figures

_SEVERITY = {"note": "Note.", "care": "Care.", "stop": "STOP."}


def learning(view: View) -> Section:
    """Return the chapter of tuning and training runs."""
    table = view.table("learning")
    title = "Tuning and training"
    hint = "Every run that was made, the poor ones too."
    groups = {n: rows for (n,), rows in table.groups("controller")}
    if not groups:
        return Section("learning", title, hint, [absent("learning", "tuning and training")])
    names = view.by_weight(list(groups))
    shown = names[:MOST_CURVES]
    counts = [f"{len(groups[n].unique('run'))} of {wording.clean(n)}" for n in names]
    span = _common(groups, shown)
    scale = (
        "The vertical scale is the same for all."
        if span
        else ("Each drawing has a vertical scale of its own.")
    )
    return Section(
        "learning",
        title,
        hint,
        [
            Picture(
                "Value of the search, generation by generation",
                f"Runs made: {wording.listed(counts)}; lower is better.",
                [learning_panel(groups[n], n, view.look(n), span) for n in shown],
                "learning",
                f"One line per run, a marker at its end. {scale}{more(len(names), 'drawing')}",
            )
        ],
    )


def _common(groups: dict[str, Table], shown: list[str]) -> tuple[float, float] | None:
    """Return one scale for all if nobody's curves would be flat in it."""
    spans = []
    for n in shown:
        value = drawing.bounded(groups[n].number("value"))
        value = value[np.isfinite(value)]
        if len(value):
            spans.append((float(value.min()), float(value.max())))
    if not spans:
        return None
    low, high = min(a for a, _ in spans), max(b for _, b in spans)
    if any(b - a < 0.15 * (high - low) for a, b in spans):
        return None
    return drawing.span_of(np.array([low, high]))


def record(view: View) -> Section:
    """Return the chapter on the log and its audit."""
    log, signals = view.table("log"), view.table("signals")
    blocks: list[Block] = []
    if len(log):
        blocks.append(_log_picture(view, log, signals))
    else:
        blocks.append(absent("log", "the log"))
    findings = at(view.run.verdict, "audit") or []
    if findings:
        order = {"stop": 0, "care": 1, "note": 2}
        ranked = sorted(findings, key=lambda f: order.get(text_at(f, "severity"), 3))
        blocks.append(Text("What the audit of the log found, the gravest first:"))
        blocks.append(
            Points(
                [
                    (
                        _SEVERITY.get(text_at(f, "severity"), ""),
                        wording.clean(text_at(f, "sentence")),
                    )
                    for f in ranked
                ]
            )
        )
    else:
        blocks.append(Text("The audit of the log found nothing to report."))
    if len(signals):
        blocks.append(_signals(signals))
    return Section(
        "log", "The log", "What was recorded, what was used, what the audit found.", blocks
    )


def _log_picture(view: View, log: Table, signals: Table) -> Picture:
    setpoints = {
        row["of"]: row["name"]
        for row in signals.where(role="setpoint").rows()
        if row.get("of") and log.has(row["name"])
    }
    tracks = []
    for role in ("output", "actuator", "disturbance"):
        for name in signals.where(role=role).text("name"):
            if log.has(name):
                tracks.append((name, role, setpoints.get(name, "")))
    if not len(signals):
        tracks = [(c, "", "") for c in log.columns if c not in ("elapsed_s", "used")]
    used = log.flag("used") if log.has("used") else np.ones(len(log), dtype=bool)
    hours = number_at(view.run.manifest, "log", "hours_used")
    told = f", {wording.plain(hours)}{wording.THIN}h in all" if hours > 0 else ""
    left = len(tracks) - MOST_TRACKS
    more = f" {wording.plural(left, 'more signal')} only in the CSV twin." if left > 0 else ""
    return Picture(
        "The log",
        f"{wording.share(float(used.mean()))} of the rows shown were used{told}.",
        [log_panel(log, tracks[:MOST_TRACKS], view.units, read_limits(signals))],
        "log",
        "Shaded with falling strokes: not used. Dashed thin line: setpoint. Hatched with rising "
        f"strokes: beyond the limits.{more}",
    )


def _signals(signals: Table) -> Grid:
    rows = []
    for i, row in enumerate(signals.rows()):
        ends = (at_row(signals, "low", i), at_row(signals, "high", i))
        known = [wording.plain(e, 6) if wording.is_known(e) else "none" for e in ends]
        rows.append(
            [
                Cell(wording.clean(row.get("name", ""))),
                Cell(wording.clean(row.get("role", ""))),
                Cell(wording.clean(row.get("unit", "")) or wording.MISSING),
                figures("none" if known == ["none", "none"] else f"{known[0]} to {known[1]}"),
                Cell(wording.clean(row.get("of", "")) or wording.MISSING),
            ]
        )
    return Grid("Signals", ("signal", "role", "unit", "limits", "setpoint of"), rows, "signals")


def fairness(view: View) -> Section:
    """Return the fairness ledger."""
    table = view.table("ledger")
    title, hint = "Fairness ledger", "What each contender was given and what it used."
    if not len(table):
        return Section("fairness", title, hint, [absent("ledger", "the fairness ledger")])
    names = [c for c in table.columns if c not in ("item", "equal")]
    equal = table.flag("equal")
    rows = [
        [
            Cell(wording.clean(row.get("item", "")), marked=not equal[i]),
            Cell(_by_value({n: row[n] for n in names})),
            Cell("equal" if equal[i] else "UNEQUAL", sign="met" if equal[i] else "failed"),
        ]
        for i, row in enumerate(table.rows())
    ]
    unequal = [wording.clean(t) for t, e in zip(table.text("item"), equal, strict=True) if not e]
    said = (
        f"Not alike: {wording.listed(unequal)}. An inequality stands in the way of GO."
        if unequal
        else "Every contender was treated alike in every item of the ledger."
    )
    return Section(
        "fairness",
        title,
        hint,
        [
            Text(said),
            Grid(
                "Ledger",
                ("item", "who had what", "judged"),
                rows,
                "ledger",
                "Twelve letters and figures in brackets are the head of a digest: alike where the "
                "things compared are the same to the last bit.",
            ),
        ],
    )


def _by_value(values: dict[str, str]) -> str:
    """Say who had what, those with the same together."""
    held: dict[str, list[str]] = {}
    for name, value in values.items():
        held.setdefault(wording.clean(value) or wording.MISSING, []).append(wording.clean(name))
    if len(held) == 1:
        return f"all: {next(iter(held))}"
    return "; ".join(f"{wording.listed(names)}: {value}" for value, names in held.items())
