"""Confidence steps, interpolation between grid points, planar fits."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from tests.conftest import Evidence

from skylag.constants import L1_M_PER_TECU, SBAS_EARTH_RADIUS_M, SBAS_SHELL_HEIGHT_M
from skylag.impact import correction_grid as grid
from skylag.impact.protection import pierce_factor
from skylag.ionosphere.augmentation_grid import all_points
from skylag.ionosphere.covariance import Epoch
from skylag.ionosphere.geometry import pierce

SOURCE = "RTCA DO-229 A.4.4.10"
PLACE = "pierce point of 50 N 10 E, azimuth 135, elevation 20"
# South-west, south-east, north-west, north-east.
DELAY = np.array([3.00, 2.75, 2.25, 2.00])
VARIANCE = np.array([0.2994, 0.4075, 0.2079, 0.2994])


def _worked() -> tuple[float, float]:
    lat, lon = pierce(50.0, 10.0, 20.0, 135.0, SBAS_SHELL_HEIGHT_M, SBAS_EARTH_RADIUS_M)
    return float(lat), float(lon)


def test_the_worked_interpolation(evidence: Evidence) -> None:
    lat, lon = _worked()
    x, y = (lon - 15.0) / 5.0, (lat - 40.0) / 5.0
    weight = grid.cell_weights(np.array([x]), np.array([y]), np.ones((1, 4), dtype=bool))[0]
    delay, variance = float(weight @ DELAY), float(weight @ VARIANCE)
    factor = float(pierce_factor(20.0))
    for name, got, expected, tolerance in (
        ("latitude", lat, 44.805812306704, 5.1e-13), ("longitude", lon, 17.001050012798, 5.1e-13),
        ("x", x, 0.400210002560, 5.1e-13), ("y", y, 0.961162461341, 5.1e-13),
        ("share north-east", weight[3], 0.384666831, 5.1e-10), ("share north-west", weight[2], 0.576495630, 5.1e-10),
        ("share south-west", weight[0], 0.023294367, 5.1e-10), ("share south-east", weight[1], 0.015543171, 5.1e-10),
        ("vertical delay", delay, 2.179075653355, 5.1e-13), ("variance", variance, 0.248330866668, 5.1e-13),
        ("obliquity", factor, 2.200815581, 5.1e-10), ("slant delay", factor * delay, 4.795743649538, 5.1e-13),
        ("slant sigma", factor * math.sqrt(variance), 1.096728183691, 5.1e-13),
    ):  # fmt: skip
        evidence(f"{PLACE}: {name}", source=SOURCE, expected=expected, got=float(got), tolerance=tolerance)


@pytest.mark.parametrize(
    ("missing", "shares", "variance"),
    [
        ("SW", {1: 0.038837539, 3: 0.361372464, 2: 0.599789997}, 0.248717553163),
        ("SE", {0: 0.038837539, 2: 0.560952459, 3: 0.400210003}, 0.248072850022),
        ("NE", None, math.nan),
        ("NW", None, math.nan),
    ],
)
def test_with_one_corner_missing(
    missing: str, shares: dict[int, float] | None, variance: float, evidence: Evidence
) -> None:
    lat, lon = _worked()
    there = np.array([[name != missing for name in ("SW", "SE", "NW", "NE")]])
    weight = grid.cell_weights(np.array([(lon - 15) / 5]), np.array([(lat - 40) / 5]), there)[0]
    if shares is None:
        assert np.isnan(weight).all()
        return
    for corner, expected in shares.items():
        evidence(f"{PLACE}, {missing} missing: share of corner {corner}", source=SOURCE, expected=expected,
                 got=float(weight[corner]), tolerance=5.1e-10)  # fmt: skip
    evidence(f"{PLACE}, {missing} missing: variance", source=SOURCE, expected=variance, got=float(weight @ VARIANCE),
             tolerance=5.1e-13)  # fmt: skip
    evidence(f"{PLACE}, {missing} missing: delay", source=SOURCE, expected=2.179075653355, got=float(weight @ DELAY),
             tolerance=5.1e-13)  # fmt: skip


def test_the_small_interpolation(evidence: Evidence) -> None:
    weight = grid.cell_weights(np.array([0.3]), np.array([0.6]), np.ones((1, 4), dtype=bool))[0]
    for name, got, expected in (
        ("NE", weight[3], 0.18), ("NW", weight[2], 0.42), ("SW", weight[0], 0.28), ("SE", weight[1], 0.12),
        ("delay", float(weight @ np.array([4.0, 5.0, 3.0, 2.0])), 3.34),
    ):  # fmt: skip
        evidence(f"interpolation at 0.3, 0.6: {name}", source=SOURCE, expected=expected, got=float(got),
                 tolerance=1e-12)  # fmt: skip


@given(st.floats(0, 1), st.floats(0, 1), st.integers(-1, 3))
def test_shares_carry_any_plane(x: float, y: float, missing: int) -> None:
    there = np.array([[corner != missing for corner in range(4)]])
    weight = grid.cell_weights(np.array([x]), np.array([y]), there)[0]
    if np.isnan(weight).any():
        return
    corner_x, corner_y = np.array([0, 1, 0, 1]), np.array([0, 0, 1, 1])
    assert weight.sum() == pytest.approx(1)
    assert weight @ corner_x == pytest.approx(x, abs=1e-12)
    assert weight @ corner_y == pytest.approx(y, abs=1e-12)
    assert (weight >= -1e-12).all()


@pytest.mark.parametrize("step", range(15))
def test_confidence_steps(step: int, evidence: Evidence) -> None:
    """The variance is that of the bound, rounded up to four decimals; a bound at a step is that step."""
    bound = grid.CONFIDENCE_M[step]
    evidence(f"variance of confidence step {step}", source="RTCA DO-229 table A-17", unit="m^2",
             expected=math.ceil((bound / 3.29) ** 2 * 1e4 - 1e-9) / 1e4, got=float(grid.variance_of(step)),
             tolerance=1e-9)  # fmt: skip
    assert grid.step_of(bound) == step
    assert grid.step_of(bound + 1e-6) == step + 1


def test_beyond_the_last_step_is_not_monitored() -> None:
    assert grid.step_of([45.01, math.nan, math.inf]).tolist() == [15, 15, 15]
    assert np.isnan(grid.variance_of(15))


def _lattice(band_most: int = 8) -> tuple[grid.Lattice, np.ndarray]:
    every = all_points()
    some = (every.band <= band_most) & (np.abs(every.lat) <= 75)
    return grid.Lattice(every.lat[some].astype(int), every.lon[some].astype(int)), np.ones(some.sum(), dtype=bool)


@given(st.floats(-75, 75), st.floats(-180, 179.99))
def test_every_place_up_to_75_degrees_lies_in_its_cell(lat: float, lon: float) -> None:
    lattice, monitored = _lattice()
    found = lattice.around(np.array([lat]), np.array([lon]), monitored)
    assert found.usable[0]
    corner_lat = lattice.lat[found.point[0]]
    turn = np.mod(lattice.lon[found.point[0]] - lon + 180, 360) - 180
    assert found.weight[0] @ corner_lat == pytest.approx(lat, abs=1e-9)
    assert found.weight[0] @ turn == pytest.approx(0, abs=1e-9)
    assert np.ptp(corner_lat) == (5 if abs(lat) < 55 else 10) or abs(lat) == 55


def _whole_lattice() -> tuple[grid.Lattice, np.ndarray]:
    every = all_points()
    some = every.band <= 8
    return grid.Lattice(every.lat[some].astype(int), every.lon[some].astype(int)), np.ones(some.sum(), dtype=bool)


@given(st.floats(75.01, 90), st.floats(-180, 179.99), st.sampled_from([1, -1]))
def test_the_caps_are_reached(size: float, lon: float, side: int) -> None:
    """Beyond 75 degrees: shares are shares, of points at 75 and 85, and up to 85 latitude is carried as it is."""
    lattice, monitored = _whole_lattice()
    found = lattice.around(np.array([side * size]), np.array([lon]), monitored)
    assert found.usable[0]
    assert found.weight[0].sum() == pytest.approx(1)
    assert (found.weight[0] >= -1e-9).all()
    used = lattice.lat[found.point[0]]
    assert set(np.abs(used).tolist()) <= ({75, 85} if size <= 85 else {85})
    assert (np.sign(used) == side).all()
    if size <= 85:
        assert found.weight[0] @ np.abs(used) == pytest.approx(size, abs=1e-9)
        turn = np.mod(lattice.lon[found.point[0]] - lon + 180, 360) - 180
        assert (np.abs(turn) <= 90 + 1e-9).all()


def test_at_the_poles_all_four_points_count_alike() -> None:
    lattice, monitored = _whole_lattice()
    found = lattice.around(np.array([90.0, -90.0, 85.0 + 1e-9, 85.0]), np.array([10.0, 20.0, 45.0, 45.0]), monitored)
    assert found.weight[:2] == pytest.approx(np.full((2, 4), 0.25))
    # On the parallel of 85 both rules agree: half of 0 E and half of 90 E.
    for row in (2, 3):
        shares = dict(zip(lattice.lon[found.point[row]].tolist(), found.weight[row].tolist(), strict=False))
        by_lon = {lon: sum(w for p, w in zip(found.point[row], found.weight[row], strict=True)
                           if lattice.lon[p] == lon and lattice.lat[p] == 85) for lon in shares}  # fmt: skip
        assert by_lon[0] == pytest.approx(0.5, abs=1e-6)
        assert by_lon[90] == pytest.approx(0.5, abs=1e-6)


def test_a_cap_with_a_point_missing_carries_nobody() -> None:
    lattice, monitored = _whole_lattice()
    gone = (lattice.lat == 85) & (lattice.lon == 0)
    found = lattice.around(np.array([80.0, 88.0, 80.0]), np.array([45.0, 45.0, -135.0]), monitored & ~gone)
    assert found.usable.tolist() == [False, False, True]


def test_two_missing_corners_leave_the_wide_cell() -> None:
    lattice, monitored = _lattice()
    gone = np.isin(lattice.lat, [45]) & np.isin(lattice.lon, [15, 20])
    found = lattice.around(np.array([44.0, 42.0]), np.array([17.0, 17.0]), monitored & ~gone)
    assert found.usable.all()
    assert np.ptp(lattice.lat[found.point[0]]) == 10


def test_a_point_that_is_not_monitored_carries_nobody() -> None:
    lattice, monitored = _lattice()
    found = lattice.around(np.array([44.0]), np.array([17.0]), np.zeros_like(monitored))
    assert not found.usable.any()


# The check fit: ten lines of sight around a point, east and north [km], vertical delay [m].
EAST = np.array([-600, -250, 0, 180, 420, 700, -500, 300, -150, 550.0])
NORTH = np.array([100, -400, 350, -650, 250, -100, 500, 600, -50, -300.0])
VERTICAL = np.array([3.10, 3.62, 2.85, 4.05, 3.00, 3.75, 2.55, 2.60, 3.22, 3.90])


def _part(delay_m: np.ndarray, sigma_m: float = 0.25) -> Epoch:
    count = len(delay_m)
    return Epoch(
        x=EAST[:count], y=NORTH[:count], vtec=delay_m / L1_M_PER_TECU, own=np.full(count, sigma_m / L1_M_PER_TECU),
        arc=np.zeros(count), rows=np.zeros((count, 2), dtype=int), factor=np.zeros(count),
        leanings=np.zeros((count, 2)), receiver=np.arange(count),
    )  # fmt: skip


def _judged(part: Epoch, **choices: float) -> tuple[int, bool, float, float]:
    at = np.array([0.0])
    found = grid.judge_points(part, np.zeros((1, 1)), at, at, grid.ConfidenceChoices(**choices))
    return int(found[0][0]), bool(found[1][0]), float(found[2][0]), float(found[3][0])


def test_the_planar_fit_of_ten(evidence: Evidence) -> None:
    """Inflation for ten lines of sight; the fit's chi-square is 0.3829419, so the limit parts it from a tenth of it."""
    count, irregular, raised, _ = _judged(_part(VERTICAL))
    assert (count, irregular) == (10, False)
    evidence("inflation of sigma with ten lines of sight", source="chi-square limits, Walter et al. 2000 (from memory)",
             expected=6.3748, got=raised, tolerance=5.1e-5)  # fmt: skip
    # Residuals stretched until chi-square is just under and just over its limit of 24.3218863.
    design = np.stack([np.ones(10), EAST, NORTH], axis=1)
    plane = design @ np.linalg.lstsq(design, VERTICAL, rcond=None)[0]
    for stretch, expected in ((0.999, False), (1.001, True)):
        factor = math.sqrt(24.3218863 / 0.3829419) * stretch
        assert _judged(_part(plane + factor * (VERTICAL - plane)))[1] is expected


def test_too_few_or_too_far_is_not_monitored() -> None:
    assert math.isnan(_judged(_part(VERTICAL[:9]))[2])
    assert math.isnan(_judged(_part(VERTICAL), nearest_km=100.0)[2])


def test_the_way_from_the_lines_of_sight_counts() -> None:
    """A slope of 1 mm/km over the way to the nearest line of sight, or to their centre, whichever is more."""
    _, _, _, missed_m = _judged(_part(VERTICAL), missed_mm_per_km=1.0)
    centre = math.hypot(EAST.mean(), NORTH.mean())
    nearest = np.hypot(EAST, NORTH).min()
    assert missed_m == pytest.approx(max(centre, nearest) / 1000.0)
