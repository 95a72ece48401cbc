"""The manifest of an output folder: what went in, what came out, and what made it.

It is written beside every output, and read again by ``skytally verify``; then it
is a file that anybody may have edited, so that every value is checked and nothing
is believed that its own fingerprint contradicts.
"""

from __future__ import annotations

import importlib.metadata
import json
import platform
import re
from contextlib import suppress
from dataclasses import asdict
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import BaseModel, ConfigDict, Field, ValidationError

from skytally import __version__
from skytally.code_hash import code_sha256
from skytally.errors import InputError
from skytally.local_files import read_local_file
from skytally.results import Results
from skytally.serialise import fingerprint_of

__all__ = ["MANIFEST", "MANIFEST_FORMAT", "Manifest", "libraries", "manifest_text", "read_manifest"]

MANIFEST = "manifest.json"
MANIFEST_FORMAT = "skytally/manifest"
MANIFEST_LIMIT_BYTES = 16 * 1024 * 1024

# What skytally needs; what these need in turn is found by their own metadata.
_NEEDED = (
    *("numpy", "scipy", "astropy", "astropy-healpix", "mocpy", "jinja2", "weasyprint"),
    *("matplotlib", "pydantic", "platformdirs", "typer", "rich"),
)
_NAME = re.compile(r"[A-Za-z0-9][A-Za-z0-9._-]*")

_Sha256 = Annotated[str, Field(pattern=r"^([0-9a-f]{64})?$")]
_Text = Annotated[str, Field(max_length=4096)]


class _Part(BaseModel):
    model_config = ConfigDict(strict=True, frozen=True, allow_inf_nan=False)


class Software(_Part):
    """Version of skytally, and the hash of its code."""

    name: Literal["skytally"]
    version: _Text
    code_sha256: _Sha256


class Input(_Part):
    """A file that was read, its path as the campaign names it."""

    role: _Text
    path: _Text
    sha256: _Sha256


class Numbers(_Part):
    """Hash of all numbers, and of each part of them."""

    sha256: _Sha256
    parts: dict[_Text, _Sha256]


class Output(_Part):
    """A file that was written."""

    path: _Text
    bytes: int
    sha256: _Sha256


class Manifest(_Part):
    """A manifest as read; keys that are not needed here are passed over."""

    format: Literal["skytally/manifest"]
    format_version: Literal[1]
    command: Literal["report", "regions"]
    fingerprint: Annotated[str, Field(pattern=r"^[0-9a-f]{12}$")]
    software: Software
    platform: _Text
    libraries: dict[_Text, _Text]
    campaign: _Text | None
    settings: dict[_Text, str | int | float | None]
    inputs: list[Input]
    results: Numbers
    outputs: list[Output]


def manifest_text(
    results: Results, command: str, campaign: str | None, outputs: list[dict[str, Any]]
) -> str:
    """Return the manifest as JSON text.

    Parameters
    ----------
    results : Results
        What was written.
    command : str
        The command that wrote it.
    campaign : str or None
        Path of the campaign file from the output folder.
    outputs : list of dict
        Path, size in bytes and SHA-256 of every other file.
    """
    identity = results.identity
    content = {
        "format": MANIFEST_FORMAT,
        "format_version": 1,
        "command": command,
        "fingerprint": identity.fingerprint or None,
        "software": {"name": "skytally", "version": __version__, "code_sha256": code_sha256()},
        "platform": machine(),
        "libraries": libraries(),
        "event": asdict(results.event),
        "campaign": campaign,
        "settings": asdict(results.settings),
        "seed": None,  # No number is drawn at random.
        "working_orders": {t.name: [t.order_min, t.order_max] for t in results.telescopes},
        "inputs": [asdict(item) for item in results.inputs],
        "results": {"sha256": identity.sha256, "parts": dict(identity.parts)},
        "outputs": outputs,
    }
    return json.dumps(content, indent=1, allow_nan=False, ensure_ascii=False) + "\n"


def machine() -> str:
    """Name the kind of machine, whose arithmetic may round in its own way."""
    return f"{platform.system()} {platform.machine()}"


def libraries() -> dict[str, str]:
    """Versions of Python and of every installed library that skytally stands on, by name."""
    found: dict[str, str] = {}
    waiting = list(_NEEDED)
    while waiting:
        name = waiting.pop().lower().replace("_", "-")
        if name in found:
            continue
        with suppress(importlib.metadata.PackageNotFoundError):
            one = importlib.metadata.distribution(name)
            found[name] = one.version
            for line in one.requires or ():
                needed = _NAME.match(line)
                if needed and "extra ==" not in line:
                    waiting.append(needed.group())
    return {"python": platform.python_version(), **dict(sorted(found.items()))}


def read_manifest(folder: Path) -> Manifest:
    """Read the manifest of an output folder and hold it against its own fingerprint.

    Raises
    ------
    InputError
        If there is none, or it is not as skytally wrote it.
    """
    path = folder / MANIFEST
    if not folder.is_dir():
        raise InputError(
            "there is no folder of that name",
            file=folder,
            remedy="Give the folder that skytally report or skytally regions wrote.",
        )
    if path.is_symlink() or not path.exists():
        raise InputError(
            f"the folder holds no {MANIFEST} of skytally",
            file=folder,
            remedy="Give the folder that skytally report or skytally regions wrote.",
        )
    data, _ = read_local_file(path, size_limit_bytes=MANIFEST_LIMIT_BYTES, error=InputError)
    try:
        found = Manifest.model_validate_json(data)
    except ValidationError as fault:
        first = fault.errors()[0]
        place = ".".join(map(str, first["loc"])) or "the whole"
        raise _broken(path, f"{place}: {first['msg']}") from fault
    inputs = [(item.role, item.path, item.sha256) for item in found.inputs]
    if fingerprint_of(inputs, dict(found.settings), found.results.sha256) != found.fingerprint:
        raise _broken(path, "its fingerprint is not that of its inputs, settings and numbers")
    return found


def _broken(path: Path, reason: str) -> InputError:
    return InputError(
        f"the manifest is not as skytally wrote it ({reason[:300]})",
        file=path,
        remedy="Take the folder from where it was first written, or write it anew.",
    )
