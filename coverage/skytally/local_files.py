"""Reading files that a user named: local, of bounded size, hashed as read.

Every byte that comes from outside passes here, so that a URL, a directory, a
pipe, a file that expands a thousandfold or one that was cut short ends in one
sentence and never in a traceback or a full memory.
"""

from __future__ import annotations

import gzip
import hashlib
import io
import os
import re
import tempfile
import warnings
import zlib
from collections.abc import Iterator
from contextlib import contextmanager
from contextvars import ContextVar
from pathlib import Path
from stat import S_ISDIR, S_ISREG
from typing import Any, BinaryIO, cast

from astropy.io import fits

from skytally.errors import InputError, OutputError, UsageError
from skytally.fits_layout import check_shared_bytes, walk_headers

__all__ = [
    "SIZE_VARIABLE",
    "expand",
    "hashes_as_read",
    "header_value",
    "is_url",
    "open_bounded",
    "open_fits",
    "read_local_file",
    "size_limit",
    "write_whole",
]

# The one way to raise the limits: who runs the tool may, what is read may not.
SIZE_VARIABLE = "SKYTALLY_SIZE_LIMIT_MIB"

_CHUNK = 1 << 22
_hashes: ContextVar[dict[str, str] | None] = ContextVar("hashes", default=None)
# Two letters at least, so that a Windows drive is a path; pathlib folds "//" into "/".
_URL = re.compile(r"\s*[A-Za-z][A-Za-z0-9+.-]+:/")


def is_url(text: str) -> bool:
    """Tell whether a text names something by URL rather than by local path."""
    return _URL.match(text) is not None


def size_limit(usual_bytes: int) -> int:
    """Return the largest size of a file: the usual one, or what the environment states instead.

    Raises
    ------
    UsageError
        If `SIZE_VARIABLE` holds no whole number above 0.
    """
    stated = os.environ.get(SIZE_VARIABLE, "").strip()
    if not stated:
        return usual_bytes
    if not (stated.isascii() and stated.isdigit() and len(stated) <= 9 and int(stated) > 0):
        raise UsageError(
            f"the environment variable {SIZE_VARIABLE} holds {stated[:40]!r}, expected a whole "
            "number of MiB",
            remedy=f"Set it like this: {SIZE_VARIABLE}=4096, or unset it.",
        )
    return int(stated) << 20


def _too_large(
    what: str, limit_bytes: int, path: str | Path, error: type[InputError]
) -> InputError:
    return error(
        f"{what} more than the limit of {_size_text(limit_bytes)}",
        file=path,
        remedy=f"Check that it is the right file; if it is, set {SIZE_VARIABLE} to a larger limit.",
    )


def _size_text(size: float) -> str:
    for unit in ("bytes", "KiB", "MiB"):
        if size < 1024:
            return f"{size:.0f} {unit}"
        size /= 1024
    return f"{size:.1f} GiB"


def read_local_file(
    path: str | Path, *, size_limit_bytes: int, error: type[InputError]
) -> tuple[bytes, str]:
    """Read a local regular file once.

    Parameters
    ----------
    path : str or Path
        The file; anything that looks like a URL is refused.
    size_limit_bytes : int
        A larger file is refused before it is read, unless `SIZE_VARIABLE` allows it.
    error : type
        Which of our exceptions to raise.

    Returns
    -------
    data : bytes
        The file as it stands on disk.
    sha256 : str
        Hash of exactly these bytes, in hexadecimal.

    Raises
    ------
    InputError
        Of the type ``error``.
    """
    if is_url(str(path)):
        raise error(
            "this is a URL, expected a file on this machine",
            file=path,
            remedy="Download it first and give the path of the copy.",
        )
    try:
        status = os.stat(path)
        if not S_ISREG(status.st_mode):
            kind = "a directory" if S_ISDIR(status.st_mode) else "not a regular file"
            raise error(
                f"this is {kind}, expected a file",
                file=path,
                remedy="Give the path of the file itself.",
            )
        if status.st_size > (limit := size_limit(size_limit_bytes)):
            raise _too_large(f"the file holds {_size_text(status.st_size)},", limit, path, error)
        with open(path, "rb") as stream:
            # Reading by the limit would ask for that much memory.
            data = stream.read(status.st_size)
    except (OSError, ValueError) as cause:
        reason = (getattr(cause, "strerror", None) or str(cause)).lower()
        raise error(
            f"the file cannot be read ({reason})",
            file=path,
            remedy="Check the path, which is relative to the file that names it, "
            "and the permissions.",
        ) from cause
    digest = hashlib.sha256(data).hexdigest()
    if (hashes := _hashes.get()) is not None:
        hashes[str(path)] = digest
    return data, digest


@contextmanager
def hashes_as_read() -> Iterator[dict[str, str]]:
    """Collect, by path, the hash of each file that `read_local_file` reads meanwhile.

    A file that changes is not what was read when it is read once more to be hashed.
    """
    hashes: dict[str, str] = {}
    token = _hashes.set(hashes)
    try:
        yield hashes
    finally:
        _hashes.reset(token)


def expand(
    data: bytes,
    path: str | Path,
    *,
    size_limit_bytes: int,
    error: type[InputError],
    must_begin: bytes = b"",
) -> bytes:
    """Return gzip data decompressed, any other data as it is.

    Decompression stops as soon as the limit is passed, or at once where the
    content does not begin as it must; so a small file that expands to a huge
    one costs no more than the limit.

    Raises
    ------
    InputError
        Of the type ``error``: cut short, damaged, or beyond the limit.
    """
    if not data.startswith(b"\x1f\x8b"):
        return data
    whole = io.BytesIO()  # grows in place, and hands out its bytes without a copy
    begun = False
    limit = size_limit(size_limit_bytes)
    try:
        with gzip.GzipFile(fileobj=io.BytesIO(data)) as stream:
            while chunk := stream.read(_CHUNK):
                if not (begun or chunk.startswith(must_begin)):
                    return chunk
                begun = True
                whole.write(chunk)
                if whole.tell() > limit:
                    raise _too_large("the compressed file expands to", limit, path, error)
    except EOFError as cause:
        raise error(
            "the compressed file ends too early",
            file=path,
            remedy="It was cut short: copy or download it again.",
        ) from cause
    except (OSError, zlib.error) as cause:
        raise error(
            "the compressed file is damaged",
            file=path,
            remedy="Copy or download it again.",
        ) from cause
    return whole.getvalue()


class _Bounded(io.BufferedIOBase):
    """A stream that is read or skipped up to a limit, wherever the reader means to go."""

    def __init__(self, stream: gzip.GzipFile, limit: int, excess: InputError) -> None:
        self._stream = stream
        self._limit = limit
        self._excess = excess

    def seek(self, offset: int, whence: int = os.SEEK_SET) -> int:
        """Go to a place counted from the beginning."""
        if offset > self._limit:
            raise self._excess
        return self._stream.seek(offset, whence)

    def read(self, size: int | None = -1) -> bytes:
        """Read as usual, or raise when that passes the limit."""
        left = self._limit - self._stream.tell()
        data = self._stream.read(left + 1 if size is None or size < 0 else min(size, left + 1))
        if len(data) > left:
            raise self._excess
        return data


@contextmanager
def open_bounded(
    path: str | Path, *, size_limit_bytes: int, error: type[InputError]
) -> Iterator[BinaryIO]:
    """Open a local regular file to read parts of it, plain or as its gzip expands.

    A plain file may have any size, since what is not read costs nothing; of a
    compressed one no more than the limit is expanded.

    Raises
    ------
    InputError
        Of the type ``error``, when the limit is passed.
    """
    limit = size_limit(size_limit_bytes)
    excess = _too_large("the compressed file expands to", limit, path, error)
    with open(path, "rb") as stream:
        packed = stream.read(2) == b"\x1f\x8b"
        stream.seek(0)
        if not packed:
            yield stream
            return
        with gzip.GzipFile(fileobj=stream) as expanded:
            yield cast(BinaryIO, _Bounded(expanded, limit, excess))


def open_fits(data: bytes, path: str | Path, *, error: type[InputError]) -> fits.HDUList:
    """Open FITS held in memory without copying it, and check that it is whole.

    Raises
    ------
    InputError
        Of the type ``error``: not FITS, or cut short.
    """
    if not data.startswith(b"SIMPLE  ="):
        raise error(
            f"this is {_beginning(data)}, expected FITS, plain or compressed with gzip",
            file=path,
            remedy="Check that it is the right file.",
        )
    end = max((end for _, end in walk_headers(io.BytesIO(data), path, error)), default=len(data))
    if end < len(data):
        data = data[:end]  # what follows is no FITS
    with warnings.catch_warnings():
        # A file cut short is warned about and then read as empty: we look ourselves.
        warnings.simplefilter("ignore")
        try:
            hdus = fits.HDUList.fromstring(data)
            count = len(hdus)  # reads the headers, which wait until asked for
        # Damaged headers end in whatever the parser trips over.
        except Exception as cause:
            raise error(
                "the FITS headers cannot be read",
                file=path,
                remedy="The file is damaged or cut short: copy or download it again.",
            ) from cause
        for hdu in hdus[:count]:
            if isinstance(hdu, fits.BinTableHDU):
                _check_whole(hdu, len(data), path, error)
    return hdus


def _beginning(data: bytes) -> str:
    """Say what a file is by how it begins."""
    if not data:
        return "an empty file"
    line = data[:12].decode("latin-1").strip().partition("\n")[0].strip()
    text = "".join(c if c.isascii() and c.isprintable() else "?" for c in line)
    if text.strip("?"):
        return f"a file that begins with {text!r}"
    return f"a file that begins with the bytes {data[:8].hex(' ')}"


def _check_whole(
    hdu: fits.BinTableHDU, size: int, path: str | Path, error: type[InputError]
) -> None:
    """Refuse a table with fewer rows than its header announces, or more bytes than the file."""
    try:
        announced = hdu.header["NAXIS2"]
        found = len(hdu.data)
        trouble = f"it ends after {found} of {announced} rows" if found < announced else None
        trouble = trouble or check_shared_bytes(hdu, size)
    except Exception:  # see above
        trouble = "its rows cannot be read"
    if trouble:
        raise error(
            f"the table of this FITS file is not whole ({trouble})",
            file=path,
            remedy="The file is damaged or cut short: copy or download it again.",
        )


def header_value(
    header: fits.Header, key: str, default: Any, path: str | Path, error: type[InputError]
) -> Any:
    """Return the value of a keyword, the default where the header lacks it.

    Raises
    ------
    InputError
        Of the type ``error``, if its line is damaged.
    """
    try:
        return header.get(key, default)
    except fits.VerifyError as cause:
        raise error(
            f"the line of the keyword {key} in the FITS header cannot be read",
            file=path,
            remedy="Correct the header, or copy or download the file again.",
        ) from cause


def write_whole(path: str | Path, data: bytes) -> None:
    """Write a file so that it appears whole or not at all.

    Raises
    ------
    OutputError
        If it cannot be written; nothing is left behind.
    """
    target = Path(path)
    try:
        handle, beside = tempfile.mkstemp(dir=target.parent, prefix=f".{target.name}.")
        try:
            with os.fdopen(handle, "wb") as stream:
                stream.write(data)
            mask = os.umask(0)
            os.umask(mask)
            os.chmod(beside, 0o666 & ~mask)  # mkstemp makes a private file
            os.replace(beside, target)
        except BaseException:
            os.unlink(beside)
            raise
    except OSError as cause:
        raise OutputError(
            f"the file cannot be written ({(cause.strerror or str(cause)).lower()})",
            file=path,
            remedy="Check that the folder exists, is writable and has room.",
        ) from cause
