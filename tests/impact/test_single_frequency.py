"""What the broadcast model leaves: zero where the map is the model, and by hand where it is not."""

import numpy as np
import pytest
from tests.impact.test_satellite_augmentation import SITE, a_sky
from tests.impact.test_survey import some_fields

from skylag.constants import L1_M_PER_TECU
from skylag.errors import Missing, Refused
from skylag.impact import single_frequency, sky
from skylag.ionosphere.broadcast_delay import klobuchar
from skylag.ionosphere.geometry import mapping
from skylag.tables import UNSEEN, Fields

ZERO = {"GPSA": (0.0, 0.0, 0.0, 0.0), "GPSB": (0.0, 0.0, 0.0, 0.0)}


def _wide(vtec: float) -> Fields:
    """Maps of one content that reach all pierce points, at the first hour."""
    few = some_fields()
    lats, lons = np.arange(-60.0, -19.0, 1.0), np.arange(120.0, 171.0, 1.0)
    times = few.times[:12]
    shape = (len(times), len(lats), len(lons))

    def full(value: float) -> np.ndarray:
        return np.full(shape, value, dtype=np.float32)

    return Fields(times, lats, lons, full(vtec), full(0.5), np.full(shape, 9, dtype=np.uint16), full(1), full(0.1),
                  full(0), full(1), np.full(shape, 1, dtype=np.uint8))  # fmt: skip


def test_range_error_by_hand() -> None:
    """Alpha and beta of zero leave the model's night delay of 5 ns; the map has 20 TECU everywhere."""
    fields, world = _wide(20.0), a_sky()
    found = single_frequency.left_over(SITE, fields, world, ZERO, mask_deg=5.0)
    elevation, azimuth = world.look(SITE.lat, SITE.lon)
    measured = 20.0 * L1_M_PER_TECU * mapping(elevation[0], 400e3)
    model = klobuchar((0,) * 4, (0,) * 4, SITE.lat, SITE.lon, elevation[0], azimuth[0], fields.times[:1])
    assert found.range_m[0] == pytest.approx(np.quantile(np.abs(model - measured), 0.95), rel=1e-6)
    assert (found.measured == 9).all()
    assert (found.in_view == 9).all()
    assert found.day_range_95_m == pytest.approx(found.range_m[0], rel=0.01)
    assert found.day_vertical_95_m > 0
    assert found.hours.tolist() == [fields.times[0].item()]


def test_position_error_of_a_common_delay_is_none() -> None:
    """When every line of sight is off alike the clock takes it all: here checked through the solution itself."""
    world = a_sky()
    elevation, azimuth = world.look(SITE.lat, SITE.lon)
    rows = sky.rows_of(elevation[:1], azimuth[:1])
    weight = np.sin(np.radians(elevation[:1])) ** 2
    solve = np.einsum("tij,tsj,ts->tis", sky.position_covariance(rows, weight), rows, weight)
    moved = solve[0] @ np.full(9, 3.0)
    assert moved == pytest.approx([0, 0, 0, 3.0], abs=1e-9)


def test_more_content_leaves_more() -> None:
    errors = [single_frequency.left_over(SITE, _wide(v), a_sky(), ZERO).day_range_95_m for v in (20.0, 40.0, 80.0)]
    assert errors == sorted(errors)


def test_lines_of_sight_that_nobody_saw_do_not_count() -> None:
    fields = _wide(20.0)
    fields.state[:6] = UNSEEN
    found = single_frequency.left_over(SITE, fields, a_sky(), ZERO)
    assert np.isnan(found.range_m[:6]).all()
    assert np.isnan(found.vertical_m[:6]).all()
    assert (found.measured[:6] == 0).all()
    assert np.isfinite(found.range_m[6:]).all()


def test_without_coefficients_it_is_said() -> None:
    with pytest.raises(Missing, match="not known for this day"):
        single_frequency.left_over(SITE, _wide(20.0), a_sky(), {"GAL": (1.0, 2.0, 3.0)})
    with pytest.raises(Refused, match="four coefficients"):
        single_frequency.coefficients_of({"GPSA": (1.0,), "GPSB": (1.0, 2.0, 3.0, 4.0)})


def test_caution_and_assumptions() -> None:
    found = single_frequency.left_over(SITE, _wide(20.0), a_sky(), ZERO)
    assert "not for navigation" in found.caution
    assert "Klobuchar" in found.assumptions[0]
