"""The hash of this package's own code."""

from __future__ import annotations

import hashlib
from functools import cache
from pathlib import Path

__all__ = ["code_sha256"]


@cache
def code_sha256() -> str:
    """Hash the package's own modules, so that changed code of one version is told apart."""
    whole = hashlib.sha256()
    for path in sorted(Path(__file__).parent.glob("*.py")):
        whole.update(path.name.encode() + b"\0" + hashlib.sha256(path.read_bytes()).digest())
    return whole.hexdigest()
