"""One real receiver's day with a published map of the same day, through the whole product once in a test run."""

from concurrent.futures import ThreadPoolExecutor
from functools import cache
from pathlib import Path

from skylag import formats
from skylag.jobs import work
from skylag.tables import Biases, Fields, Products

PLACE = (46.877, 7.465)  # deg
MAP = "CODE map corg2350.15i of 2015-08-23; such maps are good to 1 to 2.5 TECU"


@cache
def products(open_data: Path) -> Products:
    """ZIMM, 23 August 2015: satellite biases as published, the receiver's found from this receiver alone."""
    folder = open_data / "2015-235"
    files = [folder / "obs/ZIMM2350.15O.gz", folder / "sp3", *sorted((folder / "bias").glob("P1*08.DCB"))]
    with ThreadPoolExecutor(1) as executor:
        return work.network_day(files, executor=executor).products


@cache
def published(open_data: Path) -> tuple[Fields, Biases]:
    """The published map of the day and the biases that came with it."""
    reading = formats.read(open_data / "2015-235/ionex/corg2350.15i.gz")
    assert isinstance(reading.table, Fields)
    return reading.table, reading.header["biases"]
