"""The Python face: astropy and mocpy objects in and out."""

from __future__ import annotations

from pathlib import Path

import healpy
import numpy as np
import pytest
from astropy import units as u
from astropy.coordinates import SkyCoord
from astropy.time import Time
from mocpy import MOC
from skytally import Campaign, Spans
from skytally.errors import CampaignError, UsageError
from skytally.scaffold import write_campaign


@pytest.fixture(scope="module")
def campaign(tmp_path_factory: pytest.TempPathFactory) -> Campaign:
    return Campaign.read(write_campaign(tmp_path_factory.mktemp("api"))[0])


def test_what_a_campaign_is_called_and_when(campaign: Campaign) -> None:
    assert campaign.name in repr(campaign)
    assert isinstance(campaign.event_time, Time)
    assert campaign.event_time.scale == "utc"
    assert campaign.map_versions == tuple(m.version for m in campaign.tally().maps)
    assert campaign.telescopes == tuple(t.name for t in campaign.tally().telescopes)


def test_the_tally_is_made_once_and_reports_progress(campaign: Campaign) -> None:
    assert campaign.tally() is campaign.tally()
    seen: list[float] = []
    again = campaign.tally(lambda stage, fraction: seen.append(fraction))
    assert seen == sorted(seen)
    assert 0 <= seen[0] <= seen[-1] <= 1
    assert again == campaign.tally()


# The example plays in a year whose leap seconds are not announced yet.
@pytest.mark.filterwarnings("ignore:ERFA function")
def test_exposures_are_a_table_with_units_and_times(campaign: Campaign) -> None:
    table = campaign.exposures()
    results = campaign.tally()
    assert len(table) == len(results.exposures) == results.row().exposures
    assert isinstance(table["start"], Time)
    hours = (table["start"] - campaign.event_time).to_value(u.hour)
    # Times are written to the second or better.
    np.testing.assert_allclose(hours, [e.hours for e in results.exposures], atol=1 / 3600)
    assert (table["end"] >= table["start"]).all()
    for name, unit in (("ra", u.deg), ("dec", u.deg), ("area", u.deg**2), ("depth", u.mag)):
        assert table[name].unit == unit
    missing = [e.depth is None for e in results.exposures]
    assert np.array_equal(getattr(table["depth"], "mask", np.zeros(len(table), bool)), missing)
    assert list(table["exposure"]) == [e.exposure for e in results.exposures]


def test_coverage_is_a_moc_whose_probability_is_the_row_s(campaign: Campaign) -> None:
    results = campaign.tally()
    for name in (None, *campaign.telescopes):
        moc = campaign.coverage(name)
        row = results.row(telescope=name)
        assert isinstance(moc, MOC)
        # mocpy's own area (fraction of the sky) is the independent value.
        area = moc.sky_fraction * 4 * np.pi * np.degrees(1) ** 2
        assert area == pytest.approx(row.area_deg2, rel=1e-9)
        assert campaign.probability(moc) == pytest.approx(row.probability, abs=1e-9)
        for version in campaign.map_versions:
            wanted = results.row(version, telescope=name).probability
            assert campaign.probability(moc, map=version) == pytest.approx(wanted, abs=1e-9)
    assert campaign.probability(Spans.full()) == pytest.approx(1, abs=1e-9)
    with pytest.raises(UsageError, match=r"'Avocet'.*Heron"):
        campaign.coverage("Avocet")
    with pytest.raises(UsageError, match="'9'"):
        campaign.probability(Spans.full(), map="9")


def test_density_at_positions_of_any_shape_and_frame(campaign: Campaign) -> None:
    rng = np.random.default_rng(7)
    middle = campaign.exposures()[0]
    lon = middle["ra"].value + rng.normal(0, 3, (4, 5))
    lat = middle["dec"].value + rng.normal(0, 3, (4, 5))
    where = SkyCoord(lon, lat, unit="deg")
    for version in campaign.map_versions:
        skymap = campaign.map(version)
        density = campaign.probability_density(where, map=version)
        assert density.unit == 1 / u.sr
        # healpy finds the cell of order 29; the map's cells are searched one by one.
        cell = healpy.ang2pix(1 << 29, lon, lat, nest=True, lonlat=True)
        inside = (skymap.starts <= cell[..., None]) & (cell[..., None] < skymap.stops)
        wanted = (inside * skymap.density_per_sr).sum(axis=-1)
        assert wanted.max() > 0
        np.testing.assert_array_equal(density.value, wanted)
        turned = campaign.probability_density(where.galactic, map=version)
        np.testing.assert_allclose(turned.value, wanted, rtol=1e-12)
    one = campaign.probability_density(where[0, 0])
    assert one.shape == ()
    with pytest.raises(UsageError, match="not finite"):
        campaign.probability_density(SkyCoord(np.nan, 0.0, unit="deg"))


def test_a_missing_file_is_our_error() -> None:
    with pytest.raises(CampaignError, match=r"nowhere\.toml"):
        Campaign.read(Path("nowhere.toml"))
