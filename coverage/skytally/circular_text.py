"""Plain 7-bit text of at most 72 columns: paragraphs, lists and tables of fixed width."""

from __future__ import annotations

import textwrap
import unicodedata
from collections.abc import Iterable, Sequence

from skytally.wording import NBSP, to_ascii

__all__ = ["WIDTH", "bullets", "columns", "latin", "paragraph", "worded"]

WIDTH = 72

# Stands for a no-break space until the lines are broken; no text holds it.
_GLUE = "\x00"
# Letters that no decomposition takes apart.
_LETTERS = {
    "ß": "ss",
    "Æ": "Ae",
    "æ": "ae",
    "Œ": "Oe",
    "œ": "oe",
    "Ø": "O",
    "ø": "o",
    "Ł": "L",
    "ł": "l",
    "Đ": "D",
    "đ": "d",
    "ı": "i",
    "Þ": "Th",
    "þ": "th",
}


def columns(head: Sequence[str], rows: Iterable[Sequence[str]], align: str) -> list[str]:
    """Return a fixed-width table, as wide as its content."""
    table = [[latin(cell).replace(_GLUE, " ") for cell in row] for row in (head, *rows)]
    widths = [max(len(row[i]) for row in table) for i in range(len(head))]
    return [
        "  ".join(f"{cell:{side}{width}}" for cell, side, width in zip(row, align, widths)).rstrip()
        for row in table
    ]


def bullets(head: str, items: Iterable[str]) -> list[str]:
    """Return a paragraph and below it one for each item, behind a hyphen."""
    lines = paragraph(head)
    for item in items:
        lines += paragraph(item, first="- ", rest="  ")
    return lines


def paragraph(text: str, first: str = "", rest: str = "") -> list[str]:
    """Break text into lines of 7-bit characters; numbers stay with their units."""
    lines = textwrap.wrap(
        latin(text),
        WIDTH,
        initial_indent=first,
        subsequent_indent=rest,
        break_on_hyphens=False,
    )
    return [line.replace(_GLUE, " ") for line in lines]


def latin(text: str) -> str:
    """Return 7-bit text: the same words where there is a way to write them, marks dropped."""
    glued = "".join(c for c in text if c.isprintable() or c == NBSP).replace(NBSP, _GLUE)
    return "".join(c if c.isascii() else _letter(c) for c in glued)


def _letter(character: str) -> str:
    plain = to_ascii(character)
    if plain != "?":
        return plain
    if character in _LETTERS:
        return _LETTERS[character]
    parts = unicodedata.normalize("NFKD", character)
    return "".join(c for c in parts if c.isascii()) or "?"


def worded(text: str) -> str:
    """Write a bound in words, as a sentence wants it."""
    return text.replace(f"<{NBSP}", "less than ").replace(f">{NBSP}", "more than ")
