"""The chapter on the models: what they can and cannot do."""

import numpy as np

from idlearn.reports import drawing, wording
from idlearn.reports.blocks import Block, Cell, Grid, Panel, Picture, Section, absent
from idlearn.reports.pictures_models import free_run_panel, residual_panel, step_panel
from idlearn.reports.view import View, at_row, figures, interval_text

MOST_CURVES = 6  # drawings of one kind; the others are in the CSV twin
MOST_STRUCTURES = 6


def models(view: View) -> Section:
    """Return the chapter on what the models can and cannot do."""
    return Section(
        "models",
        "The models",
        "What they can reproduce of data they have not seen, and what not.",
        [_free_run(view), _residuals(view), _steps(view), _tried(view), *_structures(view)],
    )


def more(n: int, noun: str) -> str:
    """Say how many drawings of a kind there is no room for."""
    left = n - MOST_CURVES
    return f" {wording.plural(left, f'more {noun}')} only in the CSV twin." if left > 0 else ""


def _free_run(view: View) -> Block:
    table = view.table("free_run")
    groups = list(table.groups("part", "output"))
    if not groups:
        return absent("free_run", "the free run of the models")
    inside: list[str] = []
    loose: list[str] = []
    panels: list[Panel] = []
    for (part, output), rows in groups:
        measured, low, high = (rows.number(k) for k in ("measured", "low", "high"))
        known = np.isfinite(measured) & np.isfinite(low) & np.isfinite(high)
        if known.any():
            held = (measured >= low) & (measured <= high)
            inside.append(
                f"{wording.share(float(held[known].mean()))} of {wording.clean(output)} "
                f"({wording.clean(part)} models)"
            )
            if np.median((high - low)[known]) > np.ptp(measured[known]) > 0:
                loose.append(f"{wording.clean(output)} ({wording.clean(part)} models)")
        if len(panels) < MOST_CURVES:
            panels.append(free_run_panel(rows, part, output, view.units.get(output, "")))
    message = "Measured data over the free run of the models."
    if inside:
        message = f"Of the rows shown, the bands hold {wording.listed(inside)}."
    if loose:
        message += (
            f" Mostly wider than all the data are the bands of {wording.listed(loose)}: that they "
            "hold the data shows nothing."
        )
    return Picture(
        "Free run on held-out data",
        message,
        panels,
        "free_run",
        "Solid: measured. Dashed, with a band that should hold 95 % of the data: simulated from "
        f"past inputs alone, without ever looking at the output.{more(len(groups), 'drawing')}",
    )


def _residuals(view: View) -> Block:
    table = view.table("residuals")
    groups = list(table.groups("output", "against"))
    if not groups:
        return absent("residuals", "the residuals")
    value, limit = np.abs(drawing.bounded(table.number("correlation"))), table.number("limit")
    counts = np.isfinite(value) & np.isfinite(limit)
    own = np.array([a == "itself" for a in table.text("against")], dtype=bool)
    counts &= ~((table.number("lag") == 0) & own)
    beyond = int((value[counts] > limit[counts]).sum())
    parts = table.unique("part")
    return Picture(
        "Correlation of the residuals",
        f"{wording.count(beyond)} of {wording.plural(int(counts.sum()), 'correlation')} are beyond "
        "their limits; about one in twenty would be by chance.",
        [
            residual_panel(rows, output, against, parts)
            for (output, against), rows in groups[:MOST_CURVES]
        ],
        "residuals",
        "What the models leave unexplained should be related neither to its own past nor to the "
        f"inputs. {_parts(parts)}{more(len(groups), 'drawing')}",
    )


def _parts(parts: list[str]) -> str:
    shapes = ("disc", "square", "triangle")
    return " ".join(
        f"{shapes[i % 3].capitalize()}: models of the {wording.clean(p)} part."
        for i, p in enumerate(parts)
    )


def _steps(view: View) -> Block:
    table = view.table("step_response")
    groups = list(table.groups("input", "output"))
    if not groups:
        return absent("step_response", "the step responses")
    panels, told = [], []
    for (source, target), rows in groups[:MOST_CURVES]:
        units = (view.units.get(source, ""), view.units.get(target, ""))
        panels.append(step_panel(rows, source, target, units))
    (source, target), rows = groups[0]
    for (part,), own in rows.groups("part"):
        last = interval_text(own, ("estimate", "low", "high"), len(own) - 1)
        told.append(f"{last} by the {wording.clean(part)} models")
    return Picture(
        "Step responses",
        f"After the time shown a unit step of {wording.clean(source)} has moved "
        f"{wording.clean(target)} by {wording.listed(told)}.",
        panels,
        "step_response",
        "Dashed with squares: practice models. Solid with triangles: jury models. Bands: 95 % of "
        "the plausible plants. Where the two disagree, the log does not settle the matter."
        f"{more(len(groups), 'drawing')}",
    )


def _tried(view: View) -> Block:
    table = view.table("models")
    if not len(table):
        return absent("models", "the models that were tried")
    rows = []
    passed, chosen = table.flag("passed"), table.flag("chosen")
    for i, row in enumerate(table.rows()):

        def one(column: str, i: int = i) -> float:
            return at_row(table, column, i)

        rows.append(
            [
                Cell(wording.clean(row.get("name", "")) + (" (chosen)" if chosen[i] else "")),
                Cell(wording.clean(row.get("part", "")) or wording.MISSING),
                Cell(_structure(row.get("family", ""), row.get("orders", ""))),
                figures(wording.number(one("free_run_nrmse"), 0.1)),
                # a share or percent, as the validation has it
                figures(wording.number(one("free_run_vaf"), 5 if one("free_run_vaf") > 2 else 0.1)),
                figures(wording.number(one("k_step_nrmse"), 0.1)),
                figures(wording.share(one("coverage95"))),
                figures(_p_value(one("whiteness_p"))),
                figures(wording.number(one("widening"), 0.5)),
                Cell(
                    _judged(bool(passed[i]), row.get("reasons", "")),
                    sign="met" if passed[i] else "failed",
                ),
            ]
        )
    return Grid(
        f"Models: {int(passed.sum())} of {len(table)} passed validation",
        (
            "model",
            "part",
            "family, orders",
            "free run NRMSE",
            "free run VAF",
            "k-step NRMSE",
            "coverage",
            "whiteness p",
            "widened by",
            "validation",
        ),
        rows,
        "models",
        "NRMSE: 0 is perfect. VAF: 1 (or 100) is perfect. Coverage should reach 95 %. Whiteness p: "
        "below 0.05 the residuals hold something that the model does not.",
    )


def _structure(family: str, orders: str) -> str:
    """Return family and orders; the orders alone where they begin with a family themselves."""
    named = orders.split(" ")[0].isalpha()
    return wording.clean(orders if named else f"{family} {orders}".strip())


def _structures(view: View) -> list[Block]:
    """Return the best of the structures that were tried in each part of the log."""
    grids: list[Block] = []
    for part in ("practice", "jury"):
        table = view.table(f"structures_{part}")
        shown = [c for c in table.columns if c != "status"]
        if not len(table) or not shown:
            continue
        rows = []
        for i, row in enumerate(table.rows()[:MOST_STRUCTURES]):
            cells = [Cell(wording.clean(row[shown[0]]))]
            for c in shown[1:]:
                value = at_row(table, c, i)
                text = _p_value(value) if c.endswith("_p") else wording.plain(value)
                cells.append(figures(text if wording.is_known(value) else wording.clean(row[c])))
            rows.append(cells)
        grids.append(
            Grid(
                f"Structures tried on the {part} part: the best {len(rows)} of {len(table)}",
                [
                    wording.clean(c).replace("_", " ")
                    if "free" in c or "error" in c
                    else wording.clean(c)
                    for c in shown
                ],
                rows,
                table.name,
            )
        )
    return grids


def _p_value(p: float) -> str:
    return "below 0.001" if p < 0.001 else wording.plain(p, 2)


def _judged(passed: bool, reasons: str) -> str:
    word = "passed" if passed else "did not pass"
    return f"{word}: {wording.clean(reasons)}" if reasons else word
