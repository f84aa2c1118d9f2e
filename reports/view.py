"""What the chapters share: who is who, how each one looks, which numbers belong together."""

import math
from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property

from idlearn.reports import wording
from idlearn.reports.blocks import Cell
from idlearn.reports.inks import Look, look_of
from idlearn.reports.runfiles import RunFiles, Table, at, number_at, text_at

SIDES = {
    "incumbent": "runs today",
    "classical": "classical, tuned",
    "learned": "learned",
    "floor": "floor, not a controller",
}


@dataclass(frozen=True)
class View:
    """A run folder seen by the report.

    Attributes:
        run: the folder.
    """

    run: RunFiles

    def table(self, name: str) -> Table:
        """Return tables/NAME.csv."""
        return self.run.table(name)

    @cached_property
    def candidate(self) -> str:
        """Name of the candidate, "" if there is none."""
        return text_at(self.run.verdict, "candidate")

    @cached_property
    def baseline(self) -> str:
        """Name of the baseline, "" if there is none."""
        return text_at(self.run.verdict, "baseline")

    @cached_property
    def cost(self) -> str:
        """Name of the cost that the verdict is given under."""
        return text_at(self.run.verdict, "cost")

    @cached_property
    def outcome(self) -> str:
        """Return "go", "no-go" or "undecided"."""
        return text_at(self.run.verdict, "verdict")

    @cached_property
    def names(self) -> list[str]:
        """Return all contenders in the order of verdict.json, then any that only tables know."""
        listed = [text_at(c, "name") for c in at(self.run.verdict, "controllers") or []]
        return list(dict.fromkeys([*listed, *self.table("contenders").unique("name")]))

    @cached_property
    def looks(self) -> dict[str, Look]:
        """Return contender -> look."""
        known = {text_at(c, "name"): c for c in at(self.run.verdict, "controllers") or []}
        kinds = dict(
            zip(
                self.table("contenders").text("name"),
                self.table("contenders").text("kind"),
                strict=True,
            )
        )
        entries = [known.get(n) or {"name": n, "kind": kinds.get(n, "")} for n in self.names]
        return look_of(entries, self.candidate, self.baseline)

    def look(self, name: str) -> Look:
        """Return the look of a contender, of a plain one where the name is not known."""
        return self.looks.get(name) or next(iter(look_of([{"name": name}], "", "").values()))

    def kind(self, name: str) -> str:
        """Return "incumbent", "classical", "learned", "floor" or ""."""
        for c in at(self.run.verdict, "controllers") or []:
            if c.get("name") == name:
                return text_at(c, "kind")
        found = self.table("contenders").where(name=name).text("kind")
        return found[0] if found else ""

    def role(self, name: str) -> str:
        """Return what a contender is in this study, in words."""
        if name == self.candidate and name:
            return "candidate, learned"
        if name == self.baseline and name:
            return (
                "baseline, runs today"
                if self.kind(name) == "incumbent"
                else ("baseline, classical, tuned")
            )
        return SIDES.get(self.kind(name), self.kind(name))

    def by_weight(self, names: Sequence[str]) -> list[str]:
        """Return names with candidate, baseline and incumbent first."""
        first = [self.candidate, self.baseline]
        first += [n for n in names if self.kind(n) == "incumbent"]
        return list(dict.fromkeys([n for n in first if n in names] + list(names)))

    @cached_property
    def units(self) -> dict[str, str]:
        """Return signal -> unit."""
        return self.run.units()

    @cached_property
    def worthwhile(self) -> float:
        """Return the cost ratio at which the gain is just worthwhile, NaN if unknown."""
        for clause in at(self.run.verdict, "clauses") or []:
            if clause.get("name") == "benefit":
                return number_at(clause, "limit")
        return 1 - number_at(self.run.manifest, "acceptance", "limits", "least_gain")

    @cached_property
    def confidence(self) -> float:
        """Return the confidence of the intervals, NaN if unknown."""
        told = number_at(self.run.verdict, "ratio", "confidence")
        if math.isfinite(told):
            return told
        return number_at(self.run.manifest, "acceptance", "limits", "confidence")

    def name_cell(self, name: str) -> Cell:
        """Return the cell that names a contender, with its line and marker."""
        return Cell(wording.clean(name), look=self.look(name))


def figures(text: str) -> Cell:
    """Return a cell of figures."""
    return Cell(text, digits=True)


def interval_text(table: Table, columns: tuple[str, str, str], row: int = 0) -> str:
    """Return a figure with its interval from three columns of a row."""
    value, low, high = (at_row(table, c, row) for c in columns)
    return wording.with_interval(value, low, high)


def at_row(table: Table, column: str, row: int = 0) -> float:
    """Return one number of a table, NaN where there is none."""
    values = table.number(column)
    return float(values[row]) if row < len(values) else math.nan
