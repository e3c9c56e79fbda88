"""Raggedness: published index values, the planar-fit test, patches with two witnesses, and receivers at fault."""

from dataclasses import replace

import numpy as np
import pytest
from tests.simulated.moving_wall import PLACES, START, changed, flat, quiet, samples_of, simulate, wall

from skylag import chain, formats
from skylag.errors import NotEnough
from skylag.ionosphere import faults, fronts, irregularity, slopes
from skylag.tables import Thresholds

SERIES = np.array([20.00, 20.12, 20.30, 20.15, 20.60, 21.30, 21.10, 21.55, 21.70, 22.40, 22.35])
NO_ONSETS = fronts.Fronts((), fronts._no_onsets())


def test_index_of_a_known_series(evidence):
    rot = irregularity.rate_of_change(SERIES, 30.0)
    expected = [0.24, 0.36, -0.30, 0.90, 1.40, -0.40, 0.90, 0.30, 1.40, -0.10]
    assert np.allclose(rot, expected, atol=1e-9)
    evidence("index of rate of change, 30 s over 5 min", source="Pi et al. 1997, GRL 24, 2283; worked by hand",
             expected=0.621948551, got=float(irregularity.index_of(rot)), tolerance=1e-9, unit="TECU/min")  # fmt: skip


def test_a_step_or_a_wild_phase_is_not_steady():
    rng = np.random.default_rng(3)
    noise = rng.normal(0, 0.02, (10, 2))
    step, wild = noise.copy(), noise.copy()
    step[4] += 3.0
    wild[4] += 5.0
    wild[5] -= 5.0
    for rot in (step, wild):
        assert (irregularity.index_of(rot) > 0.5).all()
        assert (irregularity.steadily(rot) < 0.05).all()
    scattered = rng.normal(0, 0.6, (10, 50))
    assert (irregularity.steadily(scattered) > 0.125).mean() > 0.95


def test_along_arc_rate_of_a_known_series(evidence):
    elevation = 40.0 + 0.3 * np.arange(10)  # at the middle of each interval
    mapping = 1.0 / np.sqrt(1.0 - (6371.0 / 6721.0 * np.cos(np.radians(elevation))) ** 2)
    rate = irregularity.along_arc_rate(irregularity.rate_of_change(SERIES, 30.0), mapping)
    source = "Juan et al. 2018, J. Space Weather Space Clim. (formula from memory)"
    evidence("along-arc rate, root mean square", source=source, expected=0.388075723,
             got=float(np.sqrt(np.mean(rate**2))), tolerance=1e-6, unit="TECU/min")  # fmt: skip
    evidence("1 mm/s of delay as content", source="Sanz et al. 2014, operational limit", expected=0.06 / 0.162372448,
             got=irregularity.AATR_LIMIT_TECU_MIN, tolerance=1e-8, unit="TECU/min")  # fmt: skip


def test_planar_fit_of_known_points(evidence):
    east = np.array([-600, -250, 0, 180, 420, 700, -500, 300, -150, 550.0])
    north = np.array([100, -400, 350, -650, 250, -100, 500, 600, -50, -300.0])
    delay = np.array([3.10, 3.62, 2.85, 4.05, 3.00, 3.75, 2.55, 2.60, 3.22, 3.90])
    fit = irregularity.planar_fit(east, north, delay, np.hypot(0.35, 0.25))
    source = "grid-point planar fit of satellite-based augmentation, ten points worked twice (references 7.6)"
    for name, expected, tolerance in (
        ("level_m", 3.2797408, 1e-7), ("east_m_per_km", 3.1337371e-4, 1e-10), ("north_m_per_km", -1.20366982e-3, 1e-10),
        ("chi_square", 0.3829419, 1e-7), ("level_sigma_m", 0.13842958, 1e-8), ("limit", 24.3218863, 1e-6),
    ):  # fmt: skip
        evidence(f"planar fit: {name}", source=source, expected=expected, got=fit[name], tolerance=tolerance)
    assert not fit["irregular"]
    assert irregularity.planar_fit(east, north, delay + 3.0 * (np.arange(10) % 2), np.hypot(0.35, 0.25))["irregular"]
    with pytest.raises(NotEnough, match="planar fit: 3 pierce points"):
        irregularity.planar_fit(east[:3], north[:3], delay[:3], np.array(0.4))


def test_inflation_of_the_formal_sigma(evidence):
    for points, expected in ((10, 6.3748), (20, 3.0392), (30, 2.3789)):
        evidence(f"inflation at {points} points", source="chi-square limits at 0.001 and 0.999 (rule from memory)",
                 expected=expected, got=irregularity.inflation(points), tolerance=1e-4)  # fmt: skip


@pytest.fixture(scope="module")
def calm():
    return simulate(quiet, np.random.default_rng(61), hours=4.0)


def ragged(rays, samples, centre, radius_km, first_h, last_h, drift_m_s=(0.0, 0.0), seed=1):
    """Small waves of some 0.6 TECU inside a circle that drifts: added to the rays of a calm sky."""
    rng = np.random.default_rng(seed)
    x, y = flat(rays.pierce_lat, rays.pierce_lon)
    t = (rays.time - START) / np.timedelta64(1, "s")
    late = t - 0.5 * (first_h + last_h) * 3600
    inside = np.hypot(x - centre[0] - drift_m_s[0] * late / 1e3, y - centre[1] - drift_m_s[1] * late / 1e3) < radius_km
    inside &= (t >= first_h * 3600) & (t < last_h * 3600)
    waves = np.zeros(len(rays))
    for _ in range(30):
        length, angle, phase = rng.uniform(6, 25), rng.uniform(0, 6.28), rng.uniform(0, 6.28)
        waves += 0.25 * np.sin(2 * np.pi / length * (x * np.cos(angle) + y * np.sin(angle) - 0.09 * t) + phase)
    return changed(rays, samples, np.flatnonzero(inside), waves[inside])


def test_a_calm_sky_has_no_patch(calm):
    rays, samples = calm
    found = irregularity.assess(rays, NO_ONSETS, None, samples)
    assert found.patches == ()
    assert np.nanmedian(found.index) < 0.2
    assert np.isfinite(found.aatr).all()


@pytest.mark.parametrize(("share", "found"), [(1.1, False), (0.9, True)])
def test_a_regions_own_index_decides_what_is_ragged(calm, share, found):
    """`strained_roti` of a region file, just above and just below the highest index of a patch."""
    rays, samples = ragged(*calm, centre=(40.0, -60.0), radius_km=130.0, first_h=1.0, last_h=2.5)
    (patch,) = [p for p in irregularity.assess(rays, NO_ONSETS, None, samples).patches if p.confirmed]
    usual = irregularity.IrregularityChoices()
    assert chain.ragged_from(usual, Thresholds()) == usual
    own = chain.ragged_from(usual, Thresholds(strained_roti=share * patch.index_highest, broken_roti=9.0))
    assert own.restless_tecu_min == pytest.approx(0.5 * own.ragged_tecu_min)
    own = replace(own, fewest_ragged=1)
    assert any(p.confirmed for p in irregularity.assess(rays, NO_ONSETS, own, samples).patches) is found


def test_a_patch_is_found_where_it_is(calm):
    rays, samples = ragged(*calm, centre=(40.0, -60.0), radius_km=130.0, first_h=1.0, last_h=2.5)
    found = [p for p in irregularity.assess(rays, NO_ONSETS, None, samples).patches if p.confirmed]
    assert len(found) == 1
    patch = found[0]
    x, y = flat(np.array(patch.lat), np.array(patch.lon))
    assert np.hypot(x - 40.0, y + 60.0) < 60.0
    assert 60.0 < patch.radius_km < 190.0
    assert abs((patch.start - START) / np.timedelta64(1, "m") - 60) <= 15
    assert abs((patch.end - START) / np.timedelta64(1, "m") - 150) <= 15
    assert len(patch.receivers) >= 2 and patch.index_highest > 0.5


@pytest.mark.parametrize(("speed", "heading", "seed"), [(70.0, 285.0, 3), (110.0, 60.0, 6), (40.0, 150.0, 2)])
def test_the_drift_of_a_patch_is_told(calm, speed, heading, seed):
    drift = speed * np.sin(np.radians(heading)), speed * np.cos(np.radians(heading))
    rays, samples = ragged(
        *calm, centre=(20.0, 10.0), radius_km=130.0, first_h=1.0, last_h=2.8, drift_m_s=drift, seed=seed
    )
    (patch,) = [p for p in irregularity.assess(rays, NO_ONSETS, None, samples).patches if p.confirmed]
    assert abs(patch.drift_m_s - speed) < min(3.0 * patch.drift_sigma_m_s, 0.25 * speed)
    assert abs((patch.drift_heading_deg - heading + 180.0) % 360.0 - 180.0) < 15.0


def test_a_passing_wall_is_not_ragged():
    ramp = wall(200.0, 50.0, 250.0, 30.0, 2 * 3600)
    rays, samples = simulate(lambda x, y, t: quiet(x, y, t) + ramp(x, y, t), np.random.default_rng(62), hours=4.0)
    moving = fronts.track(rays, samples)
    assert len(moving.fronts) == 1
    assert irregularity.assess(rays, NO_ONSETS, None, samples).patches  # it would be, were its runs not left out
    assert [p for p in irregularity.assess(rays, moving, None, samples).patches if p.confirmed] == []


def test_one_ragged_receiver_is_a_fault_and_no_weather(calm):
    rays, samples = calm
    rng = np.random.default_rng(63)
    rows = np.flatnonzero((rays.receiver == 5) & (rays.time >= START + np.timedelta64(60, "m"))
                          & (rays.time < START + np.timedelta64(120, "m")))  # fmt: skip
    rays, samples = changed(rays, samples, rows, rng.normal(0, 0.8, len(rows)))
    found = irregularity.assess(rays, NO_ONSETS, None, samples)
    assert [p for p in found.patches if p.confirmed] == []
    blamed = faults.find(rays, samples, found)
    assert {fault.receiver for fault in blamed} == {"RX05"}
    assert abs((blamed[0].start - START) / np.timedelta64(1, "m") - 60) <= 10


def test_a_level_that_nobody_shares_is_a_fault(calm):
    rays, samples = calm
    rows = np.flatnonzero((rays.receiver == 9) & (rays.time >= START + np.timedelta64(60, "m"))
                          & (rays.time < START + np.timedelta64(120, "m")))  # fmt: skip
    rays, samples = changed(rays, samples, rows, 14.0 * rays.mapping[rows])
    blamed = faults.find(rays, samples, irregularity.assess(rays), slopes.measure(rays, samples))
    assert {fault.receiver for fault in blamed} == {"RX09"}
    assert any("level off by" in fault.why for fault in blamed)


def test_a_slip_storm_and_a_silence_are_faults(calm):
    rays, samples = calm
    storm = (rays.receiver == 2) & (rays.time >= START + np.timedelta64(90, "m"))
    storm &= rays.time < START + np.timedelta64(110, "m")
    minute = (rays.time - START) // np.timedelta64(120, "s")
    cut = replace(rays, arc=np.where(storm, 100_000 + rays.arc * 1000 + minute.astype(np.int64), rays.arc))
    keep = ~((rays.receiver == 7) & (rays.time >= START + np.timedelta64(150, "m"))
             & (rays.time < START + np.timedelta64(180, "m")))  # fmt: skip
    kept = cut.where(keep)
    thinned = samples_of(kept, samples.vtec[keep], samples.arc_sigma[keep], samples.receiver_sigma[keep])
    blamed = faults.find(kept, thinned, irregularity.assess(kept))
    assert sorted(fault.receiver for fault in blamed) == ["RX02", "RX07"]
    by_name = {fault.receiver: fault.why for fault in blamed}
    assert "broken arcs" in by_name["RX02"] and "lines of sight" in by_name["RX07"]


def test_a_calm_network_blames_nobody(calm):
    rays, samples = calm
    assert faults.find(rays, samples, irregularity.assess(rays), slopes.measure(rays, samples)) == ()


def test_a_wall_over_the_network_blames_nobody():
    ramp = wall(200.0, 50.0, 150.0, 30.0, 2 * 3600)
    rays, samples = simulate(lambda x, y, t: quiet(x, y, t) + ramp(x, y, t), np.random.default_rng(64), hours=4.0)
    moving = fronts.track(rays, samples)
    found = irregularity.assess(rays, moving)
    assert faults.find(rays, samples, found, slopes.measure(rays, samples), moving) == ()


@pytest.mark.parametrize("speed", [60.0, 150.0, 400.0])
def test_a_wall_over_a_wide_network_blames_nobody_even_unrecognised(speed):
    ramp = wall(150.0, 80.0, speed, 325.0, 2 * 3600)
    wide = [PLACES[0], PLACES[8], PLACES[10], PLACES[13]]
    rays, samples = simulate(
        lambda x, y, t: quiet(x, y, t) + ramp(x, y, t), np.random.default_rng(66), hours=4.0, places=wide
    )
    found = irregularity.assess(rays)
    assert faults.find(rays, samples, found, slopes.measure(rays, samples), None) == ()


def test_a_lone_slope_is_blamed_where_a_neighbour_looked_at_the_same_place(calm):
    rays, samples = calm
    late = (rays.time >= START + np.timedelta64(60, "m")) & (rays.time < START + np.timedelta64(75, "m"))
    rows = np.flatnonzero((rays.receiver == 5) & late)  # too short for the test of levels
    rays, samples = changed(rays, samples, rows, 14.0 * rays.mapping[rows])
    steep = slopes.measure(rays, samples)
    blamed = faults.find(rays, samples, irregularity.assess(rays), steep)
    assert {fault.receiver for fault in blamed} == {"RX05"}
    assert any("every steep slope seen includes it" in fault.why for fault in blamed)


def test_two_receivers_have_nobody_to_compare_with():
    rays, samples = simulate(quiet, np.random.default_rng(65), hours=1.0, places=PLACES[:2])
    assert faults.find(rays, samples, irregularity.assess(rays)) == ()


@pytest.mark.parametrize("epochs", [0, 1, 3, 22])
def test_little_data_raises_nothing_and_breaks_nothing(calm, epochs):
    rays, samples = calm
    few = rays.time < START + np.timedelta64(epochs * 30, "s")
    rays = rays.where(few)
    samples = samples_of(rays, samples.vtec[few], samples.arc_sigma[few], samples.receiver_sigma[few])
    steep = slopes.measure(rays, samples)
    moving = fronts.track(rays, samples, steep)
    found = irregularity.assess(rays, moving, None, samples)
    assert faults.find(rays, samples, found, steep, moving) == ()
    assert found.patches == () and moving.fronts == ()


@pytest.mark.open_data
def test_index_of_a_quiet_day_over_denmark(open_data, evidence):
    signals = formats.read(open_data / "2020-177/obs/ESBC00DNK_R_20201770000_01D_30S_MO.crx.gz").table
    orbits = formats.read(open_data / "2020-177/nav/ESBC00DNK_R_20201770000_01D_MN.rnx.gz").table
    rays = chain.receiver_day(signals, [orbits], chain.Choices(), 400e3).rays
    found = irregularity.assess(rays)
    assert found.patches == ()
    gps = np.char.startswith(rays.satellites[found.satellite], "G")
    source = "GPS windows of ESBC, 25 June 2020 (Kp 1 and less), worked apart with other code (references 10.1)"
    for share, expected, tolerance in ((0.5, 0.011, 0.001), (0.95, 0.029, 0.003), (0.99, 0.042, 0.004)):
        got = float(np.nanquantile(found.index[:, gps], share))
        evidence(f"quiet-day index above 30 degrees, {share:.0%} quantile", source=source, expected=expected, got=got,
                 tolerance=tolerance, unit="TECU/min")  # fmt: skip
    evidence("quiet-day along-arc rate, largest hour", source="ESBC, 25 June 2020, worked apart: 0.020 to 0.050",
             expected=0.050, got=float(np.nanmax(found.aatr)), tolerance=0.005, unit="TECU/min")  # fmt: skip
