"""Lines of equal delay: shapes that are known, gaps, saddles, the antimeridian, refusals."""

import json
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from tests.formats.test_ionex import invented

from skylag.constants import L1_M_PER_TECU
from skylag.errors import Refused
from skylag.formats import contours
from skylag.tables import Fields

ROWS, COLUMNS = np.mgrid[0:15, 0:17].astype(float)


def test_a_circle_is_one_closed_line_on_its_radius() -> None:
    (line,) = contours.lines_of(np.hypot(ROWS - 7, COLUMNS - 8), 4.0)
    assert np.array_equal(line[0], line[-1]) and len(line) > 20
    assert np.abs(np.hypot(line[:, 0] - 7, line[:, 1] - 8) - 4.0).max() < 0.03


def test_a_plane_is_cut_by_one_open_line_from_edge_to_edge() -> None:
    (line,) = contours.lines_of(COLUMNS + 0.0 * ROWS, 4.25)
    assert line[:, 1] == pytest.approx(4.25) and sorted(line[:, 0].tolist()) == list(range(15))


def test_lines_end_where_nobody_looks() -> None:
    values = COLUMNS + 0.0 * ROWS
    values[7, 4] = np.nan
    lines = contours.lines_of(values, 4.25)
    assert sorted(len(line) for line in lines) == [7, 7]
    assert contours.lines_of(np.full((3, 3), np.nan), 1.0) == []
    assert contours.lines_of(np.full((3, 3), 1.0), 1.0) == []


@pytest.mark.parametrize(("level", "joined"), [(0.4, True), (0.6, False)])
def test_a_saddle_goes_with_its_middle(level: float, joined: bool) -> None:
    """High corners in the south-west and north-east: joined where the middle is above the level."""
    lines = contours.lines_of(np.array([[1.0, 0.0], [0.0, 1.0]]), level)
    assert len(lines) == 2
    cut_off = {tuple(np.rint(line.mean(axis=0)).astype(int)) for line in lines}
    assert cut_off == ({(0, 1), (1, 0)} if joined else {(0, 0), (1, 1)})


@given(st.integers(0, 10**6), st.integers(2, 9), st.integers(2, 9))
def test_every_point_lies_on_the_level_and_no_crossing_is_lost(seed: int, rows: int, columns: int) -> None:
    rng = np.random.default_rng(seed)
    values = rng.normal(size=(rows, columns))
    lines = contours.lines_of(values, 0.1)
    points = np.concatenate(lines) if lines else np.zeros((0, 2))
    r, c = np.floor(points).astype(int).T if len(points) else (np.zeros(0, int), np.zeros(0, int))
    up, along = points[:, 0] - r, points[:, 1] - c
    assert np.all((up == 0) | (along == 0))
    r2, c2 = np.minimum(r + (up > 0), rows - 1), np.minimum(c + (along > 0), columns - 1)
    share = up + along
    assert values[r, c] + share * (values[r2, c2] - values[r, c]) == pytest.approx(0.1, abs=1e-9)
    above = values >= 0.1
    crossed = (above[1:] != above[:-1]).sum() + (above[:, 1:] != above[:, :-1]).sum()
    assert len(np.unique(points.round(9), axis=0)) == crossed


def fields(lon_shift: float = 0.0) -> Fields:
    content = np.broadcast_to(np.arange(7.0)[None, None, :] * 3.0, (1, 4, 7))
    maps = invented(content, np.ones(content.shape), 1.0)
    return replace(maps, lons=maps.lons + lon_shift, support=np.full(content.shape, 2, np.uint16))


def test_lines_of_a_map_as_geojson() -> None:
    told = json.loads(contours.to_geojson(fields(), 0, 0.5, {"simulated": True}, 1.5))
    assert told["simulated"] is True and told["time_utc"].endswith("Z")
    levels = [one["properties"]["vertical_delay_m"] for one in told["features"]]
    assert levels == pytest.approx([0.5, 1.0, 1.5, 2.0, 2.5])  # 18 TECU are 2.92 m
    for one in told["features"]:
        assert one["properties"]["vertical_delay_sigma_m"] == pytest.approx(L1_M_PER_TECU, abs=1e-3)
        for lon, lat in one["geometry"]["coordinates"]:
            assert (lon + 170.0) * 3.0 * L1_M_PER_TECU == pytest.approx(one["properties"]["vertical_delay_m"], abs=1e-3)
            assert 40.0 <= lat <= 43.0


def test_nothing_is_drawn_where_nobody_looks_and_lines_are_cut_at_the_antimeridian() -> None:
    blind = replace(fields(), support=np.zeros((1, 4, 7), np.uint16))
    assert json.loads(contours.to_geojson(blind, 0, 0.5, {"simulated": False}, 1.5))["features"] == []
    slanting = fields(347.0)  # 177 to 183 degrees east
    value = np.broadcast_to(np.arange(4.0)[:, None] * 3.0 - np.arange(7.0) * 1.2 + 10.0, (1, 4, 7)).astype(np.float32)
    told = json.loads(contours.to_geojson(replace(slanting, vtec=value), 0, 0.4, {"simulated": False}, 1.5))
    crossing = [one for one in told["features"] if one["geometry"]["type"] == "MultiLineString"]
    assert crossing
    for one in told["features"]:
        shape = one["geometry"]
        for line in shape["coordinates"] if shape["type"] == "MultiLineString" else [shape["coordinates"]]:
            lons = [lon for lon, _ in line]
            assert min(lons) >= -180.0 and max(lons) <= 180.0 and max(lons) - min(lons) < 10.0


def test_no_line_runs_where_the_delay_is_known_too_badly() -> None:
    """Half of the map has a sigma of 20 TECU, 3.2 m: with a limit of 1.5 m it is not seen, with one of 4 m it is."""
    vague = fields().vtec_sigma.copy()
    vague[:, :, 3:] = 20.0
    maps = replace(fields(), vtec_sigma=vague)

    def levels(limit_m: float) -> list[float]:
        told = json.loads(contours.to_geojson(maps, 0, 0.5, {"simulated": True}, limit_m))
        return [one["properties"]["vertical_delay_m"] for one in told["features"]]

    assert levels(1.5) == pytest.approx([0.5])  # the three western columns reach 6 TECU, 0.97 m
    assert levels(4.0) == pytest.approx([0.5, 1.0, 1.5, 2.0, 2.5])
    maps.vtec_sigma[:] = np.nan
    assert levels(4.0) == [], "a delay of unknown sigma is not seen"


@pytest.mark.parametrize(("step", "said"), [(0.0, "more than 0"), (-1.0, "more than 0"), (float("nan"), "more than 0"),
                                            (1e-4, "400 are the most")])  # fmt: skip
def test_steps_that_make_no_lines_are_refused(step: float, said: str) -> None:
    with pytest.raises(Refused, match=said):
        contours.to_geojson(fields(), 0, step, {"simulated": False}, 1.5)
