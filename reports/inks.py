"""Inks, lines and markers: one contender looks the same in every picture of a report.

The inks keep apart in simulated colour deficiency and differ in lightness; line and marker tell
them apart without any colour at all.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

PAPER = "#fbfaf6"
INK = "#1c2530"
QUIET = "#55606b"  # second voice: axes, hints
RULE = "#c9c6ba"
WASH = "#eceae1"  # shading behind what was not used
MODEL = "#24506e"
BAND = "#c3d3dd"
SECOND = "#8a5a12"
SECOND_BAND = "#e9dcc3"


@dataclass(frozen=True)
class Look:
    """How one contender is drawn.

    Attributes:
        colour: of line and marker.
        dash: lengths of stroke and gap [line widths]; empty for a solid line.
        marker: matplotlib's name of the marker.
    """

    colour: str
    dash: tuple[float, ...]
    marker: str

    @property
    def line(self) -> Any:
        """Return the line style as matplotlib takes it."""
        return (0, self.dash) if self.dash else "-"

    @property
    def band(self) -> str:
        """Return the ink thinned by paper, for bands."""
        return blend(self.colour, PAPER, 0.24)


CANDIDATE = Look("#a8371c", (), "o")
BASELINE = Look("#153e5c", (5, 1.6), "s")
INCUMBENT = Look("#7c7a78", (1.4, 1.4), "D")
FLOOR = Look(INK, (0.9, 2.4), "|")
OTHERS = (
    Look("#0c5a4e", (7, 1.6, 1.4, 1.6), "^"),
    Look("#b3831a", (3, 1.4), "v"),
    Look("#7d4a9e", (8, 2.4), "P"),
    Look("#3f97cf", (4, 1.3, 1, 1.3, 1, 1.3), "X"),
)
_MARKERS = "hd*p8H"


def blend(colour: str, ground: str, part: float) -> str:
    """Return `part` of a colour on a ground, both as #rrggbb."""
    mixed = [
        round(part * int(colour[i : i + 2], 16) + (1 - part) * int(ground[i : i + 2], 16))
        for i in (1, 3, 5)
    ]
    return "#" + "".join(f"{c:02x}" for c in mixed)


def look_of(
    controllers: Sequence[Mapping[str, Any]], candidate: str, baseline: str
) -> dict[str, Look]:
    """Return contender -> look.

    Args:
        controllers: entries of verdict.json, each with name and kind.
        candidate: name, "" if there is none.
        baseline: name, "" if there is none.
    """
    looks: dict[str, Look] = {}
    left = 0
    for c in controllers:
        name, kind = str(c.get("name", "")), c.get("kind")
        if name in looks:
            continue
        if name == candidate:
            looks[name] = CANDIDATE
        elif name == baseline:
            looks[name] = BASELINE
        elif kind == "floor":
            looks[name] = FLOOR
        elif kind == "incumbent" and INCUMBENT not in looks.values():
            looks[name] = INCUMBENT
        else:
            look, rounds = OTHERS[left % len(OTHERS)], left // len(OTHERS)
            if rounds:  # inks come round again, with another line and marker
                dash = OTHERS[(left + rounds) % len(OTHERS)].dash
                marker = _MARKERS[(left - len(OTHERS)) % len(_MARKERS)]
                look = Look(look.colour, dash, marker)
            looks[name] = look
            left += 1
    return looks
