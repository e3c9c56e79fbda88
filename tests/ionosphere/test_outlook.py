"""The outlook: no peeking, honest beginnings, windows, phases of storms, what unseen hours may and may not do."""

from dataclasses import fields, replace

import numpy as np
import pytest
from tests.conftest import Evidence
from tests.simulated.year_of_content import Year, simulate

from skylag.errors import NotEnough, Refused
from skylag.ionosphere import activity, outlook
from skylag.ionosphere.activity import AFTER, LATER, MAIN, ONSET, QUIET, UNTOLD
from skylag.ionosphere.climatology import climate_of
from skylag.ionosphere.outlook import Drivers, History, replay, tomorrow, windows
from skylag.tables import HOLDS, UNSEEN, Outlook


@pytest.fixture(scope="module")
def year() -> Year:
    return simulate(11, days=64, places=3)


@pytest.fixture(scope="module")
def whole(year: Year) -> list[Outlook]:
    """The outlook after each day."""
    return list(replay(year.history, year.drivers))


def unseen(history: History) -> History:
    """The same days without anything seen."""
    nothing = np.full(history.delay.shape, np.nan)
    return replace(history, delay=nothing, sigma=nothing, slope=nothing, states=np.zeros_like(history.states))


def same(one: Outlook, other: Outlook) -> bool:
    def equal(name: str) -> bool:
        a, b = getattr(one, name), getattr(other, name)
        return bool(np.array_equal(a, b, equal_nan=a.dtype.kind == "f")) if isinstance(a, np.ndarray) else a == b

    return all(equal(field.name) for field in fields(Outlook))


def cut(drivers: Drivers, count: int) -> Drivers:
    return Drivers(drivers.ap[:count], drivers.expected[:count], drivers.flux[:count])


# ---------------------------------------------------------------------------------------------- no peeking


def test_an_outlook_is_the_same_whatever_came_later(year: Year, whole: list[Outlook]) -> None:
    """Each outlook of a replay, bit by bit, from a history that ends on its day."""
    for last in (0, 1, 27, 40):
        alone = tomorrow(year.history.until(last + 1), cut(year.drivers, last + 1))
        assert same(whole[last], alone), last


def test_an_outlook_does_not_feel_later_days_changed(year: Year, whole: list[Outlook]) -> None:
    last = 50
    history = year.history
    spoilt = replace(history, delay=history.delay.copy(), slope=history.slope.copy(), states=history.states.copy())
    spoilt.delay[last + 1 :] *= 7.0
    spoilt.slope[last + 1 :] = 300.0
    spoilt.states[:, last + 1 :] = 3
    drivers = Drivers(year.drivers.ap.copy(), year.drivers.expected.copy(), year.drivers.flux.copy())
    drivers.ap[last + 1 :] = 400.0
    drivers.expected[last + 1 :] = 400.0
    drivers.flux[last + 1 :] = 400.0
    again = list(replay(spoilt, drivers))
    assert same(whole[last], again[last])
    assert not same(whole[last + 2], again[last + 2])  # the change can be felt


def test_many_places_are_learned_from_by_some_and_told_to_all() -> None:
    year = simulate(12, days=6, places=75)
    assert len(year.history.lats) > outlook.LEARNING_PLACES
    *_, last = replay(year.history, year.drivers)
    assert same(last, tomorrow(year.history, year.drivers))
    assert last.strained.shape == (3, 48, 75) and np.isfinite(last.strained).all()
    assert (last.strained.std(axis=2) > 0).any(axis=1).all()


def test_it_speaks_of_the_hours_after_the_last_day(year: Year, whole: list[Outlook]) -> None:
    made = whole[-1]
    assert made.known_until == year.history.days[-1]
    assert made.hours[0] == year.history.days[-1].astype("datetime64[ns]") + np.timedelta64(24, "h")
    assert len(made.hours) == 48
    assert len(tomorrow(year.history.until(3), ahead_days=1).hours) == 24


# ---------------------------------------------------------------------------------------------- honest beginnings


def test_an_empty_archive_gives_climatology_and_says_so(year: Year) -> None:
    empty = unseen(year.history.until(1))
    made = tomorrow(empty)
    ahead = empty.days[-1] + np.arange(1, 3)
    model = climate_of(ahead, empty.lats, empty.lons).delay(slice(None), np.full(2, np.nan)).reshape(48, -1)
    middle = made.delay_quantiles[..., int(np.argmin(np.abs(made.levels - 0.5)))]
    assert np.allclose(middle, model, rtol=0.02)
    assert "climatology alone" in made.basis[0]
    assert any("solar flux is not known" in sentence for sentence in made.basis)
    assert (made.seen_days == 0).all()
    low, high = (made.delay_quantiles[..., int(np.argmin(np.abs(made.levels - level)))] for level in (0.025, 0.975))
    assert (high / low > 4.0).all()  # wide: half of the delay may be wrong
    for use in range(len(made.uses)):
        assert [span.kind for span in windows(made, 0, use)] == ["not known"]


def test_ranges_narrow_as_days_come(year: Year) -> None:
    def width(made: Outlook) -> float:
        low, high = (made.delay_quantiles[..., int(np.argmin(np.abs(made.levels - level)))] for level in (0.1, 0.9))
        return float(np.median(np.log(high / low)))

    made = list(replay(year.history.until(61), ahead_days=1))
    assert width(made[0]) > width(made[3]) > width(made[20])
    assert width(made[0]) > 2.0 * width(made[60])


def test_unseen_hours_never_count_as_holding(year: Year) -> None:
    """Half of the hours of a restless archive, unseen at random, leave chances where they were; not halved."""
    known = year.history.until(40)
    history = replace(known, states=np.where(known.slope > 1.0, 2, HOLDS).astype(np.uint8)[None].repeat(3, axis=0))
    hidden = np.random.default_rng(3).random(history.delay.shape) < 0.5
    states = history.states.copy()
    states[:, hidden] = UNSEEN
    full, half = tomorrow(history), tomorrow(replace(history, states=states))
    assert float(full.strained.mean()) > 0.3
    known = np.isfinite(half.strained)
    assert known.mean() > 0.98  # an hour seen on a fifth of the days only has no chance
    assert float(half.strained[known].mean()) == pytest.approx(float(full.strained.mean()), abs=0.05)


def test_hours_at_which_nobody_looks_are_not_called_good(year: Year) -> None:
    """Six hours that are never seen at a place, and a place of which the delay is known but never the state."""
    history = year.history.until(40)
    states = np.full_like(history.states, HOLDS)
    states[:, :, 2:8, 0] = UNSEEN
    states[:, :, :, 1] = UNSEEN
    made = tomorrow(replace(history, states=states), ahead_days=1)
    assert made.seen_days.tolist() == [27.0, 0.0, 27.0]
    kinds = [(int((one.start - made.hours[0]) / np.timedelta64(1, "h")), one.kind) for one in windows(made, 0, 0)]
    assert kinds == [(0, "likely holds"), (2, "not known"), (8, "likely holds")]
    assert [one.kind for one in windows(made, 1, 0)] == ["not known"]
    assert [one.kind for one in windows(made, 2, 0)] == ["likely holds"]
    seldom = states.copy()
    seldom[:, -6:, 2:8, 0] = HOLDS  # six days are fewer than seven
    assert windows(tomorrow(replace(history, states=seldom), ahead_days=1), 0, 0)[1].kind == "not known"
    seldom[:, -7:, 2:8, 0] = HOLDS
    assert [one.kind for one in windows(tomorrow(replace(history, states=seldom), ahead_days=1), 0, 0)] == [
        "likely holds"
    ]


def test_quantiles_rise_and_broken_is_never_likelier_than_strained(whole: list[Outlook]) -> None:
    for made in whole[::15]:
        assert (np.diff(made.delay_quantiles, axis=-1) >= 0).all()
        assert (np.diff(made.slope_quantiles, axis=-1) >= 0).all()
        assert (made.broken <= made.strained).all()
        assert ((made.broken >= 0) & (made.strained <= 1)).all()


def test_a_told_storm_moves_the_outlook(year: Year) -> None:
    """After storms were seen, an entered storm raises chances over an entered calm; the basis says which it was."""
    count = 64
    calm, storm = (cut(year.drivers, count) for _ in range(2))
    calm, storm = replace(calm, expected=calm.expected.copy()), replace(storm, expected=storm.expected.copy())
    calm.expected[-1], storm.expected[-1] = 4.0, 150.0
    quiet, rough = tomorrow(year.history, calm, 1), tomorrow(year.history, storm, 1)
    assert rough.strained[1].mean() > 1.3 * quiet.strained[1].mean()
    assert set(rough.phases) == {"onset", "main phase"}
    assert any("storm or its aftermath told" in sentence for sentence in rough.basis)


def test_wrong_shapes_are_refused(year: Year) -> None:
    with pytest.raises(Refused, match="one row for each of the 64 days"):
        tomorrow(year.history, cut(year.drivers, 3))
    with pytest.raises(NotEnough, match="has no day"):
        list(replay(year.history.until(0)))
    with pytest.raises(Refused, match="must have the shape"):
        replace(year.history, delay=year.history.delay[:, :3])
    with pytest.raises(Refused, match="follow one another"):
        replace(year.history, days=year.history.days[::-1])
    with pytest.raises(Refused, match="between 0 and"):
        windows(tomorrow(year.history.until(2)), 0, 0, most=0.7)


# ---------------------------------------------------------------------------------------------- windows and phases


def test_windows_cut_where_the_chance_passes(year: Year) -> None:
    made = tomorrow(year.history.until(20), ahead_days=1)
    strained = np.full((3, 24, 3), 0.02)
    strained[0, 9:12, 1] = 0.3
    strained[0, 12:14, 1] = 0.8
    made = replace(made, strained=strained, broken=strained / 2)
    spans = windows(made, 1, 0)
    assert [span.kind for span in spans] == ["likely holds", "doubtful", "likely not", "likely holds"]
    assert spans[1].start == made.hours[9] and spans[2].end == made.hours[14]
    assert (spans[2].strained, spans[2].broken) == (0.8, 0.4)
    assert spans[0].start == made.hours[0] and spans[-1].end == made.hours[-1] + np.timedelta64(1, "h")


def test_phases_of_a_storm() -> None:
    ap = np.full(120, 5.0)
    ap[10:40] = 100.0
    ap[20:26] = 20.0  # a pause
    found = activity.phases(ap)
    assert (found[:10] == QUIET).all()
    assert (found[10:20] == ONSET).all()
    assert (found[20:26] == AFTER).all()
    assert (found[26:40] == MAIN).all()
    assert (found[40:64] == AFTER).all()
    assert (found[64:88] == LATER).all()
    assert (found[88:] == QUIET).all()


def test_no_phase_looks_ahead(rng: np.random.Generator) -> None:
    ap = rng.choice([4.0, 20.0, 60.0, np.nan], size=400, p=[0.5, 0.25, 0.2, 0.05])
    whole = activity.phases(ap)
    for end in range(1, 400, 7):
        assert (activity.phases(ap[:end]) == whole[:end]).all()


def test_hours_without_an_index_are_untold() -> None:
    assert (activity.phases(np.full(24, np.nan)) == UNTOLD).all()


def test_the_storm_limit(evidence: Evidence) -> None:
    evidence("ap from where a storm is counted", source="Kp 5- is ap 39: conversion table of the index's makers (GFZ)",
             expected=39, got=activity.STORM_AP, tolerance=0, unit="2 nT")  # fmt: skip
