"""Content between the nodes and epochs of maps: a worked case, laws, edges, and real stations."""

from pathlib import Path

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from tests.conftest import Evidence
from tests.ionosphere import zimm_day

from skylag import formats
from skylag.constants import L1_HZ, L2_HZ, REFRACTION_M3_S2, SPEED_OF_LIGHT_M_S, TECU, WGS84_F
from skylag.errors import NotEnough
from skylag.ionosphere import arcs, bias_algebra, geometry, orbits, pairs
from skylag.ionosphere.interpolation import at_geocentric_rows, slant_at, vertical_at
from skylag.tables import Fields, Reading, Signals

START = np.datetime64("2024-03-30", "ns")


def maps(values: np.ndarray, lats: np.ndarray, lons: np.ndarray, hours: float = 2.0) -> Fields:
    """Maps (T, lat, lon) every `hours`, their sigma a tenth of the content."""
    shape = values.shape
    nothing = np.full(shape, np.nan, dtype=np.float32)
    times = START + np.rint(np.arange(shape[0]) * hours * 3600).astype(np.int64).astype("timedelta64[s]")
    return Fields(
        times=times, lats=lats, lons=lons, vtec=values.astype(np.float32), vtec_sigma=(values / 10).astype(np.float32),
        support=np.zeros(shape, dtype=np.uint16), slope=nothing, slope_sigma=nothing, slope_east=nothing,
        slope_north=nothing, state=np.zeros(shape, dtype=np.uint8),
    )  # fmt: skip


WORKED = maps(
    np.array(
        [
            [
                [12.0, 13.3, 15.1, 16.8, 18.0, 18.6, 18.7, 18.1, 17.0],
                [10.1, 11.2, 12.7, 14.1, 15.1, 15.6, 15.7, 15.2, 14.3],
            ],
            [
                [17.0, 18.2, 19.5, 20.4, 20.8, 20.5, 19.7, 18.6, 17.2],
                [14.3, 15.3, 16.4, 17.1, 17.4, 17.2, 16.6, 15.6, 14.5],
            ],
        ]
    ),
    np.array([47.5, 50.0]),
    np.arange(0.0, 41.0, 5.0),
)
HALF_PAST = START + np.timedelta64(30, "m")


@pytest.mark.parametrize(("turning", "expected"), [(False, 17.803), (True, 16.979)])
def test_a_worked_case(turning: bool, expected: float, evidence: Evidence) -> None:
    got, sigma = vertical_at(WORKED, 48.5, 27.0, HALF_PAST, turning)
    evidence(f"content between two small maps, {'turned' if turning else 'not turned'}", unit="TECU",
             source="IONEX 1.0 section 3, worked case of a handbook by two routes", expected=expected, got=float(got),
             tolerance=5.1e-4)  # fmt: skip
    assert float(sigma) == pytest.approx(float(got) / 10, rel=1e-4)


GLOBE_LATS, GLOBE_LONS = np.arange(-87.5, 88, 2.5), np.arange(-180.0, 181, 5.0)


def globe() -> Fields:
    """Three maps of a smooth content that stands still under the Sun."""
    lon = np.radians(GLOBE_LONS)[None, None, :]
    turn = np.radians(15.0 * 2.0 * np.arange(3))[:, None, None]
    return maps(20 + 10 * np.cos(lon + turn) * np.cos(np.radians(GLOBE_LATS))[None, :, None], GLOBE_LATS, GLOBE_LONS)


@given(st.floats(-87.5, 87.5), st.floats(-540, 540), st.floats(0, 4))
def test_content_that_stands_under_the_sun_is_met_by_turning(lat: float, lon: float, hours: float) -> None:
    when = START + np.timedelta64(round(hours * 3.6e12), "ns")
    truth = 20 + 10 * np.cos(np.radians(lon + 15 * hours)) * np.cos(np.radians(lat))
    got, _ = vertical_at(globe(), lat, lon, when)
    assert float(got) == pytest.approx(truth, abs=0.02)  # what straight lines over 2.5 x 5 degrees leave of a cosine


@given(st.floats(-87.5, 87.5), st.floats(-180, 180))
def test_longitudes_go_round(lat: float, lon: float) -> None:
    here, there = (float(vertical_at(globe(), lat, x, START)[0]) for x in (lon, lon + 360))
    assert here == pytest.approx(there, abs=1e-4)


def test_nodes_are_met_and_arrays_taken() -> None:
    field = globe()
    lat, lon = np.meshgrid(field.lats, field.lons, indexing="ij")
    got, _ = vertical_at(field, lat, lon, field.times[1], turning=False)
    assert got == pytest.approx(field.vtec[1], abs=1e-4)


def test_outside_is_nan() -> None:
    for lat, lon, when in (
        (47.4, 20, START), (50.1, 20, START), (48, -0.1, START), (48, 40.1, START),
        (48, 20, START - np.timedelta64(1, "s")), (48, 20, START + np.timedelta64(7201, "s")),
    ):  # fmt: skip
        assert np.isnan(vertical_at(WORKED, lat, lon, when, turning=False)[0])
    for lat, lon in ((47.5, 0), (50, 40), (50, 0), (47.5, 40)):
        assert np.isfinite(vertical_at(WORKED, lat, lon, START, turning=False)[0])


def test_a_missing_node_is_not_bridged() -> None:
    values = WORKED.vtec.astype(float)
    values[0, 0, 4] = np.nan
    field = maps(values, WORKED.lats, WORKED.lons)
    assert np.isnan(vertical_at(field, 48.0, 22.0, START, turning=False)[0])
    assert np.isnan(vertical_at(field, 48.0, 22.0, HALF_PAST, turning=False)[0])
    assert np.isfinite(vertical_at(field, 48.0, 12.0, START, turning=False)[0])
    assert np.isfinite(vertical_at(field, 48.0, 22.0, field.times[1], turning=False)[0])


def latitude_of(rows: np.ndarray) -> np.ndarray:
    """Geographic latitude of geocentric rows: the other way round by its own formula."""
    return np.degrees(np.arctan(np.tan(np.radians(rows)) / (1.0 - WGS84_F) ** 2))


@given(st.integers(-800, 650), st.sampled_from([1, 2, 5, 10, 25]), st.integers(3, 30))
def test_geocentric_rows_are_regular_within_the_map_and_lose_little(south: int, step: int, count: int) -> None:
    """On tenths of a degree, for the format; what is given up at the edges is less than a step and two tenths."""
    lats = (south + step * np.arange(count)) / 10.0
    assume(lats[-1] < 89.0)
    content = np.broadcast_to(lats[None, :, None] + 100.0, (1, count, 2))
    found = at_geocentric_rows(maps(content, lats, np.array([5.0, 6.0])))
    assert np.allclose(found.lats * 10, np.rint(found.lats * 10), atol=1e-6)
    assert np.allclose(np.diff(found.lats), step / 10.0)
    where = latitude_of(found.lats)
    assert lats[0] - 1e-9 <= where[0] and where[-1] <= lats[-1] + 1e-9
    assert (where[0] - lats[0]) + (lats[-1] - where[-1]) < step / 10.0 + 0.2
    # Content that grows with geographic latitude is told as the geographic latitude of the row.
    assert found.vtec[0, :, 0] == pytest.approx(where + 100.0, abs=2e-4)
    assert found.vtec_sigma[0, :, 1] == pytest.approx((where + 100.0) / 10.0, abs=2e-4)


def test_geocentric_rows_of_a_region() -> None:
    """48 to 56 N in half degrees: rows 0.192 degrees further south, so 48.3 to 55.8 lie closest; one row is lost."""
    lats = np.arange(48.0, 56.1, 0.5)
    found = at_geocentric_rows(maps(np.ones((1, 17, 2)), lats, np.array([5.0, 6.0])))
    assert found.lats == pytest.approx(np.arange(48.3, 55.9, 0.5))
    mirrored = at_geocentric_rows(maps(np.ones((1, 17, 2)), -lats[::-1], np.array([5.0, 6.0])))
    assert mirrored.lats == pytest.approx(-found.lats[::-1])
    # Two rows have room for two of a finer step; of one, or of a strip of a tenth, no map can be made.
    assert len(at_geocentric_rows(maps(np.ones((1, 2, 2)), lats[:2], np.array([5.0, 6.0]))).lats) == 2
    for few in (lats[:1], np.array([45.0, 45.1])):
        with pytest.raises(NotEnough, match="larger region"):
            at_geocentric_rows(maps(np.ones((1, len(few), 2)), few, np.array([5.0, 6.0])))


def test_geocentric_rows_have_no_number_beside_a_row_that_has_none() -> None:
    lats = np.arange(48.0, 56.1, 0.5)
    content = np.ones((2, 17, 2))
    content[1, 8, 0] = np.nan  # 52.0 N: between the rows of 51.5 and 52.0, and of 52.0 and 52.5
    found = at_geocentric_rows(maps(content, lats, np.array([5.0, 6.0])))
    none = np.isnan(found.vtec)
    beside = (latitude_of(found.lats) > 51.5) & (latitude_of(found.lats) < 52.5)
    assert none[1, :, 0].tolist() == beside.tolist() and none.sum() == beside.sum() == 2
    assert np.isnan(found.vtec_sigma).sum() == 2


def test_one_map_serves_its_own_time_only() -> None:
    one = maps(WORKED.vtec[:1].astype(float), WORKED.lats, WORKED.lons)
    assert float(vertical_at(one, 47.5, 10, START)[0]) == pytest.approx(15.1)
    assert np.isnan(vertical_at(one, 47.5, 10, HALF_PAST)[0])
    none = maps(np.empty((0, 2, 9)), WORKED.lats, WORKED.lons)
    with pytest.raises(NotEnough):
        vertical_at(none, 47.5, 10, START)


# ------------------------------------------------------------------------------------------------ a station and a map


def content_minus_map(
    open_data: Path, observations: str, orbit_files: str, satellite_biases: str, map_file: str, receiver: str
) -> tuple[np.ndarray, np.ndarray]:
    """Measured vertical content of GPS rays above 20 degrees and the map's at their pierce points.

    Nothing is fitted: levelled phases, published biases of satellites and receiver, the shell height of the map.
    """

    def read(pattern: str) -> list[Reading]:
        return [formats.read(path) for path in sorted(open_data.glob(pattern))]

    signals, tables = read(observations)[0].table, [reading.table for reading in read(orbit_files)]
    published = read(map_file)[0]
    known = bias_algebra.join([*(reading.table for reading in read(satellite_biases)), published.header["biases"]])
    assert isinstance(signals, Signals)
    assert isinstance(published.table, Fields)
    chosen, _ = pairs.choose(signals)
    position = orbits.seen_from(tables, chosen.satellites, chosen.times, signals.receiver.position_m)
    elevation, _ = geometry.look(signals.receiver.position_m, position)
    rays = geometry.place(arcs.cut(chosen, None, elevation), position, 450e3, 20.0)
    rays = rays.where(np.char.startswith(rays.satellites, "G")[rays.satellite])
    pair = chosen.pairs["G"]
    when = chosen.times[len(chosen.times) // 2]
    own = bias_algebra.pair_bias(known, "receiver", receiver, "G", *RECEIVER_CODES[receiver], when)
    assert own is not None
    of_satellite = {
        str(name): bias_algebra.pair_bias(known, "satellite", str(name), "G", pair.code1, pair.code2, when)
        for name in rays.satellites
    }
    bias_ns = np.array([(of_satellite[str(name)] or (np.nan,))[0] for name in rays.satellites])[rays.satellite] + own[0]
    per_tecu_m = REFRACTION_M3_S2 * TECU * (1 / L2_HZ**2 - 1 / L1_HZ**2)
    measured = (rays.stec + SPEED_OF_LIGHT_M_S * 1e-9 * bias_ns / per_tecu_m) / rays.mapping
    geocentric = np.degrees(np.arctan((1 - WGS84_F) ** 2 * np.tan(np.radians(rays.pierce_lat))))
    told, _ = vertical_at(published.table, geocentric, rays.pierce_lon, rays.time)
    both = np.isfinite(measured) & np.isfinite(told)
    return measured[both], told[both]


# The pair a published receiver bias belongs to, as its file says.
RECEIVER_CODES = {"ZIMM": ("C1W", "C2W"), "KIRU": ("C1W", "C2W")}


@pytest.mark.open_data
@pytest.mark.parametrize(
    ("receiver", "files", "rows"),
    [
        (
            "ZIMM",
            ("2015-235/obs/ZIMM2350*", "2015-235/sp3/*", "2015-235/bias/P1*08.DCB", "2015-235/ionex/*"),
            15_000,
        ),
        (
            "KIRU",
            ("2024-090/obs/KIRU*", "2024-090/sp3/*", "2024-090/bias/*", "2024-090/ionex/*"),
            800,
        ),
    ],
)
def test_a_station_against_the_map_of_its_day(
    open_data: Path, evidence: Evidence, receiver: str, files: tuple[str, str, str, str], rows: int
) -> None:
    measured, told = content_minus_map(open_data, *files, receiver)
    assert len(measured) > rows
    apart = measured - told
    source = "CODE map of the same day, with CODE biases; such maps are good to 1 to 2.5 TECU (handbook 12)"
    evidence(f"median of vertical content at {receiver} minus map", source=source, unit="TECU", expected=0.0,
             got=float(np.median(apart)), tolerance=1.0)  # fmt: skip
    evidence(f"scatter of vertical content at {receiver} minus map", source=source, unit="TECU", expected=2.5,
             got=float(np.std(apart)), tolerance=0, at_most=True)  # fmt: skip


@pytest.mark.open_data
def test_what_the_product_answers_for_a_station_beside_the_published_map(open_data: Path, evidence: Evidence) -> None:
    """The maps that a day's files gave, asked along the station's own lines of sight; against its measurements, and
    against the published map asked the same way, less what the one known offset of the receiver's bias explains."""
    day, (table, biases) = zimm_day.products(open_data), zimm_day.published(open_data)
    rays, samples = day.samples.rays, day.samples
    every = np.flatnonzero((rays.elevation > 20.0) & (np.arange(len(rays)) % 7 == 0))
    lat, lon, _ = geometry.geodetic(np.asarray(rays.receivers[0].position_m))
    asked = (lat, lon, rays.elevation[every], rays.azimuth[every])
    ours, sigma = slant_at(day.fields, *asked, rays.time[every], rays.shell_height_m)
    told = np.isfinite(ours)
    assert told.sum() > 1000  # lines of sight that pierce the shell within the region around the one receiver
    apart = (ours - samples.stec[every])[told]
    assert np.std(apart / rays.mapping[every][told]) < 1.0  # its arcs scatter by so much in level
    assert np.mean(np.abs(apart) <= 1.96 * sigma[told]) > 0.93
    # The published map, at the pierce points of its own shell.
    pierce_lat, pierce_lon = geometry.pierce(*asked, 450e3)
    geocentric = np.degrees(np.arctan((1 - WGS84_F) ** 2 * np.tan(np.radians(pierce_lat))))
    inside = np.clip(rays.time[every], table.times[0], table.times[-1])
    theirs = vertical_at(table, geocentric, pierce_lon, inside)[0] * geometry.mapping(asked[2], 450e3)
    both = told & np.isfinite(theirs)
    found = day.calibration.biases
    known = biases.value_ns[(biases.name == "ZIMM") & (biases.system == "G")][0]
    by_bias = day.calibration.ray_per_ns[every] * -(found.value_ns[found.kind == "receiver"][0] - known)
    rest = ((ours - theirs - by_bias) / rays.mapping[every])[both]
    evidence("slant content the product answers at ZIMM minus published map, less its bias, median vertical",
             source=zimm_day.MAP, unit="TECU", expected=0.0, got=float(np.median(rest)), tolerance=1.0)  # fmt: skip
    evidence("the same, scatter", source=zimm_day.MAP, unit="TECU", expected=1.5, got=float(np.std(rest)), tolerance=0,
             at_most=True)  # fmt: skip
