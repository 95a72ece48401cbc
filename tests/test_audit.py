"""The audit whole: what a campaign demotes or silences, and the order of the rest."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from campaign_builder import EVENT_MJD, campaign, log_table, telescope
from skytally.account import account, lay_coverage
from skytally.audit import audit
from skytally.cameras import CircleCamera
from skytally.campaign import AuditOptions, LoadedCampaign
from skytally.cosmology import Cosmology
from skytally.findings import CODES, SEVERITIES
from skytally.skymap_io import circle_skymap
from skytally.space import Space

MISSING = "depth-missing"


def night(**options: AuditOptions) -> LoadedCampaign:
    """Two logs of six fields each; Heron's third and fourth have no limit."""
    depth = np.array([20.1, 20.3, np.nan, np.nan, 20.2, 20.4])
    ra, dec = 150 + 0.4 * np.arange(6), np.full(6, -8.0)
    logs = {name: log_table(name, ra, dec, depth=depth) for name in ("Heron", "Plover")}
    telescopes = [
        replace(telescope(name, CircleCamera(0.3), log), site=None) for name, log in logs.items()
    ]
    heard = [replace(t, audit=options.get(t.name, AuditOptions())) for t in telescopes]
    return campaign(heard, [circle_skymap(151.0, -8.0, 3.0, label="1", issued_mjd=EVENT_MJD)])


def findings(one: LoadedCampaign):
    cosmology = Cosmology.named("Planck18")
    return audit(one, lay_coverage(one), [(m, Space.of(m, cosmology)) for m in one.maps])


def test_every_code_is_known_and_the_gravest_come_first() -> None:
    found, silenced = findings(night())
    assert silenced == ()
    assert {f.code for f in found} <= set(CODES)
    ranks = [SEVERITIES.index(f.severity) for f in found]
    assert ranks == sorted(ranks)
    assert [f.subject for f in found if f.code == MISSING] == ["Heron", "Plover"]


def test_a_telescope_silences_a_code_for_itself_alone() -> None:
    found, silenced = findings(night(Heron=AuditOptions(silence=frozenset({MISSING}))))
    assert [f.subject for f in found if f.code == MISSING] == ["Plover"]
    assert [(f.code, f.subject, f.rows) for f in silenced] == [(MISSING, "Heron", (4, 5))]


@pytest.mark.parametrize(
    ("code", "wished", "given"),
    [
        ("depth-out-of-range", "note", "note"),
        ("depth-out-of-range", "caution", "caution"),
        (MISSING, "caution", "note"),
        (MISSING, "note", "note"),
    ],
)
def test_a_code_is_demoted_and_never_raised(code: str, wished: str, given: str) -> None:
    one = night()
    depth = np.array([3.0, 3.0, np.nan, 20.1, 20.2, 20.3])
    spoilt = replace(one.telescopes[0], log=replace(one.telescopes[0].log, depth=depth))
    heard = replace(spoilt, audit=AuditOptions(demote={code: wished}))
    usual, _ = findings(replace(one, telescopes=(spoilt, one.telescopes[1])))
    found, _ = findings(replace(one, telescopes=(heard, one.telescopes[1])))
    before = {(f.code, f.subject): f.severity for f in usual}
    after = {(f.code, f.subject): f.severity for f in found}
    assert (before["depth-out-of-range", "Heron"], before[MISSING, "Heron"]) == ("error", "note")
    assert after == {**before, (code, "Heron"): given}


def test_silenced_findings_reach_the_results() -> None:
    results = account(night(Heron=AuditOptions(silence=frozenset({MISSING}))))
    assert [(f.code, f.subject) for f in results.silenced] == [(MISSING, "Heron")]
    assert MISSING in {f.code for f in results.findings}
