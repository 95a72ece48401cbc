"""The output folder: every file whole or none, and nobody else's file touched.

Everything is rendered into a staging folder on the same file system first. A
new folder then appears with one rename. In an existing folder each file is
replaced with one rename, and what was there comes back if any of them fails.
The manifest says which files are ours.
"""

from __future__ import annotations

import errno
import hashlib
import io
import json
import os
import re
import shutil
import unicodedata
from collections.abc import Callable, Iterable, Iterator, Mapping
from contextlib import contextmanager, nullcontext, suppress
from pathlib import Path
from typing import Any

from astropy.table import MaskedColumn

from skytally.circular import render_circular
from skytally.errors import OutputError
from skytally.figure_style import Drawing
from skytally.figures import sketch_figures
from skytally.footprints import Progress
from skytally.house_style import HouseStyle
from skytally.leftover import LeftOver
from skytally.manifest import MANIFEST, MANIFEST_FORMAT, MANIFEST_LIMIT_BYTES, manifest_text
from skytally.moc import write_moc
from skytally.paper import Paper, open_paper
from skytally.region_files import region_to_write
from skytally.report import render_html, render_paper
from skytally.results import Results
from skytally.serialise import to_json, to_table
from skytally.skymap_io import write_skymap
from skytally.spans import Spans
from skytally.staging import hold_folder, staging_folder

__all__ = ["file_stems", "is_ours", "left_over_files", "write_outputs", "write_regions"]

_REPORT_FILES = frozenset(
    {
        *("report.html", "report.pdf", "circular.txt", "circular-short.txt"),
        *("tally.json", "tally.ecsv", MANIFEST),
    }
)
_REGION_FILE = re.compile(
    r"((regions/)?[a-z0-9][a-z0-9-]{0,79}\.fits|left-over/[a-z0-9][a-z0-9-]{0,79}\.fits\.gz"
    r"|circulars/[a-z0-9][a-z0-9-]{0,79}\.txt)"
)
# Names that a file cannot have on every system, and "all", which is the union.
_RESERVED = frozenset(
    {"all", "con", "prn", "aux", "nul"}
    | {f"{port}{digit}" for port in ("com", "lpt") for digit in range(10)}
)
_FORMULA = frozenset("=+-@")
_NO_ROOM = {errno.ENOSPC, errno.EDQUOT, errno.EFBIG}
_NO_RIGHT = {errno.EACCES, errno.EPERM, errno.EROFS}


def write_outputs(
    results: Results,
    out_dir: str | Path,
    progress: Progress | None = None,
    style: HouseStyle | None = None,
    campaign: str | Path | None = None,
    paper: Paper | None = None,
) -> tuple[Path, ...]:
    """Write the report in all its forms, the regions and the manifest.

    Parameters
    ----------
    results : Results
        What to write.
    out_dir : path
        A folder: new, empty, or one that an earlier report was written to.
    progress : callable, optional
        Called with what is being written and the fraction done.
    style : HouseStyle, optional
        Templates that override ours.
    campaign : path, optional
        The campaign file, for the manifest to say where the numbers are from.
    paper : Paper, optional
        What `open_paper` gave, if it was opened before; good for one report.

    Returns
    -------
    tuple of Path
        The files written, manifest last.

    Raises
    ------
    OutputError
        If a file cannot be written or would replace one that is not ours; then
        nothing has changed. If only the PDF cannot be made, everything else
        is written first.
    """
    failures: list[OutputError] = []

    def say(what: str, done: float) -> None:
        if progress is not None:
            progress(what, done)

    def render(folder: Path) -> None:
        with open_paper() if paper is None else nullcontext(paper) as sheets:
            say("Drawing the figures", 0.0)
            figures = _draw(results, style, sheets)
            # Beside each, the fraction of the time that the earlier ones have taken.
            writers: dict[str, tuple[float, Callable[[Path], None]]] = {
                "report.html": (0.4, lambda path: _put(path, render_html(results, figures, style))),
                "tally.json": (0.45, lambda path: _put(path, to_json(results))),
                "tally.ecsv": (0.46, lambda path: _put(path, _ecsv(results))),
                "circular.txt": (0.47, lambda path: _put(path, render_circular(results))),
                "circular-short.txt": (
                    0.47,
                    lambda path: _put(path, render_circular(results, "short")),
                ),
                "circulars": (0.47, lambda path: _render_circulars(results, path)),
                "regions": (0.48, lambda path: _render_regions(results, path)),
                "report.pdf": (0.6, lambda path: _put(path, sheets.pdf())),
            }
            for name, (done, write) in writers.items():
                say(f"Writing {name}", done)
                try:
                    write(folder / name)
                except OutputError as error:
                    if name != "report.pdf":
                        raise
                    failures.append(error)

    written = _publish(Path(out_dir), "report", results, render, campaign)
    if failures:
        raise failures[0]
    return written


def _draw(results: Results, style: HouseStyle | None, paper: Paper) -> dict[str, Drawing]:
    """Draw the figures, and hand page and drawings over as they are made."""
    sketches = sketch_figures(results)
    paper.send_page(render_paper(results, sketches, style))
    figures = {}
    for name, sketch in sketches.items():
        figures[name] = sketch.draw()
        paper.send_drawing(name, figures[name].svg)
    return figures


def write_regions(
    results: Results,
    out_dir: str | Path,
    left: Mapping[str | None, LeftOver] | None = None,
    campaign: str | Path | None = None,
) -> tuple[Path, ...]:
    """Write a MOC per telescope, one of all together, what is left, and the manifest.

    Arguments, result and errors as in `write_outputs`; ``left`` is what
    `left_overs` returns for one map version.
    """
    left = {} if left is None else left

    def render(folder: Path) -> None:
        _render_regions(results, folder)
        if left:
            (folder / "left-over").mkdir()
        for source, name in left_over_files(left).items():
            write_skymap(folder / name, left[source].skymap, results.identity.fingerprint)

    return _publish(Path(out_dir), "regions", results, render, campaign)


def left_over_files(left: Mapping[str | None, LeftOver]) -> dict[str | None, str]:
    """Name the file of what is left without covered sky (None) and without each source."""
    stems = file_stems("coverage" if source is None else source for source in left)
    return {source: f"left-over/{stem}.fits.gz" for source, stem in zip(left, stems)}


def file_stems(names: Iterable[str]) -> tuple[str, ...]:
    """Return a file name without suffix for each name, in order.

    Lower-case letters, digits and hyphens only, so no name leaves its folder,
    and no two are the same on a system that ignores case.
    """
    used = set(_RESERVED)
    stems = []
    for name in names:
        plain = unicodedata.normalize("NFKD", name).encode("ascii", "ignore").decode()
        base = re.sub(r"[^a-z0-9]+", "-", plain.lower())[:60].strip("-") or "telescope"
        stem, count = base, 1
        while stem in used:
            count += 1
            stem = f"{base}-{count}"
        used.add(stem)
        stems.append(stem)
    return tuple(stems)


def _ecsv(results: Results) -> str:
    text = io.StringIO()
    table = to_table(results)
    for name in table.colnames:
        column = table[name]
        if column.dtype.kind == "U":
            table[name] = MaskedColumn(
                [_inert(cell) for cell in column.filled("")],
                mask=column.mask,
                description=column.description,
            )
    table.write(text, format="ascii.ecsv")
    return text.getvalue().rstrip("\n") + "\n"


def _inert(cell: str) -> str:
    """Return text that a spreadsheet shows rather than computes.

    It takes the apostrophe for the sign of text (common practice). Numbers, which may
    begin with a minus sign, have columns of their own.
    """
    return f"'{cell}" if cell[:1] in _FORMULA else cell


def _render_circulars(results: Results, folder: Path) -> None:
    folder.mkdir()
    names = [t.name for t in results.telescopes]
    for stem, name in zip(file_stems(names), names, strict=True):
        _put(folder / f"{stem}.txt", render_circular(results, telescope=name))


def _render_regions(results: Results, folder: Path) -> None:
    folder.mkdir(exist_ok=True)
    covered = results.sky.covered
    names = [t.name for t in results.telescopes]
    regions = [
        *zip(file_stems(names), names, covered, strict=True),
        ("all", None, Spans.empty().union(*covered)),
    ]
    for stem, name, spans in regions:
        rows = [results.row(map=m.version, telescope=name) for m in results.maps]
        region = region_to_write(spans, rows, results.sky.maps)
        write_moc(region, folder / f"{stem}.fits", results.identity.fingerprint)


def _put(path: Path, content: str | bytes) -> None:
    # A file name that is no valid text reaches us with lone surrogates.
    data = content.encode("utf-8", "backslashreplace") if isinstance(content, str) else content
    path.write_bytes(data)


def _publish(
    out_dir: Path,
    command: str,
    results: Results,
    render: Callable[[Path], None],
    campaign: str | Path | None,
) -> tuple[Path, ...]:
    """Render into a staging folder, then move everything into place."""
    with _plain_errors(out_dir):
        out_dir = Path(os.path.abspath(out_dir))
        if (out_dir.exists() or out_dir.is_symlink()) and not out_dir.is_dir():
            raise OutputError(
                "it exists and is not a folder",
                file=out_dir,
                remedy="Choose another folder with --out.",
            )
        with staging_folder(out_dir) as staging:
            new = staging / "new"
            new.mkdir()
            render(new)
            names = _files_in(new)
            origin = None if campaign is None else _path_from(out_dir, campaign)
            outputs = [_described(new, name) for name in names]
            _put(new / MANIFEST, manifest_text(results, command, origin, outputs))
            names.append(MANIFEST)
            _sync(new)
            # Of two runs that end at once, one folder is whole before the other's comes.
            with hold_folder(out_dir.parent):
                if out_dir.exists():
                    _replace(out_dir, names, command, staging)
                else:
                    new.rename(out_dir)
            _sync_folder(out_dir.parent)
    return tuple(out_dir / name for name in names)


def _replace(out_dir: Path, names: list[str], command: str, staging: Path) -> None:
    """Move the staged files into an existing folder, or leave it as it was."""
    ours = _our_files(out_dir, command)
    for name in names:
        _refuse_foreign(out_dir, name, ours)
    old = staging / "old"
    new = staging / "new"
    # Stale files go first and the manifest comes next, so that even after a
    # power cut the manifest in place lists every file of ours.
    stale = sorted(name for name in ours - set(names) if (out_dir / name).is_file())
    order = sorted(names, key=lambda name: name != MANIFEST)
    done: list[str] = []
    try:
        for name in stale:
            (old / name).parent.mkdir(parents=True, exist_ok=True)
            done.append(name)
            os.replace(out_dir / name, old / name)
        for name in order:
            target = out_dir / name
            (old / name).parent.mkdir(parents=True, exist_ok=True)
            target.parent.mkdir(exist_ok=True)
            if target.exists():
                _keep(target, old / name)
            done.append(name)
            os.replace(new / name, target)
    except BaseException:
        for name in done:
            with suppress(OSError):
                if (old / name).exists():
                    os.replace(old / name, out_dir / name)
                elif name in names and not (new / name).exists():
                    (out_dir / name).unlink()
        raise
    for folder in {(out_dir / name).parent for name in [*stale, *names]}:
        with suppress(OSError):
            folder.rmdir()  # Succeeds only where the last stale file has gone.
        _sync_folder(folder)


def _keep(target: Path, backup: Path) -> None:
    """Give the old file a second name; copy it where the file system has no links."""
    try:
        os.link(target, backup)
    except OSError:
        shutil.copy2(target, backup)


def _refuse_foreign(out_dir: Path, name: str, ours: frozenset[str]) -> None:
    """Raise if writing this file would touch something that is not ours."""
    target = out_dir / name
    parent = target.parent
    if parent != out_dir and os.path.lexists(parent):
        if parent.is_symlink() or not parent.is_dir():
            raise OutputError(
                "it exists and is not a folder that skytally made",
                file=parent,
                remedy="Move it away, or choose another folder with --out.",
            )
        if not os.access(parent, os.W_OK | os.X_OK):
            raise PermissionError(errno.EACCES, os.strerror(errno.EACCES), str(parent))
    if not os.path.lexists(target):
        return
    if name not in ours or target.is_symlink() or not target.is_file():
        raise OutputError(
            "a file of this name exists that skytally did not write, and it was left as it is",
            file=target,
            remedy="Move it away, or choose another folder with --out.",
        )


def _our_files(out_dir: Path, command: str) -> frozenset[str]:
    """Return the names that an earlier manifest of ours lists; empty without one."""
    path = out_dir / MANIFEST
    try:
        if path.is_symlink() or path.stat().st_size > MANIFEST_LIMIT_BYTES:
            return frozenset()
        found = json.loads(path.read_bytes())
        if found["format"] != MANIFEST_FORMAT:
            return frozenset()
        names = {str(entry["path"]) for entry in found["outputs"]}
        earlier = str(found["command"])
    except (FileNotFoundError, NotADirectoryError):
        return frozenset()
    except (ValueError, KeyError, TypeError, RecursionError):
        return frozenset()
    if earlier != command:
        raise OutputError(
            f"the folder holds the output of 'skytally {earlier}'",
            file=out_dir,
            remedy="Choose another folder with --out.",
        )
    # A manifest is a file that anybody may have edited: believe only our own kind of names.
    kept = {name for name in names if is_ours(name)}
    return frozenset(kept | {MANIFEST})


def is_ours(name: str) -> bool:
    """Tell whether a path, from the output folder, is of a kind that skytally writes."""
    return name in _REPORT_FILES or _REGION_FILE.fullmatch(name) is not None


def _files_in(folder: Path) -> list[str]:
    return sorted(p.relative_to(folder).as_posix() for p in folder.rglob("*") if p.is_file())


def _described(folder: Path, name: str) -> dict[str, Any]:
    data = (folder / name).read_bytes()
    return {"path": name, "bytes": len(data), "sha256": hashlib.sha256(data).hexdigest()}


def _path_from(out_dir: Path, campaign: str | Path) -> str | None:
    """Path of the campaign file from the output folder; None from another disk of Windows."""
    with suppress(ValueError):
        place = os.path.relpath(os.path.realpath(campaign), os.path.realpath(out_dir))
        return Path(place).as_posix()
    return None


def _sync(folder: Path) -> None:
    """Force every file below a folder, and the folders, on to the disk."""
    for path in folder.rglob("*"):
        if path.is_file():
            with path.open("rb") as stream:
                os.fsync(stream.fileno())
        else:
            _sync_folder(path)
    _sync_folder(folder)


def _sync_folder(folder: Path) -> None:
    # Some systems cannot open or sync a folder; the files themselves are safe by then.
    with suppress(OSError):
        handle = os.open(folder, os.O_RDONLY)
        try:
            os.fsync(handle)
        finally:
            os.close(handle)


@contextmanager
def _plain_errors(out_dir: Path) -> Iterator[None]:
    """Turn what the operating system says into an `OutputError` with a remedy."""
    try:
        yield
    except OSError as error:
        reason = (error.strerror or str(error)).lower()
        remedy = "Choose another folder with --out."
        if error.errno in _NO_ROOM:
            remedy = "Free some space, or choose a folder on another disk with --out."
        elif error.errno in _NO_RIGHT:
            remedy = "Allow writing there, or choose another folder with --out."
        raise OutputError(
            f"the output could not be written ({reason}); nothing there was changed",
            file=out_dir,
            remedy=remedy,
        ) from error
