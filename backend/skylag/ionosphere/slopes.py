"""Slopes of the vertical delay, seen three ways, each with its own sigma; and what their witnesses claim together.

1. Between two receivers on the same satellite at the same epoch: the mean slope between their pierce points, a lower
   bound of the steepest slope between them.  Satellite biases cancel; levels of the arcs and receiver biases do not,
   and are in the sigma.  The departure of a pair from its own median over the common arc is free of both.
2. Along the path of one satellite's pierce point, phase only (the time-step method): free of every bias, but it mixes
   time and space: a wall that moves toward the pierce point looks steeper, one that moves along looks flatter.
3. From the map (`Fields.slope`), made elsewhere; here it is only compared with the other two.

Distances are between the places on the ground below the pierce points, as everywhere in this program (on the shell they
are h/R longer, 6 % at 400 km).  Never blames the ionosphere on the word of one receiver: see `SlopeClaim.confirmed`.
"""

import itertools
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.sparse import coo_matrix
from scipy.sparse.csgraph import connected_components
from scipy.spatial import cKDTree

from skylag.constants import KM_PER_DEG, L1_M_PER_TECU
from skylag.ionosphere.field import plane_km
from skylag.ionosphere.sightlines import Sightlines, lay_out, middle
from skylag.tables import SLOPE_WAYS, Bools, Fields, Floats, Ints, Rays, Receiver, Samples, SlopeClaim, Slopes, Times

MM_PER_TECU = L1_M_PER_TECU * 1000.0  # 162.372448 mm of delay on 1575.42 MHz per TECU
PAIR, PAIR_CHANGE, PATH, FIELD = (SLOPE_WAYS.index(way) for way in SLOPE_WAYS)

# Published bounds of slant slopes [mm/km on L1], with their source.  The nominal bound is a limit of `impact.uses` and
# the spread that a ground station is taken to announce; those of the threat model give `model_bound`, the narrowest
# wall of `impact.uses` and the fastest change of content that `slips` lets an arc hold through.
NOMINAL_BOUND = 4.0  # quiet mid-latitude bound: Mayer et al. 2009, ION GNSS, 1091-1099
MODEL_WORST = 425.0  # conterminous United States threat model: Datta-Barua et al. 2010, Radio Sci. 45
MODEL_LOW_ELEVATION = 375.0  # the same at 15 degrees; linear up to 65 degrees (from memory)
MODEL_SPEED_M_S = (0.0, 750.0)  # (from memory)
MODEL_WIDTH_KM = (25.0, 200.0)  # (from memory)
# For readers of a found slope: the model's third bound, and what was published of steeper skies.  Nothing is computed
# from these.
MODEL_DELAY_M = 50.0  # largest change of delay across a wall (from memory)
BRAZIL_WORST = 850.7  # 1 March 2014, 9.72 km baseline: Yoon et al. 2017, NAVIGATION 64(3)
BRAZIL_SPEED_M_S, BRAZIL_WIDTH_KM, BRAZIL_DELAY_M = (40.0, 250.0), (20.0, 450.0), 35.0  # the same source
ASIA_PACIFIC_BOUND = 600.0  # Saito et al. 2017, GPS Solut. 21 (value from memory)

# Slopes and delays here are on 1575.42 MHz; on another carrier they are so many times as large (square of the ratio of
# frequencies: IS-GPS-200, 20.3.3.3.3.2, for the second; IS-GPS-705 and the Galileo and BeiDou signal documents).
# A table for readers who work on another carrier: every slope of this program stays on the first.
CARRIER_SCALE = {
    "1575.42 MHz": 1.0,
    "1561.098 MHz": (1575.42 / 1561.098) ** 2,
    "1278.75 MHz": (1575.42 / 1278.75) ** 2,
    "1268.52 MHz": (1575.42 / 1268.52) ** 2,
    "1227.60 MHz": (77.0 / 60.0) ** 2,
    "1207.14 MHz": (154.0 / 118.0) ** 2,
    "1176.45 MHz": (154.0 / 115.0) ** 2,
}


def model_bound(elevation_deg: Floats) -> Floats:
    """The threat model's largest slant slope [mm/km] at elevations [deg]: 375 to 15, 425 from 65 degrees (memory)."""
    return MODEL_LOW_ELEVATION + np.clip(np.asarray(elevation_deg) - 15.0, 0.0, 50.0)


def between(delay_1_m: Floats, delay_2_m: Floats, distance_km: Floats) -> Floats:
    """Slope [mm/km] of two delays [m] of one satellite a distance [km] apart (station-pair method)."""
    return np.abs(np.asarray(delay_1_m) - delay_2_m) * 1000.0 / distance_km


def along_path(change_m: Floats, path_speed_m_s: Floats, step_s: float) -> Floats:
    """Slope [mm/km] of a change of delay [m] along a pierce point's path (time-step method)."""
    return np.abs(np.asarray(change_m)) * 1e6 / (np.asarray(path_speed_m_s) * step_s)


_NEARLY_ALL = 0.9  # share of witnesses with one receiver, above which the rest must do without it


@dataclass(frozen=True)
class SlopeChoices:
    """How slopes are measured and claimed.

    step_s            spacing of the epochs looked at
    elevation_deg     lowest elevation of a witness
    nearest_km, farthest_km   distance of pierce points
    claim_mm_per_km   a witness counts from this slope on (strained: class limit "very strong", see impact.states)
    claim_sigmas      and only when the slope less so many sigmas is above it
    mapping_share     the part of the slant content that thin-shell mapping may get wrong per unit of difference of the
                      two mapping factors
    path_step_s       time step of the path slopes
    path_claim_mm_per_km  a path counts as witness from here on: far above what time change does on a calm day
    """

    step_s: float = 120.0
    elevation_deg: float = 15.0
    nearest_km: float = 5.0
    farthest_km: float = 300.0
    claim_mm_per_km: float = 8.0
    claim_sigmas: float = 2.0
    mapping_share: float = 0.15
    path_step_s: float = 120.0
    path_claim_mm_per_km: float = 40.0
    cell_km: float = 50.0
    join_km: float = 120.0
    join_s: float = 600.0


def measure(rays: Rays, samples: Samples, fields: Fields | None = None, choices: SlopeChoices | None = None) -> Slopes:
    """Witnesses of steep slopes of a network day, and what they claim together.

    rays, samples  of the network day, row by row the same (`samples.vtec`, `arc_sigma`, `receiver_sigma` are used)
    fields         the day's maps, for comparison; None where there are none yet
    """
    choices = choices or SlopeChoices()
    lines = lay_out(rays, choices.step_s)
    layers = {
        "vtec": lines.layer(np.where(rays.elevation >= choices.elevation_deg, samples.vtec, np.nan)),
        "mapping": lines.layer(rays.mapping),
        "lat": lines.layer(rays.pierce_lat),
        "lon": lines.layer(rays.pierce_lon),
        "level": lines.layer(np.hypot(samples.arc_sigma, samples.receiver_sigma)),
        "noise": lines.layer(rays.noise_sigma / rays.mapping),
    }
    arcs = lines.numbers(rays.arc)
    pairs, pair_facts = _pairs(lines, layers, arcs, choices)
    paths, path_facts = _paths(rays, samples, choices)
    columns = {name: np.concatenate([pairs[name], paths[name]]) for name in Slopes.COLUMNS}
    order = np.argsort(columns["time"], kind="stable")
    columns = {name: values[order] for name, values in columns.items()}
    claims = _claims(columns, rays, choices)
    sure = sum(claim.confirmed for claim in claims)
    told = {"claims_confirmed": sure, "claims_unconfirmed": len(claims) - sure}
    summary = {**pair_facts, **path_facts, **_compare(columns, fields), **told}
    return Slopes(**columns, claims=claims, summary=summary)


def _pairs(
    lines: Sightlines, layers: Mapping[str, Floats], arcs: Ints, choices: SlopeChoices
) -> tuple[dict[str, Any], dict[str, Any]]:
    """Slopes between receivers, absolute and as departures from the arc pair's median; and facts about all of them."""
    first, second = _pair_columns(lines)
    both = np.isfinite(layers["vtec"][:, first]) & np.isfinite(layers["vtec"][:, second])
    epoch, pair = np.nonzero(both)
    one, two = first[pair], second[pair]

    def at(name: str) -> tuple[Floats, Floats]:
        return layers[name][epoch, one], layers[name][epoch, two]

    lat, lon = at("lat"), at("lon")
    north = (lat[1] - lat[0]) * KM_PER_DEG
    turn = (lon[1] - lon[0] + 180.0) % 360.0 - 180.0
    east = turn * KM_PER_DEG * np.cos(np.radians(0.5 * (lat[0] + lat[1])))
    distance = np.hypot(east, north)
    kept = (distance >= choices.nearest_km) & (distance <= choices.farthest_km)
    epoch, pair, one, two = epoch[kept], pair[kept], one[kept], two[kept]
    distance, east, north = distance[kept], east[kept], north[kept]
    lat, lon = at("lat"), at("lon")
    vtec, mapping, level, noise = at("vtec"), at("mapping"), at("level"), at("noise")
    growth = (vtec[1] - vtec[0]) * MM_PER_TECU / distance
    shell = choices.mapping_share * 0.5 * (vtec[0] + vtec[1]) * np.abs(mapping[1] / mapping[0] - 1.0)
    sigma = np.sqrt(level[0] ** 2 + level[1] ** 2 + noise[0] ** 2 + noise[1] ** 2 + shell**2) * MM_PER_TECU / distance
    noise_only = np.hypot(np.hypot(*noise), shell) * MM_PER_TECU / distance
    common = _group(arcs[epoch, one], arcs[epoch, two])
    usual, usual_count = _group_median(growth * distance, common)
    change = growth - usual / distance
    # What the pair does on its own through the arc is the honest sigma of a departure from its median.
    restless = 1.4826 * _group_median(np.abs(growth * distance - usual), common)[0] / distance
    change_sigma = np.hypot(noise_only, restless)
    facts = {
        "pair_slopes": len(growth),
        "pair_slope_median_mm_per_km": _quantile(np.abs(growth), 0.5),
        "pair_slope_95_mm_per_km": _quantile(np.abs(growth), 0.95),
        "pair_slope_sigma_median_mm_per_km": _quantile(sigma, 0.5),
    }
    rows: list[dict[str, Any]] = []
    for way, value, spread, able in (
        (PAIR, growth, sigma, np.ones(len(growth), dtype=bool)),
        (PAIR_CHANGE, change, change_sigma, usual_count * choices.step_s >= 2400.0),
    ):
        steep = np.flatnonzero(able & (np.abs(value) - choices.claim_sigmas * spread > choices.claim_mm_per_km))
        uphill = np.where(value[steep] >= 0, 0.0, 180.0)
        rows.append({
            "way": np.full(len(steep), way, dtype=np.uint8),
            "time": lines.times[epoch[steep]],
            "receiver": lines.receiver[one[steep]],
            "other": lines.receiver[two[steep]],
            "satellite": lines.satellite[one[steep]],
            "lat": 0.5 * (lat[0] + lat[1])[steep],
            "lon": (lon[0] + 0.5 * ((lon[1] - lon[0] + 180.0) % 360.0 - 180.0))[steep],
            "distance_km": distance[steep],
            "bearing_deg": (np.degrees(np.arctan2(east[steep], north[steep])) + uphill) % 360.0,
            "slope": np.abs(value[steep]),
            "sigma": spread[steep],
            "slant": np.abs(value[steep]) * 0.5 * (mapping[0] + mapping[1])[steep],
        })  # fmt: skip
    return {name: np.concatenate([row[name] for row in rows]) for name in Slopes.COLUMNS}, facts


def _pair_columns(lines: Sightlines) -> tuple[Ints, Ints]:
    """Column numbers of every two receivers that see the same satellite."""
    couples = [
        pair
        for satellite in np.unique(lines.satellite)
        for pair in itertools.combinations(np.flatnonzero(lines.satellite == satellite).tolist(), 2)
    ]
    table = np.array(couples, dtype=np.int64).reshape(-1, 2)
    return table[:, 0], table[:, 1]


def _group(one: Ints, two: Ints) -> Ints:
    """A number for each distinct pair of arcs, per row."""
    if len(one) == 0:
        return np.zeros(0, dtype=np.int64)
    return np.asarray(np.unique(one * (int(two.max()) + 1) + two, return_inverse=True)[1], dtype=np.int64)


def _group_median(values: Floats, group: Ints) -> tuple[Floats, Ints]:
    """The median of each row's group, and how many rows the group has; both per row."""
    if len(values) == 0:
        return values, group
    order = np.lexsort((values, group))
    starts = np.searchsorted(group[order], np.arange(int(group.max()) + 1))
    counts = np.diff(np.append(starts, len(group)))
    middle_low, middle_high = starts + (counts - 1) // 2, starts + counts // 2
    medians = 0.5 * (values[order][middle_low] + values[order][middle_high])
    return medians[group], counts[group]


def _quantile(values: Floats, share: float) -> float:
    return float(np.quantile(values, share)) if len(values) else float("nan")


def _paths(rays: Rays, samples: Samples, choices: SlopeChoices) -> tuple[dict[str, Any], dict[str, Any]]:
    """Slopes along the pierce points' paths (time-step method): same arc, path_step_s apart."""
    lines = lay_out(rays, choices.path_step_s)
    vtec = lines.layer(np.where(rays.elevation >= choices.elevation_deg, samples.vtec, np.nan))
    lat, lon = lines.layer(rays.pierce_lat), lines.layer(rays.pierce_lon)
    noise = lines.layer(rays.noise_sigma / rays.mapping)
    mapping = lines.layer(rays.mapping)
    arcs = lines.numbers(rays.arc)
    north = np.diff(lat, axis=0) * KM_PER_DEG
    east = ((np.diff(lon, axis=0) + 180.0) % 360.0 - 180.0) * KM_PER_DEG * np.cos(np.radians(lat[1:]))
    distance = np.hypot(east, north)
    same = (arcs[1:] == arcs[:-1]) & (arcs[1:] >= 0)
    moving = distance > 0.02 * lines.step_s  # slower than 20 m/s tells nothing of space
    change = np.diff(vtec, axis=0)
    able = same & moving & np.isfinite(change)
    slope = np.where(able, np.abs(change) * MM_PER_TECU / np.where(moving, distance, np.nan), np.nan)
    sigma = np.hypot(noise[1:], noise[:-1]) * MM_PER_TECU / np.where(moving, distance, np.nan)
    facts = {
        "path_slopes": int(able.sum()),
        "path_slope_median_mm_per_km": _quantile(slope[able], 0.5),
        "path_slope_95_mm_per_km": _quantile(slope[able], 0.95),
    }
    with np.errstate(invalid="ignore"):
        epoch, line = np.nonzero(able & (slope - choices.claim_sigmas * sigma > choices.path_claim_mm_per_km))
    uphill = np.where(change[epoch, line] >= 0, 0.0, 180.0)
    columns = {
        "way": np.full(len(epoch), PATH, dtype=np.uint8),
        "time": lines.times[epoch],
        "receiver": lines.receiver[line],
        "other": np.full(len(epoch), -1, dtype=np.int64),
        "satellite": lines.satellite[line],
        "lat": 0.5 * (lat[1:] + lat[:-1])[epoch, line],
        "lon": lon[:-1][epoch, line],
        "distance_km": distance[epoch, line],
        "bearing_deg": (np.degrees(np.arctan2(east[epoch, line], north[epoch, line])) + uphill) % 360.0,
        "slope": slope[epoch, line],
        "sigma": sigma[epoch, line],
        "slant": slope[epoch, line] * mapping[epoch, line],
    }
    return columns, facts


# ---------------------------------------------------------------------------------------------- claims


def _claims(columns: Mapping[str, Any], rays: Rays, choices: SlopeChoices) -> tuple[SlopeClaim, ...]:
    """Witnesses that touch in space and time, joined."""
    if len(columns["time"]) == 0:
        return ()
    east, north = plane_km(columns["lat"], columns["lon"], middle(rays))
    seconds = columns["time"].astype("datetime64[ns]").astype(np.int64) / 1e9
    five = np.floor(seconds / 300.0).astype(np.int64)
    column, line = (np.floor(v / choices.cell_km).astype(np.int64) for v in (east, north))
    cells, cell = np.unique(np.stack([five, column, line], axis=1), axis=0, return_inverse=True)
    cell = cell.ravel()
    scaled = cells * np.array([300.0 / choices.join_s, *(2 * [choices.cell_km / choices.join_km])])
    touching = cKDTree(scaled).query_pairs(1.0, output_type="ndarray")
    graph = coo_matrix((np.ones(len(touching)), (touching[:, 0], touching[:, 1])), shape=(len(cells), len(cells)))
    _, cluster_of_cell = connected_components(graph, directed=False)
    cluster = cluster_of_cell[cell]
    order = np.argsort(cluster, kind="stable")
    bounds = np.searchsorted(cluster[order], np.arange(int(cluster.max()) + 2))
    claims = []
    for start, end in itertools.pairwise(bounds):
        rows = order[start:end]
        claims.append(_claim(columns, rows, cell[rows], rays))
    return tuple(sorted(claims, key=lambda claim: (claim.start, -claim.slope)))


def _claim(columns: Mapping[str, Any], rows: Ints, cell: Ints, rays: Rays) -> SlopeClaim:
    """One claim from its witnesses; see `agreement` for what confirms it."""
    receiver, other, satellite = columns["receiver"][rows], columns["other"][rows], columns["satellite"][rows]
    way = columns["way"][rows]
    confirmed, why = agreement(way, receiver, other, satellite, rays.receivers)
    if not confirmed and np.all(way == PAIR):
        why += "; steady through the arc, so more likely the level of an arc than weather"
    ways = tuple(SLOPE_WAYS[code] for code in np.unique(way))
    if confirmed:
        why += _beside(columns, rows, way)
    # Paths mix time and space: they give no size where a pair does.
    sized = rows[way != PATH] if np.any(way != PATH) else rows
    best = sized[np.argmax(columns["slope"][sized] - columns["sigma"][sized])]
    in_cell = np.unique(cell, return_inverse=True)[1]
    rank = np.lexsort((columns["slope"][rows] - columns["sigma"][rows] - 1e6 * (way == PATH), in_cell))
    last = np.append(np.flatnonzero(np.diff(in_cell[rank])), len(rank) - 1)
    steepest = rows[rank[last]]
    own_size = columns["way"][steepest] != PATH
    members = np.unique(np.concatenate([receiver, other[other >= 0]]))
    couples = np.unique(np.stack([receiver, other], axis=1)[other >= 0], axis=0)
    return SlopeClaim(
        start=columns["time"][rows].min(),
        end=columns["time"][rows].max(),
        lat=float(columns["lat"][best]),
        lon=float(columns["lon"][best]),
        slope=float(columns["slope"][best]),
        sigma=float(columns["sigma"][best]),
        pairs=len(couples),
        receivers=tuple(rays.receivers[number].name for number in members),
        satellites=tuple(str(rays.satellites[number]) for number in np.unique(satellite)),
        ways=ways,
        confirmed=confirmed,
        why=why,
        cell_time=columns["time"][steepest[own_size]],
        cell_lat=columns["lat"][steepest[own_size]],
        cell_lon=columns["lon"][steepest[own_size]],
        cell_slope=columns["slope"][steepest[own_size]],
        cell_sigma=columns["sigma"][steepest[own_size]],
    )


def _beside(columns: Mapping[str, Any], rows: Ints, way: Any) -> str:
    """What the bias-free ways say beside the pairs' own slopes, which arc levels may spoil: agreement or none."""
    said = []
    free = int((way == PAIR_CHANGE).sum())
    if np.any(way == PAIR) and free == 0:
        said.append("not seen to change within arcs, so levels could feign a part")
    elif free:
        said.append("it changes within arcs, where no bias can feign it")
    along = np.unique(columns["receiver"][rows[way == PATH]] * 1000 + columns["satellite"][rows[way == PATH]])
    if len(along):
        said.append(f"steep along {_count(len(along), 'path')} of pierce points too")
    return "".join(f"; {one}" for one in said)


def agreement(
    way: Floats | Ints | Any, receiver: Ints, other: Ints, satellite: Ints, receivers: tuple[Receiver, ...]
) -> tuple[bool, str]:
    """Whether witnesses confirm each other, and the sentence that says so.

    Confirmed when no single receiver is part of every pair, a lone pair having another receiver's path beside it, so
    that no one receiver's fault explains them (a chance slip along another receiver's path saves no star of pairs),
    and either two satellites or two pairs without a common receiver agree.  Where one receiver is part of nearly all
    witnesses the rest has to confirm itself.
    """
    couples = np.unique(np.stack([np.minimum(receiver, other), np.maximum(receiver, other)], axis=1), axis=0)
    couples = couples[couples[:, 0] >= 0]
    satellites = len(np.unique(satellite))
    members, counts = np.unique(np.concatenate([receiver, other[other >= 0]]), return_counts=True)
    everywhere = members[counts == len(receiver)]
    if len(receivers) == 1:
        return False, "unconfirmed: one receiver alone cannot tell weather from its own faults"
    if len(couples) == 0:
        return False, f"unconfirmed: only along the paths of {_count(satellites, 'satellite')}, no two receivers agree"
    if len(everywhere) > 0:
        return False, f"unconfirmed: every witness includes {receivers[int(everywhere[0])].name}"
    hub, spokes = np.unique(couples, return_counts=True)
    centre = hub[spokes == len(couples)]
    if len(couples) > 1 and len(centre) > 0:
        return False, f"unconfirmed: every receiver pair includes {receivers[int(centre[0])].name}"
    top = members[np.argmax(counts)]
    if counts.max() >= _NEARLY_ALL * len(receiver):
        rest = (receiver != top) & (other != top)
        if not agreement(way[rest], receiver[rest], other[rest], satellite[rest], receivers)[0]:
            return False, f"unconfirmed: nearly every witness includes {receivers[int(top)].name}"
    apart = any(not set(a) & set(b) for a, b in itertools.combinations(couples.tolist(), 2))
    if satellites < 2 and not apart:
        return False, f"unconfirmed: {_count(len(couples), 'receiver pair')} with a common receiver on one satellite"
    return True, f"{_count(len(couples), 'receiver pair')} and {_count(satellites, 'satellite')} agree"


def _count(number: int, noun: str) -> str:
    return f"{number} {noun}" if number == 1 else f"{number} {noun}s"


def _compare(columns: Mapping[str, Any], fields: Fields | None) -> dict[str, Any]:
    """How the field's slope compares with the witnesses at their places: median ratio and how often they part.

    They part where the difference is more than three sigmas of both and more than half the witness.
    """
    pair = columns["way"] == PAIR
    if fields is None or len(fields.times) == 0 or not pair.any():
        return {}
    there = field_slope_at(fields, columns["time"][pair], columns["lat"][pair], columns["lon"][pair])
    witness, sigma = columns["slope"][pair], columns["sigma"][pair]
    seen: Bools = np.isfinite(there[0])
    if not seen.any():
        return {}
    difference = np.abs(there[0] - witness)[seen]
    limit = np.maximum(3.0 * np.hypot(there[1], sigma)[seen], 0.5 * witness[seen])
    return {
        "field_over_pair_median": float(np.median(there[0][seen] / witness[seen])),
        "field_and_pair_part": float(np.mean(difference > limit)),
        "field_compared": int(seen.sum()),
    }


def field_slope_at(fields: Fields, time: Times, lat: Floats, lon: Floats) -> tuple[Floats, Floats]:
    """The map's slope and sigma [mm/km] at places and times: nearest cell, nearest map; NaN outside."""
    latest = np.clip(np.searchsorted(fields.times, time), 1, max(1, len(fields.times) - 1))
    previous = latest - 1
    latest = np.minimum(latest, len(fields.times) - 1)
    nearer = np.abs(fields.times[latest] - time) < np.abs(time - fields.times[previous])
    epoch = np.where(nearer, latest, previous)
    row = np.abs(lat[:, None] - fields.lats[None, :]).argmin(axis=1)
    turn = np.abs((lon[:, None] - fields.lons[None, :] + 180.0) % 360.0 - 180.0)
    column = turn.argmin(axis=1)
    half_lat = 0.501 * abs(float(fields.lats[1] - fields.lats[0])) if len(fields.lats) > 1 else 0.5
    half_lon = 0.501 * abs(float(fields.lons[1] - fields.lons[0])) if len(fields.lons) > 1 else 0.5
    inside = (np.abs(lat - fields.lats[row]) <= half_lat) & (turn.min(axis=1) <= half_lon)
    place = (epoch, np.where(inside, row, 0), np.where(inside, column, 0))
    slope = np.where(inside, fields.slope[place].astype(np.float64), np.nan)
    return slope, np.where(inside, fields.slope_sigma[place].astype(np.float64), np.nan)
