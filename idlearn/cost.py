"""THE shared cost: one declaration that the reward, the Riccati weights and the verdict all read.

The stage cost at sample k is computed from the measured y[k], the setpoint at k, the applied u[k]
and the move u[k] - u[k-1]; an episode's cost is the mean over its samples. Lower is better.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import ClassVar, Literal, get_args

import numpy as np

from idlearn.errors import InputError

Kind = Literal["tracking", "level", "move", "energy", "outside", "trip"]
Shape = Literal["squared", "absolute"]


@dataclass(frozen=True, kw_only=True)
class CostTerm:
    """One term: weight * (value / scale) ** 2, or weight * abs(value / scale).

    Attributes:
        kind: "tracking" y - setpoint, "level" y - target, "move" u[k] - u[k-1],
            "energy" u - reference, "outside" the distance beyond [low, high], "trip" 1.
        signal: output for tracking and level, actuator for move and energy, either for outside;
            empty for trip.
        weight: factor, >= 0 [-].
        scale: value that costs one weight, > 0 [engineering units].
        shape: "squared" or "absolute".
        target: of a level term [engineering units].
        reference: of an energy term [engineering units].
        low: lower end of an outside term [engineering units].
        high: upper end of an outside term [engineering units].
    """

    __pydantic_config__: ClassVar[dict[str, str]] = {"extra": "forbid"}

    kind: Kind
    signal: str = ""
    weight: float = 1.0
    scale: float = 1.0
    shape: Shape = "squared"
    target: float = 0.0
    reference: float = 0.0
    low: float = -math.inf
    high: float = math.inf

    def __post_init__(self) -> None:
        """Refuse what no cost can be built from."""
        if self.kind not in get_args(Kind):
            raise InputError(f"kind is {self.kind!r}; choose one of {', '.join(get_args(Kind))}")
        if self.shape not in get_args(Shape):
            raise InputError(f"shape is {self.shape!r}; choose squared or absolute")
        if not (math.isfinite(self.weight) and self.weight >= 0):
            raise InputError(f"weight is {self.weight}; give a finite weight of 0 or more")
        if not (math.isfinite(self.scale) and self.scale > 0):
            raise InputError(f"scale is {self.scale}; give a scale above 0 in the signal's unit")
        if not (math.isfinite(self.target) and math.isfinite(self.reference)):
            raise InputError("target and reference have to be finite numbers")
        if self.kind == "outside":
            if math.isnan(self.low) or math.isnan(self.high) or not self.low < self.high:
                raise InputError(f"low {self.low} is not below high {self.high}; swap or mend them")
            if math.isinf(self.low) and math.isinf(self.high):
                raise InputError("an outside term needs low, high or both")
        if self.kind != "trip" and not self.signal:
            raise InputError(f"a {self.kind} term needs the name of its signal")


@dataclass(frozen=True, kw_only=True)
class Cost:
    """A named sum of terms.

    Attributes:
        name: as declared in the sheet.
        terms: at least one.
        primary: whether the verdict is given under this cost.
    """

    name: str
    terms: tuple[CostTerm, ...]
    primary: bool = False

    def __post_init__(self) -> None:
        """Refuse an empty cost, or one that weighs nothing."""
        if not any(t.weight > 0 for t in self.terms):
            raise InputError(f"cost {self.name!r} has no term with a weight above 0; add one")


@dataclass(frozen=True)
class RiccatiWeights:
    """Quadratic part of a cost, in engineering units.

    Attributes:
        output: (n_y,) weight of (y - setpoint or target) squared.
        energy: (n_u,) weight of (u - reference) squared.
        reference: (n_u,) that reference.
        move: (n_u,) weight of (u[k] - u[k-1]) squared.
        target: (n_y,) where a level term asks for a fixed value, else NaN: follow the setpoint.
        exact: whether the cost holds nothing else.
    """

    output: np.ndarray
    energy: np.ndarray
    reference: np.ndarray
    move: np.ndarray
    target: np.ndarray
    exact: bool


class BoundCost:
    """Costs tied to the columns of a plant, ready to score many episodes at once.

    Args:
        costs: the costs to score together.
        outputs: names of the outputs, in column order.
        actuators: names of the actuators, in column order.
        controlled: output index of each setpoint column.

    Raises:
        InputError: a term names a signal that is not there, or tracks one without a setpoint.
    """

    def __init__(
        self,
        costs: Sequence[Cost],
        outputs: Sequence[str],
        actuators: Sequence[str],
        controlled: Sequence[int],
    ) -> None:
        """Find the columns that every term reads."""
        self.costs = tuple(costs)
        self.outputs, self.actuators = tuple(outputs), tuple(actuators)
        self.controlled = tuple(controlled)
        terms = [(i, t) for i, c in enumerate(self.costs) for t in c.terms]
        self.names = tuple(_term_name(t) for _, t in terms)
        self.of_cost = np.array([i for i, _ in terms], dtype=int)
        self._plan = tuple((t, *self._columns(t, self.costs[i].name)) for i, t in terms)
        # (n_terms, n_costs): adds the terms of each cost
        self._sum = (self.of_cost[:, None] == np.arange(len(self.costs))).astype(float)

    def _columns(self, term: CostTerm, cost: str) -> tuple[str, int, int]:
        """Return which array a term reads, its column, and the setpoint's column or -1."""
        where = f"cost {cost!r}, {term.kind} term"
        if term.kind == "trip":
            return "", 0, -1
        if term.kind in ("move", "energy"):
            column = _index(self.actuators, term.signal, where, "actuator")
            return ("move" if term.kind == "move" else "u"), column, -1
        if term.kind == "outside" and term.signal in self.actuators:
            return "u", self.actuators.index(term.signal), -1
        i = _index(self.outputs, term.signal, where, "output")
        if term.kind != "tracking":
            return "y", i, -1
        if i not in self.controlled:
            raise InputError(
                f"{where}: output {term.signal!r} has no setpoint to track; "
                "use a level term, or declare a setpoint signal of it"
            )
        return "y", i, self.controlled.index(i)

    def stage(
        self,
        y: np.ndarray,
        setpoint: np.ndarray,
        u: np.ndarray,
        move: np.ndarray,
        tripped: np.ndarray | None = None,
    ) -> np.ndarray:
        """Return the stage cost, term by term.

        Args:
            y: measured outputs (..., n_y) [engineering units].
            setpoint: (..., n_setpoints) [engineering units].
            u: applied inputs (..., n_u) [engineering units].
            move: u[k] - u[k-1] (..., n_u) [engineering units].
            tripped: (...) bool, or None for no trip.

        Returns:
            (..., n_terms), weighted [-].
        """
        arrays = {"y": y, "u": u, "move": move}
        out = np.empty((len(self._plan), *y.shape[:-1]))
        for row, (term, array, column, target) in zip(out, self._plan, strict=True):
            if term.kind == "trip":
                row[...] = 0.0 if tripped is None else tripped
            elif target >= 0:
                np.subtract(arrays[array][..., column], setpoint[..., target], out=row)
            else:
                row[...] = arrays[array][..., column]
            if term.kind == "outside":
                row[...] = np.maximum(np.maximum(term.low - row, row - term.high), 0.0)
            elif term.kind in ("level", "energy"):
                row -= term.target if term.kind == "level" else term.reference
            if term.scale != 1.0:
                row /= term.scale
            if term.shape == "absolute":
                np.abs(row, out=row)
            else:
                row *= row
            if term.weight != 1.0:
                row *= term.weight
        return np.moveaxis(out, 0, -1)

    def totals(self, terms: np.ndarray) -> np.ndarray:
        """Add the terms (..., n_terms) of each cost: (..., n_costs)."""
        return np.asarray(terms @ self._sum)

    def riccati(self, index: int = 0) -> RiccatiWeights:
        """Return the quadratic part of cost `index`, for Riccati equations."""
        n_y, n_u = len(self.outputs), len(self.actuators)
        output, energy, move = np.zeros(n_y), np.zeros(n_u), np.zeros(n_u)
        pull, target, exact = np.zeros(n_u), np.full(n_y, math.nan), True
        for t in self.costs[index].terms:
            w = t.weight / t.scale**2
            if t.weight == 0:
                continue
            if t.shape != "squared" or t.kind in ("outside", "trip"):
                exact = False
            if t.kind in ("tracking", "level"):
                i = self.outputs.index(t.signal)
                output[i] += w
                if t.kind == "level":
                    exact &= bool(np.isnan(target[i]) or target[i] == t.target)
                    target[i] = t.target
                    exact &= i not in self.controlled
            elif t.kind == "energy":
                j = self.actuators.index(t.signal)
                energy[j] += w
                pull[j] += w * t.reference
            elif t.kind == "move":
                move[self.actuators.index(t.signal)] += w
        reference = np.divide(pull, energy, out=np.zeros(n_u), where=energy > 0)
        return RiccatiWeights(output, energy, reference, move, target, exact)


def _term_name(term: CostTerm) -> str:
    return f"{term.kind} {term.signal}".strip()


def _index(names: tuple[str, ...], name: str, where: str, role: str) -> int:
    if name not in names:
        raise InputError(f"{where}: {name!r} is no {role} of this study; there are {list(names)}")
    return names.index(name)


def primary_of(costs: Sequence[Cost]) -> int:
    """Return the index of the primary cost: the marked one, else the first.

    Raises:
        InputError: no cost, or more than one marked primary.
    """
    marked = [i for i, c in enumerate(costs) if c.primary]
    if not costs:
        raise InputError("the sheet declares no cost; add [costs.NAME] with at least one term")
    if len(marked) > 1:
        names = [costs[i].name for i in marked]
        raise InputError(f"costs {names} are all marked primary; leave one")
    return marked[0] if marked else 0


def default_cost(
    outputs: Sequence[str],
    controlled: Sequence[int],
    actuators: Sequence[str],
    output_scale: Sequence[float],
    move_scale: Sequence[float],
) -> Cost:
    """Return the cost used where the sheet declares none: squared error and squared moves.

    Args:
        outputs: names of the outputs.
        controlled: output index of each setpoint column.
        actuators: names of the actuators.
        output_scale: error that costs 1, per output [engineering units].
        move_scale: move that costs 0.1, per actuator [engineering units].
    """
    tracked = [
        CostTerm(kind="tracking", signal=outputs[i], scale=float(output_scale[i]))
        for i in controlled
    ]
    moves = [
        CostTerm(kind="move", signal=a, weight=0.1, scale=float(s))
        for a, s in zip(actuators, move_scale, strict=True)
    ]
    return Cost(name="regulation", terms=(*tracked, *moves), primary=True)
