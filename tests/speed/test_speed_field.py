"""Budgets of the field; run with -m speed.  One thread of linear algebra; processor time, not the clock on the wall."""

import os
import time
from collections.abc import Iterable, Iterator
from concurrent.futures import ProcessPoolExecutor

import numpy as np
import pytest
from tests.simulated.moving_wall import CENTRE, START, quiet, simulate
from threadpoolctl import threadpool_limits

from skylag.ionosphere import field, left_out
from skylag.ionosphere.field import epochs_between, fit
from skylag.ionosphere.interpolation import slant_at
from skylag.tables import Samples

pytestmark = pytest.mark.speed
LATS, LONS = CENTRE[0] + np.linspace(-5, 5, 41), CENTRE[1] + np.linspace(-6, 6, 41)


def network(receivers: int, hours: float) -> Samples:
    """Receivers at random over ten by twelve degrees, two constellations, one observation in five minutes."""
    rng = np.random.default_rng(4)
    places = [(CENTRE[0] + rng.uniform(-4, 4), CENTRE[1] + rng.uniform(-5, 5)) for _ in range(receivers)]
    return simulate(quiet, np.random.default_rng(1), hours=hours, places=places, interval_s=300.0)[1]


def epochs(hours: float) -> np.ndarray:
    return epochs_between(START, START + np.timedelta64(round(hours * 3600), "s"), 300.0)


def one_thread(hour: field.Hour) -> tuple[field.Made, int, float]:
    """An hour's maps, made by which process in how many processor seconds."""
    with threadpool_limits(1):
        start = time.process_time()
        made = field.make(hour)
        return made, os.getpid(), time.process_time() - start


def made_in(samples: Samples, hours: float) -> float:
    """Processor seconds for the maps of some hours, on one thread."""
    with threadpool_limits(1):
        start = time.process_time()
        fit(samples, LATS, LONS, epochs(hours))
        return time.process_time() - start


def test_a_day_of_41_by_41_cells_from_16_receivers_on_two_processes() -> None:
    """The processor time of the busier process is what the clock shows where two cores are free."""
    samples = network(16, 24.0)
    busy: dict[int, float] = {}

    def told(results: Iterable[tuple[field.Made, int, float]]) -> Iterator[field.Made]:
        for made, process, seconds in results:
            busy[process] = busy.get(process, 0.0) + seconds
            yield made

    with ProcessPoolExecutor(2) as pool:
        start = time.perf_counter()
        fit(samples, LATS, LONS, epochs(24.0), run=lambda make, hours: told(pool.map(one_thread, hours)))
        taken = time.perf_counter() - start
    print(f"288 maps of 41 x 41 cells from 16 receivers: {max(busy.values()):.1f} s of the busier of two processes, "
          f"{taken:.1f} s on the clock of this machine")  # fmt: skip
    assert len(busy) == 2
    assert max(busy.values()) < 10.0


def test_a_hundred_receivers_cost_less_than_seven_times_sixteen() -> None:
    few, many = network(16, 2.0), network(100, 2.0)
    made_in(few, 0.2)
    ratio = made_in(many, 2.0) / made_in(few, 2.0)
    print(f"100 receivers cost {ratio:.1f} times what 16 cost")
    assert ratio < 7.0


def test_one_more_hour() -> None:
    samples = network(16, 24.0)
    hour = START + np.timedelta64(23, "h") + np.arange(12) * np.timedelta64(300, "s")
    with threadpool_limits(1):
        start = time.process_time()
        fit(samples, LATS, LONS, hour)
        taken = time.process_time() - start
    print(f"one more hour: {taken:.2f} s")
    assert taken < 2.0


def test_a_hundred_thousand_questions_a_second() -> None:
    samples = network(16, 2.0)
    maps = fit(samples, LATS, LONS, epochs(2.0))
    rng = np.random.default_rng(6)
    count = 100_000
    lat, lon = rng.uniform(CENTRE[0] - 3, CENTRE[0] + 3, count), rng.uniform(CENTRE[1] - 3, CENTRE[1] + 3, count)
    when = START + rng.integers(0, 6900, count).astype("timedelta64[s]")
    start = time.process_time()
    content, _ = slant_at(maps, lat, lon, rng.uniform(30, 90, count), rng.uniform(0, 360, count), when, 400_000.0)
    taken = time.process_time() - start
    print(f"{count} questions for slant content: {taken:.2f} s")
    assert np.isfinite(content).mean() > 0.8
    assert taken < 1.0


def test_the_check_of_receivers_left_out() -> None:
    samples = network(16, 24.0)
    with threadpool_limits(1):
        start = time.process_time()
        left_out.check(samples, LATS, LONS, epochs(24.0))
        taken = time.process_time() - start
    print(f"a day's check of receivers left out: {taken:.2f} s")
    assert taken < 3.0
