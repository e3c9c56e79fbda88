"""Ground-based augmentation: published bounds and worked errors, minutes exceeded, fronts on their way."""

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from tests.conftest import Evidence
from tests.impact.test_at_places import a_claim
from tests.impact.test_states import REGION, flat_fields, nothing, some_patch
from tests.impact.test_survey import DAY, TIMES, some_fields

from skylag.errors import Refused
from skylag.impact import ground_augmentation as ground
from skylag.impact import states
from skylag.impact.ground_augmentation import StationChoices
from skylag.ionosphere.geometry import mapping
from skylag.ionosphere.slopes import model_bound
from skylag.tables import BROKEN, HOLDS, STRAINED, UNSEEN, Fields, Flag, Site

SITE = Site("Here", -40.0, 146.0, "aerodrome")


@pytest.mark.parametrize(("elevation", "expected"), [(5, 375), (15, 375), (30, 390), (40, 400), (65, 425), (90, 425)])
def test_the_threat_space(elevation: float, expected: float, evidence: Evidence) -> None:
    evidence(f"threat space at elevation {elevation}", unit="mm/km", expected=expected, tolerance=1e-9,
             source="Datta-Barua et al. 2010 (425); line from 375 at 15 to 425 at 65 degrees from memory",
             got=float(model_bound(np.array(elevation))))  # fmt: skip


def test_the_nominal_error(evidence: Evidence) -> None:
    factor = float(mapping(30.0, 350e3, 6_378_136.3))
    evidence("nominal differential delay: 30 degrees, 4 mm/km, 6 km, 70 m/s, 100 s", unit="m", tolerance=5.1e-10,
             source="ICAO Annex 10 App. B 3.6.5.4 (formula from memory)", expected=0.140113688,
             got=float(ground.nominal_error_m(factor, 4.0, 6.0, 70.0)))  # fmt: skip


@pytest.mark.parametrize(
    ("slope", "smoothing", "speed", "expected", "digit"),
    [(425, 100, 70, 8.5, 0.05), (425, 30, 70, 4.335, 5e-4), (100, 100, 70, 2.0, 0.05), (100, 30, 70, 1.02, 5e-3),
     (4, 100, 70, 0.08, 5e-3), (4, 30, 70, 0.041, 5e-4), (425, 100, 0, 2.55, 5e-3)],
)  # fmt: skip
def test_errors_from_a_front(
    slope: float, smoothing: float, speed: float, expected: float, digit: float, evidence: Evidence
) -> None:
    evidence(f"error from {slope} mm/km, 6 km, {speed} m/s, {smoothing} s", unit="m", expected=expected,
             source="slope times (distance + 2 x smoothing x speed)", tolerance=digit * 1.001,
             got=float(ground.front_error_m(slope, 6.0, speed, smoothing)))  # fmt: skip


def test_minutes_beyond_each_limit() -> None:
    fields = some_fields(1.0, 0.1)
    for first, slope in ((10, 14.0), (20, 30.0), (30, 300.0)):
        fields.slope[first : first + 3] = slope
    fields.state[100:112] = UNSEEN
    found = ground.station_day(SITE, fields)
    exceeded = {"nominal": 45.0, "announced": 30.0, "threat": 15.0, "unseen": 60.0}
    assert found.minutes == {"within": 1440.0 - 45.0 - 60.0, "warned": 0.0, **exceeded}
    assert {one.what for one in found.exceeded} == {"nominal", "announced", "threat", "unseen"}
    first = next(one for one in found.exceeded if one.what == "nominal")
    assert (first.start, first.end) == (TIMES[10], TIMES[13])
    assert "14.0 ± 0.1 mm/km" in first.why
    assert np.isnan(found.error_95_m[100:112]).all()


def test_hours_without_maps_are_minutes_of_which_nothing_is_known() -> None:
    fields = some_fields(1.0, 0.1)
    part = replace(fields, times=fields.times[:72], **{name: getattr(fields, name)[:72] for name in Fields.LAYERS})
    minutes = ground.station_day(SITE, part).minutes
    assert (minutes["within"], minutes["unseen"]) == (360.0, 1080.0)


@pytest.mark.parametrize(
    ("slope", "sigma", "state", "what"),
    [
        (14.0, 2.0, UNSEEN, "unseen"), (14.0, 0.5, STRAINED, "nominal"), (12.0, 0.5, HOLDS, "within"),
        (12.0, 0.8, UNSEEN, "unseen"),  # 12 + 1.645 x 0.8 is beyond 3.29 x 4 = 13.16
        (1.0, 20.0, UNSEEN, "unseen"), (30.0, 1.0, BROKEN, "announced"),
    ],
)  # fmt: skip
def test_within_is_only_said_where_the_slope_excludes_worse(slope: float, sigma: float, state: int, what: str) -> None:
    found = ground.station_day(SITE, some_fields(slope, sigma))
    assert set(found.state.tolist()) == {state}
    assert found.minutes[what] == 1440.0
    assert found.minutes["within"] == (1440.0 if what == "within" else 0.0)
    assert found.minutes["unseen"] == (1440.0 if what == "unseen" else 0.0)
    if what == "unseen":
        assert f"known to ± {sigma:.{1 if sigma < 1 else 0}f} mm/km only" in found.exceeded[0].why


@settings(max_examples=50, deadline=None)
@given(st.floats(0, 60), st.floats(0.01, 30), st.floats(0, 10))
def test_more_doubt_never_makes_a_slope_nominal(slope: float, sigma: float, more: float) -> None:
    """Nor does a smaller announced spread; and every minute has exactly one state."""
    one = ground.station_day(SITE, some_fields(slope, sigma))
    two = ground.station_day(SITE, some_fields(slope, sigma + more))
    less = ground.station_day(SITE, some_fields(slope, sigma), (), StationChoices(sigma_mm_per_km=2.0))
    for other in (two, less):
        assert not ((other.state == HOLDS) & (one.state != HOLDS)).any()
    assert one.minutes["within"] + one.minutes["unseen"] + one.minutes["nominal"] >= 1440.0


def test_a_smaller_spread_never_shortens() -> None:
    fields = some_fields(1.0, 0.1)
    fields.slope[:, :, :] = np.linspace(0, 40, len(TIMES))[:, None, None]
    minutes = [
        ground.station_day(SITE, fields, (), StationChoices(sigma_mm_per_km=sigma)).minutes["nominal"]
        for sigma in (1.0, 2.0, 4.0, 8.0)
    ]
    assert minutes == sorted(minutes, reverse=True)
    assert minutes[0] > minutes[-1] > 0


def a_front(confirmed: bool = True) -> Flag:
    """Moving north at 200 m/s; at 06:00 it lies 300 km south of the site."""
    start = DAY + np.timedelta64(6, "h")
    steps = np.arange(0, 50, 5)
    track = tuple(
        (start + np.timedelta64(int(k), "m"), -40.0 - (300 - 12.0 * k) / 111.195, 146.0) for k in steps
    )
    return Flag(start, track[-1][0], -41.0, 146.0, "front", 60.0, 3.0, 200.0, 0.0, "broken", "seen", confirmed, track)


def test_a_front_over_the_site_counts_with_its_own_slope() -> None:
    fields = some_fields(5.0, 0.5)
    quiet = ground.station_day(SITE, fields)
    assert quiet.minutes["announced"] == 0.0
    stormy = ground.station_day(SITE, fields, [a_front()])
    assert stormy.minutes["announced"] == pytest.approx(10.0, abs=5.0)
    assert np.nanmax(stormy.slope) == 60.0
    assert ground.station_day(SITE, fields, [a_front(False)]).minutes == quiet.minutes


def test_a_front_whose_sigma_is_not_known_counts_all_the_same() -> None:
    blind = some_fields(5.0, 0.5)
    blind.state[:] = UNSEEN
    for fields in (some_fields(5.0, 0.5), blind):
        sure = ground.station_day(SITE, fields, [replace(a_front(), sigma_mm_per_km=0.0)])
        vague = ground.station_day(SITE, fields, [replace(a_front(), sigma_mm_per_km=float("nan"))])
        np.testing.assert_array_equal(vague.state, sure.state)
        assert (vague.state == BROKEN).any() and vague.minutes["announced"] == sure.minutes["announced"] > 0
        assert not any("nan" in one.why for one in vague.exceeded)


@pytest.mark.parametrize("code", [STRAINED, BROKEN])
def test_a_warning_of_the_map_raises_where_its_slope_does_not(code: int) -> None:
    fields = some_fields(2.0, 1.0)
    fields.state[100:112] = code
    found = ground.station_day(SITE, fields)
    assert (found.state[100:112] == code).all()
    assert found.minutes["within"] == 1440.0 - 60.0
    assert found.minutes["warned"] == 60.0
    assert found.minutes["unseen"] == 0.0
    (told,) = found.exceeded
    assert (told.what, told.start, told.end) == ("warned", TIMES[100], TIMES[112])
    assert told.why.startswith(("strained by a warning", "broken by a warning")[code == BROKEN])


@pytest.mark.parametrize("witness", ["claim", "patch"])
def test_patches_and_slopes_between_receivers_count(witness: str) -> None:
    """Over a quiet map of 2 ± 1 mm/km, judged as a day is; the site lies aside of its cell's middle."""
    site = Site("Aside", -39.2, 145.72, "aerodrome")
    fields = flat_fields(slope=2.0, sigma=1.0)
    slopes, fronts, patches = nothing()
    if witness == "claim":
        slopes = replace(slopes, claims=(a_claim(fields, -39.27, 145.61),))
    else:
        patches = replace(patches, patches=(some_patch(),))
    made = states.judge(fields, slopes, fronts, patches, replace(REGION, sites=(site,)))
    quiet = ground.station_day(site, replace(fields, state=np.full_like(fields.state, HOLDS)))
    assert (quiet.state == HOLDS).all()
    found = ground.station_day(site, made.fields, made.flags)
    assert (made.site_states[:, 0] >= STRAINED).any()
    assert (found.state >= made.site_states[:, 0]).all()
    assert found.minutes["warned"] > 0
    assert found.minutes["within"] < quiet.minutes["within"]
    words = "four pairs of three receivers agree" if witness == "claim" else "ragged content"
    assert any(one.what == "warned" and words in one.why for one in found.exceeded)


@settings(max_examples=50, deadline=None)
@given(st.floats(0, 60), st.floats(0.01, 10), st.sampled_from([UNSEEN, HOLDS, STRAINED, BROKEN]))
def test_never_better_than_the_map(slope: float, sigma: float, code: int) -> None:
    fields = some_fields(slope, sigma)
    fields.state[:] = code
    found = ground.station_day(SITE, fields, [a_front()])
    assert (found.state != HOLDS).all() or code == HOLDS
    if code >= STRAINED:
        assert (found.state >= code).all()


def test_a_front_only_raises() -> None:
    """A weak one over a cell that is not seen leaves it unseen; a strong one warns of it; none softens a steep map."""
    fields = some_fields(1.0, 0.1)
    fields.state[:] = UNSEEN
    weak = replace(a_front(), slope_mm_per_km=5.0, sigma_mm_per_km=0.5, state="holds")
    found = ground.station_day(SITE, fields, [weak])
    assert (found.state == UNSEEN).all()
    assert np.isnan(found.slope).all()
    assert found.minutes["unseen"] == 1440.0
    strong = ground.station_day(SITE, fields, [weak, a_front()])
    assert set(strong.state.tolist()) == {UNSEEN, BROKEN}
    vague = replace(a_front(), slope_mm_per_km=60.0, sigma_mm_per_km=59.0)
    steep = ground.station_day(SITE, some_fields(30.0, 1.0), [vague])
    assert (steep.state == BROKEN).all()


def test_off_the_map_all_is_unseen() -> None:
    found = ground.station_day(Site("Far", 10.0, 10.0), some_fields())
    assert found.minutes == {
        "within": 0.0, "nominal": 0.0, "announced": 0.0, "threat": 0.0, "warned": 0.0, "unseen": 1440.0
    }  # fmt: skip
    assert not found.state.any()


def test_choices_are_bounded_and_printed() -> None:
    with pytest.raises(Refused, match="outside"):
        StationChoices(sigma_mm_per_km=30.0)
    found = ground.station_day(SITE, some_fields(), (), StationChoices(sigma_mm_per_km=6.0, smoothing_s=30.0))
    text = " ".join(found.assumptions)
    assert "6 mm/km" in text
    assert "30 s" in text
    assert "not for navigation" in found.caution
