"""Logs: from files to arrays of one sample time, and what they can support."""

from idlearn.logs.audit import audit_log, require_information
from idlearn.logs.plantlog import PlantLog
from idlearn.logs.readers import read_log
from idlearn.logs.signals import Finding, Rejected, Signal

__all__ = [
    "Finding",
    "PlantLog",
    "Rejected",
    "Signal",
    "audit_log",
    "read_log",
    "require_information",
]
