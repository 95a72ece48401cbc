"""Sources of a campaign from their tables, and what of them no exposure can answer."""

from __future__ import annotations

from collections.abc import Iterable, Sequence

from skytally.campaign_model import ExtinctionTable, SourceTable
from skytally.observations import LogTable
from skytally.sources import Detection, LightCurves, Source, same_band

__all__ = ["build_source", "extinction_notes", "source_notes"]


def build_source(table: SourceTable, curves: LightCurves | None, magnitude_system: str) -> Source:
    """Return the source that a table describes.

    Parameters
    ----------
    table : SourceTable
        As checked, with either a magnitude or a light-curve file.
    curves : mapping or None
        The content of that file.
    magnitude_system : str
        System of the campaign's magnitudes.
    """
    magnitudes: dict[str, float] | float = {} if table.magnitude is None else table.magnitude
    bands = None if isinstance(magnitudes, float) else tuple(curves or magnitudes)
    changes = table.fade is not None or table.rise is not None
    return Source(
        name=table.name,
        bands=bands,
        kind="light curve" if curves is not None else "fade" if changes else "constant",
        magnitudes=magnitudes,
        fade_per_day=table.fade or 0.0,
        rise_days=table.rise or 0.0,
        curves=curves or {},
        k_correction=table.k_correction,
        detection=Detection(table.detection.offset, table.detection.width, table.detection.plateau),
        visits=table.visits,
        gap_minutes=table.gap_minutes,
        magnitude_system=magnitude_system,
    )


def source_notes(sources: Sequence[Source], logs: Iterable[LogTable]) -> list[str]:
    """Note what is said about a source and has no use."""
    observed = sorted({str(band) for log in logs for band in log.band})
    notes = []
    for source in sources:
        unused = [b for b in source.bands or () if not any(same_band(b, o) for o in observed)]
        if source.bands and len(unused) == len(source.bands):
            notes.append(
                f"Source {source.name!r} is described in {', '.join(unused)} only, and no "
                f"exposure is in such a band (observed: {_named(observed)}); nothing can be said "
                "about it. Name its bands as the logs do."
            )
        elif unused:
            notes.append(
                f"Source {source.name!r}: no exposure is in {', '.join(unused)}; what is said "
                "there has no use."
            )
        if source.gap_minutes and source.visits == 1:
            notes.append(
                f"Source {source.name!r}: gap_minutes has no use with visits = 1; set visits to 2 "
                "or more if it must be seen again."
            )
    return notes


def extinction_notes(table: ExtinctionTable) -> list[str]:
    """Note keys of ``[extinction]`` that have no use without a map."""
    if table.map is not None:
        return []
    given = [key for key in ("coefficients", "allow_holes") if getattr(table, key)]
    return [f"[extinction]: {' and '.join(given)} without a map; no use was made."] * bool(given)


def _named(bands: Sequence[str]) -> str:
    return ", ".join(band or "none named" for band in bands) or "none"
