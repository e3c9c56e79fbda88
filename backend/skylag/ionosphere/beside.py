"""A published map of content laid beside the day's own: where they differ, by how much, and what the difference is.

Differences are ours minus theirs, at our epochs and cells, the published map read between its nodes and epochs by the
rules of its format (turned with the Sun).  What the difference is made of is told by parts whose squares add up: a
level, a share of the content, an hour's level, an hour's tilt, and what is finer.  Never says which of two maps is
right, and never compares where our own map sees nothing.
"""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy.ndimage import uniform_filter

from skylag.constants import REFRACTION_M3_S2, SPEED_OF_LIGHT_M_S, TECU, carrier_hz
from skylag.errors import NotEnough
from skylag.ionosphere.geometry import geocentric_latitude, mapping
from skylag.ionosphere.interpolation import vertical_at
from skylag.tables import Biases, Fields, Floats, Times
from skylag.timescales import gps_to_utc, utc_to_gps

# A published day begins and ends on UT hours, ours on GPS ones: leap seconds alone leave no map out.
_LEAP = np.timedelta64(60, "s")
_WITHIN = 1.959964  # 95 % of a normal error lie within so many sigmas
_PLAIN_ELEVATION = 45.0  # at which what a bias does along a line of sight is told straight up


@dataclass(frozen=True)
class BiasOffset:
    """Our biases minus the published ones of one signal pair [ns], over receivers and satellites that both know.

    straight_up_tecu  what such biases do to vertical content, seen at 45 degrees
    receiver_by_name  of each receiver, its level counted together with that of the satellites
    """

    system: str
    code1: str
    code2: str
    receivers: int
    satellites: int
    receiver_ns: float
    satellite_ns: float
    satellite_scatter_ns: float
    straight_up_tecu: float
    receiver_by_name: Mapping[str, float]

    @property
    def together_ns(self) -> float:
        """What both do to every line of sight: receivers' and satellites' levels are only known as a sum."""
        return self.receiver_ns + self.satellite_ns


@dataclass(frozen=True)
class Beside:
    """Two maps on one grid: arrays (T, lat, lon) [TECU], NaN wherever one of them says nothing.

    sigma  of the difference: our sigma and the published rms together (ours alone where none is published)
    parts  name -> what the root mean square of the difference would be if there were nothing but this part
    coarse what averaging our own map over the published map's cells would change (root mean square)
    """

    times: Times
    lats: Floats
    lons: Floats
    ours: npt.NDArray[np.float32]
    theirs: npt.NDArray[np.float32]
    sigma: npt.NDArray[np.float32]
    parts: Mapping[str, float]
    share_of_content: float
    coarse: float
    biases: tuple[BiasOffset, ...]

    @property
    def difference(self) -> npt.NDArray[np.float32]:
        """Ours minus theirs [TECU]."""
        return np.asarray(self.ours - self.theirs)

    def hourly(self) -> tuple[Times, Floats, Floats, npt.NDArray[np.int64]]:
        """Per hour: its beginning, mean and rms of the difference [TECU], cells; and only hours that have some."""
        hour, starts = _hours(self.times)
        rows = []
        for number, start in enumerate(starts):
            values = self.difference[hour == number]
            known = values[np.isfinite(values)].astype(np.float64)
            if len(known):
                rows.append((start, known.mean(), np.sqrt(np.mean(known**2)), len(known)))
        start, mean, rms, count = zip(*rows, strict=True)
        return np.array(start), np.array(mean), np.array(rms), np.array(count, dtype=np.int64)

    def hourly_maps(self) -> npt.NDArray[np.float32]:
        """The mean difference of each of those hours, (hours, lat, lon)."""
        hour, starts = _hours(self.times)
        known = np.isfinite(self.difference)
        maps = []
        for number in range(len(starts)):
            here = known[hour == number]
            if here.any():
                total = np.where(here, self.difference[hour == number], 0.0).sum(axis=0, dtype=np.float64)
                maps.append(np.where(here.any(axis=0), total / np.maximum(here.sum(axis=0), 1), np.nan))
        return np.array(maps, dtype=np.float32)

    def facts(self) -> dict[str, Any]:
        """Mean, rms, scatter [TECU], share of cells within 95 % intervals, the parts, the biases."""
        known = np.isfinite(self.difference)
        values, sigma = self.difference[known].astype(np.float64), self.sigma[known].astype(np.float64)
        return {
            "cells": len(values),
            "maps": int(known.any(axis=(1, 2)).sum()),
            "mean_tecu": round(float(values.mean()), 3),
            "rms_tecu": round(float(np.sqrt(np.mean(values**2))), 3),
            "scatter_tecu": round(float(values.std()), 3),
            "sigma_tecu": round(float(np.sqrt(np.mean(sigma**2))), 3),
            "within_95": round(float(np.mean(np.abs(values) <= _WITHIN * sigma)), 4),
            "ours_mean_tecu": round(float(self.ours[known].mean(dtype=np.float64)), 3),
            "published_mean_tecu": round(float(self.theirs[known].mean(dtype=np.float64)), 3),
            "parts_tecu": {name: round(value, 3) for name, value in self.parts.items()},
            "share_of_content": round(self.share_of_content, 4),
            "finer_than_their_cells_tecu": round(self.coarse, 3),
            "biases": [
                {
                    "system": one.system, "pair": f"{one.code1}-{one.code2}", "receivers": one.receivers,
                    "satellites": one.satellites, "receiver_ns": round(one.receiver_ns, 3),
                    "satellite_ns": round(one.satellite_ns, 3),
                    "satellite_scatter_ns": round(one.satellite_scatter_ns, 3),
                    "straight_up_tecu": round(one.straight_up_tecu, 3),
                    "receiver_by_name_ns": {name: round(v, 3) for name, v in one.receiver_by_name.items()},
                }
                for one in self.biases
            ],
        }  # fmt: skip


def lay_beside(
    ours: Fields, theirs: Fields, our_biases: Biases | None = None, their_biases: Biases | None = None,
    shell_height_m: float = 400e3,
) -> Beside:  # fmt: skip
    """Our maps beside published ones, where ours see something.

    theirs  maps on geocentric latitudes, as files of the format have them; ours are on geographic ones
    Raises NotEnough where the two have no time or no place in common.
    """
    first, last = theirs.times[0], theirs.times[-1]
    inside = (ours.times >= first - _LEAP) & (ours.times <= last + _LEAP)
    if not inside.any():
        raise NotEnough(
            f"the published map is of {first.astype('datetime64[m]')} to {last.astype('datetime64[m]')}, the day's "
            f"maps of {ours.times[0].astype('datetime64[m]')} to {ours.times[-1].astype('datetime64[m]')} (GPS time): "
            "give the map of the same day",
            had=0, needed=1, where="times",
        )  # fmt: skip
    times = ours.times[inside]
    lon, lat = np.meshgrid(ours.lons, ours.lats)
    geocentric = geocentric_latitude(lat)
    shape = (len(times), *lat.shape)
    when = np.clip(times.astype(np.int64), first.astype(np.int64), last.astype(np.int64)).astype("datetime64[ns]")
    told, told_sigma = vertical_at(
        theirs, np.broadcast_to(geocentric, shape), np.broadcast_to(lon, shape),
        np.broadcast_to(when[:, None, None], shape),
    )  # fmt: skip
    mine = np.where(ours.support[inside] > 0, ours.vtec[inside], np.nan).astype(np.float64)
    both = np.isfinite(mine) & np.isfinite(told)
    if not both.any():
        seen = "the day's maps see nothing" if not np.isfinite(mine).any() else "the published map does not reach there"
        raise NotEnough(
            f"no cell is in both maps: {seen}; the region is {ours.lats[0]:g} to {ours.lats[-1]:g} N, "
            f"{ours.lons[0]:g} to {ours.lons[-1]:g} E, the published map {theirs.lats[0]:g} to {theirs.lats[-1]:g} N, "
            f"{theirs.lons[0]:g} to {theirs.lons[-1]:g} E",
            had=0, needed=1, where="cells",
        )  # fmt: skip
    mine, told = np.where(both, mine, np.nan), np.where(both, told, np.nan)
    sigma = np.hypot(ours.vtec_sigma[inside].astype(np.float64), np.where(np.isfinite(told_sigma), told_sigma, 0.0))
    parts, share = _parts(mine, told, times)
    return Beside(
        times, ours.lats, ours.lons, mine.astype(np.float32), told.astype(np.float32),
        np.where(both, sigma, np.nan).astype(np.float32), parts, share, _coarse(mine, ours, theirs),
        _bias_offsets(our_biases, their_biases, shell_height_m) if our_biases and their_biases else (),
    )  # fmt: skip


def _hours(times: Times) -> tuple[npt.NDArray[np.int64], Times]:
    """The number of each epoch's hour, and where the hours begin: whole hours of UTC, a minute's leap seconds aside."""
    utc = (np.asarray(gps_to_utc(times)) + _LEAP).astype("datetime64[h]")
    starts, number = np.unique(utc, return_inverse=True)
    return number.astype(np.int64), np.asarray(utc_to_gps(starts.astype("datetime64[ns]")))


def _parts(mine: Floats, told: Floats, times: Times) -> tuple[dict[str, float], float]:
    """What the difference is made of, one part after the other, each fitted to what the ones before have left.

    Squares of the parts add up to the mean square of the difference, since each is a least-squares fit.
    """
    epoch, row, column = np.nonzero(np.isfinite(mine))
    left = (mine - told)[epoch, row, column]
    square = float(np.mean(left**2))
    parts: dict[str, float] = {}
    content = told[epoch, row, column]
    content = content - content.mean()
    _, group = np.unique(_hours(times)[0][epoch], return_inverse=True)
    share = float(left @ content / max(float(content @ content), 1e-12)) if len(left) > 1 else 0.0
    north, east = row - row.mean(), column - column.mean()
    for name in ("level", "share of content", "hour by hour", "tilt", "finer"):
        if name == "level":
            fit = np.full(len(left), left.mean())
        elif name == "share of content":
            fit = share * content
        elif name == "hour by hour":
            fit = (np.bincount(group, left) / np.bincount(group))[group]
        elif name == "tilt":
            fit = np.zeros(len(left))
            for one in range(int(group.max()) + 1):
                here = np.flatnonzero(group == one)
                terms = np.stack([np.ones(len(here)), north[here], east[here]], axis=1)
                fit[here] = terms @ np.linalg.lstsq(terms, left[here], rcond=None)[0]
        else:
            fit = left
        left = left - fit
        after = float(np.mean(left**2))
        parts[name] = float(np.sqrt(max(square - after, 0.0)))
        square = after
    return parts, share


def _coarse(mine: Floats, ours: Fields, theirs: Fields) -> float:
    """How far our own map is from its mean over cells as large as those of the published one (root mean square)."""
    def cells(own: Floats, other: Floats) -> int:
        step = float(own[1] - own[0]) if len(own) > 1 else 1.0
        return max(1, round(abs(float(other[1] - other[0])) / step)) if len(other) > 1 else 1

    size = (1, cells(ours.lats, theirs.lats), cells(ours.lons, theirs.lons))
    known = np.isfinite(mine)
    total = uniform_filter(np.where(known, mine, 0.0), size, mode="constant")
    weight = uniform_filter(known.astype(np.float64), size, mode="constant")
    return float(np.sqrt(np.mean((mine - total / np.maximum(weight, 1e-9))[known] ** 2)))


def _bias_offsets(ours: Biases, theirs: Biases, shell_height_m: float) -> tuple[BiasOffset, ...]:
    """Our biases against the published ones, per signal pair of ours whose receivers the file knows.

    A receiver is compared on the same two bands: once its satellites' differences between the codes of a band are
    applied, its own bias is the same number whichever code it tracks.  Satellites are compared on the same codes only.
    """
    def by_key(table: Biases) -> dict[tuple[str, str, str, str], dict[str, float]]:
        found: dict[tuple[str, str, str, str], dict[str, float]] = {}
        for row in np.flatnonzero(np.isfinite(table.value_ns)):
            kind = str(table.kind[row])
            name = str(table.name[row])[:4] if kind == "receiver" else str(table.name[row])
            key = (str(table.system[row]), str(table.code1[row]), str(table.code2[row]), kind)
            found.setdefault(key, {})[name.upper()] = float(table.value_ns[row])
        return found

    mine, others = by_key(ours), by_key(theirs)
    rows = []
    for system, code1, code2 in sorted({key[:3] for key in mine if key[0] != "R" and key[2]}):
        exact = others.get((system, code1, code2, "receiver"))
        bands = (code1[:2], code2[:2])
        alike = [k for k in others if (k[0], k[3]) == (system, "receiver") and (k[1][:2], k[2][:2]) == bands]
        there = exact if exact is not None else others[alike[0]] if alike else {}
        here = mine.get((system, code1, code2, "receiver"), {})
        receiver = {name: here[name] - there[name] for name in sorted(here.keys() & there.keys())}
        if not receiver:
            continue
        own, published = (table.get((system, code1, code2, "satellite"), {}) for table in (mine, others))
        satellite = np.array([own[name] - published[name] for name in sorted(own.keys() & published.keys())])
        level = float(satellite.mean()) if len(satellite) else 0.0
        of_receivers = float(np.mean(list(receiver.values())))
        f1, f2 = carrier_hz(system, code1[1]), carrier_hz(system, code2[1])
        # Content is the levelled content plus so much per ns of bias (code1 minus code2).
        per_ns = SPEED_OF_LIGHT_M_S * 1e-9 / (REFRACTION_M3_S2 * TECU * (1.0 / f2**2 - 1.0 / f1**2))
        rows.append(BiasOffset(
            system, code1, code2, len(receiver), len(satellite), of_receivers, level,
            float(satellite.std()) if len(satellite) else float("nan"),
            per_ns * (of_receivers + level) / float(mapping(_PLAIN_ELEVATION, shell_height_m)),
            {name: value + level for name, value in receiver.items()},
        ))  # fmt: skip
    return tuple(rows)
