"""What the columns of a log may be called, and which one holds what."""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Mapping, Sequence
from difflib import get_close_matches
from pathlib import Path

from skytally.errors import LogError
from skytally.table_io import TextTable, split_unit

__all__ = ["ALIASES", "find_columns", "listed", "mapping_remedy", "normalise_name"]

# Canonical name -> names understood with no mapping, the first present wins. The names that
# begin with s_ or t_, obs_id and execution_status are those of ObsCore 1.1 (table 1) and
# ObsLocTAP 1.0; the others are common practice.
ALIASES: dict[str, tuple[str, ...]] = {
    "exposure": (
        *("exposure", "obs_id", "obsid", "exposure_id", "exp_id", "expid", "visit", "frame"),
        *("image", "filename", "file", "name", "id"),
    ),
    "ra": (
        *("ra", "s_ra", "ra_deg", "right_ascension", "ra_j2000", "raj2000", "ra_icrs"),
        *("ra_hms", "ra_hours"),
    ),
    "dec": (
        *("dec", "s_dec", "dec_deg", "declination", "decl", "dec_j2000", "dej2000", "decj2000"),
        *("dec_icrs", "dec_dms", "de"),
    ),
    "angle": ("angle", "position_angle", "pa", "pa_deg", "posang", "pos_angle"),
    "start": (
        *("start", "t_min", "date_obs", "start_time", "time_start", "utc_start", "start_utc"),
        *("obs_start", "mjd_start", "start_mjd", "mjd_obs", "mjd", "jd", "utc", "ut"),
        *("datetime", "time", "date"),
    ),
    "end": ("end", "t_max", "end_time", "time_end", "utc_end", "end_utc", "mjd_end", "end_mjd"),
    "duration": (
        *("duration", "t_exptime", "exptime", "exposure_time", "exp_time", "texp", "t_exp"),
        *("exptime_s", "duration_s", "integration_time"),
    ),
    "band": ("band", "filter", "filt", "filter_name", "passband"),
    "depth": (
        *("depth", "limmag", "lim_mag", "maglim", "mag_lim", "limiting_magnitude"),
        *("limiting_mag", "limit", "lim"),
    ),
    "quality": ("quality", "status", "qa"),
    "execution_status": ("execution_status",),
    "region": ("region", "s_region", "footprint"),
    "fov": ("fov", "s_fov"),
    "extinction": ("extinction", "a_band"),
}


def normalise_name(name: str) -> str:
    """Lower case, no unit in brackets, spaces and dashes as underscores."""
    bare, _ = split_unit(name.strip())
    return re.sub(r"[\s.\-]+", "_", bare.lower())


def find_columns(
    table: TextTable, mapping: Mapping[str, str], path: str | Path, notes: list[str]
) -> dict[str, int]:
    """Find which column of a log holds what: by the user's mapping, then by known names.

    Parameters
    ----------
    table : TextTable
        The log.
    mapping : mapping
        Canonical name to column of the file.
    path : str or Path
        For messages.
    notes : list of str
        What was assumed is added here.

    Returns
    -------
    dict
        Canonical name to index of the column; absent where the log has none.

    Raises
    ------
    LogError
        If a mapped or a needed column is absent, or a name is ambiguous.
    """
    bare = [normalise_name(x) for x in table.names]
    at = {
        canonical: _mapped_column(canonical, wanted, table, bare, path)
        for canonical, wanted in mapping.items()
    }
    claimed = set(at.values())
    for canonical, aliases in ALIASES.items():
        if canonical in at:
            continue
        present = [bare.index(x) for x in aliases if x in bare]
        present = [x for x in present if x not in claimed]
        if present:
            at[canonical] = present[0]
            others = [repr(table.names[x]) for x in present[1:]]
            if others:
                notes.append(
                    f"Column {table.names[present[0]]!r} is read as {canonical}, and "
                    f"{', '.join(others)} left unread; map columns if this is wrong."
                )
    times = Counter(bare)
    for canonical, index in at.items():
        if times[bare[index]] > 1:
            raise LogError(
                f"{times[bare[index]]} columns have this name, so {canonical} is ambiguous",
                file=path,
                column=table.names[index],
                remedy="Give every column its own name.",
            )
    _need_columns(at, table, path)
    return at


def _mapped_column(
    canonical: str, wanted: str, table: TextTable, bare: list[str], path: str | Path
) -> int:
    if wanted.strip() in table.names:
        return table.names.index(wanted.strip())
    name = normalise_name(wanted)
    if name in bare:
        return bare.index(name)
    near = get_close_matches(name, dict.fromkeys(bare), n=3, cutoff=0.4)
    close = [repr(table.names[bare.index(x)]) for x in near]
    hint = f"The nearest are {', '.join(close)}" if close else "No name is near it"
    raise LogError(
        f"columns maps {canonical} to this column, but the log has none of that name",
        file=path,
        column=wanted,
        remedy=f"{hint}; the log has {listed([repr(x) for x in table.names], 30)}.",
    )


def _need_columns(at: Mapping[str, int], table: TextTable, path: str | Path) -> None:
    needed = ["start"] if "region" in at else ["start", "ra", "dec"]
    for canonical in needed:
        if canonical not in at:
            what = canonical if canonical == "start" else f"{canonical} (and none for region)"
            raise LogError(
                f"the log has no column for {what}",
                file=path,
                remedy=mapping_remedy(canonical, table),
            )


def mapping_remedy(canonical: str, table: TextTable) -> str:
    """Return a sentence that lists the columns present and shows how to map one."""
    names = listed([repr(x) for x in table.names], 30)
    return (
        f'It has {names}: say which one with columns = {{ {canonical} = "NAME" }}, and see that '
        "the line with the names does not begin with # and that commas, semicolons or tabs "
        "part the cells."
    )


def listed(items: Sequence[str], most: int = 5) -> str:
    """Join items for a sentence; what is beyond the first few is counted."""
    rest = len(items) - most
    shown_items = [x if len(x) <= 80 else x[:77] + "..." for x in items[:most]]
    return ", ".join(shown_items) + (f" and {rest} more" if rest > 0 else "")
