"""Coast lines: known capes, clean cuts, seams, and a user's own file."""

import json
from pathlib import Path

import numpy as np
import pytest

from skylag.errors import FormatError, Missing, Refused
from skylag.formats import coast

STRAIT = (-44.0, -36.0, 142.0, 150.0)


def test_southern_capes_lie_where_published(evidence) -> None:
    """The southernmost points of the Australian mainland and of Tasmania."""
    source = "Geoscience Australia, Continental extremities (from memory)"
    mainland = max(coast.read_coast(-39.3, -38.7, 146.0, 146.6), key=len)  # the islets south of it are short
    south_point = mainland[np.argmin(mainland[:, 0])]
    evidence("South Point, Wilsons Promontory: latitude", source=source, expected=-(39 + 8 / 60 + 20 / 3600),
             got=float(south_point[0]), tolerance=0.01, unit="deg")  # fmt: skip
    evidence("South Point, Wilsons Promontory: longitude", source=source, expected=146 + 22 / 60 + 26 / 3600,
             got=float(south_point[1]), tolerance=0.02, unit="deg")  # fmt: skip
    tasmania = np.vstack(coast.read_coast(-43.7, -43.4, 146.6, 147.0))
    evidence("South East Cape, Tasmania: latitude", source=source, expected=-(43 + 38 / 60 + 40 / 3600),
             got=float(tasmania[:, 0].min()), tolerance=0.01, unit="deg")  # fmt: skip


def test_all_points_lie_in_the_box() -> None:
    lines = coast.read_coast(*STRAIT)
    points = np.vstack(lines)
    assert points[:, 0].min() >= STRAIT[0] - 1e-9 and points[:, 0].max() <= STRAIT[1] + 1e-9
    assert points[:, 1].min() >= STRAIT[2] - 1e-9 and points[:, 1].max() <= STRAIT[3] + 1e-9
    assert all(len(line) >= 2 for line in lines)
    on_edge = np.isclose(points[:, 0], STRAIT[1]) | np.isclose(points[:, 1], STRAIT[2])
    assert on_edge.any(), "the mainland leaves the box, so its line is cut at the edge"


def test_two_halves_hold_what_the_whole_holds() -> None:
    """Cutting a box in two loses no coast."""

    def length(lines: tuple[coast.Line, ...]) -> float:
        return sum(float(np.hypot(*np.diff(line, axis=0).T).sum()) for line in lines)

    whole = length(coast.read_coast(*STRAIT))
    west = length(coast.read_coast(-44.0, -36.0, 142.0, 146.3))
    east = length(coast.read_coast(-44.0, -36.0, 146.3, 150.0))
    assert west + east == pytest.approx(whole, rel=1e-6)


def test_over_the_180th_meridian() -> None:
    """Fiji's islands lie on both sides; what comes out is within the box asked for, whichever way it is named."""
    lines = coast.read_coast(-19.0, -15.0, 176.0, 184.0)
    points = np.vstack(lines)
    assert (points[:, 1] < 180).any() and (points[:, 1] > 180).any()
    other = np.vstack(coast.read_coast(-19.0, -15.0, -184.0, -176.0))
    assert len(other) == len(points)
    assert (other[:, 1] >= -184.0).all() and (other[:, 1] <= -176.0).all()


def test_no_line_runs_along_the_seam() -> None:
    """The rings are cut at 180 degrees and at the pole: no coast is there."""
    for box in ((60.0, 75.0, 170.0, 190.0), (-90.0, -60.0, -180.0, 180.0), (-90.0, -60.0, 90.0, 270.0)):
        lines = coast.read_coast(*box)
        assert lines, "these boxes have coasts on both sides of the seam"
        for line in lines:
            along = np.abs(np.abs(line[:, 1]) - 180.0) < 1e-4
            assert not (along[:-1] & along[1:] & (np.diff(line[:, 0]) != 0)).any()
            assert line[:, 0].min() > -89.9


def test_a_larger_box_has_coarser_lines() -> None:
    near, far = coast.read_coast(-44, -40, 144, 148), coast.read_coast(-80, 80, -180, 180)
    assert sum(map(len, far)) < 40_000
    step = [np.median(np.hypot(*np.diff(np.vstack(lines), axis=0).T)) for lines in (near, far)]
    assert step[0] < step[1] / 4


def test_open_sea_has_no_coast() -> None:
    assert coast.read_coast(-40.0, -35.0, -120.0, -115.0) == ()


@pytest.mark.parametrize("box", [(1, 0, 0, 1), (0, 1, 5, 1), (-91, 0, 0, 1), (0, 1, 0, 361), (float("nan"), 1, 0, 1)])
def test_wrong_boxes_are_refused(box: tuple[float, float, float, float]) -> None:
    with pytest.raises(Refused, match="south must be below north"):
        coast.read_coast(*box)


# ---------------------------------------------------------------------------------------------- a file of one's own


def saved(path: Path, content: object) -> Path:
    path.write_text(content if isinstance(content, str) else json.dumps(content), encoding="utf-8")
    return path


SQUARE = [[0.0, 0.0], [4.0, 0.0], [4.0, 4.0], [0.0, 4.0], [0.0, 0.0]]


@pytest.mark.parametrize(
    "geometry, count",
    [
        ({"type": "LineString", "coordinates": SQUARE}, 1),
        ({"type": "Polygon", "coordinates": [SQUARE, [[1, 1], [2, 1], [2, 2], [1, 1]]]}, 2),
        ({"type": "MultiLineString", "coordinates": [SQUARE, SQUARE]}, 2),
        ({"type": "MultiPolygon", "coordinates": [[SQUARE], [SQUARE]]}, 2),
        ({"type": "GeometryCollection", "geometries": [{"type": "LineString", "coordinates": SQUARE}]}, 1),
        ({"type": "FeatureCollection", "features": [
            {"type": "Feature", "properties": {}, "geometry": {"type": "LineString", "coordinates": SQUARE}},
            {"type": "Feature", "properties": {}, "geometry": {"type": "Point", "coordinates": [1, 1]}},
            {"type": "Feature", "properties": {}, "geometry": None}]}, 1),
    ],
)  # fmt: skip
def test_geojson_of_every_kind(tmp_path: Path, geometry: dict, count: int) -> None:
    lines = coast.read_coast(-1, 5, -1, 5, saved(tmp_path / "own.geojson", geometry))
    assert len(lines) == count
    np.testing.assert_array_equal(lines[0], np.array(SQUARE)[:, ::-1])  # longitude first there, latitude first here


def test_a_line_is_cut_at_the_edges_of_the_box(tmp_path: Path) -> None:
    path = saved(tmp_path / "own.geojson", {"type": "LineString", "coordinates": [[-2, 1], [6, 1], [6, 3], [-2, 3]]})
    lines = coast.read_coast(0, 4, 0, 4, path)
    np.testing.assert_allclose(np.array(lines), [[[1, 0], [1, 4]], [[3, 4], [3, 0]]])
    touching = saved(tmp_path / "touch.geojson", {"type": "LineString", "coordinates": [[-2, 6], [6, 6], [9, 9]]})
    assert coast.read_coast(0, 4, 0, 4, touching) == ()


@pytest.mark.parametrize(
    "content",
    ["", "not json", "[]", "{}", '{"type": "FeatureCollection"}', '{"type": "Point", "coordinates": [1, 2]}',
     '{"type": "LineString", "coordinates": [["a", "b"], ["c", "d"]]}', '{"type": "LineString", "coordinates": 5}',
     '{"type": "LineString", "coordinates": [[1], [2]]}', '{"type": "LineString", "coordinates": [[1, 2], [null, 2]]}'],
)  # fmt: skip
def test_what_is_no_coast_is_named(tmp_path: Path, content: str) -> None:
    path = saved(tmp_path / "own.geojson", content)
    with pytest.raises(FormatError, match=r"own\.geojson"):
        coast.read_coast(0, 4, 0, 4, path)


def test_a_file_that_is_not_there(tmp_path: Path) -> None:
    with pytest.raises(Missing, match="no such coast file"):
        coast.read_coast(0, 4, 0, 4, tmp_path / "none.geojson")
