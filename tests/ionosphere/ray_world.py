"""A small invented world of rays with known biases, made directly as rays: quick enough for many adjustments."""

from dataclasses import dataclass, replace

import numpy as np

from skylag.ionosphere import adjustment, geometry
from skylag.ionosphere.plasmasphere import slant_shape
from skylag.tables import Biases, Floats, Rays, Receiver, SignalPair, concatenate

DAY = np.datetime64("2031-05-05T00:00:00", "ns")
NONE = np.datetime64("NaT", "ns")
GPS = SignalPair("G", "C1W", "C2W", "L1W", "L2W")
GPS_CIVIL = SignalPair("G", "C1C", "C2W", "L1C", "L2W")
GALILEO = SignalPair("E", "C1C", "C5Q", "L1C", "L5Q")
GLONASS = SignalPair("R", "C1P", "C2P", "L1P", "L2P")
PLACES = ((-38.3, 142.4), (-37.5, 149.6), (-40.1, 146.1), (-41.9, 148.1), (-42.9, 147.1), (-39.9, 143.9))


@dataclass(frozen=True)
class World:
    """Rays, the GLONASS channels, and the truth: (kind, name, pair name) -> ns; content (rays,) straight up [TECU]."""

    rays: Rays
    channels: dict[str, int]
    bias: dict[tuple[str, str, str], float]
    content: Floats

    def errors(self, biases: Biases) -> Floats:
        """Estimate less truth [ns], per row."""
        keys = zip(biases.kind, biases.name, biases.code1, biases.code2, strict=True)
        return np.array([v - self.bias[str(k), str(n), f"{a}-{b}"]
                         for (k, n, a, b), v in zip(keys, biases.value_ns, strict=True)])  # fmt: skip

    def only(self, chosen: np.ndarray) -> "World":
        """The world with fewer rays."""
        return replace(self, rays=self.rays.where(chosen), content=self.content[chosen])

    def product(self, pair: SignalPair, shift_ns: float = 0.0, sigma_ns: float = 0.01, source: str = "product X",
                start: np.datetime64 = NONE, end: np.datetime64 = NONE) -> Biases:  # fmt: skip
        """The true satellite biases of a pair as a published table."""
        names = [n for k, n, p in self.bias if k == "satellite" and p == pair.name and n[0] == pair.system]
        values = [self.bias["satellite", n, pair.name] + shift_ns for n in names]
        return records("satellite", names, pair.system, pair.code1, pair.code2, values, sigma_ns, source, start, end)


def records(
    kind: str, names: list[str], system: str, code1: str, code2: str, values: list[float], sigma_ns: float = 0.01,
    source: str = "product X", start: np.datetime64 = NONE, end: np.datetime64 = NONE,
) -> Biases:  # fmt: skip
    """Bias records of one kind and pair of codes."""
    count = len(names)
    return Biases(
        kind=np.full(count, kind), name=np.array(names), system=np.full(count, system), code1=np.full(count, code1),
        code2=np.full(count, code2), value_ns=np.array(values, dtype=float), sigma_ns=np.full(count, sigma_ns),
        start=np.full(count, start), end=np.full(count, end), source=source,
    )  # fmt: skip


def smooth_content(lat: Floats, lon: Floats, hours: Floats) -> Floats:
    """Vertical content [TECU] of the dense layer: a daily bulge and slopes, within reach of the adjustment's model."""
    x, y = (np.mod(lon - 145.0, 360.0) - 0.0) , lat + 40.0
    x = np.where(x > 180.0, x - 360.0, x)
    day = 12.0 + 8.0 * np.sin(2 * np.pi * (hours - 6.0) / 24.0)
    return np.asarray(day * (1.0 + 0.03 * y + 0.01 * x + 0.001 * y * y) + 0.05 * x * np.sin(2 * np.pi * hours / 12.0))


def make(
    rng: np.random.Generator,
    pairs_of: tuple[tuple[SignalPair, ...], ...] = ((GPS, GALILEO),) * 6,
    hours: tuple[float, float] = (0.0, 24.0),
    satellites: int = 14,
    level_sigma: float = 0.3,
    plasmasphere: float = 1.0,
    foot_exponent: float = 1.0,
    lon_shift: float = 0.0,
    noise: float = 0.02,
) -> World:
    """One receiver per entry of `pairs_of`, each on its signal pairs; every satellite passes twice a day.

    Level errors of arcs and noise are drawn from exactly the sigmas told.
    """
    names = {"G": [f"G{n + 1:02d}" for n in range(satellites)], "E": [f"E{n + 1:02d}" for n in range(satellites)],
             "R": [f"R{n + 1:02d}" for n in range(satellites)]}  # fmt: skip
    # As in the sky, two satellites half an orbit apart share a channel; the last here is alone on its own.
    channels = {name: (n // 2) % 7 - 3 for n, name in enumerate(names["R"])}
    channels[names["R"][-1]] = 5
    bias: dict[tuple[str, str, str], float] = {}
    for system, pair in (("G", GPS), ("E", GALILEO), ("R", GLONASS)):
        values = rng.normal(0.0, 4.0, satellites)
        for name, value in zip(names[system], values - values.mean(), strict=True):
            bias["satellite", name, pair.name] = float(value)
    gaps = rng.normal(0.0, 1.0, satellites)
    for name, gap in zip(names["G"], gaps - gaps.mean(), strict=True):
        bias["satellite", name, GPS_CIVIL.name] = bias["satellite", name, GPS.name] + float(gap)
    peaks = {name: rng.uniform(30.0, 85.0, 2) for system in names for name in names[system]}
    middles = {name: np.array([0.0, 12.0]) + rng.uniform(0.0, 12.0) for name in peaks}
    headings = {name: rng.uniform(0.0, 360.0, 2) for name in peaks}
    parts, contents = [], []
    for number, pairs in enumerate(pairs_of):
        lat, lon = PLACES[number]
        lon += lon_shift
        receiver = Receiver(f"RC{number:02d}00XXX", tuple(geometry.earth_fixed(lat, lon, 50.0)))
        columns: dict[str, list[np.ndarray]] = {name: [] for name in Rays.COLUMNS}
        content: list[np.ndarray] = []
        mine = np.array(sorted({name for pair in pairs for name in names[pair.system]}))
        arc = 0
        for p, pair in enumerate(pairs):
            bias.setdefault(("receiver", receiver.name, pair.name), float(rng.normal(0.0, 8.0)))
            for name in names[pair.system]:
                for one in (0, 1):
                    pass_h = np.mod(middles[name][one], 24.0) + 0.02 * (lon - 145.0 - lon_shift)
                    at = np.arange(hours[0] * 12, hours[1] * 12) / 12.0
                    at = at[np.abs(at - pass_h) < 2.6]
                    if len(at) < 6:
                        continue
                    turn = (at - pass_h) / 2.6
                    elevation = 10.0 + (peaks[name][one] - 10.0 + 0.3 * number) * np.cos(np.pi / 2 * turn)
                    azimuth = np.mod(headings[name][one] + 100.0 * turn, 360.0)
                    pierce_lat, pierce_lon = geometry.pierce(lat, lon, elevation, azimuth, 400e3)
                    mapping = geometry.mapping(elevation, 400e3)
                    vertical = smooth_content(pierce_lat, pierce_lon - lon_shift, at)
                    stec = mapping * vertical + rng.normal(0.0, level_sigma) + rng.normal(0.0, noise, len(at))
                    row = {
                        "time": DAY + (at * 3600e9).astype(np.int64).astype("timedelta64[ns]"),
                        "receiver": 0, "satellite": int(np.searchsorted(mine, name)), "arc": arc, "pair": p,
                        "elevation": elevation, "azimuth": azimuth, "pierce_lat": pierce_lat, "pierce_lon": pierce_lon,
                        "mapping": mapping, "stec": stec, "stec_phase": stec, "noise_sigma": noise,
                        "level_sigma": level_sigma,
                    }  # fmt: skip
                    for key, value in row.items():
                        columns[key].append(np.broadcast_to(value, at.shape))
                    content.append(vertical)
                    arc += 1
        rays = Rays(
            receivers=(receiver,), satellites=mine, pairs=pairs, shell_height_m=400e3, interval_s=300.0,
            **{key: np.concatenate(values) for key, values in columns.items()},
        )  # fmt: skip
        of_pair = np.array([[bias.get(("satellite", str(name), pair.name), 0.0) for name in mine]
                            for pair in rays.pairs])  # fmt: skip
        of_receiver = np.array([bias["receiver", receiver.name, pair.name] for pair in rays.pairs])
        own = of_receiver[rays.pair] + of_pair[rays.pair, rays.satellite]
        geocentric = np.degrees(np.arctan2(receiver.position_m[2], np.hypot(*receiver.position_m[:2])))
        here = (np.full(len(rays), geocentric), np.full(len(rays), lon))
        rays.stec[:] += plasmasphere * slant_shape(*here, rays.elevation, rays.azimuth, foot_exponent)
        rays = replace(rays, stec=rays.stec - adjustment.content_per_ns(rays, channels) * own)
        parts.append(rays)
        contents.append(np.concatenate(content))
    return World(concatenate(parts), channels, bias, np.concatenate(contents))
