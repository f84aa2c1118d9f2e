"""The command line: arguments, progress, exit codes; everything else happens below.

Exit codes: 0 the command did its work, 2 the input is wrong, 3 the data are well-formed but
uninformative, 10 no-go and 11 undecided with --gate, 130 stopped by the user.
"""

import json
import os
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from idlearn import __version__
from idlearn.errors import IdlearnError, UninformativeError

if TYPE_CHECKING:
    from idlearn.study.progress import Progress

app = typer.Typer(
    help="Decide from routine logs whether a learned controller should replace a working one. "
    "Nothing is ever written to a plant.",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
)
STOPPED = 130
GATE = {"go": 0, "no-go": 10, "undecided": 11}

SheetArgument = Annotated[Path, typer.Argument(metavar="SHEET", help="study sheet (TOML)")]
JsonOption = Annotated[bool, typer.Option("--json", help="print machine-readable output")]
OutOption = Annotated[
    Path | None, typer.Option("--out", metavar="DIR", help="run folder [beside the sheet: run/]")
]
EffortOption = Annotated[
    str | None,
    typer.Option("--effort", metavar="E", help="quick, standard or thorough [from the sheet]"),
]
WorkersOption = Annotated[
    int | None,
    typer.Option("--workers", metavar="N", min=1, help="processes at once [as many as cores]"),
]
GateOption = Annotated[
    bool, typer.Option("--gate", help="exit with 10 for no-go, 11 for undecided")
]


@app.callback(invoke_without_command=True)
def _top(
    version: Annotated[bool, typer.Option("--version", help="print the version")] = False,
) -> None:
    if version:
        typer.echo(f"idlearn {__version__}")
        raise typer.Exit


@app.command()
def demo(
    plant: Annotated[str, typer.Argument(help="demo plant (invented): kiln")] = "kiln",
    effort: EffortOption = None,
    workers: WorkersOption = None,
    as_json: JsonOption = False,
    gate: GateOption = False,
) -> None:
    """Write an invented plant's log and sheet, and run the whole study on them.

    Example: idlearn demo kiln --effort quick
    """
    from idlearn.study import write_demo

    sheet = write_demo(plant, Path.cwd())
    _say(f"Invented log and sheet written to {sheet.parent}.", as_json)
    _run(sheet, None, effort, workers, as_json, gate)


@app.command()
def audit(sheet: SheetArgument, as_json: JsonOption = False) -> None:
    """Say what the log can and cannot support.

    Example: idlearn audit kiln.toml
    """
    from idlearn.study import audit_sheet

    findings = audit_sheet(sheet)
    if as_json:
        _print_json({"audit": findings})
        return
    for f in findings:
        typer.echo(f"{f['severity']:>5}  {f['sentence']}")


@app.command()
def identify(sheet: SheetArgument, out: OutOption = None, as_json: JsonOption = False) -> None:
    """Identify models from the log, validate them and save them.

    Example: idlearn identify kiln.toml
    """
    from idlearn.study import identify_sheet

    with _Bars(as_json) as bars:
        result = identify_sheet(sheet, out, bars)
    if as_json:
        _print_json(result)
        return
    for model in result["models"]:
        state = "passed" if model["passed"] else "not passed"
        typer.echo(
            f"{model['name']}: {model['sentence']} Validation {state}"
            + (f": {model['reasons']}" if model["reasons"] else ".")
        )
    for f in result["audit"]:
        typer.echo(f"{f['severity']:>5}  {f['sentence']}")


@app.command()
def run(
    sheet: SheetArgument,
    out: OutOption = None,
    effort: EffortOption = None,
    workers: WorkersOption = None,
    as_json: JsonOption = False,
    gate: GateOption = False,
) -> None:
    """Run the whole study, or go on with one that was stopped.

    Example: idlearn run kiln.toml --effort quick
    """
    _run(sheet, out, effort, workers, as_json, gate)


@app.command()
def report(
    folder: Annotated[Path, typer.Argument(metavar="DIR", help="run folder")],
    as_json: JsonOption = False,
) -> None:
    """Write the report again from a run folder.

    Example: idlearn report kiln/run
    """
    from idlearn.study import write_report

    path = write_report(folder)
    if as_json:
        _print_json({"report": str(path)})
    else:
        typer.echo(f"Report: {path}")


def _run(
    sheet: Path,
    out: Path | None,
    effort: str | None,
    workers: int | None,
    as_json: bool,
    gate: bool,
) -> None:
    from idlearn.study import run_study

    with _Bars(as_json) as bars:
        finished = run_study(sheet, out=out, effort=effort, workers=workers, progress=bars)
    verdict = finished.verdict
    if as_json:
        _print_json(verdict)
    else:
        typer.echo(_summary(verdict))
        typer.echo(f"Report: {finished.folder / 'report.html'}")
    if gate and verdict["verdict"] != "go":
        raise typer.Exit(GATE[verdict["verdict"]])


def _summary(verdict: dict[str, Any]) -> str:
    lines = [f"Verdict: {verdict['verdict'].upper()}. {verdict['sentence']}", ""]
    rows = [("controller", "kind", "cost", "ratio to baseline")]
    cost = verdict["cost"]
    for c in verdict["controllers"]:
        mean = c["costs"].get(cost, {}).get("mean")
        ratio = c["ratio_to_baseline"].get(cost)
        rows.append(
            (
                c["name"],
                c["kind"],
                "-" if mean is None else f"{mean:.4g}",
                "-" if ratio is None else f"{ratio['estimate']:.3f}",
            )
        )
    widths = [max(len(r[i]) for r in rows) for i in range(4)]
    if len(rows) > 1:
        lines += ["  ".join(v.ljust(w) for v, w in zip(r, widths, strict=True)) for r in rows]
        lines.append("")
    unmet = [c for c in verdict["clauses"] if c["state"] != "met"]
    lines += [f"{c['state']}: {c['sentence']}" for c in unmet]
    if verdict["next"]["sentence"]:
        lines.append(f"Next: {verdict['next']['sentence']}")
    return "\n".join(lines)


def _say(text: str, as_json: bool) -> None:
    if not as_json:
        typer.echo(text, err=True)


def _print_json(document: Any) -> None:
    typer.echo(json.dumps(document, indent=1, allow_nan=False))


class _Bars:
    """Progress on standard error: a bar on a terminal, nothing elsewhere."""

    def __init__(self, quiet: bool) -> None:
        self._live = not quiet and sys.stderr.isatty()
        self._bar: Any = None
        self._task: Any = None

    def __enter__(self) -> "Progress":
        if self._live:
            from rich.console import Console
            from rich.progress import (
                BarColumn,
                Progress,
                TextColumn,
                TimeElapsedColumn,
                TimeRemainingColumn,
            )

            self._bar = Progress(
                TextColumn("{task.description:<34}"),
                BarColumn(),
                TextColumn("{task.completed:.0f}/{task.total:.0f}"),
                TimeElapsedColumn(),
                TimeRemainingColumn(),
                console=Console(stderr=True),
            )
            self._bar.start()
        return self

    def __exit__(self, *_: object) -> None:
        if self._bar is not None:
            self._bar.stop()

    def stage(self, name: str, steps: int) -> None:
        if self._bar is not None:
            self._task = self._bar.add_task(name, total=max(steps, 1))

    def step(self, note: str = "") -> None:
        if self._bar is not None:
            self._bar.advance(self._task)


def main() -> None:
    """Run the command line and turn what went wrong into one sentence and an exit code."""
    try:
        code = app(standalone_mode=False)
    except UninformativeError as error:
        _fail(str(error), 3)
    except IdlearnError as error:
        _fail(str(error), 2)
    except (KeyboardInterrupt, typer.Abort):
        code = STOPPED
    except BrokenPipeError:
        # the reader of our output has gone; nothing is left to say
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        raise SystemExit(141) from None
    except Exception as error:
        # a wrong option or argument shows itself and its usage
        if not hasattr(error, "show") or not hasattr(error, "exit_code"):
            raise
        error.show()
        raise SystemExit(error.exit_code) from None
    if code == STOPPED:  # also how typer reports an interrupt
        _fail("stopped; the same command goes on where it was", STOPPED)
    if isinstance(code, int) and code:
        raise SystemExit(code)


def _fail(message: str, code: int) -> None:
    print(f"idlearn: {message}", file=sys.stderr)
    raise SystemExit(code)


if __name__ == "__main__":
    main()
