"""Levels where the plasmasphere is of a shape that the estimator's model cannot take.

The model is one family: a density along field lines, with one growth toward the feet.  Here the truth follows other
laws (`other_skies`), over the invented dense layers of three days, four latitudes and two levels.  What all receivers
of a day err by together is one draw; its size over the stated sigma is asked for over many.
"""

import dataclasses
from functools import cache

import numpy as np
import pytest
from tests.simulated.other_skies import Looks, Sky, drawn
from tests.simulated.rays_of_truth import errors, rays_of_truth, true_biases

from invented import network
from invented.places import STATIONS
from skylag.ionosphere.adjustment import AdjustmentChoices, apply, solve
from skylag.ionosphere.geometry import modified_mapping
from skylag.settings import Estimation
from skylag.tables import Floats

CALM, STORM, RECOVERY = "2031-03-11", "2031-03-12", "2031-03-13"
FIVE = ("MRGT", "EDRO", "KELM", "BRIM", "JASP")
# Day, degrees by which the network stands further north, factor on the dense layer.
BASES = ((CALM, 0.0, 1.0), (STORM, 0.0, 1.0), (RECOVERY, 0.0, 1.0), (CALM, 0.0, 2.0), (CALM, -12.0, 1.0),
         (CALM, 10.0, 1.0), (STORM, 10.0, 1.0), (STORM, -12.0, 1.0))  # fmt: skip

Base = tuple[Looks, dict[tuple[str, str, str, str], float], Floats]


@cache
def base(day: str, north: float, level: float) -> Base:
    """Rays through the dense layers alone, the true biases, and the true content at the pierce points of high rays."""
    stations = [dataclasses.replace(s, lat=s.lat + north) for s in STATIONS]
    world = network.simulate(day, FIVE, interval_s=300.0, stations=stations, plasmasphere=0.0, level=level)
    looks = Looks.of(rays_of_truth(world, np.random.default_rng(1)))
    rays, high = looks.rays, looks.high
    dense = world.vertical_content(rays.pierce_lat[high], rays.pierce_lon[high], rays.time[high])
    return looks, true_biases(world), dense


@dataclasses.dataclass(frozen=True)
class Found:
    """What an adjustment made of a sky: [ns] common error of the receivers and its stated sigma, RMS error of
    satellites, single errors over sigma; [TECU] median error of high contents and its stated sigma."""

    common: float
    stated: float
    satellites: float
    singles: Floats
    level: float
    level_stated: float


def adjust(
    where: tuple[str, float, float], sky: Sky, choices: AdjustmentChoices | None = None, alone: bool = False,
    modified: bool = False,
) -> Found:  # fmt: skip
    """Adjust the rays of a day through a sky; `alone`: KELM without the others."""
    looks, truth, dense = base(*where)
    rays = dataclasses.replace(looks.rays, stec=looks.rays.stec + looks.slant(sky, where[2]))
    high, content = looks.high, dense + looks.vertical(sky, where[2])
    if modified:
        rays = dataclasses.replace(rays, mapping=modified_mapping(rays.elevation))
    if alone:
        own = rays.receiver == 2
        kept = own[high]
        high, content = (np.cumsum(own) - 1)[high[kept]], content[kept]
        rays = rays.where(own)
    calibration = solve(rays, None, choices)
    error, table = errors(calibration.biases, truth), calibration.biases
    receivers = table.kind == "receiver"
    own_sigma = np.sqrt(np.diag(calibration.covariance))
    singles = [
        (error[group] - error[group].mean()) / own_sigma[group]
        for system in np.unique(table.system) for kind in ("receiver", "satellite")
        if (group := (table.kind == kind) & (table.system == system)).sum() > 1
    ]  # fmt: skip
    samples = apply(calibration, rays)
    leaning = np.hypot(np.median(samples.lean_shell[high]), np.median(samples.lean_high[high]))
    return Found(
        float(error[receivers].mean()), float(np.median(table.sigma_ns[receivers])),
        float(np.sqrt(np.mean(error[~receivers] ** 2))), np.concatenate(singles),
        float(np.median(samples.vtec[high] - content)), float(leaning),
    )  # fmt: skip


def rms(values: object) -> float:
    return float(np.sqrt(np.mean(np.asarray(values) ** 2)))


def campaign(seed: int, count: int, choices: AdjustmentChoices | None = None, **how: bool) -> list[Found]:
    """Adjust `count` skies, dealt out over the days."""
    rng = np.random.default_rng(seed)
    skies = [drawn(rng, number) for number in range(count)]
    return [
        adjust(where, skies[number], choices, **how)
        for first, where in enumerate(BASES) for number in range(first, count, len(BASES))
    ]  # fmt: skip


def say(words: str, found: list[Found]) -> tuple[float, float]:
    """Print a campaign; gives the RMS of common errors over sigma, of receivers and of contents."""
    bias, level = rms([f.common / f.stated for f in found]), rms([f.level / f.level_stated for f in found])
    print(f"{words}: common error RMS {rms([f.common for f in found]):.3f} ns, mean "
          f"{np.mean([f.common for f in found]):+.3f}, stated {np.mean([f.stated for f in found]):.3f}, over sigma "
          f"{bias:.2f} (at most {max(abs(f.common / f.stated) for f in found):.1f}, beyond two: "
          f"{sum(abs(f.common) > 2.0 * f.stated for f in found)} of {len(found)}); content RMS "
          f"{rms([f.level for f in found]):.2f} TECU, over sigma {level:.2f}; satellites RMS "
          f"{rms([f.satellites for f in found]):.3f} ns, single errors over sigma "
          f"{np.std(np.concatenate([f.singles for f in found])):.2f}")  # fmt: skip
    return bias, level


@pytest.mark.parametrize(
    ("words", "sky"),
    [
        ("no growth toward the feet", Sky(foot=0.0)),
        ("twice the growth", Sky(foot=2.0)),
        ("hydrogen on spheres", Sky(foot=None, tail_tecu=3.0)),
        ("none at all", Sky(equator_tecu=0.01)),
    ],
)
def test_another_shape_is_within_the_sigma(words: str, sky: Sky) -> None:
    """On the calm day of five receivers; with the growth held at its usual value all but the last were off by 0.2 to
    0.5 ns, up to 2.8 of the sigma that went with it."""
    found = adjust(BASES[0], sky)
    print(f"{words}: common {found.common:+.3f} of {found.stated:.3f} ns, level {found.level:+.2f} of "
          f"{found.level_stated:.2f} TECU, satellites {found.satellites:.3f} ns")  # fmt: skip
    assert abs(found.common) < min(2.0 * found.stated, 0.45)
    assert abs(found.level) < 2.0 * found.level_stated
    assert found.stated < 0.6, "honest is not the same as vast"
    assert found.satellites < 0.15


@pytest.mark.slow
@pytest.mark.parametrize("alone", [False, True], ids=["five receivers", "one receiver alone"])
def test_levels_are_as_good_as_stated_over_many_skies(alone: bool) -> None:
    """Two campaigns of 32 skies that the sigmas were not calibrated on.

    Of 64 common errors, most of them small and some large, an RMS is known to about a tenth."""
    found = [one for seed in (201, 202) for one in campaign(seed, 32, alone=alone)]
    bias, level = say("one receiver alone" if alone else "five receivers", found)
    low, high = (0.7, 1.3) if alone else (0.8, 1.2)  # alone, errors scatter more from sky to sky
    assert low < bias < high
    assert low < level < high
    assert rms([f.common for f in found]) < 0.45
    assert np.mean([abs(f.common) < 2.0 * f.stated for f in found]) > 0.9
    assert 0.8 < np.std(np.concatenate([f.singles for f in found])) < 1.25


@pytest.mark.slow
def test_growth_found_from_the_day_beats_growth_held() -> None:
    """And the mapping of global maps, without a high layer, reads too high: by 0.4 ns in the mean, 1.2 TECU."""
    found, held = campaign(203, 24), campaign(203, 24, AdjustmentChoices(foot_exponent=1.0))
    plain = campaign(203, 24, Estimation(mapping="modified").choices().adjustment, modified=True)
    for words, one in (("found", found), ("held", held), ("modified single layer", plain)):
        say(words, one)
    assert rms([f.common for f in found]) < 0.6 * rms([f.common for f in held])
    assert rms([f.common for f in found]) < 0.4 * rms([f.common for f in plain])
    assert np.mean([f.common for f in plain]) > 0.2
    # Asked for, it says so in its sigma: without what was left out leaning on it, errors were 3 sigmas.
    assert 0.7 < rms([f.common / f.stated for f in plain]) < 1.3
    assert 0.7 < rms([f.level / f.level_stated for f in plain]) < 1.5
