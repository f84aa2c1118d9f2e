"""The study sheet: one TOML file that declares the whole study.

Each layer owns the dataclass of its section; this module only reads the file, hands every table
to its owner and says in one sentence where the sheet is wrong.
"""

import hashlib
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, ClassVar, TypeVar

from idlearn.baselines import Incumbent
from idlearn.comparison import Acceptance
from idlearn.cost import Cost, CostTerm, primary_of
from idlearn.envs import Scenario
from idlearn.errors import InputError, SheetError
from idlearn.logs.declared import load_toml
from idlearn.logs.sheetparts import explain_validation
from idlearn.study.effort import EFFORTS

T = TypeVar("T")
SECTIONS = (
    "study",
    "log",
    "timing",
    "signals",
    "incumbent",
    "costs",
    "scenarios",
    "acceptance",
    "candidates",
)
LEARNED = ("evolution", "predictive")
LATER = ("gradient",)  # names that a sheet may hold already; this version leaves them out
CLASSICAL = ("pid", "lqg", "linear")


@dataclass(frozen=True, kw_only=True)
class StudySection:
    """Section [study].

    Attributes:
        name: shown in the report.
        seed: the study's one integer, >= 0.
        effort: "quick", "standard" or "thorough".
    """

    __pydantic_config__: ClassVar[dict[str, str]] = {"extra": "forbid"}

    name: str
    seed: int = 1
    effort: str = "standard"

    def __post_init__(self) -> None:
        """Refuse what no study can run with."""
        if self.seed < 0:
            raise InputError(f"seed is {self.seed}; give an integer of 0 or more")
        if self.effort not in EFFORTS:
            raise InputError(f"effort is {self.effort!r}; choose one of {sorted(EFFORTS)}")


@dataclass(frozen=True, kw_only=True)
class CandidatesSection:
    """Section [candidates].

    Attributes:
        learned: learned candidates to train.
        classical: classical contenders to tune.
    """

    __pydantic_config__: ClassVar[dict[str, str]] = {"extra": "forbid"}

    learned: tuple[str, ...] = LEARNED
    classical: tuple[str, ...] = CLASSICAL

    @property
    def left_out(self) -> tuple[str, ...]:
        """Learned candidates that this version does not have yet."""
        return tuple(n for n in self.learned if n in LATER)

    def __post_init__(self) -> None:
        """Refuse names that nobody answers to."""
        for kind, names, known in (
            ("learned", self.learned, LEARNED),
            ("classical", self.classical, CLASSICAL),
        ):
            for name in names:
                if name not in known and name not in LATER:
                    raise InputError(f"{kind} has {name!r}; this version knows {list(known)}")
            if not [n for n in names if n in known]:
                raise InputError(f"{kind} names none of {list(known)}; name at least one")


@dataclass(frozen=True)
class Sheet:
    """A study sheet that has been read and checked.

    Attributes:
        path: the file.
        sha256: of the file.
        study: section [study].
        source: the tables of [[log]], [timing] and [signals], for `read_log`.
        costs: every declared cost; empty where one is to be derived.
        scenarios: declared scenarios; empty where they are to be derived.
        acceptance: section [acceptance].
        candidates: section [candidates].
        incumbent: section [incumbent], or None.
    """

    path: Path
    sha256: str
    study: StudySection
    source: Mapping[str, Any]
    costs: tuple[Cost, ...] = ()
    scenarios: tuple[Scenario, ...] = ()
    acceptance: Acceptance = field(default_factory=Acceptance)
    candidates: CandidatesSection = field(default_factory=CandidatesSection)
    incumbent: Incumbent | None = None

    @property
    def latency_samples(self) -> int:
        """Samples between a decision and its effect."""
        return int(self.source.get("timing", {}).get("latency_samples", 0))


def read_sheet(path: str | Path) -> Sheet:
    """Read and check a study sheet.

    Args:
        path: TOML file.

    Raises:
        SheetError: with one sentence that names the file and the place in it.
    """
    where = Path(path)
    document, raw = load_toml(where)
    for key in document:
        if key not in SECTIONS:
            raise SheetError(
                f"{where}: unknown section or key {key!r}; the sheet has {', '.join(SECTIONS)}"
            )
    if "study" not in document:
        document["study"] = {"name": where.stem}
    study = _build(StudySection, document["study"], where, "study")
    costs = _costs(document.get("costs", {}), where)
    return Sheet(
        path=where,
        sha256=hashlib.sha256(raw).hexdigest(),
        study=study,
        source={k: document[k] for k in ("log", "timing", "signals") if k in document},
        costs=costs,
        scenarios=_scenarios(document.get("scenarios", []), where),
        acceptance=_build(Acceptance, document.get("acceptance", {}), where, "acceptance"),
        candidates=_build(CandidatesSection, document.get("candidates", {}), where, "candidates"),
        incumbent=(
            _build(Incumbent, document["incumbent"], where, "incumbent")
            if "incumbent" in document
            else None
        ),
    )


def _costs(tables: Any, where: Path) -> tuple[Cost, ...]:
    if not isinstance(tables, dict):
        raise SheetError(f"{where}: costs has to be tables [costs.NAME]; name each cost")
    costs = []
    for name, table in tables.items():
        at = f"costs.{name}"
        if not isinstance(table, dict):
            raise SheetError(f"{where}: {at} has to be a table with [[{at}.terms]]")
        for key in table:
            if key not in ("terms", "primary"):
                raise SheetError(
                    f"{where}: {at} has the unknown key {key!r}; it has terms, primary"
                )
        terms = table.get("terms", [])
        if not isinstance(terms, list) or not isinstance(table.get("primary", False), bool):
            raise SheetError(f"{where}: {at} needs [[{at}.terms]], and primary true or false")
        built = tuple(
            _build(CostTerm, t, where, f"{at}.terms[{i + 1}]") for i, t in enumerate(terms)
        )
        try:
            costs.append(Cost(name=name, terms=built, primary=table.get("primary", False)))
        except InputError as error:
            raise SheetError(f"{where}: {at}: {error}") from None
    if costs:
        try:
            primary_of(costs)
        except InputError as error:
            raise SheetError(f"{where}: {error}") from None
    return tuple(costs)


def _scenarios(tables: Any, where: Path) -> tuple[Scenario, ...]:
    if not isinstance(tables, list):
        raise SheetError(f"{where}: scenarios has to be a list of tables [[scenarios]]")
    built = tuple(_build(Scenario, t, where, f"scenarios[{i + 1}]") for i, t in enumerate(tables))
    names = [s.name for s in built]
    for name in names:
        if names.count(name) > 1:
            raise SheetError(f"{where}: two scenarios are called {name!r}; rename one")
    return built


def _build(cls: type[T], table: Any, where: Path, at: str) -> T:
    """Build a section's dataclass from its table, or say in one sentence what is wrong."""
    from pydantic import TypeAdapter, ValidationError

    if not isinstance(table, dict):
        raise SheetError(f"{where}: {at} has to be a table")
    try:
        return TypeAdapter(cls).validate_python(table)
    except ValidationError as error:
        raise SheetError(explain_validation(error, f"{where}: {at}")) from None
