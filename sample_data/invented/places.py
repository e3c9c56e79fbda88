"""Where the invented network stands: receivers, sites and the region.  All names are made up.

The coast is real, so that maps look plausible; nobody and nothing of these names exists there.  Never computes.
"""

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

Floats = npt.NDArray[np.float64]

WGS84_A_M, WGS84_F = 6_378_137.0, 1.0 / 298.257223563  # NIMA TR8350.2


@dataclass(frozen=True)
class Station:
    """An invented receiver: marker, name of its place, position, and its habits.

    gps         "W" brings C1W and C2W, "C" brings C1C and C2W, "CW" brings all three codes
    bad         factor on code multipath
    clock       "steered", "slow" (drifts a few microseconds a day) or "jumps" (a millisecond reset of the codes alone)
    """

    marker: str
    place: str
    lat: float
    lon: float
    height_m: float
    gps: str = "W"
    multipath: float = 1.0
    clock: str = "steered"

    @property
    def position_m(self) -> tuple[float, float, float]:
        """Earth-centred, Earth-fixed position [m], to the tenth of a millimetre, as in the file header."""
        xyz = ecef(np.array(self.lat), np.array(self.lon), np.array(self.height_m))
        return (round(float(xyz[0]), 4), round(float(xyz[1]), 4), round(float(xyz[2]), 4))


# XBS is one of the country codes that ISO 3166 leaves to users: it belongs to no country.
STATIONS = (
    Station("MRGT00XBS", "Marrowgate", -38.27, 142.42, 61.0),
    Station("HLRN00XBS", "Hollerin", -38.71, 143.41, 214.0, clock="slow"),
    Station("TWSK00XBS", "Twinsack", -38.04, 144.33, 38.0, gps="CW"),
    Station("QUDL00XBS", "Quaddle Bay", -38.44, 145.72, 47.0, gps="C"),
    Station("VANP00XBS", "Vantapool", -38.62, 146.08, 55.0),
    Station("LURB00XBS", "Lurbeck", -37.78, 147.83, 84.0, clock="jumps"),
    Station("EDRO00XBS", "Eddrow", -37.52, 149.62, 133.0),
    Station("OXBR00XBS", "Oxbarren", -36.93, 145.24, 121.0, clock="slow"),
    Station("KELM00XBS", "Kelm Isle", -39.93, 143.97, 42.0),
    Station("FENN00XBS", "Fennock Isle", -40.08, 148.06, 33.0),
    Station("SKAR00XBS", "Skarrock", -41.02, 145.06, 96.0, multipath=3.0),
    Station("BRIM00XBS", "Brimmow", -41.31, 146.71, 158.0, gps="C"),
    Station("JASP00XBS", "Jasperell", -41.90, 148.12, 72.0),
    Station("ZOLL00XBS", "Zollhaven", -42.94, 147.08, 207.0, clock="slow"),
)
MARKERS = tuple(station.marker for station in STATIONS)

REGION_NAME = "Tarn Strait"
SOUTH, NORTH, WEST, EAST = -43.5, -36.5, 142.0, 150.0
STEP_DEG, SHELL_HEIGHT_KM = 0.5, 400.0
TIMEZONE = "Etc/GMT-10"

# name, latitude, longitude, kind
SITES = (
    ("Cravendell aerodrome", -37.99, 144.62, "aerodrome"),
    ("Pellbury aerodrome", -38.03, 146.72, "aerodrome"),
    ("Kelm Isle airstrip", -39.80, 143.95, "aerodrome"),
    ("Fennock Isle airstrip", -40.17, 148.08, "aerodrome"),
    ("Stonnet aerodrome", -41.68, 147.02, "aerodrome"),
    ("Ironmoor aerodrome", -42.62, 147.32, "aerodrome"),
    ("Windrace sea-floor survey", -39.60, 146.00, "survey"),
    ("Garnook road survey", -38.33, 143.60, "survey"),
    ("Hobbinstead dam survey", -41.70, 146.35, "survey"),
    ("Eddrow coast survey", -37.60, 149.30, "survey"),
    ("Port Sallow", -38.37, 142.62, "port"),
    ("Port Tamsin", -41.06, 147.10, "port"),
)


def station(marker: str) -> Station:
    """The station of a nine-character marker or its first four letters."""
    for one in STATIONS:
        if one.marker == marker or one.marker[:4] == marker:
            return one
    raise KeyError(f"no invented receiver {marker!r}; there are {', '.join(MARKERS)}")


def ecef(lat: Floats, lon: Floats, height_m: Floats) -> Floats:
    """Earth-fixed positions (..., 3) [m] of geodetic latitudes and longitudes [deg] and heights [m] (WGS 84)."""
    lat_rad, lon_rad = np.radians(lat), np.radians(lon)
    e2 = WGS84_F * (2.0 - WGS84_F)
    prime = WGS84_A_M / np.sqrt(1.0 - e2 * np.sin(lat_rad) ** 2)
    across = (prime + height_m) * np.cos(lat_rad)
    up = (prime * (1.0 - e2) + height_m) * np.sin(lat_rad)
    return np.stack([across * np.cos(lon_rad), across * np.sin(lon_rad), up * np.ones_like(lon_rad)], axis=-1)


def directions(lat: float, lon: float) -> Floats:
    """Unit vectors east, north, up as rows (3, 3) at a place."""
    la, lo = np.radians(lat), np.radians(lon)
    east = [-np.sin(lo), np.cos(lo), 0.0]
    north = [-np.sin(la) * np.cos(lo), -np.sin(la) * np.sin(lo), np.cos(la)]
    up = [np.cos(la) * np.cos(lo), np.cos(la) * np.sin(lo), np.sin(la)]
    return np.array([east, north, up])


def region_toml() -> str:
    """The text of region.toml."""
    lines = [
        "# An invented network on a real coast: every name here is made up.",
        "[region]",
        f'name = "{REGION_NAME}"',
        f"south = {SOUTH}",
        f"north = {NORTH}",
        f"west = {WEST}",
        f"east = {EAST}",
        f"step_deg = {STEP_DEG}",
        f"shell_height_km = {SHELL_HEIGHT_KM}",
        f'timezone = "{TIMEZONE}"',
    ]
    for name, lat, lon, kind in SITES:
        lines += ["", "[[site]]", f'name = "{name}"', f"lat = {lat}", f"lon = {lon}", f'kind = "{kind}"']
    return "\n".join(lines) + "\n"
