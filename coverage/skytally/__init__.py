"""Sky coverage accounting for alerts with large, uncertain localizations."""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from skytally.api import Campaign
    from skytally.skymap import SkyMap
    from skytally.skymap_io import read_skymap
    from skytally.spans import Spans

__all__ = ["Campaign", "SkyMap", "Spans", "__version__", "read_skymap"]

__version__ = "0.1.0"

# Found on first use, so that importing the package costs next to nothing.
_HOMES = {"Campaign": "api", "SkyMap": "skymap", "Spans": "spans", "read_skymap": "skymap_io"}


def __getattr__(name: str) -> object:
    if name not in _HOMES:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    return getattr(import_module(f"{__name__}.{_HOMES[name]}"), name)


def __dir__() -> list[str]:
    return sorted({*globals(), *__all__})
