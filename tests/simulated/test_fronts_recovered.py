"""Walls drawn at random over the published threat space, and calm skies: how many are found, and how well.

The marks to reach: of walls of 60 mm/km and more that cross at least four lines of sight above 15 degrees, 98 % raised;
slope within 20 % median error, speed within 15 %, heading within 15 degrees for walls faster than 50 m/s.
"""

import numpy as np
import pytest
from tests.simulated.moving_wall import flat, quiet, simulate, wall

from skylag.ionosphere import fronts, slopes


def drawn(seed: int) -> tuple[float, float, float, float]:
    """Slope 30-500 mm/km, width 25-200 km, speed 0-750 m/s, any heading."""
    rng = np.random.default_rng([20_260_101, seed])
    return rng.uniform(30, 500), rng.uniform(25, 200), rng.uniform(0, 750), rng.uniform(0, 360)


def judged(seed: int) -> dict[str, float]:
    """One drawn wall: what was found of it."""
    slope, width, speed, heading = drawn(seed)
    rng = np.random.default_rng([7, seed])
    start_h = float(rng.uniform(0, 20))
    ramp = wall(slope, width, speed, heading, (start_h + 1.5) * 3600)
    rays, samples = simulate(lambda x, y, t: quiet(x, y, t) + ramp(x, y, t), rng, start_h=start_h, hours=3.0)
    x, y = flat(rays.pierce_lat, rays.pierce_lon)
    t = (rays.time - np.datetime64("2030-03-05")) / np.timedelta64(1, "s")
    ahead = x * np.sin(np.radians(heading)) + y * np.cos(np.radians(heading))
    ahead -= speed / 1e3 * (t - (start_h + 1.5) * 3600)
    high = rays.elevation >= 15.0
    line = rays.receiver * 100 + rays.satellite
    passed = set(line[high & (ahead > width / 2)]) & set(line[high & (ahead < -width / 2)])
    found = fronts.track(rays, samples)
    claims = [claim for claim in slopes.measure(rays, samples).claims if claim.confirmed]
    row = {"slope": slope, "width": width, "speed": speed, "heading": heading, "lines": len(passed),
           "raised": float(bool(found.fronts or claims)), "fronts": len(found.fronts)}  # fmt: skip
    if found.fronts:
        best = max(found.fronts, key=lambda front: front.onsets)
        row |= {
            "slope_error": best.slope / slope - 1.0,
            "speed_error": best.speed_m_s / speed - 1.0,
            "heading_error": abs((best.heading_deg - heading + 180.0) % 360.0 - 180.0),
            "slope_over_sigma": (best.slope - slope) / best.slope_sigma,
            "speed_over_sigma": (best.speed_m_s - speed) / best.speed_sigma_m_s,
        }
    return row


def marks(rows: list[dict[str, float]]) -> dict[str, float]:
    """The figures of the benchmark."""
    fit = [row for row in rows if row["slope"] >= 60 and row["lines"] >= 4]
    fast = [row for row in fit if row["speed"] > 50]
    seen = [row for row in fast if row["fronts"]]
    return {
        "drawn": len(rows), "fit": len(fit), "raised": float(np.mean([row["raised"] for row in fit])),
        "as front": len(seen) / max(1, len(fast)),
        "slope": float(np.median([abs(row["slope_error"]) for row in seen])),
        "speed": float(np.median([abs(row["speed_error"]) for row in seen])),
        "heading": float(np.median([row["heading_error"] for row in seen])),
        "slope 90 %": float(np.quantile([abs(row["slope_error"]) for row in seen], 0.9)),
        "speed 90 %": float(np.quantile([abs(row["speed_error"]) for row in seen], 0.9)),
        "heading 90 %": float(np.quantile([row["heading_error"] for row in seen], 0.9)),
        "slope over sigma": float(np.median(np.abs([row["slope_over_sigma"] for row in seen])) / 0.6745),
        "speed over sigma": float(np.median(np.abs([row["speed_over_sigma"] for row in seen])) / 0.6745),
    }  # fmt: skip


def held(figures: dict[str, float]) -> None:
    assert figures["raised"] >= 0.98
    assert figures["slope"] <= 0.20
    assert figures["speed"] <= 0.15
    assert figures["heading"] <= 15.0


def test_six_walls_of_the_threat_space():
    held(marks([judged(seed) for seed in range(6)]))


@pytest.mark.slow
def test_two_hundred_walls_of_the_threat_space():
    figures = marks([judged(seed) for seed in range(200)])
    print(figures)
    held(figures)


@pytest.mark.slow
def test_ten_calm_network_days_raise_nothing():
    raised = 0
    for seed in range(10):
        rays, samples = simulate(quiet, np.random.default_rng([11, seed]), hours=24.0)
        raised += len(fronts.track(rays, samples).fronts)
        raised += sum(claim.confirmed for claim in slopes.measure(rays, samples).claims)
    assert raised <= 1
