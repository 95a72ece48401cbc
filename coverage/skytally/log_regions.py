"""The regions that a log gives outright, read and checked before anything counts them."""

from __future__ import annotations

import os
from collections.abc import Iterable
from dataclasses import replace
from pathlib import Path

import numpy as np

from skytally.errors import RegionError, SkytallyError
from skytally.local_files import hashes_as_read
from skytally.log_cells import visible
from skytally.moc import read_moc
from skytally.observations import LogTable, SetAside
from skytally.region_text import parse_region
from skytally.shapes import Shape

__all__ = ["is_moc_path", "resolve_regions"]

_MOC_ENDINGS = (".fits", ".fits.gz", ".fit", ".json", ".txt", ".ascii", ".moc")


def is_moc_path(text: str) -> bool:
    """Tell whether a region cell names a MOC file rather than being region text."""
    return text.strip().lower().endswith(_MOC_ENDINGS)


def _inside(path: Path, folders: Iterable[Path]) -> Path:
    """Return the path, links followed, if it lies in one of some folders."""
    real = os.path.realpath(path)
    if any(Path(real).is_relative_to(os.path.realpath(folder)) for folder in folders):
        return path
    raise RegionError(
        "this file lies outside the folders of the log and of the campaign",
        remedy="Copy it beside the log, and name the copy.",
    )


def resolve_regions(
    log: LogTable, base: Path, campaign: Path | None = None
) -> tuple[LogTable, dict[str, Shape], list[tuple[str, str, str]]]:
    """Turn a log's region cells into shapes; rows whose region fails are set aside.

    Parameters
    ----------
    log : LogTable
        As read.
    base : Path
        Folder that relative MOC paths start from: that of the log.
    campaign : Path, optional
        Folder of the campaign file. A MOC lies inside this one or that of the
        log: a log comes from somebody else, who has no say over other files.

    Returns
    -------
    log : LogTable
        Without the rows whose region cannot be used.
    shapes : dict
        The shape of every distinct region cell in use.
    inputs : list of (role, path, sha256)
        The MOC files read.
    """
    shapes: dict[str, Shape] = {}
    faults: dict[str, str] = {}
    inputs: list[tuple[str, str, str]] = []
    for text in sorted(set(log.region) - {""}):
        try:
            if is_moc_path(text):
                path = _inside(base / text, (base, campaign or base))
                with hashes_as_read() as hashes:
                    shapes[text] = read_moc(path)
                inputs.append(("region", text, hashes[str(path)]))
            else:
                shapes[text] = parse_region(text)
        except SkytallyError as error:
            # The path as the log has it, not as it is on this machine.
            faults[text] = (
                f"{visible(text)}: {error.message.rstrip('.')}. {error.remedy or ''}".rstrip()
            )
    if not faults:
        return log, shapes, inputs
    bad = np.array([text in faults for text in log.region])
    aside = tuple(
        SetAside(
            log.telescope,
            log.file,
            int(log.row[place]),
            log.exposure[place],
            "unreadable",
            faults[log.region[place]],
            "region",
        )
        for place in np.flatnonzero(bad)
    )
    used = log.take(np.flatnonzero(~bad))
    return replace(used, set_aside=log.set_aside + aside), shapes, inputs
