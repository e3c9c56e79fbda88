"""The adjustment on a small world made directly as rays, where every number put in is known.

The recovery on days with a three-dimensional ionosphere, through slip finding and levelling, is in
`tests/simulated/test_biases_recovered.py`; real measurement files are in `tests/ionosphere/test_adjustment_real.py`.
"""

from dataclasses import replace

import numpy as np
import pytest
from tests.ionosphere import ray_world
from tests.ionosphere.ray_world import GALILEO, GLONASS, GPS, GPS_CIVIL, World

from skylag.errors import NotEnough, Refused
from skylag.ionosphere.adjustment import AdjustmentChoices, apply, content_per_ns, relative_mapping_sigma, solve
from skylag.ionosphere.bias_algebra import join
from skylag.ionosphere.geometry import mapping, modified_mapping
from skylag.tables import Calibration


@pytest.fixture(scope="module")
def world() -> World:
    """Six receivers, two constellations, a whole day."""
    return ray_world.make(np.random.default_rng(11))


@pytest.fixture(scope="module")
def calibration(world: World) -> Calibration:
    return solve(world.rays)


def receivers(calibration: Calibration) -> np.ndarray:
    return np.asarray(calibration.biases.kind == "receiver")


def by_key(calibration: Calibration) -> dict[tuple[str, str, str], tuple[float, float]]:
    table = calibration.biases
    keys = zip(table.kind, table.name, table.code1, table.value_ns, table.sigma_ns, strict=True)
    return {(str(k), str(n), str(c)): (float(v), float(s)) for k, n, c, v, s in keys}


# ---------------------------------------------------------------------------------------------- recovery


def test_without_noise_nothing_is_left_over() -> None:
    """Level errors of a thousandth of a TECU: what is left is only what splines cannot follow."""
    world = ray_world.make(np.random.default_rng(3), level_sigma=0.001, noise=0.001)
    calibration = solve(world.rays)
    assert np.abs(world.errors(calibration.biases)).max() < 0.03
    samples = apply(calibration, world.rays)
    assert calibration.high_layer_vertical is not None
    low = samples.vtec - calibration.high_layer_vertical
    assert np.sqrt(np.mean((low - world.content) ** 2)) < 0.05


def test_errors_are_as_large_as_stated() -> None:
    """Five worlds of their own chance; the model's own doubt (`leanings`) is left out, since this world follows the
    model exactly.  200 biases: the standard deviation is known to 5 %."""
    ratios = []
    for seed in range(5):
        world = ray_world.make(np.random.default_rng(seed), hours=(0.0, 24.0))
        calibration = solve(world.rays)
        ratios.append(world.errors(calibration.biases) / np.sqrt(np.diag(calibration.covariance)))
    assert 0.8 < np.std(np.concatenate(ratios)) < 1.2
    assert abs(np.mean(np.concatenate(ratios))) < 0.3


def test_contents_are_as_good_as_stated(world: World, calibration: Calibration) -> None:
    samples = apply(calibration, world.rays)
    assert calibration.high_layer_vertical is not None
    error = samples.vtec - calibration.high_layer_vertical - world.content
    within = np.abs(error) < 3 * samples.sigma
    assert within.mean() > 0.99
    assert np.sqrt(np.mean(error**2)) < 0.3


def test_factor_of_the_reference_pair(world: World) -> None:
    """1 ns of GPS L1-L2 bias is 2.854 TECU (c / 0.10505 m per TECU; IS-GPS-200 carriers)."""
    gps = np.array([p.system for p in world.rays.pairs])[world.rays.pair] == "G"
    assert content_per_ns(world.rays)[gps] == pytest.approx(2.8539, abs=1e-3)


def test_mapping_doubt_is_the_derivative_of_the_mapping() -> None:
    """Of either mapping; the modified one by its own formula, with a layer a kilometre higher."""
    elevation = np.array([15.0, 30.0, 60.0])
    both = mapping(elevation, 401e3) / mapping(elevation, 400e3) - 1.0
    assert relative_mapping_sigma(mapping(elevation, 400e3), 400e3, 1e3) == pytest.approx(-both, rel=5e-3)
    angle = np.radians(0.9782 * (90.0 - elevation))
    higher = (1.0 - (6371.0 / (6371.0 + 507.7) * np.sin(angle)) ** 2) ** -0.5 / modified_mapping(elevation) - 1.0
    assert relative_mapping_sigma(modified_mapping(elevation), 400e3, 1e3) == pytest.approx(-higher, rel=0.025)


# ---------------------------------------------------------------------------------------------- laws


def test_a_constant_moved_from_satellites_to_receivers_changes_no_content(world: World) -> None:
    """A product whose satellites all stand 3 ns higher moves all receivers by -3 ns and nothing else."""
    first = solve(world.rays, join([world.product(GPS), world.product(GALILEO)]))
    second = solve(world.rays, join([world.product(GPS, 3.0), world.product(GALILEO, 3.0)]))
    step = second.biases.value_ns - first.biases.value_ns
    assert step[receivers(first)] == pytest.approx(-3.0, abs=1e-4)
    assert step[~receivers(first)] == pytest.approx(3.0, abs=1e-4)
    assert apply(second, world.rays).vtec == pytest.approx(apply(first, world.rays).vtec, abs=1e-3)


def test_the_zero_mean_datum_is_as_good_for_content_as_a_product(world: World, calibration: Calibration) -> None:
    held = solve(world.rays, join([world.product(GPS), world.product(GALILEO)]))
    difference = apply(held, world.rays).vtec - apply(calibration, world.rays).vtec
    assert np.sqrt(np.mean(difference**2)) < 0.2


@pytest.mark.parametrize("what", ["two of six receivers", "a third of the day", "every other arc", "a constellation"])
def test_sigma_never_shrinks_when_rays_are_removed(what: str, world: World, calibration: Calibration) -> None:
    """What noise and levels leave; variances are found anew from fewer residuals, so single biases are granted a sixth.

    The leanings are no noise: how far a wrong shape moves one satellite depends on where the rays happen to pass, and
    may shrink; of the receivers, which they move together, by a third at most."""
    rays = world.rays
    hours = (rays.time - rays.time.min()).astype("timedelta64[s]").astype(float) / 3600.0
    keep = {
        "two of six receivers": rays.receiver < 4,
        "a third of the day": hours < 16.0,
        "every other arc": rays.arc % 2 == 0,
        "a constellation": np.array([p.system for p in rays.pairs])[rays.pair] == "G",
    }[what]
    less = solve(rays.where(keep))
    own = [{key: np.sqrt(variance) for key, variance in zip(by_key(c), np.diag(c.covariance), strict=True)}
           for c in (less, calibration)]  # fmt: skip
    ratio = [own[0][key] / own[1][key] for key in own[0]]
    assert min(ratio) > 0.85
    assert np.median(ratio) > 1.0
    fewer, all_of_them = by_key(less), by_key(calibration)
    assert min(fewer[key][1] / all_of_them[key][1] for key in fewer if key[0] == "receiver") > 0.67


def test_order_of_rays_does_not_matter(world: World, calibration: Calibration, rng: np.random.Generator) -> None:
    order = rng.permutation(len(world.rays))
    shuffled = solve(world.rays.where(order))
    # The first ray of each arc and span may be another one, but the whole hardly moves.
    assert shuffled.biases.value_ns == pytest.approx(calibration.biases.value_ns, abs=0.01)


def test_network_on_the_line_of_180_degrees(calibration: Calibration) -> None:
    """The same world further east, across 180 degrees: the smooth content must not tear there."""
    moved = ray_world.make(np.random.default_rng(11), lon_shift=34.0)
    assert moved.rays.pierce_lon.min() < -170 and moved.rays.pierce_lon.max() > 170
    there = solve(moved.rays)
    assert np.abs(moved.errors(there.biases)).max() < 0.25
    assert np.median(there.biases.sigma_ns) == pytest.approx(np.median(calibration.biases.sigma_ns), rel=0.3)


# ---------------------------------------------------------------------------------------------- published biases


def test_satellites_of_a_product_come_out_exactly_at_it(world: World) -> None:
    product = world.product(GPS, shift_ns=1.7, source="product X")
    calibration = solve(world.rays, product)
    table = calibration.biases
    for row in np.flatnonzero((table.kind == "satellite") & (table.system == "G")):
        published = float(product.value_ns[product.name == table.name[row]][0])
        assert table.value_ns[row] == pytest.approx(published, abs=1e-4)
        assert table.sigma_ns[row] == pytest.approx(0.01, rel=1e-3)  # the record's own
        assert calibration.datum_of_row[row] == "held at product X"
    assert "G C1W-C2W: 14 satellites held at product X" in calibration.summary["datum"]
    assert "E C1C-C5Q: zero mean of 14 satellites" in calibration.summary["datum"]
    others = [w for w, k, s in zip(calibration.datum_of_row, table.kind, table.system, strict=True)
              if (k, s) == ("receiver", "G")]  # fmt: skip
    assert set(others) == {"14 satellites held at product X"}


def test_errors_of_held_records_are_in_the_sigmas(world: World) -> None:
    """A product of 0.8 ns each, errors drawn so: receivers and contents know it, errors are as large as stated."""
    ratios = []
    for seed in range(3):
        product = world.product(GPS, sigma_ns=0.8)
        product.value_ns[:] += np.random.default_rng(seed).normal(0.0, 0.8, len(product))
        only = world.only(np.array([p.system for p in world.rays.pairs])[world.rays.pair] == "G")
        calibration = solve(only.rays, product)
        table = calibration.biases
        own = np.sqrt(np.diag(calibration.covariance))
        satellites = ~receivers(calibration)
        assert own[satellites] == pytest.approx(0.8, rel=1e-3)
        # Fourteen satellites: a receiver's bias is off by 0.8 / sqrt(14) at least.
        assert np.all(own[~satellites] > 0.8 / np.sqrt(14) * 0.9)
        ratios.append(only.errors(table) / own)
    assert 0.6 < np.std(np.concatenate(ratios)) < 1.4


def test_a_satellite_the_product_lacks_is_found_and_said(world: World) -> None:
    product = world.product(GPS)
    known = product.name != "G05"
    columns = ("kind", "name", "system", "code1", "code2", "value_ns", "sigma_ns", "start", "end")
    product = replace(product, **{name: getattr(product, name)[known] for name in columns})
    calibration = solve(world.rays, product)
    row = int(np.flatnonzero(calibration.biases.name == "G05")[0])
    assert abs(world.errors(calibration.biases)[row]) < 4 * calibration.biases.sigma_ns[row]
    assert any("names no bias of G05" in note for note in calibration.summary["notes"])


def test_a_wrong_record_is_told_and_moves_nobody_else(world: World) -> None:
    """One satellite of the product stands 4 ns too high, as when its number went to another spacecraft."""
    right, wrong = world.product(GPS), world.product(GPS)
    wrong.value_ns[wrong.name == "G07"] += 4.0
    good, bad = by_key(solve(world.rays, right)), by_key(calibration := solve(world.rays, wrong))
    told = [note for note in calibration.summary["notes"] if "G07" in note]
    assert len(told) == 1
    assert float(told[0].split("ask for ")[1].split(" ns")[0]) == pytest.approx(-4.0, abs=0.31)
    assert solve(world.rays, right).summary["notes"] == []
    for key, (value, sigma) in good.items():
        if key[0] == "receiver":
            assert abs(bad[key][0] - value) < 0.5 * sigma


def test_earlier_days_are_drawn_upon_not_held(world: World) -> None:
    """Three hours of one receiver leave biases open; yesterday's close them, as far as they may have walked."""
    rays = world.rays
    short = world.only(((rays.time - rays.time.min()) < np.timedelta64(3 * 3600, "s")) & (rays.receiver == 0))
    start = ray_world.DAY - np.timedelta64(86_400, "s")
    yesterday = join([
        world.product(pair, sigma_ns=0.05, source="day before", start=start, end=ray_world.DAY)
        for pair in (GPS, GALILEO)
    ])  # fmt: skip
    alone = solve(short.rays)
    drawn = solve(short.rays, yesterday, AdjustmentChoices(prior_walk_ns_per_day=0.1))
    loose = solve(short.rays, yesterday, AdjustmentChoices(prior_walk_ns_per_day=1.0))
    satellites = ~receivers(alone)
    sigma = [float(np.median(np.sqrt(np.diag(c.covariance))[satellites])) for c in (drawn, loose, alone)]
    assert sigma[0] < 0.8 * sigma[1]
    assert sigma[1] < sigma[2]
    assert 0.02 < sigma[0] < 0.12  # at most what the walk leaves, never held
    assert "mean of" in drawn.summary["datum"] and "as in day before" in drawn.summary["datum"]
    error = short.errors(drawn.biases)[satellites] / np.sqrt(np.diag(drawn.covariance))[satellites]
    assert np.sqrt(np.mean(error**2)) < 1.3
    # A record of another day is not held, where a product is asked to hold: it is not of this day.
    assert "held" not in solve(short.rays, yesterday).summary["datum"]


def test_earlier_receivers_tell_only_differences(world: World) -> None:
    """All receivers of the earlier table stand 5 ns too high: that must not lift the level of the day."""
    names = [r.name for r in world.rays.receivers]
    high = ray_world.records(
        "receiver", names, "G", "C1W", "C2W", [world.bias["receiver", n, GPS.name] + 5.0 for n in names], 0.02,
        "day before",
    )  # fmt: skip
    calibration = solve(world.rays, join([world.product(GPS), high]), AdjustmentChoices(prior_walk_ns_per_day=0.05))
    assert np.abs(world.errors(calibration.biases)).max() < 0.3


def test_earlier_receivers_of_glonass_are_not_drawn_upon() -> None:
    """A table names a receiver once per channel and does not say which: its numbers must not be taken for any."""
    world = ray_world.make(np.random.default_rng(9), ((GLONASS,),) * 2)
    satellites = world.product(GLONASS)
    names = [r.name for r in world.rays.receivers]
    nonsense = ray_world.records("receiver", names, "R", "C1P", "C2P", [30.0, -30.0], 0.01, "day before")
    choices = AdjustmentChoices(prior_walk_ns_per_day=0.1)
    without = solve(world.rays, satellites, choices, world.channels)
    found = solve(world.rays, join([satellites, nonsense]), choices, world.channels)
    assert found.biases.value_ns == pytest.approx(without.biases.value_ns, abs=1e-9)


# ---------------------------------------------------------------------------------------------- pairs of codes


@pytest.fixture(scope="module")
def mixed() -> World:
    """Four receivers of C1W-C2W and two of C1C-C2W, of which the last is there for five hours."""
    world = ray_world.make(np.random.default_rng(5), ((GPS,),) * 4 + ((GPS_CIVIL,),) * 2)
    rays = world.rays
    early = (rays.time - rays.time.min()) < np.timedelta64(5 * 3600, "s")
    return world.only((rays.receiver < 5) | early)


def test_two_pairs_share_their_satellites(mixed: World) -> None:
    calibration = solve(mixed.rays)
    error = mixed.errors(calibration.biases)
    assert np.sqrt(np.mean(error**2)) < 0.15
    assert "G C1C-C2W: zero mean of the differences of 14 satellites from C1W-C2W" in calibration.summary["datum"]
    civil = [w for w, c in zip(calibration.datum_of_row, calibration.biases.code1, strict=True) if c == "C1C"]
    assert set(civil) == {"zero mean of the differences of 14 satellites from C1W-C2W"}


def test_a_product_of_first_codes_alone_ties_the_two_pairs(mixed: World) -> None:
    """C1C-C1W from a product, C1W-C2W from nobody: one level is open, not two, and differences come out exactly."""
    names = [f"G{n + 1:02d}" for n in range(14)]
    gap = [mixed.bias["satellite", n, "C1C-C2W"] - mixed.bias["satellite", n, "C1W-C2W"] for n in names]
    calibration = solve(mixed.rays, ray_world.records("satellite", names, "G", "C1C", "C1W", gap))
    found = by_key(calibration)
    for name, value in zip(names, gap, strict=True):
        assert found["satellite", name, "C1C"][0] - found["satellite", name, "C1W"][0] == pytest.approx(value, abs=1e-4)
    free = by_key(solve(mixed.rays))
    civil = [key for key in found if key[0] == "satellite" and key[2] == "C1C"]
    assert np.median([found[key][1] for key in civil]) < 0.8 * np.median([free[key][1] for key in civil])
    assert "differences of 14 satellites from C1W-C2W as in product X" in calibration.summary["datum"]


def test_a_satellite_hardly_seen_on_one_pair_leans_on_the_other() -> None:
    """The civil receiver is there for four hours and sees some satellites for minutes: their C1C-C2W bias is C1W-C2W
    give or take 1.3 ns, not give or take a hundred."""
    world = ray_world.make(np.random.default_rng(8), ((GPS,),) * 4 + ((GPS_CIVIL,),))
    rays = world.rays
    early = (rays.time - rays.time.min()) < np.timedelta64(4 * 3600, "s")
    world = world.only((rays.receiver < 4) | early)
    calibration = solve(world.rays)
    civil = (calibration.biases.kind == "satellite") & (calibration.biases.code1 == "C1C")
    assert civil.sum() >= 5
    assert calibration.biases.sigma_ns[civil].max() < 1.5
    # The mean of the differences is over fewer satellites than the truth's; that level is a convention.
    gap = world.errors(calibration.biases)[civil]
    assert np.std(gap) < 0.4


def test_one_receiver_with_both_pairs_ties_them(mixed: World) -> None:
    """Rays of both pairs of one receiver: the satellites' code differences are found from them."""
    world = ray_world.make(np.random.default_rng(6), ((GPS, GPS_CIVIL),) + ((GPS,),) * 3)
    calibration = solve(world.rays)
    found = by_key(calibration)
    for n in range(14):
        name = f"G{n + 1:02d}"
        gap = found["satellite", name, "C1C"][0] - found["satellite", name, "C1W"][0]
        truth = world.bias["satellite", name, "C1C-C2W"] - world.bias["satellite", name, "C1W-C2W"]
        assert gap == pytest.approx(truth, abs=0.4)


def test_glonass_has_a_receiver_bias_per_channel() -> None:
    world = ray_world.make(np.random.default_rng(9), ((GPS, GLONASS),) * 3)
    calibration = solve(world.rays, None, None, world.channels)
    table = calibration.biases
    rows = np.flatnonzero((table.kind == "receiver") & (table.system == "R"))
    assert len(rows) == 3 * 8  # channels -3 to +3, and +5
    words = {calibration.datum_of_row[row] for row in rows}
    assert "channel -3: zero mean of 2 satellites" in words
    assert "channel +5: one satellite alone, set to zero: its bias is counted with the receivers'" in words
    assert "R C1P-C2P by channel: zero mean of 2 satellites (6 times)" in calibration.summary["datum"]
    # The rays know sums of a receiver's and a satellite's bias: these must be right whatever the levels.
    rays = world.rays
    glonass = np.array([p.system for p in rays.pairs])[rays.pair] == "R"
    error = world.errors(table)
    pair = error[calibration.ray_bias_rows[:, 0]] + error[calibration.ray_bias_rows[:, 1]]
    assert np.sqrt(np.mean(pair[glonass] ** 2)) < 0.15


def test_a_bias_that_no_ray_meets_is_said_to_be_unknown(world: World) -> None:
    """A satellite that stays below the elevation limit of the adjustment."""
    rays = world.rays
    low = np.array([str(s) == "G03" for s in rays.satellites])[rays.satellite]
    calibration = solve(rays.where(~low | (rays.elevation < 14.9)))
    row = int(np.flatnonzero(calibration.biases.name == "G03")[0])
    assert calibration.datum_of_row[row] == "not known: no ray above the elevation limit"
    assert calibration.biases.sigma_ns[row] > 50.0
    assert any("G03 C1W-C2W" in note for note in calibration.summary["notes"])
    assert "zero mean of 13 satellites" in calibration.summary["datum"]
    others = np.arange(len(calibration.biases)) != row
    # The mean is now over 13 satellites: all satellites move by the lost one's share, the receivers against it.
    moved = world.errors(calibration.biases)[others]
    assert np.ptp(moved[calibration.biases.kind[others] == "satellite"]) < 8.0
    assert np.all(calibration.receiver_sigma < 2.0)


# ---------------------------------------------------------------------------------------------- little data


def test_one_receiver_alone_solves_with_larger_sigma(world: World, calibration: Calibration) -> None:
    one = world.only(world.rays.receiver == 2)
    alone = solve(one.rays)
    assert alone.summary["alone"] and alone.summary["receivers"] == 1
    error = one.errors(alone.biases)
    assert np.abs(error).max() < 0.5
    network, single = by_key(calibration), by_key(alone)
    satellites = [key for key in single if key[0] == "satellite"]
    assert np.median([single[key][1] for key in satellites]) > 1.5 * np.median([network[key][1] for key in satellites])


def test_one_constellation_alone_solves(world: World) -> None:
    for letter in "GE":
        systems = np.array([p.system for p in world.rays.pairs])[world.rays.pair]
        part = world.only(systems == letter)
        assert np.abs(part.errors(solve(part.rays).biases)).max() < 0.4


def test_two_hours_say_how_little_they_know(world: World, calibration: Calibration) -> None:
    rays = world.rays
    short = world.only((rays.time - rays.time.min()) < np.timedelta64(2 * 3600, "s"))
    little = solve(short.rays)
    assert np.median(little.biases.sigma_ns) > 3 * np.median(calibration.biases.sigma_ns)
    # The level of the satellites is a convention over fewer of them: look at what rays know, the sums.
    error = short.errors(little.biases)
    rows = little.ray_bias_rows
    total = (error[rows[:, 0]] + error[rows[:, 1]]) * np.abs(little.ray_per_ns)
    sigma = np.hypot(little.ray_bias_sigma, np.abs(little.leanings).sum(axis=0) * short.rays.mapping)
    assert np.mean(np.abs(total) < 3 * sigma + 0.3) > 0.95


def test_too_few_rays_are_refused_with_a_way_out(world: World) -> None:
    with pytest.raises(NotEnough, match=r"needs 50 thinned lines of sight above 15 deg, there are 49; add files"):
        solve(world.rays.where(np.flatnonzero(world.rays.elevation > 20.0)[::40][:49]))


def test_nothing_above_the_limit_is_refused(world: World) -> None:
    with pytest.raises(NotEnough, match="there are 0"):
        solve(world.rays.where(world.rays.elevation < 15.0))


# ---------------------------------------------------------------------------------------------- what is at fault


SPOILS = ("levels", "noise", "an hour", "offset of hours", "twice the content")


def spoil(world: World, receiver: int, what: str, rng: np.random.Generator) -> World:
    rays = world.rays
    own = rays.receiver == receiver
    hours = (rays.time - rays.time.min()).astype("timedelta64[s]").astype(float) / 3600.0
    added = {
        "levels": rng.normal(0.0, 15.0, rays.arc.max() + 1)[rays.arc],
        "noise": rng.normal(0.0, 10.0, len(rays)),
        "an hour": np.where(np.abs(hours - 10.0) < 0.5, rng.normal(0.0, 30.0, len(rays)), 0.0),
        "offset of hours": np.where(np.abs(hours - 10.0) < 1.5, 20.0, 0.0),
        "twice the content": rays.stec,
    }[what]
    return replace(world, rays=replace(rays, stec=rays.stec + np.where(own, added, 0.0)))


@pytest.mark.parametrize("what", SPOILS)
def test_one_bad_receiver_does_not_move_the_others(what: str, world: World, rng: np.random.Generator) -> None:
    """With the bad receiver against without it: receivers within a third of their sigma; satellites within
    2.5 of theirs, since a receiver more, even a good one, moves them by its own chance."""
    without = by_key(solve(world.rays.where(world.rays.receiver != 1)))
    found = by_key(solve(spoil(world, 1, what, rng).rays))
    for key, (value, sigma) in without.items():
        share = 0.35 if key[0] == "receiver" else 2.5
        assert abs(found[key][0] - value) < share * sigma, key


def test_a_bad_receiver_gets_larger_sigmas(world: World, calibration: Calibration, rng: np.random.Generator) -> None:
    bad = by_key(solve(spoil(world, 1, "levels", rng).rays))
    good = by_key(calibration)
    name = world.rays.receivers[1].name
    assert bad["receiver", name, "C1W"][1] > 1.5 * good["receiver", name, "C1W"][1]
    other = world.rays.receivers[0].name
    assert bad["receiver", other, "C1W"][1] == pytest.approx(good["receiver", other, "C1W"][1], rel=0.1)


# ---------------------------------------------------------------------------------------------- the plasmasphere


def test_growth_toward_the_feet_is_found_from_the_day() -> None:
    """A world whose plasmasphere does not grow at all toward its feet: held at 1 all receivers err together."""
    world = ray_world.make(np.random.default_rng(4), foot_exponent=0.0)
    held, found = solve(world.rays, None, AdjustmentChoices(foot_exponent=1.0)), solve(world.rays)
    assert held.summary["high_layer_foot_exponent"] == 1.0
    assert abs(found.summary["high_layer_foot_exponent"]) < 0.15
    common = [float(world.errors(c.biases)[receivers(c)].mean()) for c in (held, found)]
    assert abs(common[0]) > 0.2
    assert abs(common[1]) < 0.05
    # Held, the sigma covers what was not known.
    assert abs(common[0]) < 2.5 * np.median(held.biases.sigma_ns[receivers(held)])
    assert found.summary["high_layer_foot_exponent_sigma"] < held.summary["high_layer_foot_exponent_sigma"]


# ---------------------------------------------------------------------------------------------- drift within the day


def drifting(world: World, receiver: int, amplitude_ns: float) -> World:
    """The world with one receiver's GPS bias on a daily wave."""
    rays = world.rays
    hours = (rays.time - rays.time.min()).astype("timedelta64[s]").astype(float) / 3600.0
    own = (rays.receiver == receiver) & (np.array([p.system for p in rays.pairs])[rays.pair] == "G")
    wave = amplitude_ns * np.sin(2 * np.pi * hours / 24.0) * content_per_ns(rays)
    return replace(world, rays=replace(rays, stec=rays.stec - np.where(own, wave, 0.0)))


def test_a_steady_day_tells_of_no_drift(calibration: Calibration) -> None:
    assert calibration.summary["drifting"] == []


def test_drift_is_told_with_its_receiver_and_size(world: World) -> None:
    told = solve(drifting(world, 3, 1.0).rays).summary
    assert [(d["receiver"], d["pair"]) for d in told["drifting"]] == [(world.rays.receivers[3].name, "C1W-C2W")]
    # Blocks of three hours see nearly the whole wave from -1 to +1 ns.
    assert 1.4 < told["drifting"][0]["range_ns"] < 2.3
    assert any("moves within the day" in note for note in told["notes"])


def test_drift_is_found_per_few_hours_on_request(world: World) -> None:
    moved = drifting(world, 3, 1.0)
    calibration = solve(moved.rays, None, AdjustmentChoices(drift_hours=3.0))
    table = calibration.biases
    name = world.rays.receivers[3].name
    rows = np.flatnonzero((table.kind == "receiver") & (table.name == name) & (table.code1 == "C1W"))
    assert len(rows) == 8
    assert np.all(table.start[rows[1:]] == table.end[rows[:-1]])
    middle = (table.start[rows] - ray_world.DAY).astype("timedelta64[s]").astype(float) / 3600.0 + 1.5
    truth = world.bias["receiver", name, GPS.name] + np.sin(2 * np.pi * middle / 24.0)
    assert np.abs(table.value_ns[rows] - truth).max() < 0.35
    assert calibration.summary["drifting"] == []
    # The content of that receiver profits.
    own = (moved.rays.receiver == 3) & (moved.rays.elevation > 30)

    def spread(choices: AdjustmentChoices) -> float:
        found = solve(moved.rays, None, choices)
        assert found.high_layer_vertical is not None
        left = apply(found, moved.rays).vtec - found.high_layer_vertical - moved.content
        return float(np.sqrt(np.mean(left[own] ** 2)))

    assert spread(AdjustmentChoices(drift_hours=3.0)) < 0.7 * spread(AdjustmentChoices())


def test_drift_hours_out_of_range_are_refused(world: World) -> None:
    with pytest.raises(Refused, match="1 to 24 hours"):
        solve(world.rays, None, AdjustmentChoices(drift_hours=0.2))
