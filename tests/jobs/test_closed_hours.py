"""Hours of maps that are kept while a day goes on: given only where their rays hardly moved, and then good enough."""

from collections.abc import Callable
from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from tests.builders import STORM_DAY, invented_day

from skylag.ionosphere.background import PLAIN
from skylag.ionosphere.field import FieldChoices, Hour, Made, epochs_between, make, prepare
from skylag.jobs import kept, work
from skylag.jobs.closed_hours import ClosedHours, Nearness, near
from skylag.tables import Samples

MOST = Nearness().most_tecu


@pytest.fixture(scope="module")
def samples() -> Samples:
    return invented_day(STORM_DAY, satellites=8, rays_every_s=60).samples


def hours_of(samples: Samples, first: int = 5, last: int = 7, choices: FieldChoices | None = None) -> tuple[Hour, ...]:
    """Hours of maps on a coarse grid."""
    lat, lon = np.meshgrid(np.arange(-42.0, -36.5, 1.5), np.arange(143.0, 149.5, 1.5))
    start = STORM_DAY.astype("datetime64[ns]")
    epochs = epochs_between(start + np.timedelta64(first, "h"), start + np.timedelta64(last, "h"), 1200.0)
    return prepare(samples, lat.ravel(), lon.ravel(), epochs, choices or FieldChoices())


def moved(samples: Samples, change: Any, **other: Any) -> Samples:
    """The same with other contents: a change [TECU] per ray."""
    return replace(samples, vtec=samples.vtec + change, **other)


def per_arc(samples: Samples, sigma: float, seed: int) -> Any:
    """A change that is one for each arc, as new levels and biases make it."""
    rng = np.random.default_rng(seed)
    return rng.normal(0.0, sigma, int(samples.rays.arc.max()) + 1)[samples.rays.arc]


def test_the_same_hour_is_near_itself(samples: Samples) -> None:
    (one, _), (again, _) = hours_of(samples), hours_of(samples)
    assert near(one, again, Nearness(most_tecu=0.0))


@pytest.mark.parametrize("change", [0.03, 0.0])
def test_small_changes_are_near_and_large_ones_are_not(samples: Samples, change: float) -> None:
    (before, _), (now, _) = hours_of(samples), hours_of(moved(samples, per_arc(samples, change, 1)))
    (far, _) = hours_of(moved(samples, per_arc(samples, 0.2, 2)))
    (all_alike, _) = hours_of(moved(samples, 1.01 * MOST))
    assert near(before, now, Nearness())
    assert not near(before, far, Nearness()) and not near(before, all_alike, Nearness())


def test_one_ray_far_off_is_enough(samples: Samples) -> None:
    """A single arc that is levelled anew by more than its sigma: five rays of a hundred may be one receiver's wall."""
    (before, _) = hours_of(samples)
    arc = samples.rays.arc[np.flatnonzero(samples.rays.time >= before.epochs[0])[0]]
    (now, _) = hours_of(moved(samples, np.where(samples.rays.arc == arc, 20.0, 0.0)))
    assert not near(before, now, Nearness())


CHANGES: dict[str, Callable[[Hour], Hour]] = {
    "another epoch": lambda hour: replace(hour, epochs=hour.epochs + np.timedelta64(1, "s")),
    "an epoch less": lambda hour: replace(hour, epochs=hour.epochs[:-1], parts=hour.parts[:-1]),
    "another place": lambda hour: replace(hour, lat=hour.lat + 0.1),
    "other choices": lambda hour: replace(hour, choices=FieldChoices(support_km=100.0)),
    "another background": lambda hour: replace(hour, background=replace(PLAIN, name="another")),
    "a ray less": lambda hour: replace(hour, parts=(hour.parts[0].where(np.arange(5)), *hour.parts[1:])),
    "nothing seen": lambda hour: replace(hour, parts=(None, *hour.parts[1:])),
    "other biases": lambda hour: replace(hour, covariance=hour.covariance * 4.0 + 0.01 * np.eye(len(hour.covariance))),
    "another noise": lambda hour: replace(
        hour, parts=tuple(replace(part, own=part.own + 1.1 * MOST) for part in hour.parts)
    ),
}  # fmt: skip


@pytest.mark.parametrize("what", CHANGES)
def test_what_makes_an_hour_another(samples: Samples, what: str) -> None:
    (before, _) = hours_of(samples)
    now = CHANGES[what](before)
    assert not near(before, now, Nearness()) and not near(now, before, Nearness())


def test_maps_of_near_hours_are_near(samples: Samples) -> None:
    """The largest change that still counts as near moves no map by more than twice that, and slopes by 0.3 mm/km."""
    for seed in range(3):
        (before, _) = hours_of(samples)
        change = np.clip(per_arc(samples, 0.5 * MOST, seed), -MOST, MOST)
        (now, _) = hours_of(moved(samples, change))
        assert near(before, now, Nearness())
        old, new = make(before).layers, make(now).layers
        assert np.nanmax(np.abs(old["vtec"] - new["vtec"])) < 2.0 * MOST
        assert np.nanmax(np.abs(old["slope"] - new["slope"])) < 0.3


def test_small_changes_do_not_add_up(samples: Samples) -> None:
    """What is compared is what the maps were made of, not the step before."""
    hours, made = ClosedHours(), 0
    for number in range(6):
        (one, _) = hours_of(moved(samples, 0.4 * MOST * number))
        if hours.given("maps", one) is None:
            hours.keep("maps", one, number)
            made += 1
    assert made == 2, "at the first and at the fourth"


class AtOnce(ThreadPoolExecutor):
    """Runs what it is given at once, and notes it."""

    def __init__(self) -> None:
        super().__init__(1)
        self.ran: list[str] = []

    def submit(self, function: Callable[..., Any], /, *arguments: Any, **named: Any) -> Future[Any]:
        self.ran.append(function.__name__)
        done: Future[Any] = Future()
        done.set_result(function(*arguments, **named))
        return done


def test_the_executor_gives_what_it_may(samples: Samples, tmp_path: Path) -> None:
    inner = AtOnce()
    keeping = kept.KeepingExecutor(inner, tmp_path, ClosedHours())
    five, six = hours_of(samples)
    first: list[Made] = list(keeping.map(work.hour_unit, (five, six)))
    late = moved(samples, np.where(samples.rays.time >= six.epochs[0], 1.0, 0.0))
    second = list(keeping.map(work.hour_unit, hours_of(late)))
    assert second[0] is first[0] and second[1] is not first[1]
    assert (keeping.hours_given, keeping.hours_made) == (1, 3) and inner.ran == ["hour_unit"] * 3
    checks = list(keeping.map(work.left_out_unit, (five, six)))
    assert len(checks) == 2 and inner.ran[3:] == ["left_out_unit"] * 2, "a check is no map"
    assert keeping.hours is not None
    keeping.hours.forget(STORM_DAY)
    list(keeping.map(work.hour_unit, (five,)))
    assert keeping.hours_made == 4
    plain = kept.KeepingExecutor(inner, tmp_path)
    list(plain.map(work.hour_unit, (five,)))
    list(plain.map(work.hour_unit, (five,)))
    assert inner.ran.count("hour_unit") == 6, "without a place for them every hour is made"


def test_what_was_forgotten_meanwhile_does_not_come_back(samples: Samples, tmp_path: Path) -> None:
    """A result is kept by a thread of the executor, which may be later than who waits for the result."""
    held: list[Future[Any]] = []

    class Later(AtOnce):
        def submit(self, function: Callable[..., Any], /, *_: Any, **__: Any) -> Future[Any]:
            held.append(Future())
            return held[-1]

    hours = ClosedHours()
    five, six = hours_of(samples)
    with Later() as inner:
        keeping = kept.KeepingExecutor(inner, tmp_path, hours)
        keeping.submit(work.hour_unit, five)
        hours.forget(STORM_DAY)
        keeping.submit(work.hour_unit, six)
        for future in held:
            future.set_result("maps")
    assert hours.given("hour_unit", five) is None and hours.given("hour_unit", six) == "maps"
