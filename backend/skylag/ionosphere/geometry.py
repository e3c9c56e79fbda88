"""Directions to satellites, points where rays pierce the shell, and the mapping from slant to vertical.

The shell is a sphere concentric with a spherical Earth, as in maps of vertical content (IONEX 1.0; RTCA DO-229,
A.4.4.10).  Elevation and azimuth are geodetic: against the normal of the ellipsoid at the receiver.  The receiver's
geodetic latitude and longitude then stand for its place on the sphere, so pierce points are in the same latitude as
receivers and coast lines.  Against a strictly geocentric reckoning this moves pierce points by up to 0.19 degrees of
latitude, all alike in one region.  Never reads a file.
"""

from collections.abc import Sequence

import numpy as np
import numpy.typing as npt

from skylag.constants import REFRACTION_M3_S2, SHELL_EARTH_RADIUS_M, TECU, WGS84_A_M, WGS84_F
from skylag.errors import Refused
from skylag.tables import Arcs, Floats, Rays

# Carrier-phase noise of one frequency [m]: a constant and a part growing with the path through the lower atmosphere,
# sigma^2 = a^2 + (b / sin elevation)^2.  Common practice for geodetic receivers.  The part that is white from epoch to
# epoch is smaller (0.003 to 0.02 TECU in fourth differences of real receivers); the rest stands for multipath of phase.
PHASE_NOISE_M = (0.0015, 0.0010)


def geodetic(position_m: npt.ArrayLike) -> tuple[Floats, Floats, Floats]:
    """Latitude [deg], longitude [deg, -180 to 180] and ellipsoidal height [m] of Earth-fixed positions (..., 3)."""
    x, y, z = np.moveaxis(np.asarray(position_m, dtype=np.float64), -1, 0)
    e2 = WGS84_F * (2 - WGS84_F)
    across = np.hypot(x, y)
    lat_rad = np.arctan2(z, across * (1 - e2))
    for _ in range(6):
        normal = WGS84_A_M / np.sqrt(1 - e2 * np.sin(lat_rad) ** 2)
        lat_rad = np.arctan2(z + e2 * normal * np.sin(lat_rad), across)
    normal = WGS84_A_M / np.sqrt(1 - e2 * np.sin(lat_rad) ** 2)
    height = across * np.cos(lat_rad) + z * np.sin(lat_rad) - WGS84_A_M**2 / normal
    return np.degrees(lat_rad), np.degrees(np.arctan2(y, x)), height


def geocentric_latitude(lat: npt.ArrayLike) -> Floats:
    """Geocentric latitude [deg], the angle at the Earth's centre, of places of geodetic latitude [deg] (WGS 84)."""
    return np.asarray(np.degrees(np.arctan((1.0 - WGS84_F) ** 2 * np.tan(np.radians(lat)))))


def geodetic_latitude(geocentric: npt.ArrayLike) -> Floats:
    """Geodetic latitude [deg] of places of geocentric latitude [deg], on the ellipsoid."""
    return np.asarray(np.degrees(np.arctan(np.tan(np.radians(geocentric)) / (1.0 - WGS84_F) ** 2)))


def earth_fixed(lat: npt.ArrayLike, lon: npt.ArrayLike, height_m: npt.ArrayLike) -> Floats:
    """Earth-fixed positions (..., 3) [m] of geodetic latitude, longitude [deg] and height [m] (WGS 84)."""
    lat_rad, lon_rad = np.radians(lat), np.radians(lon)
    height = np.asarray(height_m, dtype=np.float64)
    e2 = WGS84_F * (2 - WGS84_F)
    normal = WGS84_A_M / np.sqrt(1 - e2 * np.sin(lat_rad) ** 2)
    across = (normal + height) * np.cos(lat_rad)
    up = (normal * (1 - e2) + height) * np.sin(lat_rad)
    return np.stack(np.broadcast_arrays(across * np.cos(lon_rad), across * np.sin(lon_rad), up), axis=-1)


def look(receiver_position_m: Sequence[float], satellite_positions: Floats) -> tuple[Floats, Floats]:
    """Elevation and azimuth [deg, azimuth 0 to 360 from north over east] of satellites (..., 3) from one receiver."""
    receiver = np.asarray(receiver_position_m, dtype=np.float64)
    lat, lon, _ = geodetic(receiver)
    lat_rad, lon_rad = np.radians(lat), np.radians(lon)
    sin_lat, cos_lat, sin_lon, cos_lon = np.sin(lat_rad), np.cos(lat_rad), np.sin(lon_rad), np.cos(lon_rad)
    axes = np.array(
        [
            [-sin_lon, cos_lon, 0.0],
            [-sin_lat * cos_lon, -sin_lat * sin_lon, cos_lat],
            [cos_lat * cos_lon, cos_lat * sin_lon, sin_lat],
        ]
    )
    east, north, up = np.moveaxis((np.asarray(satellite_positions) - receiver) @ axes.T, -1, 0)
    elevation = np.degrees(np.arctan2(up, np.hypot(east, north)))
    return elevation, np.mod(np.degrees(np.arctan2(east, north)), 360.0)


def pierce(
    lat: npt.ArrayLike, lon: npt.ArrayLike, elevation: npt.ArrayLike, azimuth: npt.ArrayLike, shell_height_m: float,
    earth_radius_m: float = SHELL_EARTH_RADIUS_M,
) -> tuple[Floats, Floats]:  # fmt: skip
    """Latitude and longitude [deg, -180 to 180] where rays pierce the shell (RTCA DO-229, A.4.4.10.1; any quadrant)."""
    lat_rad, azimuth_rad = np.radians(lat), np.radians(azimuth)
    angle = np.radians(earth_angle(elevation, shell_height_m, earth_radius_m))
    sin_lat = np.sin(lat_rad) * np.cos(angle) + np.cos(lat_rad) * np.sin(angle) * np.cos(azimuth_rad)
    pierce_lat_rad = np.arcsin(np.clip(sin_lat, -1.0, 1.0))
    east = np.sin(angle) * np.sin(azimuth_rad) * np.cos(lat_rad)
    further = np.arctan2(east, np.cos(angle) - np.sin(lat_rad) * sin_lat)
    pierce_lon = np.mod(np.asarray(lon, dtype=np.float64) + np.degrees(further) + 180.0, 360.0) - 180.0
    return np.degrees(pierce_lat_rad), pierce_lon


def earth_angle(
    elevation: npt.ArrayLike, shell_height_m: float, earth_radius_m: float = SHELL_EARTH_RADIUS_M
) -> Floats:  # fmt: skip
    """Angle [deg] at the Earth's centre between receiver and pierce point."""
    elevation_rad = np.radians(elevation)
    at_shell_rad = np.arcsin(earth_radius_m * np.cos(elevation_rad) / (earth_radius_m + shell_height_m))
    return np.asarray(np.degrees(np.pi / 2 - elevation_rad - at_shell_rad))


def mapping(elevation: npt.ArrayLike, shell_height_m: float, earth_radius_m: float = SHELL_EARTH_RADIUS_M) -> Floats:
    """Slant over vertical content of a thin shell: 1 at the zenith, growing downwards."""
    sine = earth_radius_m * np.cos(np.radians(elevation)) / (earth_radius_m + shell_height_m)
    return np.asarray(1.0 / np.sqrt(1.0 - sine**2))


# Mappings to choose from in `place`.
SINGLE_LAYER, MODIFIED_SINGLE_LAYER = "single layer", "modified single layer"


def modified_mapping(elevation: npt.ArrayLike) -> Floats:
    """Slant over vertical content of the modified single layer: 1 at the zenith, growing downwards, below a thin shell.

    sin z' = R / (R + 506.7 km) sin(0.9782 z) with R = 6371 km, fitted to a slab with a plasmasphere in it (Schaer 1999,
    as global maps use it; constants from memory).  To go with no high layer of its own in the adjustment.
    """
    share = SHELL_EARTH_RADIUS_M / (SHELL_EARTH_RADIUS_M + 506.7e3)
    sine = share * np.sin(0.9782 * np.radians(90.0 - np.asarray(elevation, dtype=np.float64)))
    return np.asarray(1.0 / np.sqrt(1.0 - sine**2))


def phase_noise(elevation: Floats, f1_hz: Floats, f2_hz: Floats) -> Floats:
    """Noise [TECU] of slant content from the difference of two phases, each as noisy as PHASE_NOISE_M says."""
    per_tecu_m = REFRACTION_M3_S2 * TECU * np.abs(1 / f2_hz**2 - 1 / f1_hz**2)
    one_m = np.sqrt(PHASE_NOISE_M[0] ** 2 + (PHASE_NOISE_M[1] / np.sin(np.radians(elevation))) ** 2)
    return np.asarray(np.sqrt(2.0) * one_m / per_tecu_m)


def place(
    arcs: Arcs, satellite_positions: Floats, shell_height_m: float, minimum_elevation_deg: float = 10.0,
    mapping_function: str = SINGLE_LAYER,
) -> Rays:  # fmt: skip
    """The rays of one receiver: every point of an arc whose satellite stands at the minimum elevation or higher.

    satellite_positions  (epochs, satellites, 3) as seen from the receiver (`orbits.seen_from`), NaN where unknown
    mapping_function  SINGLE_LAYER at the shell's height, or MODIFIED_SINGLE_LAYER; pierce points are on the shell
    Raises Refused for an elevation outside 1 to 80 degrees, positions of another shape, an unknown mapping.
    """
    observations = arcs.observations
    shape = observations.code1.shape
    if satellite_positions.shape != (*shape, 3):
        raise Refused(
            f"satellite positions: {observations.receiver.name} needs the shape {(*shape, 3)}, "
            f"got {satellite_positions.shape}; ask for the observations' own epochs and satellites",
            name="satellite_positions", value=satellite_positions.shape, allowed=(*shape, 3),
        )  # fmt: skip
    if not 1.0 <= minimum_elevation_deg <= 80.0:
        raise Refused(
            f"minimum elevation: {minimum_elevation_deg:g} degrees; 1 to 80 can be asked for",
            name="minimum_elevation_deg", value=minimum_elevation_deg, allowed=(1.0, 80.0),
        )  # fmt: skip
    if mapping_function not in (SINGLE_LAYER, MODIFIED_SINGLE_LAYER):
        raise Refused(
            f"mapping: {mapping_function!r} is none; use {SINGLE_LAYER!r} or {MODIFIED_SINGLE_LAYER!r}",
            name="mapping_function", value=mapping_function, allowed=(SINGLE_LAYER, MODIFIED_SINGLE_LAYER),
        )  # fmt: skip
    elevation, azimuth = look(observations.receiver.position_m, satellite_positions)
    with np.errstate(invalid="ignore"):
        wanted = (arcs.arc >= 0) & (elevation >= minimum_elevation_deg) & np.isfinite(arcs.stec)
    epoch, satellite = np.nonzero(wanted)
    elevation, azimuth = elevation[wanted], azimuth[wanted]
    lat, lon, _ = geodetic(observations.receiver.position_m)
    pierce_lat, pierce_lon = pierce(lat, lon, elevation, azimuth, shell_height_m)
    systems = list(observations.pairs)
    pair_of_satellite = np.array([systems.index(str(name)[0]) for name in observations.satellites], dtype=np.int64)
    arc = arcs.arc[wanted]
    return Rays(
        receivers=(observations.receiver,),
        satellites=observations.satellites,
        pairs=tuple(observations.pairs.values()),
        shell_height_m=shell_height_m,
        time=observations.times[epoch],
        receiver=np.zeros(len(epoch), dtype=np.int64),
        satellite=satellite.astype(np.int64),
        arc=arc,
        pair=pair_of_satellite[satellite],
        elevation=elevation,
        azimuth=azimuth,
        pierce_lat=pierce_lat,
        pierce_lon=pierce_lon,
        mapping=(
            mapping(elevation, shell_height_m) if mapping_function == SINGLE_LAYER else modified_mapping(elevation)
        ),
        stec=arcs.stec[wanted],
        stec_phase=arcs.stec_phase[wanted],
        noise_sigma=phase_noise(elevation, observations.f1_hz[satellite], observations.f2_hz[satellite]),
        level_sigma=arcs.arc_level_sigma[arc],
        interval_s=observations.interval_s,
    )
