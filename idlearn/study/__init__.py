"""Studies: the sheet, the run folder, and the way from a log to a report."""

from idlearn.study.demo import write_demo
from idlearn.study.pipeline import (
    FinishedRun,
    audit_sheet,
    identify_sheet,
    run_study,
    write_report,
)
from idlearn.study.sheet import Sheet, read_sheet

__all__ = [
    "FinishedRun",
    "Sheet",
    "audit_sheet",
    "identify_sheet",
    "read_sheet",
    "run_study",
    "write_demo",
    "write_report",
]
