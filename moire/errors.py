"""Every error that moire raises on purpose.

::

    MoireError
    |-- ScanUnreadable (OSError)        a file cannot be read as a scan
    |-- OutputRefused (OSError)         an output cannot or must not be written
    |-- BadRequest (ValueError)         an argument has no meaning here
    |-- RecipeMismatch (ValueError)     a saved recipe does not fit this scan
    `-- EngineLost (RuntimeError)       what ran a batch stopped taking work

The message says what, what was found, what was wanted and what to do next.
Only the command line turns an error into an exit code.
"""

from __future__ import annotations


class MoireError(Exception):
    """Root of all errors that moire raises on purpose."""


class ScanUnreadable(MoireError, OSError):
    """A file cannot be read as a scan.

    Parameters
    ----------
    path : str
        The file.
    reason : str
        What is wrong with it and what to do.
    """

    def __init__(self, path: str, reason: str) -> None:
        super().__init__(f"{path}: {reason}")
        self.path = path
        self.reason = reason


class OutputRefused(MoireError, OSError):
    """An output cannot, or must not, be written.

    Parameters
    ----------
    path : str
        The target.
    reason : str
        Why, and what to do.
    """

    def __init__(self, path: str, reason: str) -> None:
        super().__init__(f"{path}: {reason}")
        self.path = path
        self.reason = reason


class BadRequest(MoireError, ValueError):
    """An argument has no meaning here."""


class RecipeMismatch(MoireError, ValueError):
    """A saved recipe does not fit this scan."""


class EngineLost(MoireError, RuntimeError):
    """What ran a batch stopped taking work and cannot be replaced; what was done is kept."""
