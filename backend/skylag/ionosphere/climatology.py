"""The usual vertical content of a place by hour, season and solar flux: IRI, by way of PyIRI.

International Reference Ionosphere with the CCIR coefficients and the density profiles of Forsythe et al. (2023), PyIRI,
Space Weather 21, e2022SW003394.  It is asked for the middles of months, at a few levels of flux, on a coarse lattice
around the places; days, levels and places lie between.  IRI ends at 2000 km: what is above is a constant.
Never knows a day: months are all that it tells apart.  A planning aid, not for navigation.
"""

import logging
from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy.interpolate import RegularGridInterpolator

from skylag.constants import L1_M_PER_TECU
from skylag.tables import Floats

USUAL_FLUX = 120.0  # F10.7 where none is told: about its mean over a solar cycle (from memory)
FLUXES = np.array([70.0, 120.0, 190.0])  # F10.7 that are asked for; beyond them the ends hold
ABOVE_TECU = 1.0  # over 2000 km at middle latitudes (from memory); it also keeps nights from vanishing
LEAST_DELAY_M = 0.05

SMOOTH_DAYS = 81  # of the mean flux that models of months are made for (three rotations of the Sun: common practice)

_STEP_LAT, _STEP_LON = 2.5, 5.0  # of the lattice [deg]; doubled until it has no more than so many nodes
_MOST_NODES = 150
_HEIGHTS_KM = np.concatenate([np.arange(80.0, 600.0, 10.0), np.arange(600.0, 2001.0, 50.0)])
_HOURS = np.arange(24) + 0.5


@dataclass(frozen=True)
class Climate:
    """IRI over days and places.

    content (M, F, 24, P)  vertical content [TECU] at the middles of months and at FLUXES
    month, share (D,)      a day is between a month and the next one, by such a share of that
    """

    content: Floats
    month: npt.NDArray[np.int64]
    share: Floats

    def delay(self, rows: Any, flux: Floats) -> Floats:
        """Vertical delay [m] (rows, 24, P) of some days under F10.7 of (rows,), NaN where it is not known."""
        month, share = self.month[rows], self.share[rows][:, None, None]
        known = np.clip(np.where(np.isfinite(flux), flux, USUAL_FLUX), FLUXES[0], FLUXES[-1])
        level = np.minimum(np.searchsorted(FLUXES, known, side="right") - 1, len(FLUXES) - 2)
        up = ((known - FLUXES[level]) / (FLUXES[level + 1] - FLUXES[level]))[:, None, None]

        def of_month(number: npt.NDArray[np.int64]) -> Floats:
            return np.asarray((1.0 - up) * self.content[number, level] + up * self.content[number, level + 1])

        content = (1.0 - share) * of_month(month) + share * of_month(month + 1)
        return np.asarray(np.maximum(content * L1_M_PER_TECU, LEAST_DELAY_M))


def climate_of(days: npt.NDArray[np.datetime64], lats: Floats, lons: Floats) -> Climate:
    """The model at the middles of the hours of days (D,), at places [deg] (P,)."""
    # The middle of a month is noon of its 15th: so long after it, in days.
    since = days.astype("datetime64[D]") - np.timedelta64(14, "D")
    before = since.astype("datetime64[M]")
    months = np.arange(before.min(), before.max() + 2)
    middles = months.astype("datetime64[D]") + np.timedelta64(14, "D")
    month = (before - months[0]).astype(np.int64)
    length = (middles[month + 1] - middles[month]) / np.timedelta64(1, "D")
    share = ((days.astype("datetime64[D]") - middles[month]) / np.timedelta64(1, "D")) / length
    lat_nodes, lon_nodes = _lattice(lats, lons)
    at = np.stack([np.broadcast_to(lats, np.shape(lons)), lons], axis=-1)
    content = np.empty((len(months), len(FLUXES), 24, len(lats)))
    for number, one in enumerate(months):
        year, of_year = divmod(int(one.astype(np.int64)), 12)
        told = _of_month(1970 + year, of_year + 1, tuple(lat_nodes), tuple(lon_nodes))
        between = RegularGridInterpolator((lat_nodes, lon_nodes), np.moveaxis(told, (2, 3), (0, 1)))
        content[number] = np.moveaxis(between(at), 0, 2)
    return Climate(content + ABOVE_TECU, month, np.asarray(share, dtype=np.float64))


def smoothed(flux: Floats) -> Floats:
    """Mean F10.7 (D,) of each day and the 80 before it, as far as known; NaN where none is.

    A month's content follows the Sun's slow change; what single days of flux do to it is much less (Balan et al. 1994,
    JGR 99, 2243-2253; from memory), so a model of months is given no single days.
    """
    known = np.isfinite(flux)
    total, count = np.cumsum(np.where(known, flux, 0.0)), np.cumsum(known).astype(np.float64)
    for sums in (total, count):
        sums[SMOOTH_DAYS:] = sums[SMOOTH_DAYS:] - sums[:-SMOOTH_DAYS].copy()
    return np.asarray(np.where(count > 0, total / np.maximum(count, 1.0), np.nan))


def _lattice(lats: Floats, lons: Floats) -> tuple[Floats, Floats]:
    """Latitudes and longitudes [deg] of nodes around places."""
    wider = 1.0
    while True:
        nodes = _nodes(lats, wider * _STEP_LAT, 90.0), _nodes(lons, wider * _STEP_LON, np.inf)
        if len(nodes[0]) * len(nodes[1]) <= _MOST_NODES:
            return nodes
        wider *= 2.0


def _nodes(values: Floats, step: float, most: float) -> Floats:
    """Whole steps around values, two at least, none beyond `most`."""
    low, high = np.floor(np.min(values) / step), np.ceil(np.max(values) / step)
    if low == high:
        low, high = (low - 1, high) if high * step >= most else (low, high + 1)
    return np.asarray(np.clip(np.arange(low, high + 1) * step, -most, most))


@lru_cache(maxsize=64)
def _of_month(year: int, month: int, lats: tuple[float, ...], lons: tuple[float, ...]) -> Floats:
    """Content [TECU] up to 2000 km (F, 24, lats, lons) at the middle of a month."""
    iri = _iri()
    lat, lon = (part.ravel() for part in np.meshgrid(lats, lons, indexing="ij"))
    told = []
    with np.errstate(all="ignore"):
        for flux in FLUXES:
            *_, density = iri.edp_update.IRI_density_1day(
                year, month, 15, _HOURS, (lon + 180.0) % 360.0 - 180.0, lat, _HEIGHTS_KM, float(flux), iri.coeff_dir
            )
            told.append(np.trapezoid(density, _HEIGHTS_KM * 1e3, axis=1) / 1e16)
    content = np.stack(told).reshape(len(FLUXES), 24, len(lats), len(lons))
    content.flags.writeable = False
    return np.asarray(content)


def _iri() -> Any:
    """PyIRI, brought in when it is first asked: it takes seconds, and few commands need it."""
    loud = logging.raiseExceptions
    import PyIRI

    logging.raiseExceptions = loud  # which it turns off for everybody
    return PyIRI
