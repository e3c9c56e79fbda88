"""How long a network day takes from observations to calibrated contents, in processor time of one core.

Processor time is counted, since other work on the machine must not decide; two cores share the receivers, the
adjustment itself runs on one.
"""

import gc
import time
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from tests.conftest import Evidence
from threadpoolctl import threadpool_limits

from skylag import chain, formats
from skylag.chain import Choices
from skylag.ionosphere.adjustment import apply, solve
from skylag.tables import Ephemerides, Rays, Receiver, Signals, concatenate

pytestmark = [pytest.mark.speed, pytest.mark.open_data]


def spent(job: Callable[[], object], times: int = 3) -> float:
    """Least processor time of several runs [s], one thread."""
    found = []
    with threadpool_limits(1):
        for _ in range(times):
            gc.collect()
            begin = time.process_time()
            job()
            found.append(time.process_time() - begin)
    return min(found)


@pytest.fixture(scope="module")
def files(open_data: Path) -> tuple[Signals, list[Ephemerides]]:
    """A real day at 30 s of GPS, Galileo, GLONASS, BeiDou and QZSS: 78 000 rays above 10 degrees."""
    signals = formats.read(next((open_data / "2020-177/obs").glob("ESBC*"))).table
    ephemerides = formats.read(next((open_data / "2020-177/nav").glob("ESBC*"))).table
    assert isinstance(signals, Signals) and isinstance(ephemerides, Ephemerides)
    return signals, [ephemerides]


def network(rays: Rays, count: int) -> Rays:
    """The same sky over `count` receivers of their own names, biases and arc levels."""
    rng = np.random.default_rng(1)
    parts = []
    for number in range(count):
        receiver = Receiver(f"RC{number:02d}00XXX", rays.receivers[0].position_m)
        level = rng.normal(0.0, 0.4, int(rays.arc.max()) + 1)[rays.arc] + rng.normal(0.0, 20.0)
        parts.append(replace(rays, receivers=(receiver,), stec=rays.stec + level))
    return concatenate(parts)


def test_sixteen_receivers_of_four_constellations(
    files: tuple[Signals, list[Ephemerides]], evidence: Evidence
) -> None:
    signals, sources = files
    to_rays = spent(lambda: chain.receiver_day(signals, sources, Choices(), 400e3))
    rays = chain.receiver_day(signals, sources, Choices(), 400e3).rays
    channels = chain.channels_of(sources)
    sixteen = network(rays, 16)
    calibration = solve(sixteen, None, None, channels)
    of_solve = spent(lambda: solve(sixteen, None, None, channels))
    of_apply = spent(lambda: apply(calibration, sixteen))
    whole = 16 / 2 * to_rays + of_solve + of_apply
    print(f"{len(sixteen)} rays: {to_rays:.2f} s per receiver, {of_solve:.2f} s adjustment, {of_apply:.2f} s contents; "
          f"{whole:.1f} s on two cores")  # fmt: skip
    evidence("16-receiver day from observations to contents, two cores", source="budget: 20 s", expected=20.0,
             got=round(whole, 1), tolerance=0, unit="s", at_most=True)  # fmt: skip
    evidence("16-receiver day, the adjustment alone", source="budget: 5 s", expected=5.0, got=round(of_solve, 2),
             tolerance=0, unit="s", at_most=True)  # fmt: skip


def test_cost_grows_with_the_number_of_rays(files: tuple[Signals, list[Ephemerides]]) -> None:
    """Twice the receivers: at most 2.6 times the time, and the same for twice the thinned rays."""
    signals, sources = files
    rays = chain.receiver_day(signals, sources, Choices(), 400e3).rays
    channels = chain.channels_of(sources)
    few, many = network(rays, 6), network(rays, 12)
    one, two = (spent(lambda r=r: solve(r, None, None, channels), 4) for r in (few, many))  # type: ignore[misc]
    print(f"6 receivers {one:.2f} s, 12 receivers {two:.2f} s")
    assert two < 2.6 * one
    thinner = replace(Choices().adjustment, thin_s=600.0)
    fewer = spent(lambda: solve(few, None, thinner, channels), 4)
    print(f"a ray in ten minutes {fewer:.2f} s, in five {one:.2f} s")
    assert one < 2.6 * fewer
