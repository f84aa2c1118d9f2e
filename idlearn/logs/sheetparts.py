"""The sheet sections [[log]], [timing], [signals.*], and one sentence for what is wrong there."""

import math
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Annotated, Any, Literal, TypeVar

from pydantic import (
    BaseModel,
    BeforeValidator,
    ConfigDict,
    Field,
    ValidationError,
    field_validator,
    model_validator,
)

from idlearn.errors import SheetError
from idlearn.logs.signals import Signal, signal_fault

Model = TypeVar("Model", bound=BaseModel)
Code = str | int | float
_STRICT = ConfigDict(extra="forbid", strict=True, frozen=True)
# Names that pydantic puts into a place for the branches of a union; no keys of the sheet.
_BRANCHES = {"str", "int", "float", "bool", "list", "dict", "tuple", "none"}


class LogEntry(BaseModel):
    """One [[log]]: a file and how to read it.

    Attributes:
        path: file, relative to the sheet; CSV, TSV, Parquet or Feather.
        time: column of time stamps or of elapsed seconds; empty if rows are equally spaced.
        zone: IANA time zone of stamps without offset.
        duplicates: what to do with rows of the same stamp: "refuse", keep the "last" one, or
            take their "mean".
        decimal: decimal sign of a text file, "." or ",".
    """

    model_config = _STRICT

    path: Annotated[str, BeforeValidator(lambda v: str(v) if isinstance(v, Path) else v)] = Field(
        min_length=1
    )
    time: str = ""
    zone: str = ""
    duplicates: Literal["refuse", "last", "mean"] = "refuse"
    decimal: Literal[".", ","] = "."

    @field_validator("zone")
    @classmethod
    def _known_zone(cls, zone: str) -> str:
        from zoneinfo import ZoneInfo

        if zone:
            try:
                ZoneInfo(zone)
            except (KeyError, ValueError, OSError):
                raise ValueError(
                    f"is {zone!r}, which is no time zone known here; "
                    'give an IANA name such as "Europe/Oslo"'
                ) from None
        return zone


class Timing(BaseModel):
    """Section [timing].

    Attributes:
        sample_time_s: sample time [s]; None: taken from the time column.
        latency_samples: samples between a decision and its effect.
    """

    model_config = _STRICT

    sample_time_s: float | None = Field(default=None, gt=0, allow_inf_nan=False)
    latency_samples: int = Field(default=0, ge=0)


class SignalEntry(BaseModel):
    """Section [signals.NAME]: see `Signal`, and what a mode or quality column holds.

    Attributes:
        good: values of a "quality" or "mode" column at which rows may be used. A quality column
            needs them; a mode column without them only ends a segment where its value changes.
    """

    model_config = _STRICT

    role: Literal["actuator", "output", "setpoint", "disturbance", "mode", "quality", "ignore"]
    unit: str = ""
    low: float = -math.inf
    high: float = math.inf
    rate_per_s: float = math.inf
    resolution: float = 0.0
    trip_low: float = -math.inf
    trip_high: float = math.inf
    of: str = ""
    good: list[Code] = Field(default_factory=list)

    @model_validator(mode="after")
    def _consistent(self) -> "SignalEntry":
        # a Signal that is never built, so that the fault reads without a signal's name
        bare = Signal.__new__(Signal)
        for key, value in self._figures().items():
            object.__setattr__(bare, key, value)
        fault = signal_fault(bare)
        if fault:
            raise ValueError(fault)
        if self.role == "quality" and not self.good:
            raise ValueError(
                'good is missing; list the values at which rows may be used, as in good = ["Good"]'
            )
        if self.good and self.role not in ("quality", "mode"):
            raise ValueError(f"good belongs to the roles quality and mode, not to {self.role}")
        return self

    def signal(self, name: str) -> Signal:
        """Return the signal of a column."""
        return Signal(name=name, **self._figures())

    def _figures(self) -> dict[str, Any]:
        return self.model_dump(exclude={"good"})


def build_section(model: type[Model], table: object, where: str) -> Model:
    """Build a section from its table.

    Args:
        model: class of the section.
        table: what the sheet holds there.
        where: place in the sheet, for the message.

    Raises:
        SheetError: with one sentence that names the place.
    """
    if not isinstance(table, Mapping):
        raise SheetError(f"{where} is {_shown(table)}; it has to be a table of keys")
    try:
        return model.model_validate(dict(table))
    except ValidationError as error:
        raise SheetError(explain_validation(error, where, tuple(model.model_fields))) from None


def explain_validation(
    error: ValidationError, where: str, known: Sequence[str] | None = None
) -> str:
    """Say in one sentence what the first fault of a failed validation is.

    Args:
        error: from pydantic.
        where: place of the table in the sheet, such as "kiln.toml: signals.heater".
        known: keys that the table may have; named when an unknown one is met.

    Returns:
        the place as a key path, what is wrong, and what to do.
    """
    first = error.errors(include_url=False)[0]
    kind, given, context = first["type"], first.get("input"), first.get("ctx", {})
    *path, key = _keys(first["loc"]) or [""]
    if kind in ("extra_forbidden", "unexpected_keyword_argument"):
        has = f"; it has {', '.join(known)}" if known and not path else "; correct or remove it"
        return f"{_place(where, path)}: unknown key {key!r}{has}"
    if kind in ("missing", "missing_argument", "missing_keyword_only_argument"):
        return f"{_place(where, path)}: key {key!r} is missing; add it"
    place = _place(where, [*path, key] if key else path)
    fault = " ".join(_fault(kind, given, context, first["msg"]).split())
    return f"{place} {fault}" if fault.startswith("is ") else f"{place}: {fault}"


def _fault(kind: str, given: object, context: Mapping[str, Any], msg: str) -> str:
    """Return what is wrong with a value, to be read after its place."""
    if kind in ("value_error", "assertion_error"):
        return str(context.get("error", msg))
    if kind in ("literal_error", "enum"):
        return f"is {_shown(given)}; choose one of {context.get('expected', 'the known values')}"
    limits = {
        "greater_than": ("greater than", "gt"),
        "greater_than_equal": ("at least", "ge"),
        "less_than": ("less than", "lt"),
        "less_than_equal": ("at most", "le"),
    }
    if kind in limits:
        words, name = limits[kind]
        return f"is {_shown(given)}; it has to be {words} {context[name]:g}"
    if kind == "finite_number":
        return f"is {_shown(given)}; it has to be a finite number"
    if kind in ("string_too_short", "too_short"):
        return "is empty; fill it in"
    wanted = {
        "float": "a number",
        "int": "a whole number",
        "string": "a text in quotes",
        "bool": "true or false",
        "list": "a list",
        "tuple": "a list",
        "dict": "a table of keys",
        "model": "a table of keys",
        "dataclass": "a table of keys",
    }.get(kind.split("_")[0])
    if wanted:
        return f"is {_shown(given)}; it has to be {wanted}"
    return f"is {_shown(given)}; {msg[:1].lower()}{msg[1:]}"


def _keys(location: tuple[int | str, ...]) -> list[str]:
    """Return the keys of a place; list positions count from 1 in square brackets."""
    keys: list[str] = []
    for part in location:
        if isinstance(part, int):
            if keys:
                keys[-1] += f"[{part + 1}]"
            else:
                keys.append(f"[{part + 1}]")
        elif part not in _BRANCHES and "[" not in part:
            keys.append(part)
    return keys


def _place(where: str, path: Sequence[str]) -> str:
    place = where
    for key in path:
        place += key if key.startswith("[") else f".{key}"
    return place


def _shown(value: object) -> str:
    text = " ".join(repr(value).split())
    return text if len(text) <= 60 else f"{text[:57]}..."
