"""Budget: slopes, fronts, patches, faults, forecasts and states of a 16-receiver day, for all uses, with events.

The mark is 15 s on two cores; this runs on one, in processor time, so that other programs' load does not count.
"""

import time
from typing import Any

import numpy as np
import pytest
from tests.impact.test_states import REGION, flat_fields
from tests.simulated.moving_wall import PLACES, quiet, simulate, wall

from skylag.impact import events, states, uses
from skylag.ionosphere import faults, fronts, irregularity, slopes

SIXTEEN = [*PLACES, (-39.8, 143.9), (-40.1, 148.1)]


@pytest.mark.speed
def test_a_day_of_sixteen_receivers(benchmark: Any) -> None:
    ramp = wall(120.0, 60.0, 180.0, 320.0, 12 * 3600)
    rays, samples = simulate(
        lambda x, y, t: quiet(x, y, t) + ramp(x, y, t), np.random.default_rng(1), hours=24.0, places=SIXTEEN
    )
    fields = flat_fields(hours=24.0)

    def all_of_it() -> int:
        steep = slopes.measure(rays, samples, fields)
        moving = fronts.track(rays, samples, steep)
        ragged = irregularity.assess(rays, moving, None, samples)
        blamed = faults.find(rays, samples, ragged, steep, moving)
        told = fronts.arrivals(moving, rays, REGION.sites)
        judged = states.judge(fields, steep, moving, ragged, REGION, blamed, told)
        found = [events.of_day(judged.fields, judged.flags, REGION)]
        for use in uses.PUBLISHED:
            seen = uses.judge_for(use, judged.fields, judged.flags, REGION)
            found.append(events.of_use(seen, judged.fields, judged.flags, REGION))
        return len(found)

    spent = []

    def timed() -> int:
        began = time.process_time()
        made = all_of_it()
        spent.append(time.process_time() - began)
        return made

    assert benchmark.pedantic(timed, rounds=2, iterations=1) == 5
    print(f"slopes to events: {min(spent):.1f} s of processor time")
    assert min(spent) < 15.0
