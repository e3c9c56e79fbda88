"""Survey windows: sizes by hand, laws, that nothing unseen is workable, and explanations afterwards."""

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.stats import norm
from tests.conftest import Evidence

from skylag.errors import Refused
from skylag.impact import sky, states, survey
from skylag.impact.survey import Job
from skylag.tables import BROKEN, HOLDS, UNSEEN, Fields, Flag, Thresholds

DAY = np.datetime64("2031-03-12", "ns")
TIMES = DAY + np.arange(0, 1440, 5).astype("timedelta64[m]")
LATS, LONS = np.arange(-42.0, -37.9, 0.5), np.arange(144.0, 148.1, 0.5)
PLACE = (-40.0, 146.0)


def some_fields(slope: float = 1.0, sigma: float = 0.1) -> Fields:
    shape = (len(TIMES), len(LATS), len(LONS))

    def full(value: float) -> np.ndarray:
        return np.full(shape, value, dtype=np.float32)

    return Fields(
        TIMES, LATS, LONS, vtec=full(10), vtec_sigma=full(0.5), support=np.full(shape, 9, dtype=np.uint16),
        slope=full(slope), slope_sigma=full(sigma), slope_east=full(0.0), slope_north=full(slope),
        state=np.full(shape, HOLDS, dtype=np.uint8),
    )  # fmt: skip


def a_job(**changes: object) -> Job:
    return replace(Job("Dam", (PLACE,)), **changes)  # type: ignore[arg-type]


def test_half_a_cycle(evidence: Evidence) -> None:
    for baseline, ppm in ((10.0, 9.51), (20.0, 4.76)):
        evidence(f"slope at which the differential delay over {baseline:g} km is half a cycle", unit="ppm",
                 source="half a wavelength of 1575.42 MHz over the baseline", expected=ppm,
                 got=survey.HALF_CYCLE_MM / baseline, tolerance=5.1e-3)  # fmt: skip


@pytest.mark.parametrize(
    ("ppm", "word"), [(0.5, "negligible"), (2.0, "negligible"), (3.9, "weak"), (7.0, "strong"), (8.1, "very strong"),
                      (np.nan, "not known")],
)  # fmt: skip
def test_classes_of_the_index(ppm: float, word: str) -> None:
    """0-2, 2-4, 4-8, above 8: Wanninger 2004, ION GNSS, 2849-2854, as two state operators give them."""
    assert survey.index_class(ppm) == word


@given(st.floats(0, 100), st.floats(1e-3, 100), st.sampled_from([0.68, 0.9, 0.95]))
def test_quantile_of_a_size(middle: float, sigma: float, share: float) -> None:
    limit = float(survey.quantile(share, np.array(middle), np.array(sigma)))
    inside = norm.cdf((limit - middle) / sigma) - norm.cdf((-limit - middle) / sigma)
    assert inside == pytest.approx(share, abs=1e-6)
    beyond = float(survey.chance_beyond(limit, np.array(middle), np.array(sigma)))
    assert beyond == pytest.approx(1 - share, abs=1e-6)


def test_size_of_errors_by_hand() -> None:
    """2 mm/km, known as well as any slope, 0.1 mm/km, over 10 km: 20 mm of vertical delay and 1.645 sigmas of 1 mm, and
    what the nominal constellation makes of it."""
    found = survey.advise(a_job(), some_fields(2.0, 0.0))
    across, height = survey.nominal_factors(PLACE, 15.0, 400e3)
    assert found.differential_68 == pytest.approx(20.0 + 0.4677, abs=1e-3)
    assert found.differential_95 == pytest.approx(21.6449, abs=1e-3)
    assert found.horizontal_95 == pytest.approx(21.6449 * across, abs=1e-2)
    assert found.vertical_95 == pytest.approx(21.6449 * height, abs=1e-2)
    assert found.longest_km == pytest.approx(min(50 / (2.16449 * height), 30 / (2.16449 * across)), abs=1e-3)
    assert set(found.verdict) == {survey.AVOID}
    assert found.index == pytest.approx(2.0)
    assert set(found.index_words) == {"negligible"}
    assert f"{across:.1f} m across and {height:.1f} m of height" in " ".join(found.assumptions)


def test_the_sky_of_the_region_does_not_differ_much_from_the_nominal_one() -> None:
    """On two invented days 2.02 and 3.15 were the middle values at 40 S, from satellites that were tracked."""
    elevation, azimuth = sky.nominal().look(*PLACE)
    across, height = survey._factors(elevation, azimuth, 15.0, 400e3)
    assert np.median(across) == pytest.approx(2.02, rel=0.1)
    assert np.median(height) == pytest.approx(3.15, rel=0.1)
    high = survey.nominal_factors(PLACE, 15.0, 400e3)
    assert (across <= high[0]).mean() >= 0.95
    assert (height <= high[1]).mean() >= 0.95


def test_errors_follow_the_geometry_of_each_satellite() -> None:
    """Horizontal and height from one line of sight at a time, by plain least squares."""
    rng = np.random.default_rng(11)
    elevation = np.degrees(np.arcsin(rng.uniform(np.sin(np.radians(16)), 1, 8)))
    azimuth = rng.uniform(0, 360, 8)
    across, height = survey._factors(elevation[None], azimuth[None], 15.0, 400e3)
    e, a = np.radians(elevation), np.radians(azimuth)
    rows = np.stack([np.cos(e) * np.sin(a), np.cos(e) * np.cos(a), np.sin(e), -np.ones(8)], axis=1)
    root = np.sin(e)
    slant = 1 / np.sqrt(1 - (6371.0 / 6771.0 * np.cos(e)) ** 2)
    moved = np.linalg.lstsq(rows * root[:, None], np.diag(slant) * root[:, None], rcond=None)[0]
    alike = moved.sum(axis=1)
    apart = np.sqrt((moved**2).sum(axis=1))
    assert across[0] == pytest.approx(max(np.hypot(*apart[:2]), np.hypot(*alike[:2])), rel=1e-3)
    assert height[0] == pytest.approx(max(apart[2], abs(alike[2])), rel=1e-3)


def test_a_mask_that_leaves_no_position_stops_work() -> None:
    found = survey.advise(a_job(mask_deg=40.0), some_fields(0.5, 0.1))
    assert set(found.verdict) == {survey.AVOID}
    assert "do not always give a position" in found.reasons[0]
    assert found.longest_km.max() == 0.0


def test_a_quiet_day_is_one_window() -> None:
    found = survey.advise(a_job(), some_fields(0.5, 0.1))
    assert [(w.start, w.end, w.verdict) for w in found.windows] == [(DAY, DAY + np.timedelta64(1, "D"), survey.WORK)]


def test_working_hours_cut_windows() -> None:
    span = (DAY + np.timedelta64(7, "h"), DAY + np.timedelta64(16, "h"))
    found = survey.advise(a_job(spans=(span,)), some_fields(0.5, 0.1))
    assert [(w.start, w.end) for w in found.windows] == [span]


def test_working_hours_beyond_the_maps_are_unseen() -> None:
    span = (DAY - np.timedelta64(2, "h"), DAY + np.timedelta64(26, "h"))
    found = survey.advise(a_job(spans=(span,)), some_fields(0.5, 0.1))
    assert [(w.start, w.end, w.verdict) for w in found.windows] == [
        (span[0], DAY, survey.NOT_SEEN), (DAY, DAY + np.timedelta64(1, "D"), survey.WORK),
        (DAY + np.timedelta64(1, "D"), span[1], survey.NOT_SEEN),
    ]  # fmt: skip


def test_a_steep_hour_is_to_be_avoided() -> None:
    fields = some_fields(0.5, 0.1)
    fields.slope_north[72:84] = 30.0
    fields.slope[72:84] = 30.0
    found = survey.advise(a_job(), fields)
    assert [w.verdict for w in found.windows] == ["work", "avoid", "work"]
    avoid = found.windows[1]
    assert (avoid.start, avoid.end) == (TIMES[72], TIMES[84])
    assert "height error" in avoid.why
    assert found.index[6] == pytest.approx(30.0)
    assert found.fixing[72] == pytest.approx(1.0)


@pytest.mark.parametrize("lost", ["state", "support", "slope", "vtec"])
def test_unseen_is_never_workable(lost: str) -> None:
    fields = some_fields(0.5, 0.1)
    getattr(fields, lost)[10:20] = {"state": UNSEEN, "support": 0}.get(lost, np.nan)
    if lost == "slope":
        fields.slope_north[10:20] = np.nan
    found = survey.advise(a_job(), fields)
    assert set(found.verdict[10:20]) == {survey.NOT_SEEN}
    assert not any(w.verdict == survey.WORK and w.start < TIMES[20] and w.end > TIMES[10] for w in found.windows)


def test_off_the_map_is_unseen() -> None:
    """And said, with how far the map reaches, to be told from a place on it that nobody sees."""
    found = survey.advise(a_job(places=((-30.0, 146.0),)), some_fields())
    assert set(found.verdict) == {survey.NOT_SEEN}
    said = (
        "-30, 146 lies off the map of this region, which reaches from latitude -42 to -38 and from longitude 144 to "
        "148: nothing can be said there"
    )
    assert set(found.reasons) == {said} == {found.windows[0].why}
    told = " ".join(survey.was_it_the_ionosphere(found, (), TIMES[100]).evidence)
    assert said in told
    several = survey.advise(a_job(places=(PLACE, (-30.0, 146.0), (-30.0, 150.0)), shape="area"), some_fields())
    assert several.reasons[0].startswith("-30, 146 and 1 more lie off the map")
    blind = replace(some_fields(), support=np.zeros_like(some_fields().support))
    assert "off the map" not in survey.advise(a_job(), blind).reasons[0]


def test_an_unknown_slope_is_unseen_not_steep() -> None:
    found = survey.advise(a_job(), some_fields(0.5, 40.0))
    assert set(found.verdict) == {survey.NOT_SEEN}
    assert "known to ± 40 mm/km only" in found.reasons[0]
    assert "which leaves up to " in found.reasons[0] and "mm (95 %) of height error over 10 km" in found.reasons[0]
    over_a_long_way = survey.advise(a_job(baseline_km=60.0), some_fields(0.0, 0.4))
    assert "known to ± 0.4 mm/km only" in over_a_long_way.reasons[0], "a sigma is never read as nought"


def test_a_slope_that_holds_may_be_too_little_known_for_a_job() -> None:
    """1 ± 3 mm/km stays under 8 mm/km with 95 %, but leaves decimetres over 10 km: each rule says what it asks."""
    fields = some_fields(1.0, 3.0)
    assert (states.field_states(fields, Thresholds()) == HOLDS).all()
    found = survey.advise(a_job(), fields)
    error = found.vertical_95[0]
    assert error > 100.0
    leaves = f"which leaves up to {error:.0f} mm (95 %) of height error over 10 km, tolerance 50 mm"
    assert f"known to ± 3 mm/km only, {leaves}" in found.reasons[0] and set(found.verdict) == {survey.NOT_SEEN}
    assert any("under 8 mm/km (95 %)" in one and "The job's own distance" in one for one in found.assumptions)
    nearby = survey.advise(a_job(baseline_km=1.0), fields)
    assert set(nearby.verdict) == {survey.WORK}
    flat = survey.advise(a_job(baseline_km=1.0, vertical_mm=1e3, horizontal_mm=5.0), fields)
    assert "of horizontal error over 1 km, tolerance 5 mm" in flat.reasons[0]
    unfixed = survey.advise(a_job(vertical_mm=1e4, horizontal_mm=1e4, baseline_km=60.0), fields)
    assert "% that fixing suffers over 60 km: nothing can be said" in unfixed.reasons[0]


def test_one_bad_corner_spoils_an_area() -> None:
    fields = some_fields(0.5, 0.1)
    fields.state[:, 0, 0] = UNSEEN
    corners = ((-42.0, 144.0), (-42.0, 145.0), (-41.0, 145.0))
    assert set(survey.advise(a_job(places=corners[1:]), fields).verdict) == {survey.WORK}
    assert set(survey.advise(a_job(places=corners), fields).verdict) == {survey.NOT_SEEN}


def test_a_reported_patch_stops_work_on_a_flat_map() -> None:
    fields = some_fields(0.5, 0.1)
    fields.state[30:40] = BROKEN
    found = survey.advise(a_job(), fields)
    assert set(found.verdict[30:40]) == {survey.AVOID}
    assert "reported here" in found.reasons[30]


def test_few_satellites_stop_work() -> None:
    names = np.array(["G01", "G02", "G03", "G04"])
    position = np.full((len(TIMES), 4, 3), np.nan)
    found = survey.advise(a_job(), some_fields(0.5, 0.1), sky.Sky(TIMES, names, position, "none"))
    assert set(found.verdict) == {survey.AVOID}
    assert found.reasons[0] == "0 satellites above 15 degrees, 5 are needed"


@settings(max_examples=30, deadline=None)
@given(
    st.sampled_from(["static", "rtk", "dgnss"]), st.floats(1, 100), st.floats(1, 100), st.integers(0, 2**32 - 1),
)  # fmt: skip
def test_a_longer_baseline_never_widens_a_window(method: str, one: float, other: float, chance: int) -> None:
    rng = np.random.default_rng(chance)
    fields = some_fields()
    steep = rng.gamma(1.0, 1.5, len(TIMES)).astype(np.float32)[:, None, None]
    fields.slope[:] = steep
    fields.slope_north[:] = steep
    fields.slope_sigma[:] = rng.gamma(1.0, 0.5, len(TIMES)).astype(np.float32)[:, None, None]
    short, long = sorted((one, other))
    by_short = survey.advise(a_job(method=method, baseline_km=short), fields)
    by_long = survey.advise(a_job(method=method, baseline_km=long), fields)
    assert not ((by_long.verdict == survey.WORK) & (by_short.verdict != survey.WORK)).any()
    assert _minutes(by_long) <= _minutes(by_short)
    stricter = survey.advise(a_job(method=method, baseline_km=short, vertical_mm=25, horizontal_mm=15), fields)
    assert not ((stricter.verdict == survey.WORK) & (by_short.verdict != survey.WORK)).any()
    fields.slope_sigma[:] *= 2
    vaguer = survey.advise(a_job(method=method, baseline_km=short), fields)
    assert not ((vaguer.verdict == survey.WORK) & (by_short.verdict != survey.WORK)).any()


def _minutes(advice: survey.Advice) -> float:
    return sum((w.end - w.start) / np.timedelta64(1, "m") for w in advice.windows if w.verdict == survey.WORK)


@given(st.floats(0.1, 20), st.floats(0.01, 5))
@settings(max_examples=20, deadline=None)
def test_the_longest_baseline_is_the_one_that_just_works(slope: float, sigma: float) -> None:
    fields = some_fields(slope, sigma)
    longest = float(survey.advise(a_job(baseline_km=1.0), fields).longest_km[0])
    if longest < 99:
        assert set(survey.advise(a_job(baseline_km=longest * 1.001), fields).verdict) != {survey.WORK}
    assert set(survey.advise(a_job(baseline_km=longest * 0.999), fields).verdict) == {survey.WORK}


def test_a_network_takes_out_a_plane_and_leaves_a_wave() -> None:
    fields = some_fields(0.5, 0.1)
    references = ((-39.0, 145.0), (-39.0, 147.0), (-41.0, 146.0))
    job = a_job(method="network", references=references)
    lat, lon = np.meshgrid(LATS, LONS, indexing="ij")
    fields.vtec[:] = 10 + 0.3 * (lat + 40) - 0.2 * (lon - 146)
    flat = survey.advise(job, fields)
    assert float(np.nanmax(flat.differential_68)) < 25  # sigma alone: 0.1 mm/km over 110 km
    fields.vtec[:, LATS == -40.0] += 1.0  # a ridge of 1 TECU, 162 mm, that no station sees
    wave = survey.advise(job, fields)
    assert float(np.nanmin(wave.differential_68)) > 100
    assert set(wave.verdict) == {survey.AVOID}


@pytest.mark.parametrize("blind", ["no line of sight", "wide sigma", "no value"])
def test_a_reference_station_that_nobody_sees_is_no_station(blind: str) -> None:
    """Where nobody looks a map holds a background: a plane through that must not call a place workable."""
    references = ((-39.0, 145.0), (-39.0, 147.0), (-41.0, 146.0))
    job = a_job(method="network", references=references)
    fields = some_fields(0.1, 0.01)
    assert set(survey.advise(job, fields).verdict) == {survey.WORK}
    station = (slice(100, 120), LATS == -41.0, LONS == 146.0)
    {"no line of sight": fields.support, "wide sigma": fields.vtec_sigma, "no value": fields.vtec}[blind][station] = {
        "no line of sight": 0, "wide sigma": 30.0, "no value": np.nan
    }[blind]  # fmt: skip
    found = survey.advise(job, fields)
    assert set(found.verdict[100:120]) == {survey.NOT_SEEN}
    assert np.isnan(found.differential_95[100:120]).all()
    assert set(found.verdict[:100]) | set(found.verdict[120:]) == {survey.WORK}


def test_a_warning_over_the_place_counts_where_its_cell_has_none() -> None:
    fields = some_fields(0.1, 0.05)
    judged = np.full((len(TIMES), 1), HOLDS, dtype=np.uint8)
    judged[50:53] = BROKEN
    found = survey.advise(a_job(), fields, judged=judged)
    assert set(found.verdict[50:53]) == {survey.AVOID}
    assert "broken" in found.reasons[51]
    assert set(found.verdict[:50]) | set(found.verdict[53:]) == {survey.WORK}


def test_an_hour_of_which_little_was_seen_is_not_called_calm() -> None:
    fields = some_fields(1.0, 0.1)
    others = np.flatnonzero(LATS != -40.0)
    fields.state[:12, others] = UNSEEN  # of the first hour one row is left
    fields.state[12:24, LATS < -40.0] = UNSEEN  # of the second more than half of what lies within reach
    fields.state[24:36, others] = UNSEEN
    fields.slope[24:36] = 9.0  # what is left of the third is bad enough to be told
    found = survey.advise(a_job(), fields)
    assert np.isnan(found.index[0]) and found.index_words[0] == "not known"
    assert found.index[1:4].tolist() == pytest.approx([1.0, 9.0, 1.0])
    fields.slope[24:36] = 3.9
    assert np.isnan(survey.advise(a_job(), fields).index[2])


def kept_maps(fields: Fields, rows: np.ndarray) -> Fields:
    return replace(fields, times=fields.times[rows], **{name: getattr(fields, name)[rows] for name in Fields.LAYERS})


def test_hours_without_maps_are_unseen_not_part_of_a_window() -> None:
    """A day that broke off at noon before one that began at six: the hours between are nobody's."""
    fields = some_fields(0.1, 0.05)
    rows = np.r_[12:144, 216:288]
    broken_off = kept_maps(fields, rows)
    verdicts = [(str(w.start)[11:16], str(w.end)[11:16], w.verdict) for w in survey.advise(a_job(), broken_off).windows]
    assert verdicts == [("00:00", "01:00", "unseen"), ("01:00", "12:00", "work"), ("12:00", "18:00", "unseen"),
                        ("18:00", "00:00", "work")]  # fmt: skip
    asked = a_job(spans=((TIMES[120], TIMES[240]),))
    windows = survey.advise(asked, broken_off).windows
    assert [(str(w.start)[11:16], str(w.end)[11:16], w.verdict) for w in windows] == [
        ("10:00", "12:00", "work"), ("12:00", "18:00", "unseen"), ("18:00", "20:00", "work")
    ]  # fmt: skip
    assert sum((w.end - w.start for w in windows), np.timedelta64(0, "ns")) == TIMES[240] - TIMES[120]


def test_a_session_averages_a_passing_slope() -> None:
    fields = some_fields(0.5, 0.1)
    fields.slope_north[100] = 8.0
    short = survey.advise(a_job(), fields)
    session = survey.advise(a_job(method="static"), fields)
    assert short.verdict[100] == survey.AVOID
    assert session.slope[100] == pytest.approx((12 * 0.5 + 8.0) / 13, rel=1e-5)


def test_afterwards() -> None:
    fields = some_fields(0.5, 0.1)
    fields.slope_north[72:84] = 30.0
    fields.slope[72:84] = 30.0
    fields.state[120:132] = UNSEEN
    advice = survey.advise(a_job(), fields)
    front = Flag(TIMES[70], TIMES[86], -40.0, 146.0, "front", 40.0, 3.0, 200.0, 0.0, "broken", "four receivers agree",
                 track=((TIMES[70], -40.5, 146.0), (TIMES[78], -40.0, 146.0)))  # fmt: skip
    likely = survey.was_it_the_ionosphere(advice, [front], TIMES[78])
    assert likely.verdict == "likely"
    assert any("Front: four receivers agree" in one for one in likely.evidence)
    assert survey.was_it_the_ionosphere(advice, [], TIMES[20]).verdict == "unlikely"
    assert survey.was_it_the_ionosphere(advice, [], TIMES[126]).verdict == "cannot be told"
    # Nor where some of the maps around saw nothing: what they missed may have been the reason.
    beside = survey.was_it_the_ionosphere(advice, [], TIMES[119])
    assert beside.verdict == "cannot be told"
    assert any("Of 5 maps around that time 2 did not see" in one for one in beside.evidence)
    with pytest.raises(Refused, match="no map lies within"):
        survey.was_it_the_ionosphere(advice, [], DAY - np.timedelta64(5, "h"))


@pytest.mark.parametrize(
    "wrong", [{"method": "magic"}, {"places": ()}, {"baseline_km": 0.0}, {"baseline_km": 500.0}, {"vertical_mm": -1.0},
              {"method": "network"}, {"mask_deg": 60.0}, {"fixing_chance": 1.0}],
)  # fmt: skip
def test_wrong_jobs_are_refused(wrong: dict[str, object]) -> None:
    with pytest.raises(Refused, match="it must be"):
        a_job(**wrong)


def test_caution_and_assumptions_come_along() -> None:
    found = survey.advise(a_job(), some_fields())
    assert "not for navigation" in found.caution
    assert any("95.1 mm" in one for one in found.assumptions)
    assert any("multipath" in one for one in found.assumptions)
