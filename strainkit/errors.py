"""Exceptions. Every mistake a user can make ends in one of these, never in a traceback.

StrainkitError            exit 1   the root; raised itself only for the unexpected
+-- UsageError            exit 2   options that contradict each other (also ValueError)
+-- InputError            exit 3   a file, folder or structure that cannot be used (also ValueError)
|   +-- DiskError         exit 3   a place that cannot be written: full disk, permissions
+-- IncompleteError       exit 4   calculations missing or unfinished, constants undetermined (also RuntimeError)
+-- NoTensorError         exit 5   no stiffness tensor can be given (also RuntimeError)
"""

from __future__ import annotations

__all__ = [
    "DiskError",
    "IncompleteError",
    "InputError",
    "NoTensorError",
    "StrainkitError",
    "UsageError",
    "counted",
    "printable",
]


def counted(count: int, thing: str) -> str:
    """A number of things: 1 job, 2 jobs."""
    return f"{count} {thing}{'' if count == 1 else 's'}"


def printable(text: str) -> str:
    """A text in which control characters, line breaks and bytes that are no text are written out, as \\x1b."""
    return text if text.isprintable() else "".join(c if c.isprintable() else ascii(c)[1:-1] for c in text)


class StrainkitError(Exception):
    """What went wrong, where, and what to do about it.

    Parameters
    ----------
    what : str
        One sentence without a full stop.
    where : str
        File, job, option or site that it concerns; empty when there is none.
    remedy : str
        What the user can do; empty when there is nothing to say.
    """

    exit_code = 1

    def __init__(self, what: str, where: object = "", remedy: str = "") -> None:
        what, place, remedy = printable(what), printable(str(where)), printable(remedy)
        super().__init__(what, place, remedy)
        self.what, self.where, self.remedy = what, place, remedy

    def __str__(self) -> str:
        head = f"{self.where}: {self.what}" if self.where else self.what
        return f"{head}\n{self.remedy}" if self.remedy else head


class UsageError(StrainkitError, ValueError):
    """Arguments that cannot be used together or are out of range."""

    exit_code = 2


class InputError(StrainkitError, ValueError):
    """A file, folder or structure that cannot be used."""

    exit_code = 3


class DiskError(InputError):
    """A place that cannot be written: every further attempt would end the same way."""


class IncompleteError(StrainkitError, RuntimeError):
    """Calculations that are missing or unfinished."""

    exit_code = 4


class NoTensorError(StrainkitError, RuntimeError):
    """Data from which no stiffness tensor can be given."""

    exit_code = 5
