"""The committed files of the invented network through the whole chain, against what the generator put in.

The truth is three-dimensional and has no thin shell.  Tolerances are the ones a regional network is built for: a
fraction of a TECU in level, a tenth of a nanosecond between satellites.
"""

import numpy as np
import pytest
from tests.simulated.day_results import CALM, STORM, day, true_slant, truth_of

from skylag.tables import BROKEN, HOLDS, STATE_NAMES

DAYS = pytest.mark.parametrize("name", [CALM, STORM])


def bias_errors(name: str, kind: str) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Error and sigma [ns] of each bias of a kind, and its signal pair."""
    known, found = truth_of(name), day(name).products.calibration.biases
    errors, sigmas, pairs = [], [], []
    for i in np.flatnonzero(found.kind == kind):
        system, code1, code2 = str(found.system[i]), str(found.code1[i]), str(found.code2[i])
        who = str(found.name[i])
        if kind == "satellite":
            true = known.satellite_bias.get((who, code1, code2))
            if true is None:  # C1C-C2W = (C1C-C1W) + (C1W-C2W)
                true = known.satellite_bias[who, "C1C", "C1W"] + known.satellite_bias[who, "C1W", "C2W"]
        else:
            true = known.receiver_bias[who, system, code1, code2]
        errors.append(found.value_ns[i] - true)
        sigmas.append(found.sigma_ns[i])
        pairs.append(f"{system} {code1}-{code2}")
    return np.array(errors), np.array(sigmas), np.array(pairs)


@DAYS
def test_satellite_biases(name: str) -> None:
    errors, _, pairs = bias_errors(name, "satellite")
    assert len(np.unique(pairs)) >= 2
    for pair in np.unique(pairs):
        here = errors[pairs == pair]
        assert len(here) == 24
        assert np.std(here) < (0.15 if name == CALM else 0.25), f"{pair}: {np.std(here):.3f} ns"


@DAYS
def test_receiver_biases_level_included(name: str) -> None:
    """A common error of all receivers is a wrong level of the map, so it counts."""
    errors, sigmas, _ = bias_errors(name, "receiver")
    assert np.sqrt(np.mean(errors**2)) < (0.45 if name == CALM else 0.6)
    assert np.all(np.abs(errors) < 3.5 * sigmas)


@DAYS
def test_slant_content(name: str) -> None:
    samples = day(name).products.samples
    rows, true = true_slant(samples, name)
    assert len(rows) > 40_000
    error = samples.stec[rows] - true
    elevation = samples.rays.elevation[rows]
    assert np.sqrt(np.mean(error[elevation > 20] ** 2)) < 1.0
    assert np.sqrt(np.mean(error[elevation <= 20] ** 2)) < 3.0


@DAYS
def test_vertical_sigma_is_as_large_as_the_errors(name: str) -> None:
    """The level is one draw a day, so the whole sigma may be wide of it; it must not be narrow.  With the leanings,
    which all contents share, taken out of error and sigma, the rest must be neither."""
    samples = day(name).products.samples
    rows, _ = true_slant(samples, name)
    rows = rows[:: max(1, len(rows) // 1500)]
    rays = samples.rays
    true = truth_of(name).vertical_content(rays.pierce_lat[rows], rays.pierce_lon[rows], rays.time[rows])
    error, sigma = samples.vtec[rows] - true, samples.sigma[rows]
    z = error / sigma
    assert np.sqrt(np.mean(np.clip(z, -6, 6) ** 2)) < 1.5
    assert np.mean(np.abs(z) < 1.96) > 0.9
    shared = np.stack([samples.lean_shell[rows], samples.lean_high[rows]], axis=1)
    own = np.sqrt(sigma**2 - np.sum(shared**2, axis=1))
    drawn = np.linalg.lstsq(shared / own[:, None], error / own, rcond=None)[0]
    assert np.all(np.abs(drawn) < 3.0), "how many sigmas each leaning of the day was off"
    spread = 1.4826 * np.median(np.abs((error - shared @ drawn) / own))
    print(f"{name}: leanings off by {drawn.round(2)} sigmas, the rest over sigma {spread:.2f}")
    assert 0.5 < spread < 1.3


@pytest.mark.parametrize(
    ("name", "hour", "limit_tecu"), [(CALM, 3, 1.0), (CALM, 15, 1.0), (STORM, 3, 1.5), (STORM, 12, 1.5)]
)
def test_map_where_it_is_seen(name: str, hour: int, limit_tecu: float) -> None:
    fields = day(name).products.fields
    index = hour * 12
    lat, lon = np.meshgrid(fields.lats, fields.lons, indexing="ij")
    seen = fields.support[index] > 0
    true = truth_of(name).vertical_content(lat[seen], lon[seen], np.full(seen.sum(), fields.times[index]))
    error = fields.vtec[index][seen] - true
    assert np.sqrt(np.mean(error**2)) < limit_tecu
    assert np.mean(np.abs(error) < 1.96 * fields.vtec_sigma[index][seen]) > 0.9


def test_the_front_is_found_as_it_was() -> None:
    """Speed, heading, steepness, and when it passes, against the wall that was put in."""
    flags = [flag for flag in day(STORM).products.flags if flag.kind == "front"]
    assert len(flags) == 1
    (front,) = flags
    wall = truth_of(STORM).front.at(np.datetime64(f"{STORM}T07:00:00"))
    assert front.state == "broken"
    assert abs(front.speed_m_s - wall.speed_m_s) < 0.1 * wall.speed_m_s
    assert abs((front.heading_deg - wall.heading_deg + 180) % 360 - 180) < 5.0
    assert abs(front.slope_mm_per_km - wall.slope_mm_per_km) < 0.15 * wall.slope_mm_per_km


def test_the_patch_is_found_as_it_was() -> None:
    flags = [flag for flag in day(STORM).products.flags if flag.kind == "irregular" and flag.confirmed]
    assert len(flags) == 1
    (patch,) = flags
    middle = patch.start + (patch.end - patch.start) / 2
    put_in = truth_of(STORM).patch.at(middle)
    assert put_in is not None
    north_km = 111.2 * (patch.lat - put_in.lat)
    east_km = 111.2 * np.cos(np.radians(put_in.lat)) * (patch.lon - put_in.lon)
    assert np.hypot(north_km, east_km) < 100.0


def test_states_of_the_storm_day() -> None:
    """Broken where and when the wall stood, holding twelve hours earlier."""
    fields = day(STORM).products.fields
    wall = truth_of(STORM).front.at(np.datetime64(f"{STORM}T07:00:00"))
    index = 84
    row = int(np.argmin(np.abs(fields.lats - wall.lat)))
    column = int(np.argmin(np.abs(fields.lons - wall.lon)))
    assert fields.state[index, row, column] == BROKEN
    assert np.mean(fields.state[6] == HOLDS) > 0.8
    assert np.all(fields.support[fields.state == HOLDS] > 0)


def test_the_receiver_at_fault_is_no_weather() -> None:
    """The hour of wild codes and phases on the calm day is a fault of its receiver and nothing else is flagged."""
    flags = day(CALM).products.flags
    ((marker, start, end),) = truth_of(CALM).faults
    named = [flag for flag in flags if flag.kind == "fault" and marker in flag.evidence]
    assert any(flag.start < end and flag.end > start for flag in named)
    assert not [flag for flag in flags if flag.kind in ("front", "irregular") and flag.state in STATE_NAMES[2:]]
    assert not [flag for flag in flags if flag.kind == "slope" and flag.confirmed]
    state = day(CALM).products.fields.state
    assert np.mean(state >= 2) < 0.001


def test_simulated_days_say_so() -> None:
    assert day(CALM).products.origin.simulated
