"""A finding: what was noticed about the inputs, what was done, and what to do."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

__all__ = ["SEVERITIES", "Finding", "Severity"]

Severity = Literal["error", "caution", "note"]

# From worst to mildest: the numbers cannot be right; look; good to know.
SEVERITIES: tuple[Severity, ...] = ("error", "caution", "note")


@dataclass(frozen=True)
class Finding:
    """Something that a reader of the numbers must know.

    Attributes
    ----------
    code : str
        Stable name of the kind of finding.
    severity : {"error", "caution", "note"}
        As in `SEVERITIES`.
    subject : str
        The telescope, map version or band concerned.
    rows : tuple of int
        Rows of the log, if any.
    text, done, remedy : str
        What was seen, what the tally did about it, and what to do.
    """

    code: str
    severity: Severity
    subject: str
    rows: tuple[int, ...]
    text: str
    done: str
    remedy: str
