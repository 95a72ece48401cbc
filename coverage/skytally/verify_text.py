"""What verifying a folder came to, on a terminal of 80 columns and as JSON."""

from __future__ import annotations

import json
from collections.abc import Iterator, Sequence
from dataclasses import asdict
from typing import Any, TextIO

from skytally import __version__
from skytally.changes import Change
from skytally.terminal import Page
from skytally.verify import Reason, Verdict
from skytally.wording import count, join_words

__all__ = ["FORMAT", "render_verdict", "to_verdict_json"]

FORMAT = "skytally/verify"

_LISTED = 20
_TOLD = 2  # of each entry
_FIRST = {"probability", "area_deg2", "depth_median", "text"}
_LONGEST = 60


def render_verdict(verdict: Verdict, stream: TextIO) -> str:
    """Return the answer first, then the files, the numbers and the reasons, as text."""
    page = Page(stream)
    page.write_line(_answer(verdict), style="bold")
    for word, files in (("altered", verdict.altered), ("missing", verdict.missing)):
        if files:
            page.write_line()
            page.write_line(f"FILES {word.upper()} since they were written", style="bold")
            for name in files:
                page.write_line(name, indent="  ", hanging="    ")
    if verdict.changes:
        page.write_line()
        page.write_line("NUMBERS that changed, as they were and as they are", style="bold")
        entries = _by_entry(verdict.changes)
        for (part, of), changes in entries[:_LISTED]:
            page.write_line(_entry(part, of, changes), indent="  ", hanging="    ")
        more = len(entries) - _LISTED
        if more > 0:
            ending = "entry" if more == 1 else "entries"
            page.write_line(f"and {more} more {ending}; --json lists them all", indent="  ")
    if verdict.reasons or verdict.changed_parts:
        page.write_line()
        title = "What else is not as it was" if verdict.same_numbers else "WHY"
        page.write_line(title, style="bold")
        for line in _why(verdict):
            page.write_line(line, indent="  ", hanging="    ")
    return page.text()


def to_verdict_json(verdict: Verdict) -> str:
    """Return the same as JSON, every number that changed listed."""
    content = {
        "format": FORMAT,
        "format_version": 1,
        "software": f"skytally {__version__}",
        "same": verdict.same,
        **asdict(verdict),
    }
    return json.dumps(content, indent=1, allow_nan=False, ensure_ascii=False) + "\n"


def _answer(verdict: Verdict) -> str:
    """Say in one line whether the numbers hold."""
    head = f"{verdict.event}, fingerprint {verdict.fingerprint}: "
    if verdict.same_numbers:
        compared = f" ({count('value', verdict.compared)} compared)" if verdict.compared else ""
        text = f"the numbers are the same{compared}"
        if verdict.rounded:
            text += f", {verdict.rounded} but for rounding"
    elif verdict.changes is None:
        text = (
            f"numbers changed, in {join_words(verdict.changed_parts)}; the folder holds no "
            "tally.json as it was written, which would tell them one by one"
        )
    else:
        text = f"{count('number', len(verdict.changes))} of {verdict.compared} changed"
    return f"{head}{text}."


def _by_entry(changes: Sequence[Change]) -> list[tuple[tuple[str, str], list[Change]]]:
    """Gather what changed of one entry, what says most of it first."""
    found: dict[tuple[str, str], list[Change]] = {}
    for change in changes:
        found.setdefault((change.part, change.of), []).append(change)
    for some in found.values():
        some.sort(key=lambda change: change.name not in _FIRST)
    return list(found.items())


def _entry(part: str, of: str, changes: Sequence[Change]) -> str:
    said = [
        f"{change.name} {_value(change.before)} → {_value(change.after)}".strip()
        for change in changes[:_TOLD]
    ]
    if len(changes) > _TOLD:
        said.append(f"{len(changes) - _TOLD} more")
    return f"{part}{f' ({of})' if of else ''}: {'; '.join(said)}"


def _why(verdict: Verdict) -> Iterator[str]:
    yield from map(_reason, verdict.reasons)
    if not verdict.reasons:
        yield (
            "Nothing that the manifest records: the same inputs, settings, code and libraries. "
            "A finding on a clock may rest on when a log was last changed."
        )


def _reason(reason: Reason) -> str:
    if reason.kind == "input":
        state = "changed"
        if reason.before is None:
            state = "was not read then"
        elif reason.after is None:
            state = "is not read now"
        return f"Input {state}: {reason.name}"
    if reason.kind == "code" and len(str(reason.after)) == 64:
        return f"Code changed: {reason.name} has the same version and other code"
    return (
        f"{reason.kind.capitalize()} changed: {reason.name}, {_value(reason.before)} → "
        f"{_value(reason.after)}"
    )


def _value(value: Any) -> str:
    if value is None:
        return "none"
    text = f"{value:.10g}" if isinstance(value, float) else str(value)
    return text if len(text) <= _LONGEST else f"{text[:_LONGEST]}…"
