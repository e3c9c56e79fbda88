"""Where satellites are at any epoch, from broadcast records or precise tables.

Broadcast: Kepler orbits with corrections (GPS, QZSS, Galileo, BeiDou with its geostationary rotation) and numerical
integration (GLONASS).  Precise: a polynomial through eleven tabulated positions.  Stale or unhealthy records are
refused, never stretched: such places are NaN, and `refused` counts why.  Positions are Earth-fixed, in metres; the
realisations (WGS 84, PZ-90, ITRF ...) agree to centimetres and are not told apart.  Never reads a file.
"""

from collections.abc import Iterator, Sequence
from dataclasses import replace

import numpy as np
import numpy.typing as npt

from skylag.constants import EARTH_ROTATION_RAD_S, SPEED_OF_LIGHT_M_S
from skylag.errors import NotEnough
from skylag.tables import Bools, Ephemerides, Floats, Ints, PreciseOrbits, Times

Source = Ephemerides | PreciseOrbits

# Gravitational constant [m^3/s^2] and rotation [rad/s] as each system's control segment uses them: IS-GPS-200 table
# 20-IV; Galileo OS SIS ICD 5.1.1; BDS-SIS-ICD-2.1 5.2.4.12; GLONASS ICD 5.1, appendix.
_MU = {"G": 3.986005e14, "J": 3.986005e14, "E": 3.986004418e14, "C": 3.986004418e14, "R": 3.986004418e14}
_ROTATION = {"G": 7.2921151467e-5, "J": 7.2921151467e-5, "E": 7.2921151467e-5, "C": 7.292115e-5, "R": 7.292115e-5}
_GLONASS_AXIS_M, _GLONASS_J2 = 6_378_136.0, 1.082_625_7e-3

# How long before and after its reference time a record may be used [s]: half the fit interval of GPS and QZSS
# (IS-GPS-200 20.3.4.4); the others common practice, by the record spacing of each system.  Galileo's records are made
# to run forward: on 2020-06-25 they were 0.9 m from precise orbits up to 2 h after, but 5 m 60 to 90 min before, and
# 11 m earlier still.
AGE_LIMIT_S = {"G": (7200.0, 7200.0), "J": (7200.0, 7200.0), "E": (5400.0, 7200.0), "C": (3600.0, 3600.0),
               "R": (900.0, 900.0)}  # fmt: skip
_AGE_SLACK_S = 1.0  # an epoch on the limit stays inside it when light time is taken off
_WEEK_S = 604_800.0
_GEOSTATIONARY_BEIDOU = frozenset(f"C{n:02d}" for n in (1, 2, 3, 4, 5, 59, 60, 61, 62, 63))
_GEOSTATIONARY_TILT_RAD = np.radians(-5.0)  # BDS-SIS-ICD-2.1, 5.2.4.12

_INTEGRATION_STEP_S = 60.0
POINTS = 11  # tabulated positions under the polynomial
_FEWEST_POINTS = 9  # at the ends of short tables

REASONS = ("used", "no record", "too old", "unhealthy")


def positions(
    source: Source | Sequence[Source], satellites: Sequence[str] | npt.NDArray[np.str_], times: Times
) -> Floats:  # fmt: skip
    """Positions (T, S, 3) [m], Earth-fixed at the epoch itself, NaN where no valid record or table covers it.

    source      one source, or several: precise ones serve first, broadcast ones fill what they lack
    satellites  (S,) names like "G05"
    times       GPS time, (T,) for all satellites alike or (T, S)
    """
    names = [str(name) for name in satellites]
    instants = _per_satellite(times, len(names))
    result = np.full((*instants.shape, 3), np.nan)
    parts = join(source)
    tables = [part for part in parts if isinstance(part, PreciseOrbits)]
    for part in parts:
        if isinstance(part, PreciseOrbits):
            found = _from_table(part, names, instants, beyond=False)
        else:
            found = _from_broadcast(part, names, instants)
        _fill(result, found)
    if np.isnan(result).any():
        for part in tables:  # beyond the ends of a table a broadcast record is better
            _fill(result, _from_table(part, names, instants, beyond=True))
    return result


def _fill(result: Floats, found: Floats) -> None:
    """Put what was found where there is nothing yet."""
    empty = np.isnan(result[..., 0])
    result[empty] = found[empty]


def seen_from(
    source: Source | Sequence[Source], satellites: Sequence[str] | npt.NDArray[np.str_], times: Times,
    receiver_position_m: Sequence[float],
) -> Floats:  # fmt: skip
    """Positions (T, S, 3) [m] where the receiver sees the satellites: at transmission, in the frame at reception.

    The signal left a light time earlier, and the Earth turned meanwhile (IS-GPS-200 20.3.3.4.3.4); both matter less
    than 0.001 degrees.  receiver_position_m is Earth-fixed.
    """
    receiver = np.asarray(receiver_position_m, dtype=np.float64)
    sources = join(source)
    instants = _per_satellite(times, len(satellites))
    there = positions(sources, satellites, instants)
    light_s = np.sqrt(((there - receiver) ** 2).sum(axis=-1)) / SPEED_OF_LIGHT_M_S
    shift = np.rint(np.nan_to_num(light_s, nan=0.075) * 1e9).astype(np.int64).astype("timedelta64[ns]")
    return turned(positions(sources, satellites, instants - shift), light_s)


def turned(position_m: Floats, light_s: Floats) -> Floats:
    """Earth-fixed positions (..., 3) of light_s (...) seconds ago, in the frame of now."""
    angle = EARTH_ROTATION_RAD_S * light_s
    x, y, z = np.moveaxis(position_m, -1, 0)
    cos, sin = np.cos(angle), np.sin(angle)
    return np.stack([x * cos + y * sin, y * cos - x * sin, z], axis=-1)


def join(source: Source | Sequence[Source]) -> tuple[Source, ...]:
    """Sources in the order of use: tables of one spacing merged (days joined), then all broadcast records as one.

    Raises NotEnough when there is none.
    """
    parts = [source] if isinstance(source, Ephemerides | PreciseOrbits) else list(source)
    if not parts:
        raise NotEnough(
            "orbits: no navigation or orbit file was given; add a broadcast navigation file of the day",
            had=0, needed=1, where="orbits",
        )  # fmt: skip
    if len(parts) == 1:
        return (parts[0],)
    tables: dict[int, list[PreciseOrbits]] = {}
    for part in parts:
        if isinstance(part, PreciseOrbits) and len(part.times):
            tables.setdefault(int(_spacing_s(part)), []).append(part)
    joined: list[Source] = [_join_tables(tables[spacing]) for spacing in sorted(tables)]
    records = [part for part in parts if isinstance(part, Ephemerides)]
    if records:
        joined.append(_join_records(records))
    return tuple(joined)


def refused(source: Ephemerides, satellites: Sequence[str], times: Times) -> dict[str, int]:
    """How many places (satellite x epoch) broadcast records cannot serve, by reason of REASONS[1:]."""
    instants = _per_satellite(times, len(satellites))
    counts = dict.fromkeys(REASONS[1:], 0)
    for column, name in enumerate(satellites):
        _, reason = _choose(source, str(name), instants[:, column])
        for code in (1, 2, 3):
            counts[REASONS[code]] += int((reason == code).sum())
    return counts


def channels(source: Source | Sequence[Source]) -> dict[str, int]:
    """GLONASS satellite -> FDMA channel, as the broadcast records tell (the latest record of each counts)."""
    parts = [source] if isinstance(source, Ephemerides | PreciseOrbits) else source
    found: dict[str, int] = {}
    for part in parts:
        if isinstance(part, Ephemerides):
            rows: Ints = np.flatnonzero(np.char.startswith(part.satellites.astype(str), "R"))
            found.update({str(part.satellites[row]): int(part.channels[row]) for row in rows})
    return found


def _per_satellite(times: Times, satellites: int) -> Times:
    """Times as (T, S) nanoseconds."""
    instants = np.asarray(times, dtype="datetime64[ns]")
    if instants.ndim == 1:
        return np.asarray(np.broadcast_to(instants[:, None], (len(instants), satellites)))
    return instants


# ---------------------------------------------------------------------------------------------- broadcast


def _from_broadcast(source: Ephemerides, satellites: list[str], instants: Times) -> Floats:
    """Positions (T, S, 3) of broadcast records."""
    result = np.full((*instants.shape, 3), np.nan)
    glonass: list[tuple[int, Ints]] = []
    for column, name in enumerate(satellites):
        rows, _ = _choose(source, name, instants[:, column])
        usable = np.flatnonzero(rows >= 0)
        if not len(usable):
            continue
        if name[0] == "R":
            glonass.append((column, rows))
            continue
        result[usable, column] = _kepler(source, name, rows[usable], instants[usable, column])
    if glonass:
        columns = np.concatenate([np.full(int((rows >= 0).sum()), column) for column, rows in glonass])
        epochs = np.concatenate([np.flatnonzero(rows >= 0) for _, rows in glonass])
        rows = np.concatenate([rows[rows >= 0] for _, rows in glonass])
        result[epochs, columns] = _integrated(source, rows, instants[epochs, columns])
    return result


def _choose(source: Ephemerides, satellite: str, instants: Times) -> tuple[Ints, Ints]:
    """Row of `source` for each instant, -1 where none serves, and the code of the reason (REASONS).

    The record nearest in time counts; of several with one reference time the one sent last.  If that one says the
    satellite is unhealthy, no older record is used in its place.
    """
    own = np.flatnonzero(source.satellites == satellite)
    rows = np.full(len(instants), -1, dtype=np.int64)
    if not len(own) or satellite[0] not in AGE_LIMIT_S:
        return rows, np.ones(len(instants), dtype=np.int64)
    own = own[np.lexsort((source.sent[own], source.toe[own]))]
    toe = source.toe[own].astype(np.int64)
    own = own[np.append(np.diff(toe) > 0, True)]
    toe = source.toe[own].astype(np.int64)
    at = instants.astype(np.int64)
    borders = (toe[1:] + toe[:-1]) // 2
    nearest = np.searchsorted(borders, at, side="right")
    before_ns, after_ns = (int((limit + _AGE_SLACK_S) * 1e9) for limit in AGE_LIMIT_S[satellite[0]])
    age = at - toe[nearest]
    fresh = (age >= -before_ns) & (age <= after_ns)
    healthy = source.healthy[own[nearest]]
    reason = np.where(~fresh, 2, np.where(~healthy, 3, 0))
    return np.where(reason == 0, own[nearest], -1), reason


def _kepler(source: Ephemerides, satellite: str, rows: Ints, instants: Times) -> Floats:
    """Positions (N, 3) of one satellite: the user algorithm of IS-GPS-200, table 20-IV (and its likes)."""
    system = satellite[0]
    mu, rotation = _MU[system], _ROTATION[system]
    (sqrt_a, e, i0, idot, omega0, omega_dot, omega, m0, delta_n,
     cuc, cus, crc, crs, cic, cis, toe_s) = source.kepler[rows].T  # fmt: skip
    elapsed = (instants.astype(np.int64) - source.toe[rows].astype(np.int64)) / 1e9
    axis = sqrt_a**2
    motion = np.sqrt(mu / axis**3) + delta_n
    if source.rates is not None:  # modernised messages; IS-GPS-200 table 30-II
        axis_rate, motion_rate = source.rates[rows].T
        axis = axis + axis_rate * elapsed
        motion = motion + 0.5 * motion_rate * elapsed
    mean = m0 + motion * elapsed
    eccentric = mean + e * np.sin(mean)
    for _ in range(10):
        step = (mean - eccentric + e * np.sin(eccentric)) / (1 - e * np.cos(eccentric))
        eccentric = eccentric + step
        if np.max(np.abs(step), initial=0.0) < 1e-13:
            break
    sin_e, cos_e = np.sin(eccentric), np.cos(eccentric)
    latitude = np.arctan2(np.sqrt(1 - e**2) * sin_e, cos_e - e) + omega
    sin2, cos2 = np.sin(2 * latitude), np.cos(2 * latitude)
    latitude = latitude + cus * sin2 + cuc * cos2
    radius = axis * (1 - e * cos_e) + crs * sin2 + crc * cos2
    inclination = i0 + idot * elapsed + cis * sin2 + cic * cos2
    along, across = radius * np.cos(latitude), radius * np.sin(latitude)
    fixed = satellite not in _GEOSTATIONARY_BEIDOU
    node = omega0 + (omega_dot - (rotation if fixed else 0.0)) * elapsed - rotation * toe_s
    cos_n, sin_n, cos_i = np.cos(node), np.sin(node), np.cos(inclination)
    x = along * cos_n - across * cos_i * sin_n
    y = along * sin_n + across * cos_i * cos_n
    z = across * np.sin(inclination)
    if not fixed:  # BDS-SIS-ICD-2.1, 5.2.4.12: tilt by -5 degrees about x, then turn with the Earth
        cos_t, sin_t = np.cos(_GEOSTATIONARY_TILT_RAD), np.sin(_GEOSTATIONARY_TILT_RAD)
        y, z = y * cos_t + z * sin_t, -y * sin_t + z * cos_t
        cos_z, sin_z = np.cos(rotation * elapsed), np.sin(rotation * elapsed)
        x, y = x * cos_z + y * sin_z, -x * sin_z + y * cos_z
    return np.stack([x, y, z], axis=-1)


def _acceleration(state: Floats, luni_solar: Floats) -> Floats:
    """Time derivative of GLONASS states (N, 6); GLONASS ICD 5.1, appendix: centre, J2, rotation, Sun and Moon."""
    x, y, z, vx, vy = state[:, :5].T
    square = x**2 + y**2 + z**2
    central = -_MU["R"] / square**1.5
    flattening = 1.5 * _GLONASS_J2 * _MU["R"] * _GLONASS_AXIS_M**2 / square**2.5
    polar = 5 * z**2 / square
    w = _ROTATION["R"]
    ax = central * x - flattening * x * (1 - polar) + w**2 * x + 2 * w * vy
    ay = central * y - flattening * y * (1 - polar) + w**2 * y - 2 * w * vx
    az = central * z - flattening * z * (3 - polar)
    return np.concatenate([state[:, 3:], np.stack([ax, ay, az], axis=-1) + luni_solar], axis=1)


def _runge_kutta(state: Floats, luni_solar: Floats, step_s: Floats | float) -> Floats:
    """GLONASS states (N, 6) a step later: classical Runge-Kutta of fourth order; step_s is (N, 1) or one number."""
    k1 = _acceleration(state, luni_solar)
    k2 = _acceleration(state + 0.5 * step_s * k1, luni_solar)
    k3 = _acceleration(state + 0.5 * step_s * k2, luni_solar)
    k4 = _acceleration(state + step_s * k3, luni_solar)
    return np.asarray(state + step_s / 6 * (k1 + 2 * k2 + 2 * k3 + k4))


def _integrated(source: Ephemerides, rows: Ints, instants: Times) -> Floats:
    """Positions (N, 3) of GLONASS satellites: each record is carried to nodes a minute apart, then to the instant."""
    records, of_record = np.unique(rows, return_inverse=True)
    elapsed = (instants.astype(np.int64) - source.toe[rows].astype(np.int64)) / 1e9
    node = np.trunc(elapsed / _INTEGRATION_STEP_S).astype(np.int64)
    reach = int(np.abs(node).max(initial=0))
    luni_solar = source.state[records, 6:]
    nodes = np.empty((2 * reach + 1, len(records), 6))
    nodes[reach] = source.state[records, :6]
    for step in range(1, reach + 1):
        nodes[reach + step] = _runge_kutta(nodes[reach + step - 1], luni_solar, _INTEGRATION_STEP_S)
        nodes[reach - step] = _runge_kutta(nodes[reach - step + 1], luni_solar, -_INTEGRATION_STEP_S)
    rest = (elapsed - node * _INTEGRATION_STEP_S)[:, None]
    return _runge_kutta(nodes[node + reach, of_record], luni_solar[of_record], rest)[:, :3]


def _join_records(parts: Sequence[Ephemerides]) -> Ephemerides:
    """All records of several tables; ionospheric coefficients of the first that tells them."""
    if len(parts) == 1:
        return parts[0]
    names = ("satellites", "messages", "toe", "sent", "healthy", "accuracy_m", "kepler", "state", "channels",
             "group_delays_s")  # fmt: skip
    ionosphere: dict[str, tuple[float, ...]] = {}
    for part in reversed(parts):
        ionosphere.update(part.ionosphere)
    rates = [part.rates if part.rates is not None else np.zeros((len(part.toe), 2)) for part in parts]
    return Ephemerides(
        **{name: np.concatenate([getattr(part, name) for part in parts]) for name in names},
        ionosphere=ionosphere, rates=np.concatenate(rates),
    )  # fmt: skip


# ---------------------------------------------------------------------------------------------- precise


def _spacing_s(table: PreciseOrbits) -> float:
    """Usual spacing of a table's epochs [s]."""
    if len(table.times) < 2:
        return 900.0
    return float(np.median(np.diff(table.times).astype("timedelta64[ns]").astype(np.int64)) / 1e9)


def _join_tables(parts: Sequence[PreciseOrbits]) -> PreciseOrbits:
    """Tables of one spacing as one; where two tell an epoch, the one that begins later counts (its day is its own)."""
    if len(parts) == 1:
        return parts[0]
    ordered = sorted(parts, key=lambda part: int(part.times[0].astype(np.int64)))
    times = np.unique(np.concatenate([part.times for part in ordered]))
    satellites = np.unique(np.concatenate([part.satellites for part in ordered]))
    position = np.full((len(times), len(satellites), 3), np.nan)
    clock = np.full((len(times), len(satellites)), np.nan)
    for part in ordered:
        place = np.ix_(np.searchsorted(times, part.times), np.searchsorted(satellites, part.satellites))
        told: Bools = np.asarray(np.isfinite(part.position_m).all(axis=-1))
        position[place] = np.where(told[..., None], part.position_m, position[place])
        clock[place] = np.where(told, part.clock_s, clock[place])
    return replace(ordered[0], times=times, satellites=satellites, position_m=position, clock_s=clock)


def _from_table(table: PreciseOrbits, satellites: list[str], instants: Times, beyond: bool) -> Floats:
    """Positions (T, S, 3) by polynomial; NaN outside the table, across gaps and where too few epochs stand together.

    beyond  the polynomial is read up to one spacing before the first and after the last epoch, so that a table of one
            day serves the whole day; metres of error there
    """
    result = np.full((*instants.shape, 3), np.nan)
    column_of = {str(name): column for column, name in enumerate(table.satellites)}
    told: Bools = np.asarray(np.isfinite(table.position_m).all(axis=-1))
    # Satellites tabulated at the same epochs and wanted at the same instants share their weights.
    alike: dict[tuple[int, bytes], list[int]] = {}
    shared = instants.strides[1] == 0
    for column, name in enumerate(satellites):
        if name in column_of:
            key = (0 if shared else column, told[:, column_of[name]].tobytes())
            alike.setdefault(key, []).append(column)
    for columns in alike.values():
        own = [column_of[satellites[column]] for column in columns]
        at = instants[:, columns[0]].astype(np.int64)
        for inside, weight, rows in _weights(table, told[:, own[0]], at, beyond):
            value = weight @ table.position_m[rows][:, own].reshape(len(rows), -1)
            result[np.ix_(inside, np.array(columns))] = value.reshape(len(inside), len(columns), 3)
    return result


def _weights(table: PreciseOrbits, told: Bools, at: Ints, beyond: bool) -> Iterator[tuple[Ints, Floats, Ints]]:
    """For each unbroken run of told epochs: numbers of the instants it serves, weights (instants, run), the run."""
    spacing_ns = int(_spacing_s(table) * 1e9)
    epochs = table.times.astype(np.int64)
    rows: Ints = np.flatnonzero(told)
    if not len(rows):
        return
    for run in np.split(rows, np.flatnonzero(np.diff(epochs[rows]) != spacing_ns) + 1):
        if len(run) < _FEWEST_POINTS:
            continue
        before = spacing_ns if beyond and run[0] == 0 else 1
        after = spacing_ns if beyond and run[-1] == len(epochs) - 1 else 1
        inside: Ints = np.flatnonzero((at > epochs[run[0]] - before) & (at < epochs[run[-1]] + after))
        if len(inside):
            yield inside, _lagrange((at[inside] - epochs[run[0]]) / spacing_ns, len(run)), run


def _lagrange(place: Floats, nodes: int) -> Floats:
    """Weights (N, nodes) that give the value at fractional places of equally spaced nodes: barycentric form.

    The polynomial goes through POINTS nodes around the place, at the ends through the last ones.
    """
    points = min(POINTS, nodes)
    first = np.clip(np.rint(place).astype(np.int64) - points // 2, 0, nodes - points)
    signs = np.array([(-1.0) ** k for k in range(points)])
    binomial = np.cumprod([1.0] + [(points - 1 - k) / (k + 1) for k in range(points - 1)])
    away = (place - first)[:, None] - np.arange(points)
    exact: Bools = np.abs(away) < 1e-10
    weight = signs * binomial / np.where(exact, 1.0, away)
    hit: Bools = np.asarray(exact.any(axis=1))
    weight = np.where(hit[:, None], exact, weight)
    weight /= weight.sum(axis=1, keepdims=True)
    spread = np.zeros((len(place), nodes))
    np.put_along_axis(spread, first[:, None] + np.arange(points), weight, axis=1)
    return spread
