"""From a run folder to report.html: one file, no network, the same bytes every time."""

import contextlib
import os
import tempfile
from importlib import resources
from pathlib import Path

from jinja2 import DictLoader, Environment, StrictUndefined
from markupsafe import Markup

from idlearn.reports import (
    chapters_loop,
    chapters_models,
    chapters_owner,
    chapters_record,
    chapters_result,
    inks,
)
from idlearn.reports.blocks import Section
from idlearn.reports.drawing import drawing
from idlearn.reports.front import front_of
from idlearn.reports.runfiles import RunFiles
from idlearn.reports.swatches import sign, swatch
from idlearn.reports.view import View

CHAPTERS = (
    chapters_result.clauses,
    chapters_result.controllers,
    chapters_result.ladder,
    chapters_result.costs,
    chapters_loop.closed_loop,
    chapters_result.pairs,
    chapters_loop.stress,
    chapters_models.models,
    chapters_record.learning,
    chapters_record.record,
    chapters_record.fairness,
    chapters_owner.settle,
    chapters_owner.owner,
    chapters_owner.manifest,
    chapters_owner.words,
)


def build_report(folder: str | Path) -> Path:
    """Write report.html into a run folder, from what lies in the folder alone.

    Args:
        folder: with verdict.json, manifest.json and tables/*.csv; any table may be missing.

    Returns:
        path of the report.

    Raises:
        RunFolderError: the folder holds no readable verdict.
    """
    folder = Path(folder)
    view = View(RunFiles.read(folder))
    with drawing():
        front = front_of(view)
        sections = [chapter(view) for chapter in CHAPTERS]
    page = (
        _environment()
        .get_template("template.html")
        .render(
            front=front,
            sections=sections,
            numbers=_numbers(sections, front.picture is not None),
            style=Markup(_source("style.css")),
        )
    )
    target = folder / "report.html"
    _write(target, page)
    return target


def _numbers(sections: list[Section], with_front: bool) -> dict[str, int]:
    """Return the number of each picture, by the address of its section and its place there."""
    numbers: dict[str, int] = {}
    n = 2 if with_front else 1
    for section in sections:
        for place, block in enumerate(section.blocks):
            if block.kind == "picture":
                numbers[f"{section.key} {place}"] = n
                n += 1
    return numbers


def _source(name: str) -> str:
    return resources.files(__package__).joinpath(name).read_text(encoding="utf-8")


def _environment() -> Environment:
    environment = Environment(
        loader=DictLoader({"template.html": _source("template.html")}),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
        keep_trailing_newline=True,
    )
    environment.filters |= {"swatch": swatch, "sign": sign}
    environment.globals |= {
        "paper": inks.PAPER,
        "ink": inks.INK,
        "quiet": inks.QUIET,
        "rule": inks.RULE,
        "wash": inks.WASH,
    }
    return environment


def _write(target: Path, text: str) -> None:
    """Put the file in its place in one move."""
    handle, part = tempfile.mkstemp(dir=target.parent, prefix=".part-")
    try:
        with os.fdopen(handle, "w", encoding="utf-8", newline="\n", errors="replace") as out:
            out.write(text)
        Path(part).chmod(0o644)
        Path(part).replace(target)
    except BaseException:
        with contextlib.suppress(OSError):
            Path(part).unlink()
        raise
