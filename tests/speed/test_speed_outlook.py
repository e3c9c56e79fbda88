"""Budget of the outlook; run with -m speed.  Processor time, one thread of linear algebra."""

import time

import pytest
from tests.simulated.year_of_content import simulate
from threadpoolctl import threadpool_limits

from skylag.jobs.hindcast import replay_scored

pytestmark = pytest.mark.speed


def year_of_hindcast(places: int) -> tuple[float, int]:
    """Seconds of processor time for a year of outlooks for two days, made, learned from and scored for three uses; how
    many were scored."""
    year = simulate(3, places=places)
    with threadpool_limits(1):
        start = time.process_time()
        tally = replay_scored(year.history, year.drivers, year.history.days[1])
        return time.process_time() - start, tally.outlooks


@pytest.mark.parametrize("places, budget_s", [(12, 30.0), (120, 60.0), (412, 60.0)])
def test_a_year_of_hindcast(places: int, budget_s: float) -> None:
    """412 places are the most that an outlook has."""
    taken, outlooks = year_of_hindcast(places)
    print(f"a year of hindcast at {places} places: {taken:.1f} s, {outlooks} outlooks")
    assert outlooks > 350
    assert taken < budget_s
