"""Protection levels: the worked case, an independent implementation over random geometries, laws."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from tests.conftest import Evidence, reference_rows

from skylag.impact import protection

SOURCE = "RTCA DO-229 appendix J; worked by four independent routes"
CASE = reference_rows("protection_case.csv")
AZIMUTH = np.array([float(row["azimuth_deg"]) for row in CASE])
ELEVATION = np.array([float(row["elevation_deg"]) for row in CASE])


def _variance(elevation: np.ndarray, correction_m2: float = 1.0, vertical_m2: float = 0.81) -> np.ndarray:
    return (
        correction_m2
        + protection.pierce_factor(elevation) ** 2 * vertical_m2
        + protection.airborne_variance(elevation, 0.36)
        + protection.troposphere_variance(elevation)
    )


@pytest.mark.parametrize("row", CASE, ids=lambda row: f"{row['azimuth_deg']}/{row['elevation_deg']}")
def test_parts_of_the_variance(row: dict[str, str], evidence: Evidence) -> None:
    elevation = np.array(float(row["elevation_deg"]))
    factor = protection.pierce_factor(elevation)
    got = {
        "pierce_factor": float(factor), "ionosphere_m": float(0.9 * factor),
        "airborne_m": float(np.sqrt(protection.airborne_variance(elevation, 0.36))),
        "troposphere_m": float(np.sqrt(protection.troposphere_variance(elevation))),
        "all_m": float(np.sqrt(_variance(elevation))),
    }  # fmt: skip
    for name, value in got.items():
        evidence(f"{name} at elevation {row['elevation_deg']}, azimuth {row['azimuth_deg']}", source=SOURCE,
                 expected=float(row[name]), got=value, tolerance=5.1e-7)  # fmt: skip


def test_the_worked_levels(evidence: Evidence) -> None:
    found = protection.levels(ELEVATION, AZIMUTH, _variance(ELEVATION))
    for name, value, expected, tolerance in (
        ("d_E^2", found.east_m2, 1.654756953, 5.1e-10),
        ("d_N^2", found.north_m2, 1.604301449, 5.1e-10),
        ("d_EN", found.east_north_m2, 0.019710837, 5.1e-10),
        ("d_U^2", found.up_m2, 9.037193202, 5.1e-10),
        ("d_major", found.major_m, 1.289008978, 5.1e-10),
        ("VPL", found.vertical_m, 16.023005896516, 5.1e-13),
        ("HPL, K 6.0", found.horizontal_m, 7.734053865088, 5.1e-13),
        ("HPL, K 6.18", found.horizontal_route_m, 7.966075481040, 5.1e-13),
    ):
        evidence(f"protection levels of the worked geometry: {name}", source=SOURCE, expected=expected,
                 got=float(value), tolerance=tolerance)  # fmt: skip


def _plain(elevation: np.ndarray, azimuth: np.ndarray, variance: np.ndarray) -> tuple[float, float]:
    """The same by whitened least squares and singular values: no normal equations, no formula for the major axis."""
    rows = []
    for e, a, v in zip(np.radians(elevation), np.radians(azimuth), variance, strict=True):
        one = [np.sin(a) * np.cos(e), np.cos(a) * np.cos(e), np.sin(e), 1.0]
        rows.append([x / np.sqrt(v) for x in one])
    inverse = np.linalg.pinv(np.array(rows))  # position per whitened range
    covariance = inverse @ inverse.T
    vertical = 5.33 * np.sqrt(covariance[2, 2])
    horizontal = 6.0 * np.linalg.svd(inverse[:2], compute_uv=False)[0]
    return float(vertical), float(horizontal)


def test_a_thousand_random_geometries(rng: np.random.Generator) -> None:
    """Each equals an independent straightforward computation."""
    satellites = 14
    elevation = np.degrees(np.arcsin(rng.uniform(np.sin(np.radians(5)), 1, (1000, satellites))))
    azimuth = rng.uniform(0, 360, (1000, satellites))
    variance = rng.uniform(0.3, 60.0, (1000, satellites))
    used = np.arange(satellites)[None, :] < rng.integers(5, satellites + 1, 1000)[:, None]
    found = protection.levels(elevation, azimuth, np.where(used, variance, np.nan))
    for number in range(1000):
        here = used[number]
        vertical, horizontal = _plain(elevation[number, here], azimuth[number, here], variance[number, here])
        assert found.vertical_m[number] == pytest.approx(vertical, rel=1e-7)
        assert found.horizontal_m[number] == pytest.approx(horizontal, rel=1e-7)


def test_too_few_satellites_give_no_level() -> None:
    found = protection.levels(ELEVATION[:3], AZIMUTH[:3], np.ones(3))
    assert np.isnan(found.vertical_m)
    assert np.isnan(found.horizontal_m)


def test_satellites_in_a_row_give_no_level() -> None:
    found = protection.levels(np.full(6, 30.0), np.full(6, 90.0), np.ones(6))
    assert np.isnan(found.vertical_m)


@given(st.integers(0, 7), st.floats(1.0, 50.0))
def test_more_variance_never_lowers_a_level(which: int, factor: float) -> None:
    before = protection.levels(ELEVATION, AZIMUTH, _variance(ELEVATION))
    worse = _variance(ELEVATION)
    worse[which] *= factor
    after = protection.levels(ELEVATION, AZIMUTH, worse)
    assert after.vertical_m >= before.vertical_m * (1 - 1e-12)
    assert after.horizontal_m >= before.horizontal_m * (1 - 1e-12)


def test_where_the_factors_come_from(evidence: Evidence) -> None:
    from scipy.stats import norm, rayleigh

    for name, got, printed in (
        ("vertical: 1e-7, two-sided normal", norm.isf(0.5e-7), protection.K_VERTICAL),
        ("horizontal en route: 5e-9, Rayleigh", rayleigh.isf(5e-9), protection.K_HORIZONTAL_ROUTE),
        ("horizontal approach: 2e-9, two-sided normal", norm.isf(1e-9), protection.K_HORIZONTAL_PRECISION),
    ):
        evidence(f"k factor, {name}", source="RTCA DO-229 appendix J", expected=printed, got=float(got),
                 tolerance=5.1e-3)  # fmt: skip


def test_correction_variances_follow_their_bounds() -> None:
    """Variance is (bound / 3.29)^2, rounded to the table's figures."""
    for bound, variance in zip(protection.CORRECTION_M, protection.CORRECTION_VARIANCE_M2, strict=True):
        assert variance == pytest.approx((bound / 3.29) ** 2, abs=1.1e-4, rel=1e-5)
