"""The record of the outlook over invented years: errors beside simple ways, ranges, chances.

The seeds below were not looked at while the method was made.  The world is `year_of_content`, which shares nothing with
the method.  Scored are 120 days with ten storms, after 120 days that may be learned from.  All limits are the project's
own aims.  Figures of ten more spans: `pytest -s -m slow tests/simulated/test_outlook_record.py`.
"""

from collections.abc import Callable

import numpy as np
import pytest
from scipy.stats import norm
from tests.simulated.year_of_content import Year, simulate

from skylag.ionosphere import outlook_score
from skylag.ionosphere.climatology import climate_of
from skylag.ionosphere.outlook import Drivers, replay
from skylag.ionosphere.outlook_score import Tally, reliability, score, verdict

SEED = 20310321
FIRST, LAST = 119, 239  # outlooks after these days: days 120 to 239 are foretold


def record(year: Year, drivers: Drivers, chances: list[np.ndarray] | None = None) -> Tally:
    """The record of a span; `chances` is given those of each use and level (days, 24, P), NaN where nothing came."""
    kept = []
    climate = climate_of(year.history.days, year.history.lats, year.history.lons)
    total = Tally()
    for number, made in enumerate(replay(year.history, drivers, FIRST)):
        if FIRST + number >= LAST:
            break
        if np.isfinite(year.history.delay[FIRST + number + 1]).any():
            total.add(score(made, year.history, drivers, climate))
            came = year.history.states[:, FIRST + number + 1]
            kept.append(np.where(came > 0, np.stack([made.strained[:, :24], made.broken[:, :24]]), np.nan))
    if chances is not None:
        days = np.stack(kept)  # (days, level, use, 24, P)
        chances.extend(days[:, level, use] for level in range(2) for use in range(days.shape[2]))
    return total


def right_by_chance(chances: list[np.ndarray]) -> str:
    """Of tenths of more than 200 cases, how many lie within five points where states are drawn from the chances.

    What is drawn is common to a day, to an hour of it and to a place by the shares that `year_of_content` gives to the
    wandering of its slopes, to their hours and to their places: 0.083, 0.04, 0.09.
    """
    rng = np.random.default_rng(1)
    day, hour, place = np.sqrt(np.array([0.25**2 / (1.0 - 0.5**2), 0.2**2, 0.3**2]) / (0.083 + 0.04 + 0.09))
    near, tenths = 0, 0
    for chance in chances:
        drawn = day * rng.normal(size=(len(chance), 1, 1)) + hour * rng.normal(size=(*chance.shape[:2], 1))
        came = norm.cdf(drawn + place * rng.normal(size=chance.shape)) < chance
        for tenth in range(10):
            inside = (chance >= tenth / 10) & (chance < (tenth + 1) / 10)
            if inside.sum() > 200:
                tenths += 1
                near += int(abs(chance[inside].mean() - came[inside].mean()) <= 0.05)
    return f"{near} of {tenths}"


@pytest.fixture(scope="module")
def year() -> Year:
    made = simulate(SEED, days=242)
    assert ((made.storms >= 120) & (made.storms < 240)).sum() == 10
    return made


@pytest.fixture(scope="module")
def tally(year: Year) -> Tally:
    """The record with activity told beforehand as such outlooks are: missed, late, of wrong size, false."""
    return record(year, year.drivers)


def test_better_than_simple_ways(tally: Tally) -> None:
    found = verdict(tally)
    assert found is not None and tally.outlooks >= 115
    for name, least in (("persistence", 0.15), ("climatology", 0.10), ("usual", 0.10), ("recurrence", 0.10)):
        print(f"beside {name}: {100 * found.against[name].better_rms:+.1f} %")
        assert found.against[name].better_rms >= least, name


def test_ranges_hold_what_they_say(tally: Tally) -> None:
    for lead in ("1", "2"):
        found = verdict(tally, lead)
        assert found is not None
        print(f"lead {lead}: RMS {found.rms:.3f} m, CRPS {found.crps:.3f} m, inside {dict(found.inside)}")
        assert 0.93 <= found.inside["95"] <= 0.97
        assert 0.75 <= found.inside["80"] <= 0.85
        assert 0.44 <= found.inside["50"] <= 0.56


def test_chances_beat_frequency_and_yesterday(tally: Tally) -> None:
    """Brier scores of the states that come often enough to tell."""
    for use, level in (("long baselines", "strained"), ("long baselines", "broken"), ("approach", "strained")):
        count, own, often, same = tally.brier[use][level]
        print(f"{use}, {level}: Brier {own / count:.4f}, frequency {often / count:.4f}, yesterday {same / count:.4f}")
        assert own < often
        assert own < 0.6 * same


def test_without_indices_it_still_beats_simple_ways(year: Year) -> None:
    """No flux, no activity, nothing entered."""
    nothing = Drivers(*(np.full_like(part, np.nan) for part in (
        year.drivers.ap, year.drivers.expected, year.drivers.flux)))  # fmt: skip
    found = verdict(record(year, nothing))
    assert found is not None
    for name in outlook_score.OTHERS:
        print(f"without indices, beside {name}: {100 * found.against[name].better_rms:+.1f} %")
        assert found.against[name].better_rms > 0.05
    assert 0.92 <= found.inside["95"] <= 0.98


@pytest.mark.slow
def test_ten_spans() -> None:
    """Ten such spans of 120 days: errors and ranges of each; chances come as often as told.

    The hours and places of one day are a few cases, not hundreds: within a single span even chances that are right by
    construction lie more than five points off in one tenth of nine (`right_by_chance`).  So all ten are pooled, and a
    tenth counts from 2000 cases on, 200 for each span.
    """
    pooled = Tally()
    near, tenths = 0, 0
    chances: list[np.ndarray] = []
    for number in range(10):
        year = simulate(SEED + 1 + number, days=242)
        mine = record(year, year.drivers, chances)
        found = verdict(mine)
        assert found is not None
        shares = {name: found.against[name].better_rms for name in ("persistence", "climatology", "usual")}
        print(f"seed {SEED + 1 + number}:", *(f"beside {name} {100 * share:+.1f} %," for name, share in shares.items()),
              f"95 % range held {100 * found.inside['95']:.1f} %")  # fmt: skip
        assert shares["persistence"] >= 0.15 and shares["climatology"] >= 0.10
        own = [one for use in mine.bins for level in mine.bins[use] for one in reliability(mine, use, level)]
        tenths += sum(one.cases > 200 for one in own)
        near += sum(one.cases > 200 and abs(one.told - one.came) <= 0.05 for one in own)
        pooled.add(mine)
    whole = verdict(pooled)
    assert whole is not None
    print(f"all: RMS {whole.rms:.3f} m, 95 % range held {100 * whole.inside['95']:.1f} %")
    assert 0.93 <= whole.inside["95"] <= 0.97
    print(f"single spans: {near} of {tenths} tenths of more than 200 cases within five points")
    print(f"  chances that are right by construction, the day ahead alone: {right_by_chance(chances)}")
    assert near >= 0.75 * tenths
    for use, level in (("long baselines", "strained"), ("long baselines", "broken"), ("approach", "strained")):
        for tenth in reliability(pooled, use, level):
            print(f"{use}, {level}: told {100 * tenth.told:.0f}, came {100 * tenth.came:.0f} ({tenth.cases})")
            assert tenth.cases <= 2000 or abs(tenth.told - tenth.came) <= 0.05


@pytest.mark.slow
def test_the_first_month() -> None:
    """Ten beginnings of an archive, storms unannounced: ranges from the fourth to the thirtieth day.

    Below 95 %, as Known limits say: scatter is learned from a few days, mostly of calm.
    """
    shares = []
    for number in range(10):
        year = simulate(SEED + 101 + number, days=34)
        climate = climate_of(year.history.days, year.history.lats, year.history.lons)
        tally = Tally()
        for last, made in enumerate(replay(year.history)):
            if 2 <= last < 30 and np.isfinite(year.history.delay[last + 1]).any():
                tally.add(score(made, year.history, year.drivers, climate))
        found = verdict(tally)
        assert found is not None
        shares.append(found.inside["95"])
    print("95 % ranges of ten first months held", *(f"{100 * share:.1f}" for share in shares),
          f"mean {100 * np.mean(shares):.1f} %")  # fmt: skip
    assert 0.90 <= np.mean(shares) <= 0.97


def test_the_world_is_no_copy_of_the_method() -> None:
    """Climatology alone does badly on it, so that the record is not won by a shared shape."""
    make: Callable[[int], Year] = simulate
    year = make(SEED)
    ways = outlook_score.simple_ways(year.history, year.drivers, 200, 201)
    off = ways["climatology"] - year.history.delay[201]
    assert float(np.sqrt(np.nanmean(off**2))) > 0.1 * float(np.nanmean(year.history.delay[201]))
