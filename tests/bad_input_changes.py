"""What spoils a sample campaign, and what the command line must then say."""

from __future__ import annotations

import io
import os
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

from astropy.io import fits

Change = Callable[[Path], None]

REPORT = ("report", "{folder}/campaign.toml", "--out", "{folder}/out")
TALLY = ("tally", "{folder}/campaign.toml")
REGIONS = ("regions", "{folder}/campaign.toml", "--out", "{folder}/out")


@dataclass(frozen=True)
class Case:
    """One broken input.

    ``change`` spoils the folder; ``place`` are the words for file and place, ``remedy`` those
    for what to do; ``command`` may name the folder as ``{folder}``; ``code`` is how it ends.
    """

    name: str
    change: Change
    place: tuple[str, ...]
    remedy: str
    command: tuple[str, ...] = REPORT
    code: int = 2

    def __str__(self) -> str:
        return self.name


# ---------------------------------------------------------------- changes to a folder


def nothing(folder: Path) -> None:
    """Change nothing: the fault is in the command."""


def put(name: str, content: str | bytes) -> Change:
    """Return a change that gives a file this content."""

    def change(folder: Path) -> None:
        (folder / name).write_bytes(content.encode() if isinstance(content, str) else content)

    return change


def edit(name: str, old: str, new: str) -> Change:
    """Return a change that replaces the first occurrence of a text, which must be there."""

    def change(folder: Path) -> None:
        text = (folder / name).read_text(encoding="utf-8")
        if old not in text:
            raise ValueError(f"{name} does not hold {old!r}")
        (folder / name).write_text(text.replace(old, new, 1), encoding="utf-8")

    return change


def toml(old: str, new: str) -> Change:
    """Return an edit of the campaign file."""
    return edit("campaign.toml", old, new)


def heron(old: str, new: str) -> Change:
    """Return an edit of the log of Heron."""
    return edit("logs/heron.csv", old, new)


def cut(name: str, size: int) -> Change:
    """Return a change that keeps the first bytes of a file, or all but the last few."""
    return lambda folder: (folder / name).write_bytes((folder / name).read_bytes()[:size])


def gone(name: str) -> Change:
    return lambda folder: (folder / name).unlink()


def as_folder(name: str) -> Change:
    """Return a change that puts a folder where a file was."""

    def change(folder: Path) -> None:
        (folder / name).unlink(missing_ok=True)
        (folder / name).mkdir()

    return change


def as_pipe(name: str) -> Change:
    def change(folder: Path) -> None:
        (folder / name).unlink()
        os.mkfifo(folder / name)

    return change


def as_dangling_link(name: str) -> Change:
    def change(folder: Path) -> None:
        (folder / name).unlink()
        (folder / name).symlink_to("moved-away")

    return change


def both(*changes: Change) -> Change:
    def change(folder: Path) -> None:
        for one in changes:
            one(folder)

    return change


def fits_bytes(columns: list[fits.Column], **header: object) -> bytes:
    table = fits.BinTableHDU.from_columns(columns)
    table.header.update(header)
    stream = io.BytesIO()
    fits.HDUList([fits.PrimaryHDU(), table]).writeto(stream)
    return stream.getvalue()


def recoded(change: Change, name: str) -> Change:
    """Return a change after which a file is written in Latin-1."""

    def recode(folder: Path) -> None:
        change(folder)
        text = (folder / name).read_text(encoding="utf-8")
        (folder / name).write_bytes(text.encode("latin-1"))

    return recode
