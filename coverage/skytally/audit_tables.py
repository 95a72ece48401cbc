"""The report's tables of what the audit found and of how claims compare."""

from __future__ import annotations

from skytally.claims import ClaimVerdict
from skytally.findings import gravest_first
from skytally.report_tables import Cell, Column, Table, capped
from skytally.results import Results
from skytally.wording import MISSING, count

__all__ = ["audit_tables"]


def audit_tables(results: Results) -> dict[str, Table]:
    """Return the tables by name; without rows where there is nothing to say."""
    return {t.name: capped(t) for t in (_findings(results), _silenced(results), _claims(results))}


def _findings(results: Results) -> Table:
    return Table(
        "findings",
        "Findings, the gravest first",
        tuple(Column(t, numeric=False) for t in ("severity", "of", "seen", "done", "to do")),
        tuple(
            (
                Cell(finding.severity, finding.code),
                Cell(finding.subject, finding.where),
                Cell(finding.text),
                Cell(finding.done),
                Cell(finding.remedy),
            )
            for finding in gravest_first(results.findings)
        ),
    )


def _silenced(results: Results) -> Table:
    return Table(
        "silenced",
        "Findings that the campaign silences",
        tuple(Column(t, numeric=False) for t in ("code", "of", "rows")),
        tuple(
            (
                Cell(finding.code, code=True),
                Cell(finding.subject),
                Cell(count("row", len(finding.rows)) if finding.rows else MISSING),
            )
            for finding in results.silenced
        ),
    )


def _claims(results: Results) -> Table:
    return Table(
        "claims",
        "What was stated, and what the logs give",
        tuple(Column(t, numeric=False) for t in ("of", "stated", "tallied", "how they compare")),
        tuple(
            (
                Cell(*_of(verdict)),
                Cell(verdict.claim.value, _source(verdict)),
                Cell(verdict.own_text or MISSING),
                Cell(str(verdict.verdict), verdict.text),
            )
            for verdict in results.claims
        ),
    )


def _of(verdict: ClaimVerdict) -> tuple[str, str]:
    """Name the quantity, and below it the selection and the map version."""
    claim = verdict.claim
    parts = (claim.telescope, claim.band, claim.night, verdict.map and f"on {verdict.map}")
    return str(claim.quantity).replace("_", " ").replace("90", "90 %"), ", ".join(
        part for part in parts if part
    )


def _source(verdict: ClaimVerdict) -> str:
    claim = verdict.claim
    return ", ".join(part for part in (claim.stated_by, claim.where) if part)
