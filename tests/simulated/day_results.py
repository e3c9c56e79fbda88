"""The three committed days, each computed once in a test run, with their truth beside them."""

from functools import cache
from pathlib import Path

import numpy as np

from invented import truth
from invented.truth import DayTruth
from skylag import settings
from skylag.jobs import work
from skylag.jobs.executor import open_executor
from skylag.tables import Samples

SAMPLES = Path(__file__).resolve().parents[2] / "sample_data"
CALM, STORM, RECOVERY = "2031-03-11", "2031-03-12", "2031-03-13"


@cache
def day(name: str) -> work.DayResult:
    """The committed files of a day, through the whole chain."""
    region = settings.read_region(SAMPLES / "region.toml")
    with open_executor("local:2") as executor:
        return work.network_day([SAMPLES / name], region=region, executor=executor, simulated=True)


@cache
def truth_of(name: str) -> DayTruth:
    """What the generator put into a day."""
    return truth.load(name)


def true_slant(samples: Samples, name: str) -> tuple[np.ndarray, np.ndarray]:
    """Row numbers of the samples on the truth's epochs and outside faults, and the true slant content there."""
    known = truth_of(name)
    rays = samples.rays
    step = np.timedelta64(300, "s")
    on = np.flatnonzero((rays.time - known.times[0]) % step == np.timedelta64(0, "ns"))
    names = np.array([receiver.name for receiver in rays.receivers])
    epoch = ((rays.time[on] - known.times[0]) // step).astype(int)
    row = np.array([list(known.receivers).index(n) for n in names])[rays.receiver[on]]
    column = np.array([list(known.satellites).index(str(n)) for n in rays.satellites])[rays.satellite[on]]
    value = known.stec[row, epoch, column]
    good = np.isfinite(value)
    for marker, start, end in known.faults:
        good &= ~((names[rays.receiver[on]] == marker) & (rays.time[on] >= start) & (rays.time[on] <= end))
    return on[good], value[good]
