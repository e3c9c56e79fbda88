"""The vertical-content field: best linear unbiased estimation from calibrated pierce points, with its uncertainty.

At each epoch the field is a plane plus a correlated residual whose variance and reach are found from the data of that
hour, seen through noise of three kinds: a ray's own, an arc's level, and the bias errors that all rays of a receiver
or a satellite share (they do not average out).  Slopes are differences of the same field over a stated length, so that
they too carry an honest sigma.  Never smooths over time beyond the window of an epoch, never fills a gap with a guess
that looks like a measurement: where no ray is near, support is 0 and the field fades into a stated background.
"""

from collections.abc import Callable, Iterable
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt
from scipy.stats import chi2

from skylag.constants import L1_M_PER_TECU
from skylag.errors import Refused
from skylag.ionosphere.background import PLAIN, Background
from skylag.ionosphere.covariance import Epoch, Residual, adapt, gather, learn, plane_km
from skylag.ionosphere.kriging import Estimates, System, at, left_out, solve
from skylag.tables import UNSEEN, Fields, Floats, Ints, Samples, Times

__all__ = ["FieldChoices", "Hour", "Made", "at_places", "epochs_between", "fit", "join", "make",
           "plane_km", "prepare", "systems"]  # fmt: skip

_HOUR = np.timedelta64(3600, "s")
_LEAST_RAYS = 4
# Receivers tried as the one at fault: the one that looks worst may be its neighbour.
_SUSPECTS = 3
_TILE = 220  # places that share a neighbourhood of rays
_FEW = 1.25  # times the neighbours: so few rays are taken all together
_LEAST_RECEIVERS = 4  # with three, who fits worse than the rest cannot be told
# A fit so bad by chance is seen once in a thousand epochs: then the hour's covariance is not that of the epoch.
_MISFIT_CHANCE = 1e-3


@dataclass(frozen=True)
class FieldChoices:
    """How the field is made.

    minimum_elevation  rays below are left out [deg]
    window_s        rays within half of it around an epoch are averaged per arc; a wall of 750 m/s moves 90 km in 120 s
    reach_km        reaches of the residual that are tried (exponential covariance)
    spread_tecu, grain_tecu  standard deviations of the residual and of its unresolved part that are tried
    support_km      a ray this near to a cell's middle carries the cell
    slope_over_km   length over which the slope of the field is taken
    learn_rays      rays of an epoch from which its residual is learned
    neighbours      rays that speak for a place where there are many more
    strange_sigmas  a ray beyond so many sigmas from what all others say is strange; where one receiver alone explains
                    it, its strange rays are left out
    far_worse       a receiver whose rays fit so many times worse than the median receiver's does not tell how rough
                    the sky is
    odd_sigmas, alone_km  rays of others beyond so many sigmas within this distance: the receiver is not alone, it is
                    weather; 3.5 is met by chance once in 2000 rays
    place_sigma_km  how far from its pierce point the content of a ray may belong: 50 km of height, as in
                    AdjustmentChoices, seen at 45 degrees
    fade_km         so far beyond what a ray carries, the field is the background alone
    widen_km        sigmas are brought to how well the rays within about this distance agree (`kriging.Surroundings`)
    """

    minimum_elevation: float = 15.0
    window_s: float = 120.0
    reach_km: tuple[float, ...] = (60.0, 125.0, 250.0, 500.0, 1000.0)
    spread_tecu: tuple[float, ...] = (0.06, 0.12, 0.25, 0.5, 1.0, 2.0, 4.0, 8.0, 16.0)
    grain_tecu: tuple[float, ...] = (0.02, 0.06, 0.2, 0.6)
    support_km: float = 150.0
    slope_over_km: float = 40.0
    learn_rays: int = 140
    neighbours: int = 240
    strange_sigmas: float = 5.0
    far_worse: float = 4.0
    odd_sigmas: float = 3.5
    alone_km: float = 300.0
    place_sigma_km: float = 50.0
    fade_km: float = 1000.0
    widen_km: float = 75.0


@dataclass(frozen=True)
class Hour:
    """The maps of one hour, ready to be made: a unit of work that travels between processes."""

    lat: Floats  # (places,) deg
    lon: Floats
    x: Floats  # (places,) km from the middle of all places
    y: Floats
    epochs: Times
    parts: tuple[Epoch | None, ...]
    covariance: Floats
    background: Background
    choices: FieldChoices


@dataclass(frozen=True)
class Made:
    """What came of an hour: layers (epochs, places), names as in `Fields`."""

    layers: dict[str, npt.NDArray[np.float32]]
    support: npt.NDArray[np.uint16]


def epochs_between(start: np.datetime64, end: np.datetime64, step_s: float) -> Times:
    """Epochs from start to before end every `step_s` seconds."""
    count = int(np.ceil((end - start) / np.timedelta64(1, "s") / step_s))
    steps = np.rint(np.arange(count) * step_s * 1e9).astype(np.int64).astype("timedelta64[ns]")
    return np.asarray(start.astype("datetime64[ns]") + steps)


def fit(
    samples: Samples,
    lats: Floats,
    lons: Floats,
    epochs: Times,
    choices: FieldChoices | None = None,
    progress: Callable[[float], None] | None = None,
    background: Background | None = None,
    run: Callable[[Callable[[Hour], Made], Iterable[Hour]], Iterable[Made]] = map,
) -> Fields:
    """Maps of vertical content and slope at each epoch.

    lats, lons  axes of the grid [deg], increasing
    progress    told the share done, 0 to 1
    background  what the field fades into where nobody looks; a plain model when None
    run         `map`, or an executor's: hours are made side by side, each by itself
    Returns Fields with every state `unseen`: states are judged elsewhere.  An epoch without rays is NaN.
    Raises NotEnough where no ray is left above the elevation limit, Refused where the axes make no grid.
    """
    for name, axis in (("lats", lats), ("lons", lons)):
        if not len(axis) or not np.all(np.isfinite(axis)) or np.any(np.diff(axis) <= 0):
            raise Refused(
                f"maps: {name} must be finite and increase, they are {axis}", name=name, value=str(axis),
                allowed="finite, increasing",
            )  # fmt: skip
    if not len(epochs) or np.any(np.diff(epochs) <= np.timedelta64(0, "ns")):
        raise Refused("maps: epochs must increase, and there must be one", name="epochs", value=len(epochs),
                      allowed="increasing, at least one")  # fmt: skip
    lon, lat = np.meshgrid(lons, lats)
    hours = prepare(samples, lat.ravel(), lon.ravel(), epochs, choices or FieldChoices(), background)
    made = []
    for number, one in enumerate(run(make, hours)):
        made.append(one)
        if progress is not None:
            progress((number + 1) / len(hours))
    return join(made, lats, lons, epochs)


def prepare(
    samples: Samples, lat: Floats, lon: Floats, epochs: Times, choices: FieldChoices,
    background: Background | None = None,
) -> tuple[Hour, ...]:  # fmt: skip
    """The units of work for places [deg] and epochs: one per hour of the clock, so that an hour made alone is the same.

    The middle of the map is that of the places.
    """
    turn = np.mod(lon - lon[0] + 180.0, 360.0) - 180.0
    middle = (0.5 * float(lat.min() + lat.max()), float(lon[0] + 0.5 * (turn.min() + turn.max())))
    x, y = plane_km(lat, lon, middle)
    parts = gather(samples, epochs, middle, choices.minimum_elevation, choices.window_s)
    hour = (epochs.astype("datetime64[ns]") - epochs[0].astype("datetime64[D]").astype("datetime64[ns]")) // _HOUR
    return tuple(
        Hour(
            lat, lon, x, y, epochs[hour == h], tuple(part for part, k in zip(parts, hour, strict=True) if k == h),
            samples.bias_covariance, background or PLAIN, choices,
        )
        for h in np.unique(hour)
    )  # fmt: skip


def make(hour: Hour) -> Made:
    """Content and slopes of one hour's epochs at its places."""
    shape = (len(hour.epochs), len(hour.x))
    names = ("vtec", "vtec_sigma", "slope", "slope_sigma", "slope_east", "slope_north")
    layers: dict[str, npt.NDArray[np.float32]] = {name: np.full(shape, np.nan, dtype=np.float32) for name in names}
    support: npt.NDArray[np.uint16] = np.zeros(shape, dtype=np.uint16)
    for number, looked in enumerate(_looked(hour)):
        if looked is None:
            continue
        answer, part = _everywhere(*looked, hour)
        support[number], nearest_km = _near(hour, part)
        answer = _placed(answer, support[number], hour)
        value, sigma = _faded(answer, nearest_km, hour, number)
        slope = np.hypot(answer.east, answer.north)
        along = np.where(slope > 0, slope, 1.0)
        slope_sigma = np.hypot(answer.east * answer.east_sigma, answer.north * answer.north_sigma) / along
        slope_sigma = np.where(slope > 0, slope_sigma, np.maximum(answer.east_sigma, answer.north_sigma))
        to_mm_per_km = L1_M_PER_TECU * 1000.0
        for name, flat in zip(
            names,
            (value, sigma, slope * to_mm_per_km, slope_sigma * to_mm_per_km, answer.east * to_mm_per_km,
             answer.north * to_mm_per_km), strict=True,
        ):  # fmt: skip
            layers[name][number] = flat
    return Made(layers, support)


def join(made: Iterable[Made], lats: Floats, lons: Floats, epochs: Times) -> Fields:
    """The hours' layers as maps on the grid they were prepared for."""
    pieces = list(made)
    shape = (len(epochs), len(lats), len(lons))
    layers = {
        name: np.concatenate([piece.layers[name] for piece in pieces]).reshape(shape) for name in pieces[0].layers
    }
    support = np.concatenate([piece.support for piece in pieces]).reshape(shape)
    return Fields(
        times=epochs, lats=lats, lons=lons, support=support, state=np.full(shape, UNSEEN, dtype=np.uint8), **layers
    )


def at_places(
    samples: Samples, lat: Floats, lon: Floats, epochs: Times, choices: FieldChoices | None = None,
    background: Background | None = None,
) -> tuple[npt.NDArray[np.float32], npt.NDArray[np.float32], npt.NDArray[np.uint16]]:  # fmt: skip
    """Vertical content, its sigma [TECU] and the lines of sight near, at any places [deg]; (epochs, places) each.

    The same field as the maps', asked at the places themselves.
    """
    made = [make(hour) for hour in prepare(samples, lat, lon, epochs, choices or FieldChoices(), background)]
    value, sigma = (np.concatenate([one.layers[name] for one in made]) for name in ("vtec", "vtec_sigma"))
    return value, sigma, np.concatenate([one.support for one in made])


# ---------------------------------------------------------------------------------------------- one epoch


def systems(hour: Hour) -> Iterable[System | None]:
    """The solved equations of each epoch of an hour, of all its rays; None where there are too few."""
    return (_system(*looked, hour) if looked is not None else None for looked in _looked(hour))


def _looked(hour: Hour) -> Iterable[tuple[Epoch, Residual] | None]:
    """The rays of each epoch with the residual that they tell; None where there are too few rays."""
    choices = hour.choices
    whole = [part for part in hour.parts if part is not None and len(part) >= _LEAST_RAYS]
    if not whole:
        return
    residual, doubtful = _learn(whole, hour)
    for part in hour.parts:
        if part is None or len(part) < _LEAST_RAYS:
            yield None
            continue
        believed = part.where(~np.isin(part.receiver, doubtful)) if doubtful else part
        believed = believed if len(believed) >= _LEAST_RAYS else part
        yield part, adapt(believed, hour.covariance, residual, choices.spread_tecu, choices.learn_rays)


def _learn(parts: list[Epoch], hour: Hour) -> tuple[Residual, list[int]]:
    """What the data of some epochs say of the residual, without receivers that fit far worse than the rest.

    One receiver at fault would make the whole sky look rough.  It is left out of the learning only; whether its rays
    are is decided with its neighbours.  Returns their numbers too.
    """
    choices = hour.choices
    tried = (choices.reach_km, choices.spread_tecu, choices.grain_tecu)
    parts = [parts[i] for i in np.unique(np.linspace(0, len(parts) - 1, 3).astype(int))]
    residual = learn(parts, hour.covariance, tried, choices.learn_rays)
    doubtful: list[int] = []
    while len(doubtful) < _SUSPECTS:
        # Some rays of each are enough to see who fits worst.
        some = [part.where(_spaced(len(part), choices.neighbours)) for part in parts]
        odd = np.concatenate([solve(part, hour.covariance, residual).strangeness ** 2 for part in some])
        who, which = np.unique(np.concatenate([part.receiver for part in some]), return_inverse=True)
        mean = np.bincount(which, odd) / np.bincount(which)
        worst = mean.argmax()
        if len(who) < _LEAST_RECEIVERS or mean[worst] < choices.far_worse**2 * np.median(mean):
            break
        left = [part.where(part.receiver != who[worst]) for part in parts]
        parts = [part for part in left if len(part) >= _LEAST_RAYS]
        if not parts:
            break
        doubtful.append(int(who[worst]))
        residual = learn(parts, hour.covariance, tried, choices.learn_rays)
    return residual, doubtful


def _spaced(count: int, most: int) -> Ints:
    """At most so many row numbers, evenly spaced."""
    return np.unique(np.linspace(0, count - 1, min(most, count)).astype(np.int64))


def _system(part: Epoch, residual: Residual, hour: Hour) -> System:
    """The equations of some rays of an epoch, without those that only a receiver at fault explains.

    Where the residual does not fit these rays, they tell their own.
    """
    system = _without_loner(solve(part, hour.covariance, residual), hour)
    free = max(len(system.part) - 3, 1)
    if system.chi_square > float(chi2.ppf(1.0 - _MISFIT_CHANCE, free)):
        own, _ = _learn([system.part], hour)
        if own != residual:
            system = _without_loner(solve(part, hour.covariance, own), hour)
    return system


def _without_loner(system: System, hour: Hour) -> System:
    """The system without the strange rays of one receiver, if nobody near sees anything odd once it is left out.

    A wall or a rough sky is seen by several receivers: what is strange to one is odd to its neighbours too, and all
    stay.  A receiver at fault makes its neighbours look odd only as long as it takes part, and shows on more than one
    satellite: a single strange ray may be the first to meet a wall, and stays.  What its rays are off is told by all
    others together.
    """
    choices = hour.choices
    limit = choices.strange_sigmas
    for _ in range(len(np.unique(system.part.receiver)) // 4):
        part, odd = system.part, system.strangeness
        strange = np.abs(odd) > limit
        if not strange.any():
            return system
        guilt = np.bincount(part.receiver[strange], odd[strange] ** 2)
        for suspect in [s for s in np.argsort(-guilt)[:_SUSPECTS] if guilt[s] > 0]:
            own = part.receiver == suspect
            rest = part.where(~own)
            if len(rest) < _LEAST_RAYS:
                continue
            off, sigma = left_out(system, np.flatnonzero(own))
            gone = np.flatnonzero(own)[np.abs(off) > limit * sigma]
            others = solve(rest, hour.covariance, system.residual)
            still = np.abs(others.strangeness) > choices.odd_sigmas
            apart = np.hypot(rest.x[still][:, None] - part.x[gone], rest.y[still][:, None] - part.y[gone])
            if len(gone) > 1 and not (apart < choices.alone_km).any():
                left = part.where(np.setdiff1d(np.arange(len(part)), gone))
                system = solve(left, hour.covariance, system.residual)
                break
        else:
            return system
    return system


def _everywhere(part: Epoch, residual: Residual, hour: Hour) -> tuple[Estimates, Epoch]:
    """Estimates at all places, and the rays they stand on: all at once where they are few, else tile by tile."""
    choices = hour.choices
    over, widen = choices.slope_over_km, choices.widen_km
    if len(part) <= _FEW * choices.neighbours:
        system = _system(part, residual, hour)
        return at(system, hour.x, hour.y, over, widen), system.part
    answer = Estimates(*(np.empty(len(hour.x)) for _ in Estimates.__dataclass_fields__))
    for tile in _tiles(hour.x, hour.y, np.arange(len(hour.x)), _TILE):
        x, y = hour.x[tile], hour.y[tile]
        outside_x = np.maximum(np.maximum(x.min() - part.x, part.x - x.max()), 0.0)
        outside_y = np.maximum(np.maximum(y.min() - part.y, part.y - y.max()), 0.0)
        # Nearest to the tile, and of those above it the nearest to its middle.
        middle = np.hypot(part.x - np.mean(x), part.y - np.mean(y))
        near = np.hypot(outside_x, outside_y) + 0.25 * middle
        chosen = np.sort(np.argpartition(near, choices.neighbours)[: choices.neighbours])
        piece = at(_system(part.where(chosen), residual, hour), x, y, over, widen)
        for name in Estimates.__dataclass_fields__:
            getattr(answer, name)[tile] = getattr(piece, name)
    return answer, part


def _tiles(x: Floats, y: Floats, rows: Ints, most: int) -> list[Ints]:
    """Places cut into tiles of at most so many, each time across the longer side."""
    if len(rows) <= most:
        return [rows]
    side = x[rows] if np.ptp(x[rows]) >= np.ptp(y[rows]) else y[rows]
    order = rows[np.argsort(side, kind="stable")]
    half = len(order) // 2
    return [*_tiles(x, y, order[:half], most), *_tiles(x, y, order[half:], most)]


def _near(hour: Hour, part: Epoch) -> tuple[Ints, Floats]:
    """Rays within reach of each place, and the distance [km] to the nearest one."""
    east = hour.x[:, None].astype(np.float32) - part.x.astype(np.float32)
    north = hour.y[:, None].astype(np.float32) - part.y.astype(np.float32)
    away2 = east * east + north * north
    count = np.count_nonzero(away2 <= hour.choices.support_km**2, axis=1)
    return np.asarray(count), np.sqrt(away2.min(axis=1).astype(np.float64))


def _placed(answer: Estimates, support: Ints, hour: Hour) -> Estimates:
    """The same, with the sigma of content widened by what misplaced lines of sight do where the map is steep.

    A ray crosses a thick layer, not a shell: its content belongs some way before or behind its pierce point.  Beside a
    wall that is an error of slope times distance, which falls with the rays that carry a place.  The slope that the
    whole map has in common (the median) is left out: what it does to all rays together is in their leanings.
    """
    seen = support > 0
    if not seen.any():
        return answer
    east, north = answer.east - np.median(answer.east[seen]), answer.north - np.median(answer.north[seen])
    off_km = hour.choices.place_sigma_km / np.sqrt(np.maximum(support, 1))
    return replace(answer, sigma=np.hypot(answer.sigma, np.hypot(east, north) * off_km))


def _faded(answer: Estimates, nearest_km: Floats, hour: Hour, number: int) -> tuple[Floats, Floats]:
    """Content and sigma; where no ray carries a place, both go over to those of the background.

    A plane and a local residual say nothing of content a thousand kilometres on: content departs from its mean day
    alike over one to two thousand kilometres (Klobuchar and Johanson 1977; from memory).  The background takes over
    with the distance beyond sight, sooner where the field itself knows less than the background; their errors are
    added, not averaged.  The background errs as it does over the network at this epoch, or by its stated share,
    whichever is more.
    """
    choices = hour.choices
    unseen = nearest_km > choices.support_km
    if not unseen.any():
        return answer.value, answer.sigma
    model = hour.background.vertical(hour.lat, hour.lon, hour.epochs[number])
    seen = ~unseen
    off = float(np.sqrt(np.mean((answer.value - model)[seen] ** 2))) if seen.any() else 0.0
    model_sigma = hour.background.sigma(model, off)
    by_distance = np.clip((nearest_km - choices.support_km) / choices.fade_km, 0.0, 1.0)
    by_sigma = answer.sigma**2 / (answer.sigma**2 + model_sigma**2)
    share = np.where(unseen, np.maximum(by_distance, by_sigma), 0.0)
    return answer.value + share * (model - answer.value), answer.sigma + share * (model_sigma - answer.sigma)
