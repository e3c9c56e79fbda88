"""Points, routes and areas become the cells of the map that they touch."""

from collections.abc import Iterator

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from skylag.errors import Refused
from skylag.impact import shapes
from skylag.impact.shapes import places_of
from skylag.tables import Floats

CORNER = st.tuples(st.floats(-44, -36), st.floats(141, 150))


def test_points_are_as_they_are() -> None:
    assert places_of([(-40.1, 146.2), (-40.1, 146.2)], "points", 0.5) == ((-40.1, 146.2), (-40.1, 146.2))


def test_a_route_touches_all_cells_on_its_way() -> None:
    found = places_of([(-42.0, 144.0), (-40.0, 144.0)], "route", 0.5)
    assert {round(lat * 2) for lat, _ in found} == {-84, -83, -82, -81, -80}
    assert found[:2] == ((-42.0, 144.0), (-40.0, 144.0))
    shifted = places_of([(-42.1, 144.0), (-40.0, 144.0)], "route", 0.5, (-41.75, 143.75))
    assert {round((lat + 41.75) / 0.5) for lat, _ in shifted} == {-1, 0, 1, 2, 3, 4}


def test_an_area_is_seen_in_its_middle() -> None:
    ring = [(-42.0, 144.0), (-42.0, 146.0), (-40.0, 146.0), (-40.0, 144.0)]
    cells = {(round(lat * 2), round(lon * 2)) for lat, lon in places_of(ring, "area", 0.5)}
    assert cells == {(row, column) for row in range(-84, -79) for column in range(288, 293)}
    hollow = [(-42, 144), (-42, 146), (-40, 146), (-40, 144), (-41.9, 144.1), (-41.9, 145.9), (-40.1, 145.9)]
    assert len(places_of(hollow, "area", 0.5)) <= len(cells)


def test_across_180_degrees() -> None:
    found = places_of([(-18.0, 179.0), (-18.0, -179.0)], "route", 0.5)
    assert {round(lon * 2) % 720 for _, lon in found} == {358, 359, 360, 361, 362}
    assert len(places_of([(-18, 179), (-18, -179), (-17, -179), (-17, 179)], "area", 0.5)) == 15


@settings(max_examples=80, deadline=None)
@given(st.lists(CORNER, min_size=3, max_size=6), st.sampled_from([0.5, 1.0]))
def test_areas_hold_what_a_plain_walk_around_finds(ring: list[tuple[float, float]], step: float) -> None:
    """Every node inside, by the sum of the angles under which the ring is seen, is among the places."""
    closed = [*ring, ring[0]]
    places = {(round(lat / step), round(lon / step)) for lat, lon in places_of(ring, "area", step)}
    for row in np.arange(-44, -35.9, step):
        for column in np.arange(141, 150.1, step):
            angles = [np.arctan2(lat - row, lon - column) for lat, lon in closed]
            turns = np.mod(np.diff(angles) + np.pi, 2 * np.pi) - np.pi
            winding = turns.sum() / (2 * np.pi)
            near_edge = np.isclose(np.abs(turns), np.pi, atol=1e-3).any()
            if round(abs(winding)) % 2 == 1 and not near_edge:
                assert (round(row / step), round(column / step)) in places


@settings(max_examples=50, deadline=None)
@given(st.lists(CORNER, min_size=3, max_size=5))
def test_more_of_a_shape_is_never_fewer_places(points: list[tuple[float, float]]) -> None:
    route, area = (set(_cells(places_of(points, shape, 0.5))) for shape in ("route", "area"))
    assert set(_cells(points)) <= route <= area


def _cells(places: object) -> list[tuple[int, int]]:
    return [(round(lat * 2), round(lon * 2)) for lat, lon in places]  # type: ignore[attr-defined]


@pytest.mark.parametrize(
    ("points", "shape", "word"),
    [([(0, 0)], "circle", "not known"), ([(0, 0)], "route", "needs 2"), ([(0, 0), (1, 1)], "area", "needs 3"),
     ([], "points", "needs 1"), ([(-40, 0), (-40, 120), (-40, 240)], "route", "touches"),
     ([(-80, 0), (80, 170)], "route", "touches"),
     ([(-10, 0), (-10, 20), (10, 20), (10, 0)], "area", "touches"),
     ([(-10, 0), (-10, 120), (10, -120)], "area", "half the Earth")],
)  # fmt: skip
def test_what_cannot_be_looked_at(points: list[tuple[float, float]], shape: str, word: str) -> None:
    with pytest.raises(Refused, match=word):
        places_of(points, shape, 0.5)
    assert shapes.MOST_PLACES == 400


def test_a_question_of_any_length_is_little_work(monkeypatch: pytest.MonkeyPatch) -> None:
    """Too many corners and too long a way are refused before a place is made; too many cells as soon as there are."""
    made = 0
    cells_of = shapes._cells

    def counted(lat: Floats, lon: Floats, step_deg: float) -> Iterator[tuple[int, int]]:
        nonlocal made
        made += len(lat)
        yield from cells_of(lat, lon, step_deg)

    monkeypatch.setattr(shapes, "_cells", counted)
    there_and_back = [(-41.0, 145.0), (-41.0, 145.1)]
    assert len(places_of(there_and_back * 50, "route", 0.5)) == 1
    made = 0
    for shape in ("route", "area"):
        with pytest.raises(Refused, match=f"shape {shape} takes at most 100 places, there are 101"):
            places_of([*(there_and_back * 50), (-41.0, 145.0)], shape, 0.5)
        assert made == 0
        # 40 ways of 20 degrees, half a cell being 0.05: 16 000 steps within 201 cells
        with pytest.raises(Refused, match="at most 8000 can be followed"):
            places_of([(-41.0, 140.0), (-41.0, 160.0)] * 20, shape, 0.1)
        assert made <= 41
        made = 0
    with pytest.raises(Refused, match="at most 400 places, there are 401"):
        places_of([(-41.0, 145.0)] * 401, "points", 0.5)
    # A third of the Earth at the finest step has over a million cells; the ring alone is too much.
    with pytest.raises(Refused, match="at most 8000 can be followed"):
        places_of([(-60.0, 0.0), (-60.0, 119.0), (60.0, 119.0), (60.0, 0.0)], "area", 0.1)
    # A ring of 392 cells with nearly ten thousand inside: a few rows are enough to know.
    made = 0
    with pytest.raises(Refused, match="more than 400 cells"):
        places_of([(0.0, 0.0), (0.0, 49.0), (49.0, 49.0), (49.0, 0.0)], "area", 0.5)
    assert made < 1500
