"""The results as if one telescope had observed alone."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import replace
from typing import Protocol, TypeVar

from skytally.errors import UsageError
from skytally.limits import SourceRow
from skytally.results import Results
from skytally.tally import TallyRow

__all__ = ["only_telescope"]


class _OfTelescope(Protocol):
    @property
    def telescope(self) -> str | None: ...


T = TypeVar("T", bound=_OfTelescope)
R = TypeVar("R", TallyRow, SourceRow)


def only_telescope(results: Results, telescope: str) -> Results:
    """Return the results with one telescope's part of them, its totals in the place of all.

    What is known only of all telescopes together (nights, what is ruled out, what
    they share) is left empty.

    Raises
    ------
    UsageError
        If there is no telescope of that name; the message lists those there are.
    """
    names = [t.name for t in results.telescopes]
    if telescope not in names:
        raise UsageError(
            f"there is no telescope {telescope!r}",
            remedy=f"Choose one of: {', '.join(map(repr, names))}.",
        )
    index = names.index(telescope)
    others = {*names[:index], *names[index + 1 :]}
    sky = results.sky
    return replace(
        results,
        telescopes=(results.telescopes[index],),
        logs=_of(results.logs, telescope),
        rows=tuple(_totals(results.rows, telescope)),
        source_rows=tuple(_totals(results.source_rows, telescope)),
        timelines=_of(results.timelines, telescope),
        as_pointed=_of(results.as_pointed, telescope),
        exposures=_of(results.exposures, telescope),
        set_aside=_of(results.set_aside, telescope),
        absolute_limits=_of(results.absolute_limits, telescope),
        findings=tuple(f for f in results.findings if f.subject not in others),
        silenced=tuple(f for f in results.silenced if f.subject not in others),
        claims=tuple(c for c in results.claims if c.claim.telescope == telescope),
        sky=replace(
            sky,
            covered=sky.covered[index : index + 1],
            outlines=sky.outlines[index : index + 1],
            deepest=None,
        ),
        exclusions=(),
        fading_planes=(),
        distance_profiles=(),
        depth_histograms=(),
        sharing=(),
    )


def _of(items: Sequence[T], telescope: str) -> tuple[T, ...]:
    return tuple(item for item in items if item.telescope == telescope)


def _totals(rows: Sequence[R], telescope: str) -> Iterator[R]:
    """Yield a telescope's rows, each as the total that it is now and as its own."""
    for row in rows:
        if row.telescope == telescope:
            yield replace(row, telescope=None)
            yield row
