"""The parts a report is made of; the template knows how each one is set."""

from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import ClassVar

from markupsafe import Markup

from idlearn.reports.inks import Look
from idlearn.reports.wording import MISSING


@dataclass(frozen=True)
class Cell:
    """One cell of a table.

    Attributes:
        text: what stands in it.
        look: line and marker to show before the text.
        sign: "met", "failed" or "open" to show before the text.
        marked: whether to set it apart, for what must not be overlooked.
        digits: whether it holds figures, to be set flush right.
    """

    text: str
    look: Look | None = None
    sign: str = ""
    marked: bool = False
    digits: bool = False

    @property
    def long(self) -> bool:
        """Whether it holds a word so long that it has to break anywhere."""
        return any(len(w) > 24 for w in self.text.split())


@dataclass(frozen=True)
class Grid:
    """A table.

    Attributes:
        caption: what it shows.
        head: names of the columns.
        rows: cells; the first of each row names it.
        csv: name of the CSV twin, "" for none.
        note: below the table.
    """

    kind: ClassVar[str] = "grid"
    caption: str
    head: Sequence[str]
    rows: Sequence[Sequence[Cell]]
    csv: str = ""
    note: str = ""

    @property
    def gaps(self) -> str:
        """Say what the mark for a missing figure means, if there is one."""
        gaps = any(c.text == MISSING for row in self.rows for c in row)
        return f"{MISSING} stands where there is nothing to tell." if gaps else ""


@dataclass(frozen=True)
class Panel:
    """One drawing of a figure.

    Attributes:
        svg: the drawing.
        phone: the same drawn narrow, to show instead on a small screen; None where one serves all.
        wide: whether it takes the whole width.
    """

    svg: Markup
    phone: Markup | None = None
    wide: bool = False


@dataclass(frozen=True)
class Picture:
    """A figure.

    Attributes:
        title: what it shows.
        message: what it says, in one sentence; also its text alternative.
        panels: its drawings.
        csv: name of the CSV twin.
        hint: how to read it.
    """

    kind: ClassVar[str] = "picture"
    title: str
    message: str
    panels: Sequence[Panel]
    csv: str
    hint: str = ""


@dataclass(frozen=True)
class Text:
    """A paragraph."""

    kind: ClassVar[str] = "text"
    text: str


@dataclass(frozen=True)
class Points:
    """A list of sentences, each with a word before it or none."""

    kind: ClassVar[str] = "points"
    points: Sequence[tuple[str, str]]


@dataclass(frozen=True)
class Blank:
    """A field for the owner to fill: what belongs there and how many ruled lines it has."""

    title: str
    hint: str
    lines: int = 2


@dataclass(frozen=True)
class Blanks:
    """Fields for the owner to fill."""

    kind: ClassVar[str] = "blanks"
    blanks: Sequence[Blank]


Block = Grid | Picture | Text | Points | Blanks


@dataclass(frozen=True)
class Section:
    """A section.

    Attributes:
        key: its address within the page.
        title: its heading.
        hint: one sentence on what it answers.
        blocks: its parts.
    """

    key: str
    title: str
    hint: str
    blocks: Sequence[Block] = field(default_factory=tuple)


def absent(name: str, what: str) -> Text:
    """Say that a table is not there or empty."""
    return Text(
        f"This run has no rows in tables/{name}.csv, so there is nothing to show of {what}."
    )
