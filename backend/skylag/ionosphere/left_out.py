"""Receivers left out: how well the map made of all others foretells each receiver's own lines of sight.

The receiver's rays are taken out of the solved equations of an epoch, all at once, without solving them again.  The
biases stay those of the whole day's adjustment, in which the receiver took part: this checks the map and its sigma,
not the calibration.  Never changes a map.
"""

from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from skylag.ionosphere.field import FieldChoices, Hour, prepare, systems
from skylag.ionosphere.kriging import left_out
from skylag.tables import Floats, Ints, Samples, Times

# 95 % of a normal error lie within so many sigmas.
_WITHIN = 1.959964


@dataclass(frozen=True)
class LeftOut:
    """One row per line of sight and epoch, foretold by all other receivers.

    time; receiver (row number of the rays' receivers); x, y [km from the middle]; off: measured less foretold vertical
    content [TECU]; sigma [TECU] of that difference, the ray's own errors included
    """

    names: tuple[str, ...]
    time: Times
    receiver: Ints
    x: Floats
    y: Floats
    off: Floats
    sigma: Floats

    def __len__(self) -> int:
        return len(self.time)

    def facts(self) -> Mapping[str, Any]:
        """Summary: count, median size, rms and mean [TECU], share within 95 % intervals, and the same by receiver.

        A receiver at fault whose arcs say themselves that their levels are poor raises the rms, not the median.
        """
        if not len(self):
            return {"lines_of_sight": 0}

        def of(rows: Any) -> dict[str, float]:
            off, sigma = self.off[rows], self.sigma[rows]
            return {
                "median_off_tecu": round(float(np.median(np.abs(off))), 3),
                "rms_tecu": round(float(np.sqrt(np.mean(off**2))), 3),
                "mean_tecu": round(float(np.mean(off)), 3),
                "sigma_tecu": round(float(np.sqrt(np.mean(sigma**2))), 3),
                "within_95": round(float(np.mean(np.abs(off) <= _WITHIN * sigma)), 4),
            }

        return {
            "lines_of_sight": len(self),
            "epochs": len(np.unique(self.time)),
            **of(slice(None)),
            "by_receiver": {self.names[r]: of(self.receiver == r) for r in np.unique(self.receiver)},
        }


Rows = tuple[tuple[Times, Ints, Floats, Floats, Floats, Floats], ...]  # columns of `LeftOut`, piece by piece


def check(
    samples: Samples, lat: Floats, lon: Floats, epochs: Times, choices: FieldChoices | None = None,
    every_s: float = 1800.0, run: Callable[[Callable[[Hour], Rows], Iterable[Hour]], Iterable[Rows]] = map,
) -> LeftOut:  # fmt: skip
    """Every receiver against the field without it, at some of the maps' epochs.

    lat, lon  places whose middle is the middle of the map, e.g. the axes of the grid
    every_s   spacing of the epochs that are checked
    run       `map`, or an executor's: hours are checked side by side, each by itself (`of_hour`)
    Covariances are those of the maps (learned from the hours' three checked epochs at most, instead of all).
    """
    step = max(1, round(every_s / max(float(np.median(np.diff(epochs).astype(np.int64))) / 1e9, 1.0))) \
        if len(epochs) > 1 else 1  # fmt: skip
    chosen = epochs[step // 2 :: step] if len(epochs) > step // 2 else epochs
    corner_lat, corner_lon = np.meshgrid([lat[0], lat[-1]], [lon[0], lon[-1]])
    hours = prepare(samples, corner_lat.ravel(), corner_lon.ravel(), chosen, choices or FieldChoices())
    rows = [row for found in run(of_hour, hours) for row in found]
    names = tuple(receiver.name for receiver in samples.rays.receivers)
    if not rows:
        none = np.zeros(0)
        return LeftOut(names, np.zeros(0, "datetime64[ns]"), np.zeros(0, np.int64), none, none, none, none)
    time, number_of, x, y, off, sigma = (np.concatenate(columns) for columns in zip(*rows, strict=True))
    return LeftOut(names, time, number_of, x, y, off, sigma)


def of_hour(hour: Hour) -> Rows:
    """The epochs of one hour: the lines of sight of each receiver, foretold by all others."""
    rows = []
    for number, system in enumerate(systems(hour)):
        if system is None:
            continue
        part = system.part
        for receiver in np.unique(part.receiver):
            own = np.flatnonzero(part.receiver == receiver)
            if len(part) - len(own) < 4:
                continue
            off, sigma = left_out(system, own)
            time = np.full(len(own), hour.epochs[number])
            rows.append((time, part.receiver[own], part.x[own], part.y[own], off, sigma))
    return tuple(rows)
