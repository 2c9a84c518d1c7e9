"""Every error Vialbook raises on purpose, on one screen.

An error says what is wrong, where, and what to do next; its class carries the exit code.
A file that cannot be used is not an error: it is held, with its reason, in the result.
"""

from __future__ import annotations


class VialbookError(Exception):
    """The root: the work could not be done (exit code 3)."""

    exit_code = 3

    def __init__(self, what: str, where: str = "", remedy: str = "") -> None:
        super().__init__(what, where, remedy)  # all in args, so that the error survives pickling
        self.what, self.where, self.remedy = what, where, remedy

    def __str__(self) -> str:
        head = f"{self.where}: {self.what}" if self.where else self.what
        return f"{head}\n  {self.remedy}" if self.remedy else head


class UsageError(VialbookError):
    """The command was used wrongly (exit code 2)."""

    exit_code = 2


class SiteError(VialbookError):
    """A file the user wrote cannot be used: site.toml, a plate, a recipe, limits, temperatures (exit code 2)."""

    exit_code = 2


class TimingError(VialbookError, ValueError):
    """Times (TI, TE, TR) that no fit can use: wrong length, not finite, too few."""


class ArchiveError(VialbookError):
    """The archive of original files cannot be read or written, or a file in it is not what its name says."""


class AlteredError(ArchiveError):
    """A file in the archive is not what its name says."""


class StoreError(VialbookError):
    """The database cannot be opened, read or written."""


class NoBookError(StoreError):
    """There is no database yet: nothing was ever taken in."""


class OldBookError(StoreError):
    """The database was made by another version of Vialbook and has to be migrated first (exit code 2)."""

    exit_code = 2


class ReportError(VialbookError):
    """A report cannot be written."""
