"""Folders in which outputs are made before they are moved into place, and locks on folders.

A lock goes with the process that holds it, however that ends. So a staging folder
without one was left by a run that was killed, and the next run clears it away.
Where a file system or a system has no locks, everything works but that.
"""

from __future__ import annotations

import os
import re
import secrets
import shutil
import time
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from pathlib import Path

from skytally.errors import OutputError

try:
    import fcntl
except ImportError:  # Windows
    fcntl = None  # type: ignore[assignment]

__all__ = ["hold_folder", "staging_folder"]

_STAGING = re.compile(r"\.skytally-[0-9a-f]{12}")
# Files are moved into place in a fraction of a second.
_PATIENCE_S = 20.0


@contextmanager
def staging_folder(out_dir: Path) -> Iterator[Path]:
    """Make a folder on the same file system; leave no trace of it, whatever happens."""
    made = [folder for folder in out_dir.parents if not folder.exists()]
    place = out_dir if out_dir.exists() else out_dir.parent
    place.mkdir(parents=True, exist_ok=True)
    staging = place / f".skytally-{secrets.token_hex(6)}"
    lock = None
    try:
        # So that no other run takes for abandoned what is made but not locked yet.
        with hold_folder(place) as held:
            if held:
                _clear_abandoned(place)
            staging.mkdir()
            with suppress(OSError):
                lock = _lock(staging)
        yield staging
    finally:
        shutil.rmtree(staging, ignore_errors=True)
        if lock is not None:
            os.close(lock)
        for folder in made:
            with suppress(OSError):
                folder.rmdir()  # Fails, as it should, where the output now stands.


@contextmanager
def hold_folder(folder: Path) -> Iterator[bool]:
    """Keep other runs from changing a folder meanwhile; False where that cannot be.

    Raises
    ------
    OutputError
        If another run keeps it for too long.
    """
    lock = None
    with suppress(OSError):
        lock = _wait_for(folder)
    try:
        yield lock is not None
    finally:
        if lock is not None:
            os.close(lock)


def _wait_for(folder: Path) -> int:
    """Return what holds a folder's lock as soon as no other process does."""
    until = time.monotonic() + _PATIENCE_S
    while (lock := _lock(folder)) is None:
        if time.monotonic() > until:
            raise OutputError(
                "another run of skytally has been writing there for too long",
                file=folder,
                remedy="Wait for it or end it, or choose another folder with --out.",
            )
        time.sleep(0.02)
    return lock


def _lock(folder: Path) -> int | None:
    """Return what holds a folder's lock until it is closed; None if another process has it."""
    if fcntl is None:
        raise OSError("there are no locks")
    handle = os.open(folder, os.O_RDONLY)
    try:
        fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except BaseException as fault:
        os.close(handle)
        if isinstance(fault, BlockingIOError):
            return None
        raise
    return handle


def _clear_abandoned(place: Path) -> None:
    """Remove the staging folders of runs that are no more."""
    for folder in place.iterdir():
        if _STAGING.fullmatch(folder.name) and folder.is_dir() and not folder.is_symlink():
            with suppress(OSError):
                lock = _lock(folder)
                if lock is not None:
                    shutil.rmtree(folder, ignore_errors=True)
                    os.close(lock)
