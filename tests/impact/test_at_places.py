"""Places judged after the day, from its kept maps and flags: never better than they would have been at the time."""

from dataclasses import replace

import numpy as np
import pytest
from tests.impact.test_states import LATS, LONS, REGION, flat_fields, nothing, some_patch

from skylag.impact import at_places, states
from skylag.tables import BROKEN, HOLDS, STRAINED, Fields, Fronts, Site, SlopeClaim

AXES = {"fine": (LATS, LONS), "coarse": (LATS[::2], LONS[::2])}


def a_claim(fields: Fields, lat: float, lon: float, slope: float = 40.0) -> SlopeClaim:
    """A confirmed slope between receivers, seen at one place at epochs 10 to 13."""
    moments = fields.times[10:14]
    return SlopeClaim(
        start=moments[0], end=moments[-1], lat=lat, lon=lon, slope=slope, sigma=2.0, pairs=4,
        receivers=("RX01", "RX02", "RX03"), satellites=("G05", "E11"), ways=("pairs",), confirmed=True,
        why="four pairs of three receivers agree", cell_time=moments, cell_lat=np.full(4, lat),
        cell_lon=np.full(4, lon), cell_slope=np.full(4, slope), cell_sigma=np.full(4, 2.0),
    )  # fmt: skip


def coarse_fields(axes: str) -> Fields:
    lats, lons = AXES[axes]
    made = flat_fields()
    part = {
        name: getattr(made, name)[:, : len(lats), : len(lons)]
        for name in ("vtec", "vtec_sigma", "support", "slope", "slope_sigma", "slope_east", "slope_north", "state")
    }
    return replace(made, lats=lats, lons=lons, **part)


def scattered() -> tuple[Site, ...]:
    rng = np.random.default_rng(8)
    return tuple(
        Site(f"place {number}", float(lat), float(lon))
        for number, (lat, lon) in enumerate(zip(rng.uniform(-41, -37, 150), rng.uniform(143, 148, 150), strict=True))
    )


@pytest.mark.parametrize("axes", AXES)
@pytest.mark.parametrize("witness", ["claim", "patch"])
def test_no_place_reads_better_later_than_at_the_time(witness: str, axes: str) -> None:
    """Anywhere in their cells; what the day's own judging says of the very place is the least to be said."""
    sites = scattered()
    fields = coarse_fields(axes)
    slopes, fronts, patches = nothing()
    if witness == "claim":
        slopes = replace(slopes, claims=(a_claim(fields, -39.27, 145.61),))
    else:
        patches = replace(patches, patches=(some_patch(lat=-39.27, lon=145.61),))
    region = replace(REGION, sites=sites)
    at_the_time = states.judge(fields, slopes, fronts, patches, region)
    later, reasons = at_places.judge(sites, at_the_time.fields, at_the_time.flags, region.thresholds)
    assert (at_the_time.site_states >= STRAINED).any()
    assert (later >= at_the_time.site_states).all()
    codes = at_places.codes(sites, at_the_time.fields, at_the_time.flags, region.thresholds)
    np.testing.assert_array_equal(codes, later)
    row, column, _ = states.nearest_cells(
        fields, np.array([site.lat for site in sites]), np.array([site.lon for site in sites])
    )
    # The cell alone would have been better somewhere: that is what the places around are asked for.
    assert (at_the_time.fields.state[:, row, column] < at_the_time.site_states).any()
    for number in range(len(sites)):
        told = zip(reasons[number], later[:, number].tolist(), strict=True)
        assert all(bool(reason) == (code != HOLDS) for reason, code in told)
    # Nor is all the map warned of: places three cells and more away hold, and so does every hour without a witness.
    far = np.hypot([site.lat + 39.27 for site in sites], [0.77 * (site.lon - 145.61) for site in sites]) > 2.8
    assert far.any()
    assert (later[:, far] == HOLDS).all()
    assert (later[30:] == HOLDS).all()


def test_a_place_at_the_middle_of_its_cell_has_the_state_of_its_cell() -> None:
    fields = flat_fields()
    slopes, fronts, patches = nothing()
    slopes = replace(slopes, claims=(a_claim(fields, -39.27, 145.61),))
    made = states.judge(fields, slopes, fronts, patches, REGION)
    sites = tuple(Site(f"{lat} {lon}", float(lat), float(lon)) for lat in LATS for lon in LONS)
    later, _ = at_places.judge(sites, made.fields, made.flags, REGION.thresholds)
    np.testing.assert_array_equal(later, made.fields.state.reshape(len(fields.times), -1))
    assert (later == BROKEN).any()


def test_a_warning_that_a_steep_map_hides_is_found_by_its_flag() -> None:
    """The cells around are steep by themselves as well: their states tell no warning, the flag does."""
    fields = flat_fields()
    fields.slope[:, :, 9:] = 40.0
    slopes, fronts, patches = nothing()
    slopes = replace(slopes, claims=(a_claim(fields, -39.0, LONS[9] + 0.05),))
    aside = Site("aside", -39.0, float(LONS[8]) + 0.22)
    region = replace(REGION, sites=(aside,))
    made = states.judge(fields, slopes, fronts, patches, region)
    made.fields.state[:, :, :9] = HOLDS  # as where the cell's own middle lay just beyond the witness
    later, _ = at_places.judge([aside], made.fields, made.flags, region.thresholds)
    assert (made.site_states[10:14, 0] == BROKEN).all()
    assert (later[10:14] == BROKEN).all()


def test_unconfirmed_witnesses_warn_of_nothing() -> None:
    fields = flat_fields()
    slopes, _, patches = nothing()
    patches = replace(patches, patches=(some_patch(confirmed=False),))
    made = states.judge(fields, slopes, Fronts((), nothing()[1].onsets), patches, REGION)
    later, _ = at_places.judge([Site("aside", -39.2, 145.7)], made.fields, made.flags, REGION.thresholds)
    assert (later == HOLDS).all()


def test_a_steep_map_is_told_by_its_slope() -> None:
    made = states.judge(flat_fields(slope=12.0), *nothing(), REGION)
    later, reasons = at_places.judge([Site("aside", -39.2, 145.7)], made.fields, made.flags, REGION.thresholds)
    assert (later == STRAINED).all()
    assert all("slopes by 12.0 ± 0.5 mm/km" in reason for reason in reasons[0])
