"""Directions, pierce points, mapping, and the rays of a receiver."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from tests.conftest import Evidence, reference_rows
from tests.ionosphere.test_orbits import G07, ephemerides, seconds

from skylag.constants import SBAS_EARTH_RADIUS_M, SHELL_EARTH_RADIUS_M
from skylag.errors import Refused
from skylag.ionosphere import geometry, orbits
from skylag.tables import Arcs, Observations, Receiver, SignalPair

DO_229 = "RTCA DO-229 A.4.4.10.1, equal to ray and sphere in vector form"
LATS, LONS = st.floats(-89.5, 89.5), st.floats(-180, 180)
ELEVATIONS, AZIMUTHS = st.floats(1, 90), st.floats(0, 359.99)
HEIGHTS_M = st.floats(100e3, 1000e3)


# ------------------------------------------------------------------------------------------------ published values


def test_geodetic_coordinates_of_a_station(evidence: Evidence) -> None:
    lat, lon, height = geometry.geodetic((3582104.9, 532590.2, 5232755.1))
    source = "handbook check with pymap3d, WGS 84"
    evidence("latitude of ESBC", source=source, expected=55.493566616484, got=float(lat), tolerance=1e-11, unit="deg")
    evidence("longitude of ESBC", source=source, expected=8.456829633183, got=float(lon), tolerance=1e-11, unit="deg")
    evidence("height of ESBC", source=source, expected=59.5392, got=float(height), tolerance=1e-4, unit="m")


@pytest.mark.parametrize(
    ("place", "expected"),
    [
        ((50, 10, 100), (4045519.7076, 713334.2754, 4862865.6422)),
        ((-23.2, -45.9, 600), (4082203.7175, -4212507.4531, -2497328.8866)),
    ],
)
def test_earth_fixed_positions(
    place: tuple[float, ...], expected: tuple[float, ...], evidence: Evidence
) -> None:  # fmt: skip
    got = geometry.earth_fixed(*place)
    evidence(f"Earth-fixed position of {place}, distance", source="WGS 84 formula, handbook check with pymap3d",
             expected=0.0, got=float(np.linalg.norm(got - np.array(expected))), tolerance=1e-4, unit="m")  # fmt: skip


def test_direction_to_a_satellite(evidence: Evidence) -> None:
    """The satellite as seen: its position at transmission, turned by the Earth during light time."""
    receiver = np.array([3582104.9, 532590.2, 5232755.1])
    # G07 of 2020-06-25 at tow 389400, by the published record: see kepler_records.csv.
    when = np.array([G07["toe"] + seconds(600)])  # type: ignore[operator]
    seen = orbits.seen_from(ephemerides([G07]), ["G07"], when, receiver.tolist())
    elevation, azimuth = geometry.look(receiver.tolist(), seen)
    source = "handbook check, computed with pymap3d as second route"
    evidence("elevation of G07 at ESBC", source=source, expected=16.396522600, got=float(elevation[0, 0]),
             tolerance=1e-7, unit="deg")  # fmt: skip
    evidence("azimuth of G07 at ESBC", source=source, expected=322.936118921, got=float(azimuth[0, 0]), tolerance=1e-7,
             unit="deg")  # fmt: skip


@pytest.mark.parametrize("row", reference_rows("pierce_points.csv"), ids=lambda row: f"lat{row['lat']}")
def test_published_pierce_points(row: dict[str, str], evidence: Evidence) -> None:
    lat, lon, azimuth, elevation = (float(row[name]) for name in ("lat", "lon", "azimuth", "elevation"))
    got = geometry.pierce(lat, lon, elevation, azimuth, 350e3, SBAS_EARTH_RADIUS_M)
    high = geometry.pierce(lat, lon, elevation, azimuth, 450e3)
    for name, value in zip(("pierce_lat", "pierce_lon"), got, strict=True):
        evidence(f"{name} from {lat:g} {lon:g}, az {azimuth:g} el {elevation:g}, 350 km", source=DO_229,
                 expected=float(row[name]), got=float(value), tolerance=2e-12, unit="deg")  # fmt: skip
    for name, value in zip(("pierce_lat_450", "pierce_lon_450"), high, strict=True):
        evidence(f"{name} from {lat:g} {lon:g}, az {azimuth:g} el {elevation:g}, 450 km", source=DO_229,
                 expected=float(row[name]), got=float(value), tolerance=2e-12, unit="deg")  # fmt: skip
    assert geometry.earth_angle(elevation, 350e3, SBAS_EARTH_RADIUS_M) == pytest.approx(float(row["psi"]), abs=1e-9)


@pytest.mark.parametrize("row", reference_rows("mapping_functions.csv"), ids=lambda row: f"el{row['elevation']}")
def test_published_mapping(row: dict[str, str], evidence: Evidence) -> None:
    elevation = float(row["elevation"])
    for name, height_m, radius_m in (
        ("sbas_350", 350e3, SBAS_EARTH_RADIUS_M), ("shell_350", 350e3, SHELL_EARTH_RADIUS_M),
        ("shell_400", 400e3, SHELL_EARTH_RADIUS_M), ("shell_450", 450e3, SHELL_EARTH_RADIUS_M),
    ):  # fmt: skip
        evidence(f"mapping {name} at {elevation:g} deg", source="thin shell, IONEX 1.0 and DO-229 A.4.4.10.4",
                 expected=float(row[name]), got=float(geometry.mapping(elevation, height_m, radius_m)),
                 tolerance=6e-10)  # fmt: skip


def test_the_noise_of_two_phases(evidence: Evidence) -> None:
    """With 3 mm on each phase the handbook has 0.0404 TECU: sqrt(2) * 3 mm / 0.105045953 m per TECU."""
    f1, f2 = np.array([1575.42e6]), np.array([1227.60e6])
    zenith_m = np.hypot(*geometry.PHASE_NOISE_M)
    got = float(geometry.phase_noise(np.array([90.0]), f1, f2)[0]) * 0.003 / zenith_m
    evidence("noise of GPS phase content for 3 mm each", source="propagation of errors, handbook 2.5", expected=0.0404,
             got=got, tolerance=5e-5, unit="TECU")  # fmt: skip


# ------------------------------------------------------------------------------------------------ laws


@given(LATS, LONS, st.floats(-500, 30_000_000))
def test_geodetic_undoes_earth_fixed(lat: float, lon: float, height_m: float) -> None:
    back = geometry.geodetic(geometry.earth_fixed(lat, lon, height_m))
    assert back[0] == pytest.approx(lat, abs=1e-9)
    assert (back[1] - lon + 180) % 360 - 180 == pytest.approx(0, abs=1e-9)
    assert back[2] == pytest.approx(height_m, abs=1e-4)


@given(LATS)
def test_geocentric_latitude_is_the_angle_at_the_centre(lat: float) -> None:
    x, _, z = geometry.earth_fixed(lat, 0.0, 0.0)
    assert geometry.geocentric_latitude(lat) == pytest.approx(np.degrees(np.arctan2(z, x)), abs=1e-9)
    assert geometry.geodetic_latitude(geometry.geocentric_latitude(lat)) == pytest.approx(lat, abs=1e-9)


def test_poles_and_the_axis() -> None:
    lat, _, height = geometry.geodetic(np.array([[0.0, 0.0, 6_356_752.3142], [0.0, 0.0, -6_356_852.3142]]))
    assert lat.tolist() == [90.0, -90.0]
    assert height == pytest.approx([0.0, 100.0], abs=1e-3)


@given(HEIGHTS_M, st.lists(ELEVATIONS, min_size=2, max_size=20))
def test_mapping_is_one_at_the_zenith_and_grows_downwards(height_m: float, elevations: list[float]) -> None:
    assert geometry.mapping(90.0, height_m) == pytest.approx(1.0, abs=1e-12)
    descending = np.sort(elevations)[::-1]
    values = geometry.mapping(descending, height_m)
    assert np.all(values >= 1.0)
    assert np.all(np.diff(values) >= 0)
    assert np.all(values <= 1 / np.sin(np.radians(descending)) + 1e-9)  # never steeper than a flat layer


@given(LATS, LONS, ELEVATIONS, AZIMUTHS, HEIGHTS_M)
def test_a_pierce_point_lies_at_its_angle_and_direction(
    lat: float, lon: float, elevation: float, azimuth: float, height_m: float
) -> None:
    """Great-circle distance from the receiver equals the Earth angle, and the ray in space goes through the point."""
    pierce_lat, pierce_lon = geometry.pierce(lat, lon, elevation, azimuth, height_m)
    here, there = unit(lat, lon), unit(float(pierce_lat), float(pierce_lon))
    angle = np.degrees(np.arctan2(np.linalg.norm(np.cross(here, there)), here @ there))
    assert angle == pytest.approx(float(geometry.earth_angle(elevation, height_m)), abs=1e-9)
    ray = (SHELL_EARTH_RADIUS_M + height_m) * there - SHELL_EARTH_RADIUS_M * here
    up = np.clip(ray @ here / np.linalg.norm(ray), -1.0, 1.0)
    assert np.degrees(np.arcsin(up)) == pytest.approx(elevation, abs=3e-6)  # arcsin is coarse at the zenith
    assert -180 <= pierce_lon < 180


def unit(lat: float, lon: float) -> np.ndarray:
    lat_rad, lon_rad = np.radians(lat), np.radians(lon)
    return np.array([np.cos(lat_rad) * np.cos(lon_rad), np.cos(lat_rad) * np.sin(lon_rad), np.sin(lat_rad)])


@given(LATS, LONS, ELEVATIONS, AZIMUTHS)
def test_look_undoes_a_step_along_a_direction(lat: float, lon: float, elevation: float, azimuth: float) -> None:
    receiver = geometry.earth_fixed(lat, lon, 100.0)
    lat_rad, lon_rad, el, az = np.radians([lat, lon, elevation, azimuth])
    east = np.array([-np.sin(lon_rad), np.cos(lon_rad), 0])
    up = unit(lat, lon)
    north = np.cross(up, east)
    step = np.cos(el) * (np.sin(az) * east + np.cos(az) * north) + np.sin(el) * up
    got = geometry.look(receiver.tolist(), receiver + 2.2e7 * step)
    assert float(got[0]) == pytest.approx(elevation, abs=1e-7)
    if elevation < 89.9:
        assert (float(got[1]) - azimuth + 180) % 360 - 180 == pytest.approx(0, abs=1e-4)
    assert lat_rad == pytest.approx(np.radians(lat))


# ------------------------------------------------------------------------------------------------ rays


def small_arcs() -> Arcs:
    """Two epochs, three satellites of two constellations; the last point belongs to no arc."""
    shape = (2, 3)
    full = np.zeros(shape)
    times = np.datetime64("2024-01-01", "ns") + 30 * np.arange(2).astype("timedelta64[s]")
    observations = Observations(
        receiver=Receiver("MADE", tuple(geometry.earth_fixed(50, 10, 100).tolist())),
        times=times, satellites=np.array(["E05", "G01", "G02"]),
        pairs={"G": SignalPair("G", "C1W", "C2W", "L1W", "L2W"), "E": SignalPair("E", "C1C", "C5Q", "L1C", "L5Q")},
        f1_hz=np.full(3, 1575.42e6), f2_hz=np.array([1176.45e6, 1227.6e6, 1227.6e6]),
        code1=full, code2=full, phase1=full, phase2=full, lock1=full.astype(np.uint8), lock2=full.astype(np.uint8),
        snr1=full, resets=np.zeros(2, dtype=bool), interval_s=30.0,
    )  # fmt: skip
    return Arcs(
        observations=observations,
        stec=np.array([[10.0, 20.0, 30.0], [11.0, 21.0, 31.0]]),
        stec_phase=np.array([[1.0, 2.0, 3.0], [2.0, 3.0, 4.0]]),
        arc=np.array([[0, 1, 2], [0, 1, -1]]), arc_satellite=np.array([0, 1, 2]), arc_start=np.zeros(3, dtype=np.int64),
        arc_end=np.array([1, 1, 0]), arc_began=np.zeros(3, dtype=np.uint8), arc_level_sigma=np.array([0.1, 0.2, 0.3]),
        arc_noise=np.full(3, 0.5), arc_points=np.array([2, 2, 1]), rejected={},
    )  # fmt: skip


def sky(*directions: tuple[float, float]) -> np.ndarray:
    """Positions (2, satellites, 3) in the given elevations and azimuths from the small arcs' receiver."""
    lon = np.radians(10.0)
    east = np.array([-np.sin(lon), np.cos(lon), 0])
    up = unit(50.0, 10.0)
    north = np.cross(up, east)
    receiver = geometry.earth_fixed(50, 10, 100)
    steps = [
        np.cos(e) * (np.sin(a) * east + np.cos(a) * north) + np.sin(e) * up
        for e, a in (np.radians(direction) for direction in directions)
    ]
    return np.stack([np.stack([receiver + 2.2e7 * step for step in steps])] * 2)


def test_place_keeps_what_is_in_an_arc_and_high_enough() -> None:
    rays = geometry.place(small_arcs(), sky((45, 0), (9.9, 90), (60, 180)), 400e3)
    assert rays.satellites[rays.satellite].tolist() == ["E05", "G02", "E05"]
    assert [rays.pairs[row].name for row in rays.pair] == ["C1C-C5Q", "C1W-C2W", "C1C-C5Q"]
    assert rays.stec.tolist() == [10.0, 30.0, 11.0]
    assert rays.stec_phase.tolist() == [1.0, 3.0, 2.0]
    assert rays.level_sigma.tolist() == [0.1, 0.3, 0.1]
    assert rays.elevation == pytest.approx([45, 60, 45])
    assert rays.azimuth == pytest.approx([0, 180, 0], abs=1e-6)
    assert rays.mapping == pytest.approx([1.339502688, 1.133247061, 1.339502688])
    assert rays.pierce_lat[0] > 50 > rays.pierce_lat[1]
    assert rays.pierce_lon == pytest.approx([10, 10, 10])
    assert rays.time[1] == np.datetime64("2024-01-01", "ns")
    assert rays.time[2] == np.datetime64("2024-01-01T00:00:30", "ns")
    assert 0.01 < rays.noise_sigma[1] < 0.05
    assert rays.receivers[0].name == "MADE"
    assert len(geometry.place(small_arcs(), sky((45, 0), (9.9, 90), (60, 180)), 400e3, 5.0)) == 5


def test_place_passes_over_unknown_positions() -> None:
    positions = sky((45, 0), (30, 90), (60, 180))
    positions[0, 0] = np.nan
    rays = geometry.place(small_arcs(), positions, 400e3)
    assert len(rays) == 4
    assert np.isfinite(rays.pierce_lat).all()
    assert len(geometry.place(small_arcs(), np.full((2, 3, 3), np.nan), 400e3)) == 0


@pytest.mark.parametrize(
    ("positions", "minimum", "words"),
    [
        (np.zeros((2, 2, 3)), 10.0, "needs the shape"),
        (np.zeros((2, 3, 3)), 0.0, "1 to 80"),
        (np.zeros((2, 3, 3)), 85.0, "1 to 80"),
    ],
)
def test_place_refuses_what_makes_no_sense(positions: np.ndarray, minimum: float, words: str) -> None:
    with pytest.raises(Refused, match=words):
        geometry.place(small_arcs(), positions, 400e3, minimum)
