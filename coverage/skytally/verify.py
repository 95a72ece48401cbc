"""Whether an output folder's numbers still follow from its inputs, and if not, why."""

from __future__ import annotations

import hashlib
import json
import os
from collections import defaultdict
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path, PurePath
from typing import Any, Literal

from skytally import __version__
from skytally.account import account
from skytally.campaign import load_campaign
from skytally.changes import Change, compare
from skytally.code_hash import code_sha256
from skytally.errors import InputError
from skytally.footprints import Progress
from skytally.local_files import is_url, read_local_file
from skytally.manifest import Manifest, libraries, machine, read_manifest
from skytally.outputs import is_ours
from skytally.results import Results
from skytally.serialise import part_hashes, to_dict, to_plain

__all__ = ["Reason", "Verdict", "verify"]

_NUMBERS = "tally.json"
_NUMBERS_LIMIT_BYTES = 1 << 30
_Kind = Literal["input", "setting", "code", "library", "machine"]


@dataclass(frozen=True)
class Reason:
    """One thing that is not as it was when the folder was written.

    ``before`` and ``after`` are None where there was, or is, none of it; of an
    input they are its hashes.
    """

    kind: _Kind
    name: str
    before: Any
    after: Any


@dataclass(frozen=True)
class Verdict:
    """What verifying a folder came to.

    Attributes
    ----------
    fingerprint, fingerprint_now : str
        As the manifest says, and of the numbers found now.
    changes : tuple of Change or None
        The numbers that differ; None where the folder holds no intact
        tally.json to tell them from.
    changed_parts : tuple of str
        Parts of the results that differ by more than rounding.
    compared, rounded : int
        Values compared, and those that differ by rounding alone.
    reasons : tuple of Reason
        What else differs, whether it moved a number or not.
    altered, missing : tuple of str
        Output files that are not as they were written, or are gone.
    """

    event: str
    campaign: str
    fingerprint: str
    fingerprint_now: str
    changes: tuple[Change, ...] | None
    changed_parts: tuple[str, ...]
    compared: int
    rounded: int
    reasons: tuple[Reason, ...]
    altered: tuple[str, ...]
    missing: tuple[str, ...]

    @property
    def same_numbers(self) -> bool:
        """Whether every number is what it was, but for rounding."""
        return not self.changed_parts

    @property
    def same(self) -> bool:
        """Whether the numbers and the files are what they were."""
        return self.same_numbers and not self.altered and not self.missing


def verify(
    folder: str | Path, campaign: str | Path | None = None, progress: Progress | None = None
) -> Verdict:
    """Account for a folder's campaign once more, and hold the numbers against the folder's.

    Nothing is written.

    Parameters
    ----------
    folder : path
        What ``skytally report`` or ``skytally regions`` wrote.
    campaign : path, optional
        The campaign file, where it is no longer where the manifest says.
    progress : callable, optional
        As for `account`.

    Raises
    ------
    InputError
        If the folder holds no manifest of ours, or an input is missing or broken.
    """
    folder = Path(folder)
    manifest = read_manifest(folder)
    states = {item.path: _state(folder, item.path, item.sha256) for item in manifest.outputs}
    before = None
    if states.get(_NUMBERS) == "intact":
        before = _numbers_of(folder, manifest)
    place = _campaign_of(folder, manifest) if campaign is None else Path(campaign)
    loaded = load_campaign(place)
    results = account(loaded, progress)
    _need_logs(manifest, results, place)
    now = results.identity
    parts = [
        name
        for name in {**manifest.results.parts, **dict(now.parts)}
        if manifest.results.parts.get(name) != dict(now.parts).get(name)
    ]
    changes, compared, rounded = None, 0, 0
    if before is not None:
        # By way of JSON, so that both sides hold the same kinds of values.
        after = json.loads(json.dumps(to_dict(results)))
        found = compare(before, after, list(dict(now.parts)))
        changes, compared, rounded = found.changes, found.compared, found.rounded
        parts = [name for name in parts if any(change.part == name for change in changes)]
    return Verdict(
        results.event.name,
        str(place),
        manifest.fingerprint,
        now.fingerprint,
        changes,
        tuple(parts),
        compared,
        rounded,
        tuple(_reasons(manifest, results)),
        tuple(path for path, state in states.items() if state == "altered"),
        tuple(path for path, state in states.items() if state == "missing"),
    )


def _state(folder: Path, name: str, sha256: str) -> Literal["intact", "altered", "missing"]:
    """Look at an output; one whose name is not of our making is not even looked for."""
    path = folder / name
    if not is_ours(name) or not os.path.lexists(path):
        return "missing"
    if path.is_symlink() or path.parent.is_symlink() or not path.is_file():
        return "altered"
    with path.open("rb") as stream:
        digest = hashlib.file_digest(stream, "sha256").hexdigest()
    return "intact" if digest == sha256 else "altered"


def _numbers_of(folder: Path, manifest: Manifest) -> Mapping[str, Any]:
    """Read the numbers that the folder holds; they are those that the manifest has hashed."""
    path = folder / _NUMBERS
    data, _ = read_local_file(path, size_limit_bytes=_NUMBERS_LIMIT_BYTES, error=InputError)
    try:
        found = json.loads(data)
        agrees = isinstance(found, dict) and part_hashes(found) == manifest.results.parts
    except (ValueError, RecursionError):
        agrees = False
    if not agrees:
        raise InputError(
            "its numbers are not those that manifest.json has hashed",
            file=path,
            remedy="Take the folder from where it was first written, or write it anew.",
        )
    return dict(found)


def _campaign_of(folder: Path, manifest: Manifest) -> Path:
    """Find the campaign file where the manifest says it is, from the folder."""
    named = manifest.campaign
    if named is None or is_url(named) or PurePath(named).is_absolute() or "\0" in named:
        raise InputError(
            "the manifest does not say where the campaign file is from the folder",
            file=folder,
            remedy="Name it with --campaign FILE.",
        )
    place = Path(os.path.normpath(os.path.join(os.path.realpath(folder), named)))
    if not os.path.isfile(place):  # Path.is_file raises where a name is too long.
        raise InputError(
            "the campaign file is not where the manifest says",
            file=place,
            remedy="If it has moved, name it with --campaign FILE.",
        )
    return place


def _need_logs(manifest: Manifest, results: Results, campaign: Path) -> None:
    """Raise if a log that was read is missing or broken now: the rest would be no comparison."""
    were_read = {item.path for item in manifest.inputs}
    for log in results.logs:
        if log.fault and log.file in were_read:
            raise InputError(
                f"the log of {log.telescope} could be read when the folder was written, and now "
                f"cannot: {log.fault}",
                file=campaign,
            )


def _reasons(manifest: Manifest, results: Results) -> Iterator[Reason]:
    """List what differs between then and now."""
    then, now = defaultdict(list), defaultdict(list)
    for read in manifest.inputs:
        then[read.role, read.path].append(read.sha256)
    for item in results.inputs:
        now[item.role, item.path].append(item.sha256)
    for role, path in {**then, **now}:
        before, after = ("+".join(side[role, path]) or None for side in (then, now))
        if before != after:
            yield Reason("input", f"{path} ({role})", before, after)
    yield from _differences("setting", manifest.settings, to_plain(results.settings))
    made = manifest.software
    if made.version != __version__:
        yield Reason("code", "skytally", made.version, __version__)
    elif made.code_sha256 != (code := code_sha256()):
        yield Reason("code", f"skytally {__version__}", made.code_sha256, code)
    yield from _differences("library", manifest.libraries, libraries())
    if manifest.platform != machine():
        yield Reason("machine", "platform", manifest.platform, machine())


def _differences(
    kind: _Kind, before: Mapping[str, Any], after: Mapping[str, Any]
) -> Iterator[Reason]:
    for name in {**before, **after}:
        if before.get(name) != after.get(name):
            yield Reason(kind, name, before.get(name), after.get(name))
