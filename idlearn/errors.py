"""The exceptions that idlearn raises on purpose.

    IdlearnError
    ├── InputError            wrong call, sheet or file; the command line ends with exit code 2
    │   ├── LogError          a log file cannot be read as it stands
    │   ├── SheetError        the study sheet is wrong
    │   └── RunFolderError    a run folder belongs to another study or is damaged
    └── UninformativeError    well-formed data that cannot support the job; exit code 3
        └── TooShortError     too few valid samples

Every message is one sentence: what is wrong, where it is, what to do.
"""


class IdlearnError(Exception):
    """Base of every exception that idlearn raises on purpose."""


class InputError(IdlearnError, ValueError):
    """Report input that is wrong as it stands."""


class LogError(InputError):
    """Report a log file that cannot be read as it stands."""


class SheetError(InputError):
    """Report a study sheet that is wrong."""


class RunFolderError(InputError):
    """Report a run folder that belongs to another study or is damaged."""


class UninformativeError(IdlearnError):
    """Report data that are well-formed but cannot support the job."""


class TooShortError(UninformativeError):
    """Report a record with too few valid samples."""
