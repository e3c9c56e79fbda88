"""Nominal GPS and Galileo constellations, their clocks and code biases, and the navigation file of a day.

GPS: the 24 baseline slots of the GPS Standard Positioning Service Performance Standard (orbit radius 26 559.7 km,
inclination 55 deg; right ascensions and arguments of latitude, from memory).  Galileo: Walker 24/3/1, 56 deg, radius
29 599.8 km (Galileo OS Service Definition Document, from memory).  Positions follow the broadcast Kepler algorithm
(IS-GPS-200 table 20-IV) on the very elements that the file carries.  Eccentricities, clocks and biases are invented.
No orbit errors: the file and the truth agree.
"""

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
import numpy.typing as npt

from invented.places import Station, directions
from skylag.tables import Ephemerides
from skylag.timescales import week_and_second

Floats = npt.NDArray[np.float64]
Times = npt.NDArray[np.datetime64]

LIGHT_M_S = 299_792_458.0
EARTH_RATE = 7.2921151467e-5  # rad/s, IS-GPS-200
MU = {"G": 3.986005e14, "E": 3.986004418e14}  # m^3/s^2, IS-GPS-200; Galileo OS SIS ICD
RELATIVITY = {"G": -4.442807633e-10, "E": -4.442807309e-10}  # s/sqrt(m), the same documents
GAMMA = {"G": (1575.42 / 1227.60) ** 2, "E": (1575.42 / 1176.45) ** 2}
REFERENCE = np.datetime64("2031-03-11T00:00:00", "ns")  # the elements are given at this GPS time

GPS_RADIUS_M, GPS_INCLINATION_DEG = 26_559_700.0, 55.0
GPS_NODES_DEG = {"A": 272.847, "B": 332.847, "C": 32.847, "D": 92.847, "E": 152.847, "F": 212.847}
GPS_SLOTS_DEG = {
    "A": (268.126, 161.786, 11.676, 41.806),
    "B": (80.956, 173.336, 309.976, 204.376),
    "C": (111.876, 11.796, 339.666, 241.556),
    "D": (135.226, 265.446, 35.156, 167.356),
    "E": (197.046, 302.596, 66.066, 333.686),
    "F": (238.886, 345.226, 105.206, 135.346),
}
GALILEO_RADIUS_M, GALILEO_INCLINATION_DEG = 29_599_800.0, 56.0
GALILEO_FIRST_NODE_DEG, GALILEO_FIRST_SLOT_DEG = 77.632, 15.153  # then 120 deg between planes, 45 and 15 deg within


def _sidereal_deg(instant: np.datetime64) -> float:
    """Greenwich mean sidereal angle [deg], linear part (Astronomical Almanac; from memory), UT1 taken as GPS time."""
    days = float((instant - np.datetime64("2000-01-01T12:00:00", "ns")) / np.timedelta64(1, "s")) / 86400.0
    return (280.46061837 + 360.98564736629 * days) % 360.0


@dataclass(frozen=True)
class Constellation:
    """Elements at REFERENCE, one per satellite (S,): SI units and radians; node is the Earth-fixed longitude then."""

    satellites: npt.NDArray[np.str_]
    system: npt.NDArray[np.str_]
    a: Floats
    e: Floats
    i0: Floats
    idot: Floats
    node: Floats
    node_rate: Floats
    omega: Floats
    m0: Floats
    delta_n: Floats
    harmonics: Floats  # (S, 6): cuc cus crc crs cic cis
    clock_s: Floats
    clock_rate: Floats
    group_delay_s: Floats  # TGD or BGD as the file gives it
    bias_ns: dict[str, Floats]  # "C1C", "C1W", "C2W", "C5Q" -> (S,), NaN where the system has no such code

    def mu(self) -> Floats:
        """Gravity constant of each satellite's system."""
        return np.array([MU[s] for s in self.system])


@lru_cache(maxsize=4)
def constellation(seed: int = 2031) -> Constellation:
    """The 24 GPS and 24 Galileo satellites, sorted by name; invented parts drawn from the seed."""
    rng = np.random.default_rng([seed, 11])
    sidereal = _sidereal_deg(REFERENCE)
    slots: list[tuple[str, float, float]] = []
    for plane, plane_node in GPS_NODES_DEG.items():
        slots += [("G", plane_node, u) for u in GPS_SLOTS_DEG[plane]]
    for plane_number in range(3):
        plane_node = GALILEO_FIRST_NODE_DEG + 120.0 * plane_number
        slots += [("E", plane_node, GALILEO_FIRST_SLOT_DEG + 15.0 * plane_number + 45.0 * k) for k in range(8)]
    order = rng.permutation(24)  # satellite numbers are not in the order of the planes
    gps, galileo = [slots[k] for k in order], [slots[24 + k] for k in rng.permutation(24)]
    rows = galileo + gps
    names = np.array([f"E{k + 1:02d}" for k in range(24)] + [f"G{k + 1:02d}" for k in range(24)])
    system = np.array([r[0] for r in rows])
    is_gps = system == "G"
    count = len(rows)
    a = np.where(is_gps, GPS_RADIUS_M, GALILEO_RADIUS_M)
    e = np.where(is_gps, rng.uniform(0.0005, 0.012, count), rng.uniform(0.00005, 0.0005, count))
    i0 = np.radians(np.where(is_gps, GPS_INCLINATION_DEG, GALILEO_INCLINATION_DEG) + rng.uniform(-0.4, 0.4, count))
    omega = rng.uniform(-np.pi, np.pi, count)
    latitude_argument = np.radians([r[2] for r in rows])
    node = np.radians(np.array([r[1] for r in rows]) - sidereal)
    harmonics = rng.normal(0.0, 1.0, (count, 6)) * np.array([1.5e-6, 1.5e-6, 60.0, 30.0, 6e-8, 6e-8])
    mean_motion = np.sqrt(np.array([MU[s] for s in system]) / a**3)
    # Turning of the node by the Earth's flattening (first order, J2 = 1.08263e-3).
    node_rate = -1.5 * mean_motion * 1.08263e-3 * (6_378_137.0 / a) ** 2 * np.cos(i0)

    # The difference of code biases is what can be seen; the mean over a constellation is nobody's, so it is set to 0.
    difference = rng.uniform(-8.0, 8.0, count)
    for s in ("G", "E"):
        difference[system == s] -= difference[system == s].mean()
    gamma = np.array([GAMMA[s] for s in system])
    delay = difference / (1.0 - gamma)  # ns; the ionosphere-free combination carries no bias: it is in the clock
    first, second = delay, gamma * delay
    civil = rng.uniform(-1.5, 1.5, count)
    civil[is_gps] -= civil[is_gps].mean()
    nan = np.full(count, np.nan)
    bias = {
        "C1W": np.where(is_gps, first, nan),
        "C2W": np.where(is_gps, second, nan),
        "C1C": np.where(is_gps, first + civil, first),
        "C5Q": np.where(is_gps, nan, second),
    }
    step = np.where(is_gps, 2.0**-31, 2.0**-32)  # resolution of the broadcast group delays
    return Constellation(
        satellites=names, system=system, a=a, e=e, i0=i0, idot=rng.normal(0.0, 1e-10, count), node=node,
        node_rate=node_rate, omega=omega, m0=latitude_argument - omega, delta_n=rng.normal(4e-9, 5e-10, count),
        harmonics=harmonics, clock_s=rng.uniform(-4e-4, 4e-4, count), clock_rate=rng.normal(0.0, 4e-12, count),
        group_delay_s=np.rint(delay * 1e-9 / step) * step, bias_ns=bias,
    )  # fmt: skip


def positions(sky: Constellation, seconds: Floats) -> tuple[Floats, Floats]:
    """Earth-fixed positions [m] at the very instant and clock offsets [s].

    seconds  (E, S) GPS time since REFERENCE, one instant for each satellite (they differ by light time)
    returns  position (E, S, 3) in the frame of that instant, clock offset (E, S) with the relativistic term
    """
    rate = np.sqrt(sky.mu() / sky.a**3) + sky.delta_n
    mean = sky.m0 + rate * seconds
    anomaly = mean + sky.e * np.sin(mean)
    for _ in range(6):
        anomaly = anomaly - (anomaly - sky.e * np.sin(anomaly) - mean) / (1.0 - sky.e * np.cos(anomaly))
    true = np.arctan2(np.sqrt(1.0 - sky.e**2) * np.sin(anomaly), np.cos(anomaly) - sky.e)
    phi = true + sky.omega
    cuc, cus, crc, crs, cic, cis = sky.harmonics.T
    sine, cosine = np.sin(2 * phi), np.cos(2 * phi)
    u = phi + cuc * cosine + cus * sine
    r = sky.a * (1.0 - sky.e * np.cos(anomaly)) + crc * cosine + crs * sine
    i = sky.i0 + sky.idot * seconds + cic * cosine + cis * sine
    node = sky.node + (sky.node_rate - EARTH_RATE) * seconds
    x, y = r * np.cos(u), r * np.sin(u)
    across = y * np.cos(i)
    position = np.stack(
        [x * np.cos(node) - across * np.sin(node), x * np.sin(node) + across * np.cos(node), y * np.sin(i)], axis=-1
    )
    relativity = np.array([RELATIVITY[s] for s in sky.system]) * sky.e * np.sqrt(sky.a) * np.sin(anomaly)
    return position, sky.clock_s + sky.clock_rate * seconds + relativity


def seen_from(
    sky: Constellation, position_m: tuple[float, float, float], seconds: Floats
) -> tuple[Floats, Floats, Floats]:
    """What a receiver meets at true GPS times (E,): satellite positions in the frame of reception, range, clock.

    returns  position (E, S, 3) [m], geometric range (E, S) [m] with light time and Earth rotation, clock (E, S) [s]
    """
    place = np.array(position_m)
    travel = np.full((len(seconds), len(sky.a)), 0.075)
    for _ in range(3):
        at, clock = positions(sky, seconds[:, None] - travel)
        angle = EARTH_RATE * travel
        turned = np.stack(
            [
                at[..., 0] * np.cos(angle) + at[..., 1] * np.sin(angle),
                -at[..., 0] * np.sin(angle) + at[..., 1] * np.cos(angle),
                at[..., 2],
            ],
            axis=-1,
        )
        distance = np.sqrt(((turned - place) ** 2).sum(axis=-1))
        travel = distance / LIGHT_M_S
    return turned, distance, clock


def look_from(sky: Constellation, station: Station, seconds: Floats) -> tuple[Floats, Floats, Floats, Floats, Floats]:
    """Elevation and azimuth [deg] (E, S) at a station at true GPS times (E,), and what `seen_from` gives."""
    position, distance, clock = seen_from(sky, station.position_m, seconds)
    unit = (position - np.array(station.position_m)) / distance[..., None]
    east, north, up = ((unit * axis).sum(axis=-1) for axis in directions(station.lat, station.lon))
    return np.degrees(np.arcsin(up)), np.degrees(np.arctan2(east, north)) % 360.0, position, distance, clock


# ------------------------------------------------------------------------------------------ the navigation message


def _records(sky: Constellation, day: np.datetime64) -> list[tuple[int, np.datetime64, dict[str, float]]]:
    """(satellite number, toe, fields) of a day: GPS every two hours, Galileo every hour, both midnights inside."""
    start = day.astype("datetime64[D]").astype("datetime64[ns]")
    rows: list[tuple[int, np.datetime64, dict[str, float]]] = []
    mean_motion = np.sqrt(sky.mu() / sky.a**3) + sky.delta_n
    for hour in range(25):
        toe = start + np.timedelta64(hour, "h")
        elapsed = float((toe - REFERENCE) / np.timedelta64(1, "s"))
        toe_s = float(week_and_second(toe)[1])
        for k, system in enumerate(sky.system):
            if system == "G" and hour % 2:
                continue
            node = sky.node[k] + (sky.node_rate[k] - EARTH_RATE) * elapsed + EARTH_RATE * toe_s
            mean = sky.m0[k] + mean_motion[k] * elapsed
            cuc, cus, crc, crs, cic, cis = (float(v) for v in sky.harmonics[k])
            fields = {
                "sqrt_a": float(np.sqrt(sky.a[k])), "e": float(sky.e[k]),
                "i0": float(sky.i0[k] + sky.idot[k] * elapsed), "idot": float(sky.idot[k]),
                "omega0": float((node + np.pi) % (2 * np.pi) - np.pi), "omega_dot": float(sky.node_rate[k]),
                "omega": float(sky.omega[k]), "m0": float((mean + np.pi) % (2 * np.pi) - np.pi),
                "delta_n": float(sky.delta_n[k]), "cuc": cuc, "cus": cus, "crc": crc, "crs": crs, "cic": cic,
                "cis": cis, "toe_s": toe_s,
                "af0": float(sky.clock_s[k] + sky.clock_rate[k] * elapsed), "af1": float(sky.clock_rate[k]),
                "delay": float(sky.group_delay_s[k]), "issue": float(hour + 1),
            }  # fmt: skip
            rows.append((k, toe, fields))
    return rows


def ephemerides(sky: Constellation, day: np.datetime64) -> Ephemerides:
    """The navigation file of a day as the table that its reader gives."""
    rows = _records(sky, day)
    numbers = np.array([k for k, _, _ in rows])
    gps = sky.system[numbers] == "G"
    toe = np.array([t for _, t, _ in rows], dtype="datetime64[ns]")
    delay = np.array([f["delay"] for _, _, f in rows])
    return Ephemerides(
        satellites=sky.satellites[numbers],
        messages=np.where(gps, "LNAV", "FNAV"),
        toe=toe,
        sent=np.asarray(toe - np.timedelta64(3600, "s"), dtype="datetime64[ns]"),
        healthy=np.ones(len(rows), dtype=bool),
        accuracy_m=np.where(gps, 2.0, 3.12),
        kepler=np.array([[f[name] for name in Ephemerides.KEPLER] for _, _, f in rows]),
        state=np.full((len(rows), 9), np.nan),
        channels=np.zeros(len(rows), dtype=np.int64),
        group_delays_s=np.stack([delay, np.where(gps, np.nan, 0.0)], axis=1),
    )


def _number(value: float) -> str:
    """A RINEX 3 navigation number, D19.12 with the exponent letter e."""
    text = f"{value:.12e}"
    mantissa, exponent = text.split("e")
    return f"{mantissa}e{int(exponent):+03d}".rjust(19)


def navigation_text(sky: Constellation, day: np.datetime64) -> str:
    """RINEX 3.05 navigation file of a day, GPS LNAV and Galileo F/NAV records, without a time of writing."""
    lines = [
        f"{'     3.05':<20}{'N: GNSS NAV DATA':<20}{'M: MIXED':<20}RINEX VERSION / TYPE",
        f"{'invented network':<20}{'sample data':<20}{'20310101 000000 GPS':<20}PGM / RUN BY / DATE",
        f"{'INVENTED DATA: no satellite ever sent this.':<60}COMMENT",
        f"{'    18':<60}LEAP SECONDS",
        f"{'':<60}END OF HEADER",
    ]
    for k, toe, f in _records(sky, day):
        when = str(toe.astype("datetime64[s]")).replace("-", " ").replace("T", " ").replace(":", " ")
        week, _ = week_and_second(toe)
        sent = f["toe_s"] - 3600.0
        gps = sky.system[k] == "G"
        lines.append(f"{sky.satellites[k]} {when}{_number(f['af0'])}{_number(f['af1'])}{_number(0.0)}")
        # Galileo data sources: bit 1 = F/NAV E5a-I, bit 8 = clock of E5a, E1 (RINEX 3.05, table A8).
        orbit = [
            (f["issue"], f["crs"], f["delta_n"], f["m0"]),
            (f["cuc"], f["e"], f["cus"], f["sqrt_a"]),
            (f["toe_s"], f["cic"], f["omega0"], f["cis"]),
            (f["i0"], f["crc"], f["omega"], f["omega_dot"]),
            (f["idot"], 1.0 if gps else 258.0, float(week), 0.0),
            (2.0, 0.0, f["delay"], f["issue"]) if gps else (3.12, 0.0, f["delay"], 0.0),
            (sent, 4.0) if gps else (sent,),
        ]
        lines += ["    " + "".join(_number(v) for v in values) for values in orbit]
    return "\n".join(lines) + "\n"
