"""What can stop the job, each error owning its exit code.

::

    FirstgainError (Exception)
    ├── UsageError (ValueError)        2  the command line or the loop sheet is wrong
    ├── LogUnreadable (ValueError)     3  the log cannot be read
    │   └── QuestionForUser            3  the log can be read in two ways; an option answers which
    └── ChecksDisagree (RuntimeError)  5  two computations of one answer differ

A test that does not support a gain is not an error: it is a result with the verdict
"withheld", and exit code `WITHHELD`.
"""

from __future__ import annotations

READY = 0
WITHHELD = 4


class FirstgainError(Exception):
    """A sentence to a person on site: what, where, and what to do.

    Parameters
    ----------
    what : str
        What is wrong, one sentence.
    file : str or None
        Name of the file, as the user gave it.
    line, column : int or str or None
        Line (counted from 1) and column (number or name) of the fault.
    remedy : str or None
        What to do about it, one sentence.
    """

    exit_code = 1

    def __init__(
        self,
        what: str,
        *,
        file: str | None = None,
        line: int | None = None,
        column: int | str | None = None,
        remedy: str | None = None,
    ) -> None:
        super().__init__(what)
        self.what = what
        self.file = file
        self.line = line
        self.column = column
        self.remedy = remedy

    def __str__(self) -> str:
        place = [self.file] if self.file else []
        if self.line is not None:
            place.append(f"line {self.line}")
        if self.column is not None:
            place.append(f"column {self.column}")
        parts = [f"{', '.join(place)}: {self.what}" if place else self.what]
        if self.remedy:
            parts.append(self.remedy)
        return " ".join(parts)

    def __reduce__(self) -> tuple[object, ...]:
        """Keep every field when the error crosses to another process."""
        return (_rebuild, (type(self), self.what, self.file, self.line, self.column, self.remedy))


def _rebuild(
    kind: type[FirstgainError],
    what: str,
    file: str | None,
    line: int | None,
    column: int | str | None,
    remedy: str | None,
) -> FirstgainError:
    return kind(what, file=file, line=line, column=column, remedy=remedy)


class UsageError(FirstgainError, ValueError):
    """The command line or the loop sheet asks for something that cannot be."""

    exit_code = 2


class LogUnreadable(FirstgainError, ValueError):
    """The log cannot be turned into times and values."""

    exit_code = 3


class QuestionForUser(LogUnreadable):
    """The log can be read in more than one way, and an option says which."""


class ChecksDisagree(FirstgainError, RuntimeError):
    """Two independent computations of one answer differ: nothing is reported."""

    exit_code = 5
