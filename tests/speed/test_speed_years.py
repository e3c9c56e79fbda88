"""Ten years of days in one archive: how long a month's overview and a day's frames take, without a network between.

    python -m pytest -s -m speed tests/speed/test_speed_years.py

Writing them takes minutes; SKYLAG_TEN_YEARS may name a folder that `python -m tests.invented_year DIR --years 10` made.
Budgets are the requirement's, medians on SQLite, the client's own work included; of processor time, so that what else
runs on the machine does not decide, with wall time told beside it.
"""

import os
import time
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest
from fastapi.testclient import TestClient
from tests.builders import REGION
from tests.invented_year import write

from skylag.archive import open_archive
from skylag.web.app import create_app

pytestmark = pytest.mark.speed
REQUIREMENT = "own requirement: ten years in the archive"


@pytest.fixture(scope="module")
def client(tmp_path_factory: pytest.TempPathFactory) -> Iterator[TestClient]:
    made = os.environ.get("SKYLAG_TEN_YEARS")
    place = Path(made) if made else write(tmp_path_factory.mktemp("years"), years=10).parent
    with open_archive(place) as archive:
        assert len(archive.days()) == 3650
        with TestClient(create_app(archive)) as asking:
            yield asking


def median_ms(client: TestClient, addresses: list[str]) -> float:
    wall, busy = [], []
    for address in addresses:
        began, before = time.perf_counter(), time.process_time()
        answer = client.get(address)
        busy.append(1000 * (time.process_time() - before))
        wall.append(1000 * (time.perf_counter() - began))
        assert answer.status_code == 200, answer.text
    (busy_ms, busy95_ms), (wall_ms, wall95_ms) = (np.quantile(times, [0.5, 0.95]) for times in (busy, wall))
    print(f"{addresses[0]}: processor {busy_ms:.1f} ms, p95 {busy95_ms:.1f}; wall {wall_ms:.1f}, p95 {wall95_ms:.1f}")
    return round(float(busy_ms), 1)


def test_a_month(client: TestClient, evidence) -> None:
    rng = np.random.default_rng(3)
    months = [np.datetime64("2031-01") + int(n) for n in rng.integers(0, 119, 40)]
    asked = [
        f"/api/days?region={REGION.name}&since={month}-01&until={(month + 1).astype('datetime64[D]') - 1}"
        for month in months
    ]
    evidence("month overview of ten years (processor time)", source=REQUIREMENT, expected=100.0,
             got=median_ms(client, asked), tolerance=0.0, unit="ms", at_most=True)  # fmt: skip


def test_frames_of_days(client: TestClient, evidence) -> None:
    """The first frame of a day that was not looked at before, then others of the same day."""
    rng = np.random.default_rng(4)
    first, following = [], []
    for number in rng.integers(0, 3640, 40):
        day = np.datetime64("2031-01-01") + int(number)
        address = f"/api/days/{REGION.name}/{day}/fields"
        first.append(f"{address}?from={day}T06:00:00Z&to={day}T06:15:00Z")
        following += [f"{address}?from={day}T{hour:02}:15:00Z&to={day}T{hour:02}:30:00Z" for hour in (7, 8, 20)]
    evidence("a day's first frame of ten years (processor time)", source=REQUIREMENT, expected=100.0,
             got=median_ms(client, first), tolerance=0.0, unit="ms", at_most=True)  # fmt: skip
    evidence("a day's next frame of ten years (processor time)", source=REQUIREMENT, expected=30.0,
             got=median_ms(client, following), tolerance=0.0, unit="ms", at_most=True)  # fmt: skip


def test_facts_of_days(client: TestClient) -> None:
    """What the page asks with the first frame: scales of the whole year are in it."""
    rng = np.random.default_rng(5)
    days = [np.datetime64("2031-01-01") + int(n) for n in rng.integers(0, 3640, 40)]
    assert median_ms(client, [f"/api/days/{REGION.name}/{day}" for day in days]) < 100.0
