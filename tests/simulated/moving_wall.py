"""A small simulated sky for tests: circular orbits over a round Earth, content on a thin shell, known walls.

Made apart from the sample days, so that the finders are not judged only by the world they were grown in.
"""

from collections.abc import Callable
from dataclasses import replace

import numpy as np

from skylag.tables import Rays, Receiver, Samples, SignalPair

R = 6371.0
SHELL = 400.0
START = np.datetime64("2030-03-05T00:00:00", "ns")
PLACES = [
    (-37.0, 143.2), (-37.4, 144.6), (-37.1, 146.0), (-37.6, 147.4), (-38.4, 142.6), (-38.5, 144.0), (-38.3, 145.4),
    (-38.2, 146.8), (-40.6, 144.8), (-40.8, 146.2), (-40.9, 147.6), (-41.8, 145.3), (-41.9, 146.6), (-42.0, 148.0),
]  # fmt: skip
CENTRE = (-39.3, 145.5)

Content = Callable[[np.ndarray, np.ndarray, np.ndarray], np.ndarray]  # (east km, north km, seconds) -> TECU


def flat(lat: np.ndarray, lon: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """East and north [km] about CENTRE, azimuthal equidistant."""
    la, lo, la0, lo0 = np.radians(lat), np.radians(lon), np.radians(CENTRE[0]), np.radians(CENTRE[1])
    c = np.arccos(np.clip(np.sin(la0) * np.sin(la) + np.cos(la0) * np.cos(la) * np.cos(lo - lo0), -1, 1))
    k = np.where(c > 1e-9, c / np.maximum(np.sin(c), 1e-12), 1.0) * R
    return k * np.cos(la) * np.sin(lo - lo0), k * (
        np.cos(la0) * np.sin(la) - np.sin(la0) * np.cos(la) * np.cos(lo - lo0)
    )


def wall(slope: float, width: float, speed: float, heading: float, at_s: float) -> Content:
    """A linear ramp of slope [mm/km on L1], width [km], speed [m/s], heading [deg]; its middle at CENTRE at `at_s`."""
    per_km = slope / 162.372448
    east, north = np.sin(np.radians(heading)), np.cos(np.radians(heading))

    def content(x: np.ndarray, y: np.ndarray, t: np.ndarray) -> np.ndarray:
        ahead = x * east + y * north - speed / 1000.0 * (t - at_s)
        return per_km * np.clip(width / 2 - ahead, 0.0, width)

    return content


def quiet(x: np.ndarray, y: np.ndarray, t: np.ndarray) -> np.ndarray:
    """A smooth day: a daily bump, a slope toward north, and travelling disturbances of 0.5 TECU."""
    day = 8.0 + 10.0 * np.exp(-(((t / 3600.0 - 4.0) / 3.5) ** 2)) + 4e-3 * y
    return day + 0.5 * np.sin(2 * np.pi * (x / 250.0 + y / 400.0 - t / 1100.0))


def simulate(
    content: Content, rng: np.random.Generator, start_h: float = 0.0, hours: float = 6.0, places=PLACES,
    interval_s: float = 30.0, phase_noise: float = 0.02, level_sigma: float = 0.7, receiver_sigma: float = 0.5,
    mask_deg: float = 10.0, per_constellation: int = 24,
) -> tuple[Rays, Samples]:  # fmt: skip
    """Rays and calibrated samples of a stretch of a day; level errors drawn from the sigmas they are given."""
    t = start_h * 3600.0 + np.arange(int(hours * 3600 / interval_s)) * interval_s
    number = np.arange(per_constellation)
    parts = []
    names = []
    for letter, radius, planes in (("G", 26560.0, 6), ("E", 29600.0, 3)):
        names += [f"{letter}{n + 1:02d}" for n in number]
        rate = np.sqrt(398600.4418 / radius**3)
        node = 2 * np.pi * (number % planes) / planes - 7.2921151467e-5 * t[:, None]
        slot = 2 * np.pi * (number // planes) / (per_constellation // planes) + 0.37 * (number % planes)
        u = slot + rate * t[:, None]
        inc = np.radians(55.5)
        x = radius * (np.cos(u) * np.cos(node) - np.sin(u) * np.cos(inc) * np.sin(node))
        y = radius * (np.cos(u) * np.sin(node) + np.sin(u) * np.cos(inc) * np.cos(node))
        parts.append(np.stack([x, y, radius * np.sin(u) * np.sin(inc)], axis=2))
    satellites = np.concatenate(parts, axis=1)
    columns: dict[str, list[np.ndarray]] = {}
    receivers = []
    arcs = 0
    level_of_receiver = rng.normal(0, receiver_sigma, len(places))
    vertical, arc_part, receiver_part = [], [], []
    for index, (lat, lon) in enumerate(places):
        la, lo = np.radians(lat), np.radians(lon)
        up = np.array([np.cos(la) * np.cos(lo), np.cos(la) * np.sin(lo), np.sin(la)])
        east, north = np.array([-np.sin(lo), np.cos(lo), 0.0]), None
        north = np.cross(up, east)
        receivers.append(Receiver(f"RX{index:02d}", tuple(float(v) for v in up * R * 1000.0)))
        sight = satellites - up * R
        sight /= np.linalg.norm(sight, axis=2)[:, :, None]
        elevation = np.arcsin(sight @ up)
        azimuth = np.arctan2(sight @ east, sight @ north)
        epoch, column = np.nonzero(elevation > np.radians(mask_deg))
        el, az = elevation[epoch, column], azimuth[epoch, column]
        angle = np.pi / 2 - el - np.arcsin(R / (R + SHELL) * np.cos(el))
        plat = np.arcsin(np.sin(la) * np.cos(angle) + np.cos(la) * np.sin(angle) * np.cos(az))
        plon = lo + np.arcsin(np.sin(angle) * np.sin(az) / np.cos(plat))
        mapping = 1.0 / np.sqrt(1.0 - (R / (R + SHELL) * np.cos(el)) ** 2)
        order = np.lexsort((epoch, column))
        new = np.ones(len(order), bool)
        new[1:] = (np.diff(column[order]) != 0) | (np.diff(epoch[order]) > 1)
        arc = np.empty(len(order), np.int64)
        arc[order] = np.cumsum(new) - 1
        x, y = flat(np.degrees(plat), np.degrees(plon))
        true = content(x, y, t[epoch])
        noise = rng.normal(0, phase_noise, len(epoch))
        level = rng.normal(0, level_sigma, arc.max() + 1)[arc]
        phase = true * mapping + noise
        vertical.append((phase + level + level_of_receiver[index] * mapping) / mapping)
        arc_part.append(level_sigma / mapping)
        receiver_part.append(np.full(len(epoch), receiver_sigma))
        rows = {
            "time": START + np.rint(t[epoch] * 1e9).astype(np.int64).astype("timedelta64[ns]"),
            "receiver": np.full(len(epoch), index), "satellite": column, "arc": arc + arcs,
            "pair": (column >= per_constellation).astype(np.int64),
            "elevation": np.degrees(el), "azimuth": np.degrees(az) % 360.0, "pierce_lat": np.degrees(plat),
            "pierce_lon": np.degrees(plon), "mapping": mapping, "stec": phase + level, "stec_phase": phase + 50.0,
            "noise_sigma": np.full(len(epoch), phase_noise), "level_sigma": np.full(len(epoch), level_sigma),
        }  # fmt: skip
        arcs += int(arc.max()) + 1
        for name, values in rows.items():
            columns.setdefault(name, []).append(values)
    rays = Rays(
        tuple(receivers), np.array(names), (SignalPair("G", "C1W", "C2W", "L1W", "L2W"),
        SignalPair("E", "C1C", "C5Q", "L1C", "L5Q")), SHELL * 1000.0, interval_s=interval_s,
        **{name: np.concatenate(values) for name, values in columns.items()},
    )  # fmt: skip
    vtec = np.concatenate(vertical)
    arc_sigma, receiver_part_all = np.concatenate(arc_part), np.concatenate(receiver_part)
    return rays, samples_of(rays, vtec, arc_sigma, receiver_part_all)


def samples_of(rays: Rays, vtec: np.ndarray, arc_sigma: np.ndarray, receiver_sigma: np.ndarray) -> Samples:
    """Samples of vertical content with the sigmas given; parts that a test does not need are zero."""
    own = rays.noise_sigma / rays.mapping
    return Samples(
        rays=rays, stec=vtec * rays.mapping, vtec=vtec, sigma=np.sqrt(arc_sigma**2 + receiver_sigma**2 + own**2),
        arc_sigma=arc_sigma, receiver_sigma=receiver_sigma, own_sigma=own,
        bias_rows=np.zeros((len(rays), 2), dtype=np.int64), bias_factor=np.ones(len(rays)),
        bias_covariance=np.zeros((1, 1)), lean_shell=np.zeros(len(rays)), lean_high=np.zeros(len(rays)),
    )  # fmt: skip


def changed(rays: Rays, samples: Samples, rows: np.ndarray, slant: np.ndarray) -> tuple[Rays, Samples]:
    """The same with slant content [TECU] added to some rows, phase and all."""
    extra = np.zeros(len(rays))
    extra[rows] = slant
    rays = replace(rays, stec=rays.stec + extra, stec_phase=rays.stec_phase + extra)
    return rays, replace(samples, rays=rays, stec=samples.stec + extra, vtec=samples.vtec + extra / rays.mapping)


def broken_down(rays: Rays, samples: Samples, rng: np.random.Generator) -> tuple[Rays, Samples]:
    """A day with its receivers' faults, as they show in rays.

    - slips found, ten a receiver in eight hours: the arc ends, the next has a level error of its own
    - slips not found, four in the network in eight hours: steps of 0.3 to 2 TECU inside an arc
    - single wild phases not found, ten in the network in eight hours: 2 to 8 TECU at one epoch
    - one receiver among metal: level errors three times those it admits
    - one receiver whose phases run away on all satellites for an hour, one whose level jumps by 12 TECU for an hour
    - outages: one receiver silent for an hour, three satellites lost by a receiver for some minutes
    """
    hours = float((rays.time.max() - rays.time.min()) / np.timedelta64(1, "h"))
    receivers = len(rays.receivers)
    arc, extra, phase_only = rays.arc.copy(), np.zeros(len(rays)), np.zeros(len(rays))
    names = rng.permutation(receivers)
    metal, wild, jumped, silent = names[:4]
    next_arc = int(arc.max()) + 1
    rows_of = {number: np.flatnonzero(arc == number) for number in np.unique(arc)}
    long = [number for number, rows in rows_of.items() if len(rows) > 80]
    for number in rng.choice(long, max(1, int(receivers * 10 * hours / 8))):  # found slips
        rows = rows_of[number]
        after = rows[rng.integers(30, len(rows) - 30) :]
        arc[after] = next_arc
        next_arc += 1
        extra[after] += rng.normal(0, 0.7)
        phase_only[after] += rng.normal(0, 20.0)
    for number in rng.choice(long, max(1, int(4 * hours / 8))):  # slips not found
        rows = rows_of[number]
        extra[rows[rng.integers(20, len(rows) - 20) :]] += rng.choice([-1, 1]) * rng.uniform(0.3, 2.0)
    for number in rng.choice(long, max(1, int(10 * hours / 8))):  # wild phases not found
        extra[rng.choice(rows_of[number])] += rng.choice([-1, 1]) * rng.uniform(2.0, 8.0)
    level = np.zeros(int(arc.max()) + 1)
    mine = np.unique(arc[rays.receiver == metal])
    level[mine] = rng.normal(0, 0.7 * np.sqrt(8.0), len(mine))
    extra += level[arc]
    late = (rays.time - rays.time.min()) / np.timedelta64(1, "h")
    for which, begin in ((wild, rng.uniform(0, hours - 1)), (jumped, rng.uniform(0, hours - 1))):
        bad = (rays.receiver == which) & (late >= begin) & (late < begin + 1)
        if which == jumped:
            extra[bad] += 12.0 * rays.mapping[bad]
            continue
        for number in np.unique(arc[bad]):
            rows = np.flatnonzero(bad & (arc == number))
            extra[rows] += np.cumsum(rng.normal(0, 0.8, len(rows)))
    begin = rng.uniform(0, hours - 1)
    keep = ~((rays.receiver == silent) & (late >= begin) & (late < begin + 1))
    for number in rng.choice(long, 3):
        rows = rows_of[number]
        first = rng.integers(20, len(rows) - 30)
        keep[rows[first : first + 20]] = False
    rays = replace(rays, arc=arc, stec_phase=rays.stec_phase + phase_only)
    rays, samples = changed(rays, samples, np.arange(len(rays)), extra)
    kept = rays.where(keep)
    return kept, samples_of(kept, samples.vtec[keep], samples.arc_sigma[keep], samples.receiver_sigma[keep])


__all__ = ["CENTRE", "PLACES", "START", "broken_down", "changed", "flat", "quiet", "simulate", "wall"]
