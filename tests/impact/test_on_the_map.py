"""Whether a place is on a map, and in which cell: one answer, whoever asks."""

from types import SimpleNamespace

import numpy as np
import pytest
from tests.impact.test_survey import LATS, LONS, some_fields

from skylag.archive.records import DayRecord
from skylag.errors import Refused
from skylag.impact.states import nearest_cells
from skylag.tables import Region, cells_at
from skylag.web.outlook import of_place

REGION = Region("strait", LATS[0], LATS[-1], LONS[0], LONS[-1])


@pytest.mark.parametrize(
    ("lat", "lon", "on"),
    [
        (-40.0, 146.0, True), (-40.0, 146.0 - 360.0, True), (-42.25, 143.75, True), (-37.75, 148.25, True),
        (-42.2502, 146.0, False), (-40.0, 148.2502, False), (-40.0, 143.7498, False), (10.0, 10.0, False),
    ],
)  # fmt: skip
def test_maps_records_and_outlooks_agree_at_the_edge(lat: float, lon: float, on: bool) -> None:
    """Half a step beyond the outermost middles is the edge; 0.0002 degrees (20 m) beyond it is off."""
    row, column, inside = nearest_cells(some_fields(), np.array([lat]), np.array([lon]))
    assert bool(inside[0]) is on
    record = SimpleNamespace(lats=LATS, lons=LONS, region=REGION)
    cell = DayRecord.cell_of(record, lat, lon)  # type: ignore[arg-type]
    assert cell == ((int(row[0]), int(column[0])) if on else None)
    if lon < -180:
        return  # such a place is refused before it is looked for
    nothing = SimpleNamespace(outlook=None)
    with pytest.raises(AttributeError if on else Refused):  # a place on the map is looked up in the outlook, here none
        of_place(nothing, REGION, lat, lon, "", 0.1, True)  # type: ignore[arg-type]


def test_a_map_of_one_row_reaches_as_far_as_its_columns_do() -> None:
    _, _, inside = cells_at(np.array([-40.0]), LONS, np.array([-40.24, -40.26]), np.array([146.0, 146.0]))
    assert inside.tolist() == [True, False]
