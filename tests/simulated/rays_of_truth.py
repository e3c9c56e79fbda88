"""Rays made straight from the simulated three-dimensional ionosphere: true slant content, biases, arc levels off by a
known sigma.  Leaves out slip finding and levelling, so that many days can be drawn in little time."""

import numpy as np

from invented.network import Simulated
from skylag.ionosphere import geometry
from skylag.ionosphere.adjustment import content_per_ns
from skylag.tables import Biases, Floats, Rays, SignalPair, concatenate

GPS = SignalPair("G", "C1W", "C2W", "L1W", "L2W")
CIVIL = SignalPair("G", "C1C", "C2W", "L1C", "L2W")
GALILEO = SignalPair("E", "C1C", "C5Q", "L1C", "L5Q")
SHELL_M = 400e3


def true_biases(world: Simulated) -> dict[tuple[str, str, str, str], float]:
    """(name, system, code1, code2) -> ns of satellites and receivers, C1C-C2W of satellites included."""
    known: dict[tuple[str, str, str, str], float] = {}
    for table in (world.satellite_biases(), world.receiver_biases()):
        keys = zip(table.name, table.system, table.code1, table.code2, strict=True)
        known |= {(str(n), str(s), str(a), str(b)): float(v)
                  for (n, s, a, b), v in zip(keys, table.value_ns, strict=True)}  # fmt: skip
    for name, system, code1, code2 in list(known):
        if (code1, code2) == ("C1C", "C1W") and (name, system, "C1W", "C2W") in known:
            known[name, system, "C1C", "C2W"] = known[name, system, code1, code2] + known[name, system, "C1W", "C2W"]
    return known


def errors(biases: Biases, known: dict[tuple[str, str, str, str], float]) -> Floats:
    """Estimate less truth [ns], per row."""
    keys = zip(biases.name, biases.system, biases.code1, biases.code2, strict=True)
    truth = [known[str(n), str(s), str(a), str(b)] for n, s, a, b in keys]
    return np.asarray(biases.value_ns - np.array(truth))


def rays_of_truth(world: Simulated, rng: np.random.Generator, level_sigma: float = 0.4) -> Rays:
    """All rays above 10 degrees of a simulated span; every ambiguity one arc, its level off by chance."""
    known = true_biases(world)
    parts = []
    for one in world.truth:
        gps = GPS if ("G", "C1W") in one.bias_ns else CIVIL
        pairs = (gps, GALILEO)
        good = np.isfinite(one.stec) & (one.elevation > 10.0) & (one.ambiguity >= 0)
        epoch, satellite = np.nonzero(good)
        names = one.satellites[satellite]
        pair = (np.char.find(names.astype(str), "E") == 0).astype(np.int64)
        key = satellite * (int(one.ambiguity.max()) + 1) + one.ambiguity[good]
        _, arc, count = np.unique(key, return_inverse=True, return_counts=True)
        kept = (count >= 3)[arc.ravel()]
        epoch, satellite, pair, arc = epoch[kept], satellite[kept], pair[kept], arc.ravel()[kept]
        elevation, azimuth = one.elevation[epoch, satellite], one.azimuth[epoch, satellite]
        lat, lon, _ = geometry.geodetic(np.asarray(one.receiver.position_m))
        pierce_lat, pierce_lon = geometry.pierce(lat, lon, elevation, azimuth, SHELL_M)
        mapping = geometry.mapping(elevation, SHELL_M)
        rays = Rays(
            receivers=(one.receiver,), satellites=one.satellites, pairs=pairs, shell_height_m=SHELL_M,
            time=one.times[epoch], receiver=np.zeros(len(epoch), dtype=np.int64), satellite=satellite, arc=arc,
            pair=pair, elevation=elevation, azimuth=azimuth, pierce_lat=pierce_lat, pierce_lon=pierce_lon,
            mapping=mapping, stec=np.zeros(len(epoch)), stec_phase=np.zeros(len(epoch)),
            noise_sigma=np.full(len(epoch), 0.03), level_sigma=np.full(len(epoch), level_sigma), interval_s=300.0,
        )  # fmt: skip
        of_satellite = np.array([[known.get((str(name), p.system, p.code1, p.code2), 0.0) for name in one.satellites]
                                 for p in pairs])  # fmt: skip
        of_receiver = np.array([known[one.receiver.name, p.system, p.code1, p.code2] for p in pairs])
        bias = of_receiver[pair] + of_satellite[pair, satellite]
        level = rng.normal(0.0, level_sigma, int(arc.max()) + 1)[arc]
        stec = one.stec[epoch, satellite] - content_per_ns(rays) * bias + level + rng.normal(0.0, 0.03, len(epoch))
        rays.stec[:] = stec
        rays.stec_phase[:] = stec
        parts.append(rays)
    return concatenate(parts)
