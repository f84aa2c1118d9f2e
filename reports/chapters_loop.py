"""Chapters on conduct: the closed loop in pictures, and under stress."""

from idlearn.reports import drawing, wording
from idlearn.reports.blocks import Block, Cell, Grid, Panel, Picture, Section, Text, absent
from idlearn.reports.pictures_loop import MOST_SIGNALS, loop_panel, read_limits, tracks_of
from idlearn.reports.pictures_result import Span, forest_panel
from idlearn.reports.runfiles import Table
from idlearn.reports.view import View, at_row, figures, interval_text

MOST_SCENARIOS = 6
MOST_CONTENDERS = 4
MOST_AXES = 54  # in all closed-loop pictures, for the size of the report
STRESSES = {
    "gain_low": "weaker actuator",
    "gain_high": "stronger actuator",
    "delay": "extra delay",
    "noise": "more noise",
}


def closed_loop(view: View) -> Section:
    """Return the chapter of closed-loop pictures."""
    table = view.table("closed_loop")
    title = "In closed loop"
    hint = "What each controller does with the same setpoints, loads and noise."
    if not len(table):
        return Section("loop", title, hint, [absent("closed_loop", "the closed loop")])
    said = dict(
        zip(
            view.table("scenarios").text("name"),
            view.table("scenarios").text("sentence"),
            strict=True,
        )
    )
    blocks: list[Block] = []
    groups = list(table.groups("scenario"))
    tracks = sum(
        min(MOST_SIGNALS, len(table.where(role=r).unique("signal"))) for r in ("output", "actuator")
    )
    contenders = MOST_CONTENDERS if tracks < 4 else MOST_CONTENDERS - 1
    most = min(MOST_SCENARIOS, max(1, MOST_AXES // (contenders * max(1, tracks))))
    for k, ((scenario,), rows) in enumerate(groups[:most]):
        blocks.append(_scenario(view, scenario, rows, said.get(scenario, ""), k, contenders))
    rest = [wording.clean(s) for (s,), _ in groups[most:]]
    if rest:
        blocks.append(Text(f"Only in the CSV twin: the scenarios {wording.listed(rest)}."))
    return Section("loop", title, hint, blocks)


def _scenario(view: View, scenario: str, rows: Table, sentence: str, k: int, most: int) -> Picture:
    names = view.by_weight(rows.unique("controller"))
    shown = names[:most]
    # the scale has to hold what is shown; who runs away off the page must not flatten the rest
    tracks = tracks_of(_of(rows, shown), read_limits(view.table("signals")), view.units)
    panels: list[Panel] = [
        loop_panel(
            rows.where(controller=n), tracks, _titled(view, n), view.look(n), f"loop {k} {i}"
        )
        for i, n in enumerate(shown)
    ]
    left = [wording.clean(n) for n in names[most:]]
    more = f" Only in the CSV twin: {wording.listed(left)}." if left else ""
    for role in ("output", "actuator"):
        extra = len(rows.where(role=role).unique("signal")) - MOST_SIGNALS
        if extra > 0:
            more += f" {wording.plural(extra, f'more {role}')} only in the CSV twin."
    return Picture(
        f"Scenario: {wording.clean(scenario)}",
        _said(view, rows, shown, scenario),
        panels,
        "closed_loop",
        f"{_asked(sentence)}Line: median over the jury plants, one seed; band: eight "
        "tenths of the plants. Dashed thin line: setpoint. Hatched: beyond the limits. The scales "
        f"are the same for all.{more}".strip(),
    )


def _asked(sentence: str) -> str:
    return f"What is asked: {wording.clean(sentence).rstrip('.')}. " if sentence else ""


def _titled(view: View, name: str) -> str:
    """Return a name with what it is, where that fits beside it."""
    mark = {view.candidate: " (candidate)", view.baseline: " (baseline)"}.get(name, "")
    if not mark and view.kind(name) == "incumbent":
        mark = " (runs today)"
    return wording.label(name, 46 - len(mark)) + mark


def _of(rows: Table, names: list[str]) -> Table:
    import numpy as np

    return rows.take(np.isin(np.array(rows.text("controller"), dtype=object), names))


def _said(view: View, rows: Table, shown: list[str], scenario: str) -> str:
    """Tell how far the median output strays from its setpoint, who is steadiest."""
    strays = {}
    for name in shown:
        own = rows.where(controller=name)
        wanted = own.where(role="setpoint")
        for signal in wanted.unique("signal")[:1]:
            y = drawing.bounded(own.where(role="output", signal=signal).number("median"))
            w = drawing.bounded(wanted.where(signal=signal).number("median"))
            n = min(len(y), len(w))
            gap = abs(y[:n] - w[:n])
            if n and (gap == gap).any():
                mean = float(gap[gap == gap].mean())
                unit = view.units.get(signal, "")
                strays[name] = f"{wording.number(mean, 0.4 * mean)} {unit}".strip()
    if not strays:
        return f"Outputs and actuators of {wording.listed([wording.clean(n) for n in shown])}."
    told = [f"{value} with {wording.clean(name)}" for name, value in strays.items()]
    return (
        f"In the scenario {wording.clean(scenario)} the median output is off its setpoint by "
        f"{wording.listed(told)} on average."
    )


def stress(view: View) -> Section:
    """Return the chapter of the stress trials."""
    table = view.table("stress")
    title, hint = "Under stress", "What happens if the models are wrong in gain, delay or noise."
    if not len(table):
        return Section("stress", title, hint, [absent("stress", "the stress trials")])
    names = [n for n in view.names if n in table.unique("controller")]
    names += [n for n in table.unique("controller") if n not in names]
    ratios = [*table.number("ratio"), *table.number("low"), *table.number("high")]
    limits = drawing.ratio_limits(ratios, most=4.0)
    panels, worst, cells = [], [], {n: [view.name_cell(n)] for n in names}
    head = ["controller"]
    for i, ((kind,), of) in enumerate(table.groups("stress")):
        plain = STRESSES.get(kind, kind.replace("_", " "))
        own = {n: of.where(controller=n) for n in names if n in of.unique("controller")}
        panels.append(
            forest_panel(
                plain,
                [
                    Span(n, at_row(r, "ratio"), at_row(r, "low"), at_row(r, "high"), view.look(n))
                    for n, r in own.items()
                ],
                limits,
                f"stress {i}",
            )
        )
        head.append(wording.clean(plain))
        for n in names:
            cells[n].append(_stressed(own.get(n)))
        if view.candidate in own:
            ratio, low, high = (at_row(own[view.candidate], k) for k in ("ratio", "low", "high"))
            worst.append((ratio, wording.clean(plain), high - low))
    known = [w for w in worst if w[0] == w[0]]
    message = "No figure of the candidate under stress."
    if known:
        value, kind, width = max(known)
        message = (
            f"The worst stress for {wording.clean(view.candidate)} is {kind}, with a cost "
            f"{wording.number(value, width)} times that of "
            f"{wording.clean(view.baseline)} under the same."
        )
    return Section(
        "stress",
        title,
        hint,
        [
            Picture(
                "Relative cost under each stress",
                message,
                panels,
                "stress",
                "The baseline is stressed alike, so 1 means that both suffer alike.",
            ),
            Grid(
                "Relative cost (interval) under each stress",
                head,
                list(cells.values()),
                "stress",
                "The share of episodes with a violation is named where there was any.",
            ),
        ],
    )


def _stressed(row: Table | None) -> Cell:
    if row is None:
        return figures(wording.MISSING)
    told = interval_text(row, ("ratio", "low", "high"))
    rate = at_row(row, "violation_rate")
    return figures(f"{told}; violations {wording.share(rate)}" if rate > 0 else told)
