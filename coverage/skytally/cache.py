"""Arrays kept between runs in a folder: checked when read, whole when written, bounded in size.

An entry is a file of its own: a first line, the SHA-256 of its key and of all that
follows, and arrays one after the other in numpy's own format, never pickled. It
appears by a rename, so that neither two runs at once nor one that is killed leave
half of one; what a power cut or a failing disk leaves is told by the hash. Nothing
that goes wrong here is an error: the caller makes what it misses, and `Cache.notes`
says why.
"""

from __future__ import annotations

import dataclasses
import hashlib
import io
import os
import platform
import re
import stat
import struct
import tempfile
import time
from collections.abc import Sequence
from contextlib import suppress
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from skytally import __version__
from skytally.code_hash import code_sha256

__all__ = ["FOLDER_VARIABLE", "LIMIT_BYTES", "Cache", "cache_folder", "key_of"]

# Names the folder where the usual place will not do.
FOLDER_VARIABLE = "SKYTALLY_CACHE"
LIMIT_BYTES = 1 << 30

_FIRST_LINE = b"skytally cache 1\n"
_HASHED = hashlib.sha256().digest_size
_NAME = re.compile(r"[0-9a-f]{64}\.kept")
_UNFINISHED = re.compile(r"unfinished-.+\.tmp")
# No run takes that long to write an entry: who began it was killed.
_ABANDONED_S = 3600.0

Arrays = list[NDArray[Any]]


def cache_folder() -> Path:
    """Return the user's folder for what can be made again, or the one that the variable names."""
    stated = os.environ.get(FOLDER_VARIABLE, "")
    if stated:
        return Path(os.path.abspath(stated))
    import platformdirs  # the only one who needs it

    return Path(platformdirs.user_cache_dir("skytally", appauthor=False))


def key_of(what: str, *parts: object) -> str:
    """Return the key of something made from these parts by this code on this kind of machine.

    Parts are numbers, texts, arrays, None, and sequences and dataclasses of such.
    """
    whole = hashlib.sha256()
    made_by = (__version__, code_sha256(), np.__version__, platform.machine())
    _feed(whole, (what, made_by, parts))
    return whole.hexdigest()


def _feed(whole: Any, part: object) -> None:
    """Hash a part so that no two different ones look alike: kind, length, content."""
    if isinstance(part, np.ndarray) and part.dtype != object:
        _feed(whole, (part.dtype.str, part.shape))
        whole.update(np.ascontiguousarray(part).data)
    elif dataclasses.is_dataclass(part):
        values = [getattr(part, field.name) for field in dataclasses.fields(part)]
        _feed(whole, (type(part).__qualname__, values))
    elif isinstance(part, list | tuple):
        whole.update(b"(" + struct.pack("<q", len(part)))
        for one in part:
            _feed(whole, one)
    elif part is None or isinstance(part, bool | int | float | str | np.number):
        text = f"{type(part).__name__} {part!r}".encode("utf-8", "surrogatepass")
        whole.update(b"." + struct.pack("<q", len(text)) + text)
    else:
        raise TypeError(f"a {type(part).__name__} is no part of a key")


class Cache:
    """A folder of arrays by key; the least recently used go when it is full.

    Parameters
    ----------
    folder : path
        Made when it is first needed.
    limit_bytes : int
        What all entries together may hold.

    Attributes
    ----------
    notes : list of str
        Sentences on what went wrong, none of them twice.
    """

    def __init__(self, folder: str | Path, limit_bytes: int = LIMIT_BYTES) -> None:
        self.folder = Path(folder)
        self.limit_bytes = limit_bytes
        self.notes: list[str] = []

    def fetch(self, key: str) -> Arrays | None:
        """Return the arrays kept under a key; None if there are none that can be trusted."""
        path = self._path(key)
        try:
            data = _read(path, self.limit_bytes)
        except FileNotFoundError:
            return None
        except OSError as fault:
            self._unusable("read", fault)
            return None
        found = _unpack(data, key)
        if found is None:
            self._note(f"an entry of the cache was damaged and is made anew ({path})")
        with suppress(OSError):
            if found is None:
                path.unlink()
            else:
                os.utime(path)  # used now
        return found

    def store(self, key: str, arrays: Sequence[NDArray[Any]]) -> None:
        """Keep arrays under a key, if they and the folder allow it."""
        body = io.BytesIO()
        for array in arrays:
            np.lib.format.write_array(body, array, allow_pickle=False)
        content = body.getbuffer()
        size = len(_FIRST_LINE) + _HASHED + len(content)
        if size > self.limit_bytes:
            return
        try:
            self.folder.mkdir(mode=0o700, parents=True, exist_ok=True)
            self._make_room(size)
            handle, name = tempfile.mkstemp(".tmp", "unfinished-", self.folder)
            try:
                with os.fdopen(handle, "wb") as stream:
                    stream.write(_FIRST_LINE)
                    stream.write(_digest(key, content))
                    stream.write(content)
                os.replace(name, self._path(key))
            except BaseException:
                with suppress(OSError):
                    os.unlink(name)
                raise
        except OSError as fault:
            self._unusable("written", fault)

    def _path(self, key: str) -> Path:
        return self.folder / f"{key}.kept"

    def _make_room(self, size: int) -> None:
        """Remove what was abandoned, and the least recently used until there is room."""
        entries = []
        for found in os.scandir(self.folder):
            with suppress(FileNotFoundError):  # another run may be making room as well
                status = found.stat(follow_symlinks=False)
                if _NAME.fullmatch(found.name):
                    entries.append((status.st_mtime, status.st_size, found.path))
                elif _UNFINISHED.fullmatch(found.name) and _is_old(status.st_mtime):
                    os.unlink(found.path)
        held = size + sum(each for _, each, _ in entries)
        for _, each, path in sorted(entries):
            if held <= self.limit_bytes:
                break
            with suppress(FileNotFoundError):
                os.unlink(path)
            held -= each

    def _unusable(self, done: str, fault: OSError) -> None:
        reason = (fault.strerror or str(fault)).lower()
        self._note(
            f"the cache in {self.folder} could not be {done} ({reason}), which costs time alone; "
            f"the environment variable {FOLDER_VARIABLE} names another folder"
        )

    def _note(self, text: str) -> None:
        if text not in self.notes:
            self.notes.append(text)


def _is_old(modified_s: float) -> bool:
    return time.time() - modified_s > _ABANDONED_S


def _read(path: Path, limit_bytes: int) -> bytes:
    """Read a regular file; nothing of one that is larger than an entry can be."""
    # A pipe in its place would keep us waiting.
    with open(os.open(path, os.O_RDONLY | getattr(os, "O_NONBLOCK", 0)), "rb") as stream:
        status = os.fstat(stream.fileno())
        if not stat.S_ISREG(status.st_mode) or status.st_size > limit_bytes:
            return b""
        return stream.read()


def _digest(key: str, content: bytes | memoryview) -> bytes:
    whole = hashlib.sha256(key.encode())
    whole.update(content)
    return whole.digest()


def _unpack(data: bytes, key: str) -> Arrays | None:
    """Return the arrays of an entry; None if a bit of it is not as it was written."""
    start = len(_FIRST_LINE) + _HASHED
    content = memoryview(data)[start:]
    if data[:start] != _FIRST_LINE + _digest(key, content):
        return None
    stream = io.BytesIO(content)
    arrays = []
    while stream.tell() < len(content):
        arrays.append(np.lib.format.read_array(stream, allow_pickle=False))
    return arrays
