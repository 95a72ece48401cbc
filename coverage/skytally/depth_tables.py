"""The numbers of the chart of depths, from the results alone."""

from __future__ import annotations

from skytally.plots import depth_bands
from skytally.report_tables import Cell, Table, capped, columns_of
from skytally.results import Results
from skytally.wording import NBSP, area_text, limit_rows, limit_terms, number_text

__all__ = ["depth_tables"]


def depth_tables(results: Results) -> dict[str, Table]:
    """Return the table of depth by place; without rows where there is no limit."""
    deepest = results.sky.deepest
    # In the order of the chart's panels.
    bands = [] if deepest is None else [str(row.band) for row in depth_bands(results)]
    rows = []
    for band in bands:
        assert deepest is not None
        depth = deepest.band_depth(band)
        without = depth.without_limit_deg2
        rows.append(
            (
                Cell(band),
                Cell(_area(depth.area_deg2)),
                Cell(_area(without) if without > 0 else number_text(0)),
                *(
                    Cell(number_text(limit, 2))
                    for limit in (depth.shallowest, depth.over_90, depth.over_50, depth.deepest)
                ),
            )
        )
    table = Table(
        "depth-places",
        f"Deepest limit of each place ({limit_terms(results.settings, limit_rows(results))})",
        columns_of(
            "band",
            "area with a limit",
            "area without",
            "shallowest",
            f"over 90{NBSP}% of the area",
            f"over 50{NBSP}% of the area",
            "deepest",
        ),
        tuple(rows),
        note="Limits in magnitudes, of the deepest single exposure. Over 90% of the area: "
        "what at least that much of the area with a limit reaches.".replace("90%", f"90{NBSP}%"),
    )
    return {table.name: capped(table)}


def _area(area_deg2: float) -> str:
    return area_text(area_deg2, area_deg2, area_deg2)
