"""The report: one self-contained page from a run folder alone."""

from pathlib import Path

__all__ = ["build_report"]


def build_report(folder: str | Path) -> Path:
    """Write report.html into a run folder, from what lies in the folder alone.

    Args:
        folder: with verdict.json, manifest.json and tables/*.csv; any table may be missing.

    Returns:
        path of the report; the same folder always gives the same bytes.

    Raises:
        RunFolderError: the folder holds no readable verdict.
    """
    # matplotlib and jinja2 are loaded only where a report is really built
    from idlearn.reports.build import build_report as build

    return build(folder)
