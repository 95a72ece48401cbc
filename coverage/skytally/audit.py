"""The audit whole: every finding on a campaign, less what the campaign silences."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

from skytally.audit_depth import band_findings, depth_findings
from skytally.audit_footprints import footprint_findings
from skytally.audit_maps import extinction_findings, map_findings, sum_findings, version_findings
from skytally.audit_positions import Limits, position_findings
from skytally.audit_rows import duplicate_findings, reconciliation_findings
from skytally.audit_times import time_findings
from skytally.campaign import AuditOptions, LoadedCampaign
from skytally.covered import Coverage
from skytally.field_extinction import bands_without_coefficient
from skytally.findings import SEVERITIES, Finding, gravest_first
from skytally.readings import READING_CODES
from skytally.skymap import SkyMap
from skytally.space import Space

__all__ = ["audit"]


def audit(
    campaign: LoadedCampaign,
    coverage: Coverage,
    spaces: Sequence[tuple[SkyMap, Space | None]],
) -> tuple[tuple[Finding, ...], tuple[Finding, ...]]:
    """Check logs, footprints and maps against each other and against the sky.

    Parameters
    ----------
    campaign : LoadedCampaign
        What was read.
    coverage : Coverage
        What `lay_coverage` made of it.
    spaces : sequence of (SkyMap, Space or None)
        The map versions with their volumes.

    Returns
    -------
    found, silenced : tuples of Finding
        The first the gravest first, demoted as the campaign says.
    """
    options = {telescope.name: telescope.audit for telescope in campaign.telescopes}
    defaults = {
        telescope.name: telescope.default_depth
        for telescope in campaign.telescopes
        if telescope.default_depth is not None
    }
    totals = [(m, m.file_sum) for m in campaign.maps if m.file_sum is not None]
    bands = bands_without_coefficient(
        coverage.footprints, campaign.dust, campaign.extinction_coefficients
    )

    def limits(telescope: str) -> Limits:
        return Limits(options[telescope].airmass, options[telescope].moon_deg)

    everything = [
        *reconciliation_findings(campaign),
        *duplicate_findings(campaign),
        *time_findings(campaign),
        *position_findings(campaign, limits),
        *footprint_findings(campaign, coverage.footprints),
        *depth_findings(campaign, defaults),
        *band_findings(campaign),
        *extinction_findings(bands),
        *map_findings(spaces),
        *sum_findings(totals),
        *version_findings(campaign),
    ]
    found: list[Finding] = []
    silenced: list[Finding] = []
    for finding in _one_cause(everything):
        wish = options.get(finding.subject, campaign.audit)
        (silenced if finding.code in wish.silence else found).append(_demoted(finding, wish))
    return tuple(gravest_first(found)), tuple(silenced)


def _one_cause(findings: Sequence[Finding]) -> list[Finding]:
    """Only doubt the clock of a log whose positions are misread: either hides its fields."""
    misread = {f.subject for f in findings if f.code in READING_CODES and f.severity == "error"}
    return [
        replace(f, severity="caution") if f.code == "clock-shifted" and f.subject in misread else f
        for f in findings
    ]


def _demoted(finding: Finding, wish: AuditOptions) -> Finding:
    """Give a finding the severity that the campaign wishes, if that is milder."""
    wished = wish.demote.get(finding.code, finding.severity)
    milder = max(wished, finding.severity, key=SEVERITIES.index)
    return replace(finding, severity=milder)
