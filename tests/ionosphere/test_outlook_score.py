"""Scores of outlooks against their definitions, sums of them, and what is left out."""

from dataclasses import replace

import numpy as np
import pytest
from tests.conftest import Evidence
from tests.simulated.year_of_content import simulate

from skylag.errors import NotEnough
from skylag.ionosphere import outlook_score
from skylag.ionosphere.climatology import climate_of
from skylag.ionosphere.outlook import replay
from skylag.ionosphere.outlook_score import Tally, crps, from_facts, reliability, score, simple_ways, verdict


def test_crps_of_a_normal_distribution(evidence: Evidence) -> None:
    """Closed form of a standard normal at its middle: (sqrt 2 - 1) / sqrt pi = 0.2337."""
    levels = np.linspace(0.005, 0.995, 199)
    from scipy.stats import norm

    got = float(crps(norm.ppf(levels), levels, np.array(0.0)))
    evidence("CRPS of a standard normal at 0", source="Gneiting and Raftery 2007, JASA 102, 359-378, equation 21",
             expected=(np.sqrt(2) - 1) / np.sqrt(np.pi), got=got, tolerance=0.002)  # fmt: skip


def test_crps_of_the_levels_in_use() -> None:
    """The few levels that are kept come within five per cent of the closed form, wherever the value lies."""
    from scipy.stats import norm

    from skylag.ionosphere.outlook import LEVELS

    for value in (-1.5, 0.0, 0.7, 2.0):
        exact = value * (2 * norm.cdf(value) - 1) + 2 * norm.pdf(value) - 1 / np.sqrt(np.pi)
        assert float(crps(norm.ppf(LEVELS), LEVELS, np.array(value))) == pytest.approx(exact, rel=0.05)


def test_scores_by_hand() -> None:
    """RMS, mean error, coverage and Brier sums of one outlook, worked out again in another way."""
    year = simulate(5, days=40, places=2)
    made = next(iter(replay(year.history, year.drivers, first=37, ahead_days=1)))
    tally = score(made, year.history, year.drivers)
    came = year.history.delay[38]
    off = [made.delay[h, p] - came[h, p] for h in range(24) for p in range(2) if np.isfinite(came[h, p])]
    found = verdict(tally)
    assert found is not None and found.hours == len(off)
    assert found.rms == pytest.approx(float(np.sqrt(np.mean(np.square(off)))))
    assert found.mean_error == pytest.approx(float(np.mean(off)))
    low, high = made.delay_quantiles[..., 1], made.delay_quantiles[..., -2]
    inside = [low[h, p] <= came[h, p] <= high[h, p] for h in range(24) for p in range(2) if np.isfinite(came[h, p])]
    assert found.inside["95"] == pytest.approx(float(np.mean(inside)))
    states = year.history.states[1, 38]
    cases = sum(tenth.cases for tenth in reliability(tally, "long baselines", "strained"))
    assert cases == int((states > 0).sum())
    came_often = sum(tenth.came * tenth.cases for tenth in reliability(tally, "long baselines", "strained"))
    assert came_often == pytest.approx(int((states >= 2).sum()))
    dark = made.strained.copy()
    dark[:, 5] = np.nan  # an hour of which no chance was told cannot be right or wrong
    fewer = score(replace(made, strained=dark, broken=dark), year.history, year.drivers)
    cases = sum(tenth.cases for tenth in reliability(fewer, "long baselines", "strained"))
    assert cases == int((states > 0).sum() - (states[5] > 0).sum())


def test_simple_ways_use_only_what_was_known() -> None:
    year = simulate(5, days=60, places=2)
    history = year.history
    ways = simple_ways(history, year.drivers, 45, 46)
    assert np.array_equal(ways["persistence"], history.delay[45], equal_nan=True)
    assert np.array_equal(ways["recurrence"], history.delay[46 - 27], equal_nan=True)
    assert np.allclose(ways["usual"], np.nanmedian(history.delay[19:46], axis=0), equal_nan=True)
    with_model = simple_ways(history, year.drivers, 45, 46, climate_of(history.days, history.lats, history.lons))
    assert all(np.array_equal(ways[name], with_model[name], equal_nan=True) for name in outlook_score.OTHERS)
    changed = history.until(60)
    changed.delay[46:] += 5.0
    again = simple_ways(changed, year.drivers, 45, 46)
    assert all(np.array_equal(ways[name], again[name], equal_nan=True) for name in outlook_score.OTHERS)
    changed.delay[46:] -= 5.0


def test_tallies_add_up_and_can_be_kept() -> None:
    year = simulate(5, days=50, places=2)
    made = list(replay(year.history, year.drivers, first=30))
    one, other = score(made[0], year.history), score(made[5], year.history)
    both = Tally()
    both.add(one)
    both.add(other)
    assert both.outlooks == 2
    assert both.own["1"][0] == one.own["1"][0] + other.own["1"][0]
    assert both.bins["approach"]["broken"][0][0] == sum(t.bins["approach"]["broken"][0][0] for t in (one, other))
    assert from_facts(both.facts()) == both


def test_days_that_have_not_come_cannot_be_scored() -> None:
    year = simulate(5, days=30, places=2)
    made = next(iter(replay(year.history, year.drivers, first=29)))
    with pytest.raises(NotEnough, match="no hour of it has been seen"):
        score(made, year.history)


def test_unseen_hours_are_not_scored() -> None:
    year = simulate(5, days=32, places=2)
    made = next(iter(replay(year.history, year.drivers, first=30, ahead_days=1)))
    hidden = year.history.until(32)
    hidden.delay[31, :12], hidden.states[:, 31, :12] = np.nan, 0
    tally = score(made, hidden)
    assert tally.own["1"][0] == np.isfinite(year.history.delay[31, 12:]).sum()
    cases = sum(tenth.cases for tenth in reliability(tally, "approach", "strained"))
    assert cases == int((year.history.states[0, 31, 12:] > 0).sum())
