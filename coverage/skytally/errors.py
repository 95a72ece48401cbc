"""The exceptions that skytally raises on purpose.

Every one can say where it happened (file, row, column) and what to do, and
carries the exit code that the command line ends with.
"""

from __future__ import annotations

from pathlib import Path

__all__ = [
    "CampaignError",
    "InputError",
    "LogError",
    "MapError",
    "OutputError",
    "RegionError",
    "SkytallyError",
    "UsageError",
]


def _shown(text: str) -> str:
    """Return text that steers no terminal: file and column names are whatever a file holds."""
    if text.isprintable():
        return text
    return "".join(c if c.isprintable() or c in "\n\u00a0" else "?" for c in text)


class SkytallyError(Exception):
    """Base of all errors raised on purpose.

    Parameters
    ----------
    message : str
        What was found and what was expected, without the place.
    file, row, column
        Where, as far as it is known. ``row`` counts as the reader of the file
        would: line 1 of a text file is row 1.
    remedy : str, optional
        What the user should do next; a full sentence.
    """

    exit_code = 2

    def __init__(
        self,
        message: str,
        *,
        file: str | Path | None = None,
        row: int | None = None,
        column: str | None = None,
        remedy: str | None = None,
    ) -> None:
        self.message = _shown(message)
        super().__init__(self.message)
        self.file = None if file is None else str(file)
        self.row = row
        self.column = column
        self.remedy = None if remedy is None else _shown(remedy)

    @property
    def place(self) -> str:
        """File, row and column in words; empty when none is known."""
        parts = []
        if self.file is not None:
            parts.append(_shown(self.file))
        if self.row is not None:
            parts.append(f"row {self.row}")
        if self.column is not None:
            parts.append(f"column {self.column!r}")
        return ", ".join(parts)

    def __str__(self) -> str:
        text = f"{self.place}: {self.message}" if self.place else self.message
        if self.remedy:
            text = f"{text.rstrip('.')}. {self.remedy}"
        return text


class UsageError(SkytallyError):
    """The command was called in a way that cannot be carried out."""


class InputError(SkytallyError):
    """A file that the user named cannot be used as it is."""


class MapError(InputError):
    """A probability map is unreadable, incomplete or contradicts itself."""


class LogError(InputError):
    """An observation log, or a single row of it, cannot be used."""


class RegionError(InputError):
    """A region text, camera or MOC does not describe a region of the sky."""


class CampaignError(InputError):
    """A campaign file has one or more faults, all listed in ``problems``."""

    def __init__(self, problems: list[str], *, file: str | Path) -> None:
        self.problems = tuple(problems)
        count = len(self.problems)
        head = "1 fault" if count == 1 else f"{count} faults"
        super().__init__(f"{head}:\n" + "\n".join(f"  {p}" for p in self.problems), file=file)


class OutputError(SkytallyError):
    """An output could not be made or written."""

    exit_code = 3
