"""The whole tally, in two dimensions and three, against the slow second implementation.

`twin_check` compares every number with those of `tally_twin` and `twin_space`, which
share no code with the package. ``pytest tests/test_twin.py --campaigns 200`` takes
more campaigns than the few of an ordinary run.
"""

from __future__ import annotations

import numpy as np
import pytest
from scipy.integrate import quad
from tally_twin import PlainSource
from twin_campaigns import deep_plan
from twin_check import Ledger, check_plan
from twin_space import chance, chance_within, far_enough, within


def pytest_generate_tests(metafunc: pytest.Metafunc) -> None:
    if "campaign_seed" in metafunc.fixturenames:
        metafunc.parametrize("campaign_seed", range(metafunc.config.getoption("campaigns")))


def test_every_number_of_a_random_campaign_agrees_with_the_twin(campaign_seed):
    check_plan(deep_plan(campaign_seed), Ledger())


@pytest.mark.parametrize("seed", [82])
def test_campaigns_that_once_disagreed(seed):
    """82: two reaches held half of the probability each, and rounding chose the median."""
    check_plan(deep_plan(seed), Ledger())


def test_a_wrong_number_would_be_noticed():
    """The ledger keeps the worst difference, relative to 1 at least, and fails above tolerance."""
    ledger = Ledger()
    ledger.close("number", [100.0, 0.0], [100.0 + 1e-8, 1e-10])
    assert ledger.worst["number"] == pytest.approx(1e-10)
    for found, expected in ((1.0, 1.0 + 1e-8), (None, 1.0), (1.0, None), ([1.0], [1.0, 2.0])):
        with pytest.raises(AssertionError):
            ledger.close("number", found, expected)


def test_the_campaigns_hold_the_hard_cases():
    plans = [deep_plan(seed).plain for seed in range(60)]
    sources = [s for p in plans for s in p.sources]
    assert any(p.dust is None for p in plans)
    assert sum(p.dust is not None for p in plans) > 30
    assert any(e.extinction is not None for p in plans for e in p.exposures)
    assert any(m.distances is None for p in plans for m in p.maps)
    for wanted in (
        lambda s: s.curve is not None,
        lambda s: s.fade_per_day > 0 and s.rise_days > 0,
        lambda s: s.flat and s.visits > 1,
        lambda s: s.width > 0 and s.visits == 3,
        lambda s: s.width == 0 and s.plateau < 1,
        lambda s: s.visits == 2 and s.gap_s == 1800,
    ):
        assert sum(map(wanted, sources)) >= 3


@pytest.mark.parametrize(
    ("mu", "sigma"), [(130.0, 35.0), (30.0, 40.0), (-40.0, 20.0), (200.0, 9.0)]
)
def test_the_twin_s_distances_against_adaptive_quadrature(mu, sigma):
    """scipy's quad of the published form, ApJL 829 L15 (2016)."""

    def form(r):
        return r**2 * np.exp(0.5 * (min(mu, 0) / sigma) ** 2 - 0.5 * ((r - mu) / sigma) ** 2)

    far = max(mu, 0) + 12 * sigma
    whole = quad(form, 0, far, epsabs=0, epsrel=1e-12, points=[max(mu, 1.0)])[0]
    for reach in (20.0, 90.0, 140.0, 300.0):
        share = quad(form, 0, min(reach, far), epsabs=0, epsrel=1e-12)[0] / whole
        one = np.array([mu]), np.array([sigma])
        assert within(np.array([reach]), *one)[0] == pytest.approx(share, rel=1e-9, abs=1e-12)
        assert chance_within(np.array([reach]), *one)[0] == pytest.approx(share, abs=1e-9)


def test_the_twin_s_chances_against_a_list_of_all_outcomes():
    """Every way in which four looks can show a source or not, weighed and counted."""
    efficiency, starts = [0.3, 0.8, 0.55, 0.9], [0, 1000, 1800, 5400]
    for visits, gap in ((1, 0), (2, 0), (2, 1800), (3, 1800), (3, 5400), (4, 6000)):
        total = 0.0
        for outcome in np.ndindex(2, 2, 2, 2):
            weight = np.prod([e if hit else 1 - e for e, hit in zip(efficiency, outcome)])
            seen = [s for s, hit in zip(starts, outcome) if hit]
            if len(seen) >= visits and seen[-1] - seen[0] >= gap:
                total += weight
        source = PlainSource("Ember", -15.0, visits=visits, gap_s=gap)
        looks = [(s, np.array([e])) for s, e in zip(starts, efficiency)]
        assert chance(source, looks)[0] == pytest.approx(total, abs=1e-12)


def test_the_twin_s_reach_by_hand():
    """Looks at 0, 600 and 3600 s that reach 100, 90 and 80 Mpc."""
    looks = [(0, 100.0), (600, 90.0), (3600, 80.0)]
    for visits, gap, wanted in ((1, 0, 100.0), (2, 0, 90.0), (2, 1800, 80.0), (3, 7200, 0.0)):
        source = PlainSource("Ember", -15.0, visits=visits, gap_s=gap)
        assert far_enough(source, looks) == wanted
