"""What the audit found, on a terminal of 80 columns and as JSON."""

from __future__ import annotations

import json
from dataclasses import asdict
from typing import TextIO

from skytally.claims import ClaimVerdict
from skytally.findings import SEVERITIES, Finding, Severity
from skytally.results import Results
from skytally.serialise import to_plain
from skytally.terminal import Page
from skytally.wording import count, join_words

__all__ = ["FORMAT", "render_check", "to_check_json"]

FORMAT = "skytally/check"

_INDENT = "    "
_TITLES: dict[Severity, str] = {
    "error": "ERRORS: the numbers cannot be right",
    "caution": "CAUTIONS: look before you send",
    "note": "NOTES: good to know",
}
_PLURALS: dict[Severity, str] = {"error": "error", "caution": "caution", "note": "note"}


def render_check(results: Results, stream: TextIO) -> str:
    """Return findings, claims and the sum of the rows as text for a stream.

    Grouped by severity, the gravest first; nothing depends on colour.
    """
    page = Page(stream)
    page.write_line(_summary(results), style="bold")
    for severity in SEVERITIES:
        found = [finding for finding in results.findings if finding.severity == severity]
        if found:
            page.write_line()
            page.write_line(_TITLES[severity], style="bold")
            for finding in sorted(found, key=lambda one: one.subject.casefold()):
                _write_finding(page, finding)
    if results.claims:
        page.write_line()
        page.write_line("CLAIMS: what was stated, and what the logs give", style="bold")
        for verdict in results.claims:
            page.write_line()
            page.write_line(_of(verdict), indent="  ", hanging=_INDENT)
            text = f"{str(verdict.verdict).capitalize()}. {verdict.text}"
            page.write_line(text, indent=_INDENT, hanging=_INDENT)
    if results.silenced:
        page.write_line()
        page.write_line("SILENCED by the campaign", style="bold")
        for finding in results.silenced:
            rows = f", {count('row', len(finding.rows))}" if finding.rows else ""
            page.write_line(f"  {finding.subject}: {finding.code}{rows}")
    return page.text()


def to_check_json(results: Results) -> str:
    """Return the same as JSON, every row of every finding listed."""
    content = {
        "format": FORMAT,
        "format_version": 1,
        "software": results.software,
        "event": asdict(results.event),
        "findings": to_plain(results.findings),
        "silenced": to_plain(results.silenced),
        "claims": to_plain(results.claims),
        "logs": to_plain(results.logs),
    }
    return json.dumps(content, indent=1, allow_nan=False, ensure_ascii=False) + "\n"


def _summary(results: Results) -> str:
    counts = [
        count(_PLURALS[severity], number)
        for severity in SEVERITIES
        if (number := sum(f.severity == severity for f in results.findings))
    ]
    found = join_words(counts) if counts else "nothing to remark"
    read = sum(log.read for log in results.logs)
    used = sum(log.used for log in results.logs)
    return (
        f"{results.event.name}: {found} in {count('row', read)} "
        f"({used} used, {read - used} set aside) of {count('log', len(results.logs))}."
    )


def _of(verdict: ClaimVerdict) -> str:
    """Say whose number it is, of what, and where it was stated."""
    claim = verdict.claim
    parts = (claim.telescope, str(claim.quantity), claim.band, claim.night)
    source = ", ".join(part for part in (claim.stated_by, claim.where) if part)
    what = ", ".join(part for part in parts if part)
    return f"{what} ({source})" if source else what


def _write_finding(page: Page, finding: Finding) -> None:
    page.write_line()
    where = f", {finding.where}" if finding.where else ""
    page.write_line(f"{finding.subject} [{finding.code}]{where}", indent="  ", hanging=_INDENT)
    for text in (finding.text, finding.done, f"To do: {finding.remedy}"):
        page.write_line(text, indent=_INDENT, hanging=_INDENT)
