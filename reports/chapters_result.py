"""Chapters on the result: clauses, controllers, ladder, costs, closed loop, pairs, stress."""

import math
from collections.abc import Iterable, Sequence

from idlearn.reports import drawing, wording
from idlearn.reports.blocks import Block, Cell, Grid, Picture, Section, Text, absent
from idlearn.reports.pictures_record import paired_panel, plant_ratios
from idlearn.reports.pictures_result import Span, forest_panel, ladder_panel
from idlearn.reports.runfiles import Table, at, number_at, text_at
from idlearn.reports.view import View, at_row, figures, interval_text

MOST_PANELS = 6  # contenders in one picture; the others are in the CSV twin
CLAUSES = {
    "benefit": "Benefit: worthwhile gain",
    "harm_violation": "Harm: violations",
    "harm_worst_tenth": "Harm: worst tenth of the episodes",
    "harm_travel": "Harm: actuator travel",
    "harm_offset": "Harm: offset left",
    "stress_gain_low": "Stress: weaker actuator",
    "stress_gain_high": "Stress: stronger actuator",
    "stress_delay": "Stress: extra delay",
    "stress_noise": "Stress: more noise",
    "evidence_audit": "Evidence: audit of the log",
    "evidence_validation": "Evidence: validation of the models",
    "evidence_coverage": "Evidence: coverage of the bands",
    "evidence_support": "Evidence: inside the log's region",
    "evidence_optimism": "Evidence: optimism",
    "evidence_baseline": "Evidence: baseline at its optimum",
    "evidence_ledger": "Evidence: equal treatment",
}


def clauses(view: View) -> Section:
    """Return the chapter of the clauses."""
    listed = at(view.run.verdict, "clauses") or []
    rows = [
        [
            Cell(_clause_name(text_at(c, "name"))),
            Cell(text_at(c, "state"), sign=text_at(c, "state")),
            figures(_figure(number_at(c, "figure"), number_at(c, "limit"))),
            figures(wording.plain(number_at(c, "limit"))),
            Cell(wording.clean(text_at(c, "sentence"))),
        ]
        for c in listed
    ]
    tally = [
        f"{n} {state}"
        for state in ("met", "failed", "open")
        if (n := sum(c.get("state") == state for c in listed))
    ]
    blocks: list[Block] = [
        Text(
            f"Of {wording.plural(len(listed), 'clause')}, {wording.listed(tally)}. A GO needs "
            "every one of them met; one failed clause of harm or stress makes a NO\u2011GO."
        ),
        Grid(
            "Clauses of the verdict",
            ("clause", "state", "figure", "limit", "in words"),
            rows,
        ),
    ]
    return Section(
        "clauses",
        "Clauses",
        "Which conditions hold, which do not, which are open.",
        blocks if listed else [Text("The verdict lists no clauses.")],
    )


def _figure(value: float, limit: float) -> str:
    """Write a clause's figure with as many digits as it takes to tell it from its limit."""
    near = value != limit and abs(value - limit) < 0.01 * abs(limit)
    return wording.plain(value, 4 if near else 3)


def _clause_name(name: str) -> str:
    plain = wording.clean(name).replace("_", " ")
    return CLAUSES.get(name, plain[:1].upper() + plain[1:])


def controllers(view: View) -> Section:
    """Return the chapter with the table of controllers, under the primary cost."""
    table = (
        view.table("contenders").where(cost=view.cost) if view.cost else (view.table("contenders"))
    )
    title, hint = "Controllers", "Who took part, what each one cost and how it behaved."
    if not len(table):
        return Section("controllers", title, hint, [absent("contenders", "the controllers")])
    rows = {n: table.where(name=n) for n in view.names if n in table.unique("name")}
    cost, conduct, effort = [], [], []
    for name, row in rows.items():

        def one(column: str, row: Table = row) -> float:
            return at_row(row, column)

        def span(column: str, low: str, high: str, row: Table = row) -> Cell:
            return figures(interval_text(row, (column, low, high)))

        label = view.name_cell(name)
        cost.append(
            [
                label,
                Cell(view.role(name)),
                span("mean", "low", "high"),
                span("ratio", "ratio_low", "ratio_high"),
                figures(wording.share(one("improvement"))),
                figures(wording.number(one("worst_tenth"), one("high") - one("low"))),
            ]
        )
        bound = wording.share(one("violation_high"))
        seen = wording.share(one("violation_rate"))
        conduct.append(
            [
                label,
                figures(seen if bound == wording.MISSING else f"{seen} (at most {bound})"),
                figures(wording.plain(one("travel"))),
                figures(wording.plain(one("offset"))),
                figures(wording.share(one("support"))),
                figures(wording.number(one("optimism_gap"), 0.1)),
                figures(wording.number(one("peak"), 0.5)),
            ]
        )
        effort.append(
            [
                label,
                figures(wording.count(one("plant_steps"))),
                figures(wording.count(one("runs"))),
                figures(wording.duration(one("seconds"))),
            ]
        )
    head = [
        "controller",
        "role",
        "mean cost (interval)",
        "relative to baseline (interval)",
        "better in share of episodes",
        "worst tenth",
    ]
    if not any(wording.is_known(v) for v in table.number("improvement")):
        head.pop(4)
        for line in cost:
            line.pop(4)
    return Section(
        "controllers",
        title,
        hint,
        [
            Grid(
                f"Cost “{wording.clean(view.cost)}” on the jury plants, lower is better",
                head,
                cost,
                "contenders",
            ),
            Grid(
                "Conduct on the jury plants",
                (
                    "controller",
                    "violations (bound)",
                    "travel",
                    "offset",
                    "support",
                    "optimism gap",
                    "sensitivity peak",
                ),
                conduct,
                "contenders",
                "Violations: share of episodes, with the highest rate the trials do not rule out. "
                "The other terms are explained under Words.",
            ),
            Grid(
                "What tuning or training used",
                ("controller", "plant-steps", "runs", "time"),
                effort,
                "contenders",
            ),
        ],
    )


def ladder(view: View) -> Section:
    """Return the chapter on where the gain comes from."""
    table = view.table("ladder")
    title = "Where the gain comes from"
    hint = "From what runs today, rung by rung, to the least cost any controller could reach."
    if not len(table):
        return Section("ladder", title, hint, [absent("ladder", "the ladder of gains")])
    rows = []
    means = table.number("mean")
    for i, name in enumerate(table.text("step")):
        mean, low, high = (at_row(table, k, i) for k in ("mean", "low", "high"))
        step = at_row(table, "step_ratio", i)
        known = i and wording.is_known(means[i - 1], mean) and means[i - 1] > 0
        if known and not table.has("step_ratio"):
            step = float(means[i] / means[i - 1])
        figure = wording.with_interval(mean, low, high)
        note = figure if math.isnan(step) else f"{_percent(step)} to {figure}"
        rows.append(Span(name, mean, low, high, view.look(name), note))
    with_figure = [i for i in range(len(means)) if math.isfinite(means[i])]
    message = "The ladder has no two rungs with figures."
    if len(with_figure) > 1:
        first, last = with_figure[0], with_figure[-1]
        names = [wording.clean(n) for n in table.text("step")]

        def told(i: int) -> str:
            return wording.number(
                float(means[i]), at_row(table, "high", i) - at_row(table, "low", i)
            )

        biggest = min(
            range(1, len(with_figure)),
            key=lambda k: means[with_figure[k]] / (means[with_figure[k - 1]] or math.nan),
        )
        message = (
            f"From {names[first]} to {names[last]} the mean cost goes from "
            f"{told(first)} to {told(last)}; the "
            f"largest step down leads to {names[with_figure[biggest]]}."
        )
    return Section(
        "ladder",
        title,
        hint,
        [
            Picture(
                "Mean cost from rung to rung",
                message,
                [ladder_panel(rows, "")],
                "ladder",
                "Beside each rung: its step from the rung before, and its mean cost with the "
                "interval, drawn thick. A rung that a classical controller reaches is no merit of "
                "learning.",
            )
        ],
    )


def _percent(step: float) -> str:
    percent = 100 * (step - 1)
    fine = 1 if abs(percent) < 10 else 0
    text = f"{percent:+.{fine}f}"
    return f"{text if float(text) else text[1:]}{wording.THIN}%".replace("-", "−")


def costs(view: View) -> Section:
    """Return the chapter that judges everybody under every declared cost."""
    table = view.table("contenders")
    title, hint = "Under each declared cost", "Whether the order changes with what is asked for."
    names = table.unique("cost")
    if not len(table):
        return Section("costs", title, hint, [absent("contenders", "the other costs")])
    ratios = [*table.number("ratio"), *table.number("ratio_low"), *table.number("ratio_high")]
    limits = drawing.ratio_limits(ratios, most=4.0)
    panels, order = [], []
    for i, cost in enumerate(names):
        rows = table.where(cost=cost)
        spans = [
            Span(
                n,
                at_row(rows.where(name=n), "ratio"),
                at_row(rows.where(name=n), "ratio_low"),
                at_row(rows.where(name=n), "ratio_high"),
                view.look(n),
            )
            for n in view.names
            if n in rows.unique("name")
        ]
        mark = " (decides)" if cost == view.cost else ""
        panels.append(
            forest_panel(
                f"{cost}{mark}",
                spans,
                limits,
                f"costs {i}",
                (1.0, view.worthwhile) if mark else (1.0,),
            )
        )
        means = {
            n: at_row(rows.where(name=n), "mean")
            for n in rows.unique("name")
            if view.kind(n) != "floor"
        }
        known = {n: m for n, m in means.items() if math.isfinite(m)}
        if known:
            order.append(
                f"{wording.clean(min(known, key=lambda n: known[n]))} under “{wording.clean(cost)}”"
            )
    one = "One cost is declared, so there is no second order to compare with. " * (len(names) == 1)
    message = (
        f"{one}The cheapest controller is {wording.listed(order)}."
        if order
        else (f"{one}No controller has a figure.")
    )
    blocks: list[Block] = [
        Picture(
            "Relative cost of every contender",
            message,
            panels,
            "contenders",
            "All were tuned and trained under the cost that decides. Arrows point to figures "
            "beyond the axis; bars carry the whole interval.",
        )
    ]
    if len(names) > 1:
        blocks.append(_cost_grid(view, names))
    return Section("costs", title, hint, blocks)


def _cost_grid(view: View, names: Sequence[str]) -> Grid:
    table = view.table("contenders")
    rows = []
    for name in view.names:
        own = table.where(name=name)
        if len(own):
            rows.append(
                [view.name_cell(name)]
                + [
                    figures(interval_text(own.where(cost=c), ("mean", "low", "high")))
                    for c in names
                ]
            )
    return Grid(
        "Mean cost (interval) under each cost",
        ("controller", *(wording.label(n, 40) for n in names)),
        rows,
        "contenders",
    )


def pairs(view: View) -> Section:
    """Return the chapter that compares plant by plant."""
    table = view.table("paired")
    title, hint = "Plant by plant", "Whether the result hangs on a few of the plausible plants."
    held = {
        n: plant_ratios(rows)
        for (n,), rows in table.groups("controller")
        if view.kind(n) != "floor"
    }
    held = {n: held[n] for n in view.by_weight(list(held)) if held[n]}
    if not held:
        return Section("pairs", title, hint, [absent("paired", "the pairs")])
    shown = list(held)[:MOST_PANELS]
    # episodes spread far more than plants do; what is compared are the plants
    limits = drawing.ratio_limits([r[0] for n in shown for r in held[n].values()], most=3.0)
    panels = [paired_panel(held[n], n, view.look(n), limits, view.worthwhile) for n in shown]
    first = shown[0]
    better = sum(r[0] < 1 for r in held[first].values())
    message = (
        f"{wording.clean(first)} costs less than {wording.clean(view.baseline)} on {better} of "
        f"{wording.plural(len(held[first]), 'jury plant')}."
    )
    return Section(
        "pairs",
        title,
        hint,
        [
            Picture(
                f"Cost relative to {wording.clean(view.baseline)} on each jury plant",
                message,
                panels,
                "paired",
                "Marker: ratio of the mean costs on one plant. Line: from the lowest to the "
                f"highest tenth of its episodes, no interval of confidence; what goes beyond the "
                f"scale is cut.{_left_out(held, shown)}",
            )
        ],
    )


def _left_out(everyone: Iterable[str], shown: Sequence[str]) -> str:
    rest = [wording.clean(n) for n in everyone if n not in shown]
    return f" Only in the CSV twin: {wording.listed(rest)}." if rest else ""
