"""The recipe: what happens to a network day, in what order.  Pure: same inputs, same outputs.

`receiver_day` takes one receiver's signals to rays; `estimate` takes the rays of all receivers to products.  Reads no
file, asks no clock: whoever calls reads (`formats`), keeps (`archive`) and measures time (`jobs`).
"""

from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np

from skylag.constants import SHELL_EARTH_RADIUS_M
from skylag.errors import NotEnough
from skylag.impact import arrivals, states
from skylag.ionosphere import (
    adjustment,
    augmentation_grid,
    background,
    displacement,
    faults,
    front_witness,
    fronts,
    geometry,
    irregularity,
    left_out,
    orbits,
    slopes,
)
from skylag.ionosphere import field as vertical_field
from skylag.ionosphere.adjustment import AdjustmentChoices
from skylag.ionosphere.arcs import ArcChoices, cut, reasons, slip_list
from skylag.ionosphere.background import Background
from skylag.ionosphere.field import FieldChoices, Hour
from skylag.ionosphere.fronts import FrontChoices
from skylag.ionosphere.irregularity import IrregularityChoices
from skylag.ionosphere.pairs import choose
from skylag.ionosphere.slopes import SlopeChoices
from skylag.tables import (
    Biases,
    Calibration,
    Ephemerides,
    Fields,
    Flag,
    PreciseOrbits,
    Rays,
    Receiver,
    Region,
    Samples,
    Signals,
    Thresholds,
)

Progress = Callable[[str, float], None]


# What becomes of published satellite biases: the adjustment holds them, draws upon them, or does without.
HOLD, DRAW, IGNORE = "hold", "draw", "ignore"
# What maps fade into where nobody looks.
BROADCAST, CLIMATOLOGICAL = "broadcast", "climatological"


@dataclass(frozen=True)
class Choices:
    """Everything a person may choose about a day, with defaults that suit a regional network.

    mapping_function   `geometry.SINGLE_LAYER` or `geometry.MODIFIED_SINGLE_LAYER`
    shell_height_km    of the thin shell; None: as the region says
    published_biases   HOLD, DRAW or IGNORE
    earlier_days       how far back the archive may be asked for biases of an earlier day, 0: not at all; they are
                       drawn upon where no published ones are in use
    bias_walk_ns_per_day  by how much a bias that is drawn upon may have walked in a day (`AdjustmentChoices`)
    background         BROADCAST (the climatological one where nothing is broadcast) or CLIMATOLOGICAL
    solar_flux         of the climatological model, in the unit of the 10.7 cm radio flux; 0: a mean day's
    """

    signals: Mapping[str, tuple[str, str]] = field(default_factory=dict)
    minimum_elevation: float = 10.0
    mapping_function: str = geometry.SINGLE_LAYER
    shell_height_km: float | None = None
    published_biases: str = HOLD
    earlier_days: int = 0
    bias_walk_ns_per_day: float = 0.1
    background: str = BROADCAST
    solar_flux: float = 0.0
    epoch_step_s: float = 300.0
    thin_to_s: float | None = None
    arcs: ArcChoices = field(default_factory=ArcChoices)
    adjustment: AdjustmentChoices = field(default_factory=AdjustmentChoices)
    maps: FieldChoices = field(default_factory=FieldChoices)
    slopes: SlopeChoices = field(default_factory=SlopeChoices)
    fronts: FrontChoices = field(default_factory=FrontChoices)
    irregularity: IrregularityChoices = field(default_factory=IrregularityChoices)


@dataclass(frozen=True)
class ReceiverDay:
    """One receiver's day up to rays, with what is worth telling about it."""

    receiver: Receiver
    rays: Rays
    notes: tuple[str, ...]
    facts: Mapping[str, Any]


@dataclass(frozen=True)
class Estimate:
    """What a network day gives, before it is stored."""

    calibration: Calibration
    samples: Samples
    fields: Fields
    flags: tuple[Flag, ...]
    site_states: Any
    site_reasons: tuple[tuple[str, ...], ...]
    facts: Mapping[str, Any]
    warnings: tuple[str, ...]


def receiver_day(
    signals: Signals, sources: Sequence[Ephemerides | PreciseOrbits], choices: Choices, shell_height_m: float
) -> ReceiverDay:
    """One receiver's signals to rays.

    sources  navigation records and tabulated orbits, best first
    Raises NotEnough where the receiver has no place, no usable signal pair, no orbit or no arc.
    """
    place = np.asarray(signals.receiver.position_m)
    if not np.all(np.isfinite(place)) or not 6.2e6 < float(np.linalg.norm(place)) < 6.5e6:
        raise NotEnough(
            f"{signals.receiver.name}: the file tells no position on Earth ({', '.join(f'{c:g}' for c in place)} m); "
            "add APPROX POSITION XYZ to its header",
            had=list(map(float, place)), needed="a position on Earth", where=signals.receiver.name,
        )  # fmt: skip
    observations, notes = choose(signals, choices.signals, channels_of(sources))
    positions = orbits.positions(sources, observations.satellites, observations.times)
    elevation, _ = geometry.look(signals.receiver.position_m, positions)
    arcs = cut(observations, choices.arcs, elevation)
    rays = geometry.place(arcs, positions, shell_height_m, choices.minimum_elevation, choices.mapping_function)
    if not len(rays):
        raise NotEnough(
            f"{signals.receiver.name}: no arc above {choices.minimum_elevation:g} deg is long enough with known "
            "orbits; add navigation or SP3 files of the day, or a longer observation file",
            had=0, needed=1, where=signals.receiver.name,
        )  # fmt: skip
    seen = np.isfinite(observations.phase1).any(axis=0)
    lost = observations.satellites[seen & ~np.isfinite(elevation).any(axis=0)]
    if len(lost):
        notes = (*notes, f"{signals.receiver.name}: no orbit for {', '.join(map(str, lost))}; left out")
    facts = {
        "receiver": signals.receiver.name,
        "epochs": len(observations.times),
        "interval_s": observations.interval_s,
        "satellites": int(seen.sum()),
        "pairs": {system: pair.name for system, pair in observations.pairs.items()},
        "glonass_channels": dict(signals.channels),
        "rays": len(rays),
        "arcs": len(arcs.arc_satellite),
        "arcs_began": reasons(arcs),
        "slips": len(slip_list(arcs)),
        "level_sigma_median_tecu": round(float(np.median(arcs.arc_level_sigma)), 3),
        **arcs.rejected,
    }
    return ReceiverDay(signals.receiver, rays, notes, facts)


def channels_of(sources: Sequence[Ephemerides | PreciseOrbits]) -> dict[str, int]:
    """GLONASS satellite -> FDMA channel, from the navigation records."""
    channels: dict[str, int] = {}
    for source in sources:
        if isinstance(source, Ephemerides):
            here = np.array([str(name)[0] == "R" for name in source.satellites], dtype=bool)
            channels.update(
                {str(s): int(k) for s, k in zip(source.satellites[here], source.channels[here], strict=True)}
            )
    return channels


def background_of(sources: Sequence[Ephemerides | PreciseOrbits], choices: Choices | None = None) -> Background:
    """What maps fade into: the broadcast model of the first navigation records that tell one, else, or where it is
    chosen, the climatological one."""
    choices = choices or Choices()
    told = (background.broadcast(source.ionosphere) for source in sources if isinstance(source, Ephemerides))
    known = next((model for model in told if model is not None), None)
    if known is not None and choices.background == BROADCAST:
        return known
    return background.climatological(choices.solar_flux)


def ragged_from(choices: IrregularityChoices, limits: Thresholds) -> IrregularityChoices:
    """The choices with the region's own index from which content is ragged; what is restless keeps its share of it."""
    share = choices.restless_tecu_min / choices.ragged_tecu_min
    return replace(choices, ragged_tecu_min=limits.strained_roti, restless_tecu_min=share * limits.strained_roti)


def estimate(
    rays: Rays,
    region: Region,
    day: np.datetime64,
    choices: Choices,
    prior: Biases | None = None,
    channels: Mapping[str, int] | None = None,
    progress: Progress | None = None,
    beyond: Background | None = None,
    run: Callable[[Callable[[Hour], Any], Iterable[Hour]], Iterable[Any]] = map,
) -> Estimate:
    """All products of one network day from the rays of its receivers.

    day       the GPS-time day; maps are made from its first to its last epoch that has data
    progress  told the stage and the share of it done
    beyond    what the maps fade into where no line of sight passes (`background_of`); a plain model when None
    run       how hours are made, of maps and of checks of them: `map`, or an executor's
    """
    tell = progress or (lambda stage, share: None)
    tell("biases", 0.0)
    calibration = adjustment.solve(rays, prior, choices.adjustment, channels)
    samples = adjustment.apply(calibration, rays)
    tell("maps", 0.0)
    first, last = rays.time.min(), rays.time.max()
    step = np.timedelta64(round(choices.epoch_step_s * 1e9), "ns")
    midnight = day.astype("datetime64[ns]")
    start = midnight + (max(first, midnight) - midnight) // step * step
    end = min(last, midnight + np.timedelta64(86_400, "s") - np.timedelta64(1, "ns")) + np.timedelta64(1, "ns")
    epochs = vertical_field.epochs_between(start, end, choices.epoch_step_s)
    fields = vertical_field.fit(
        samples, region.lats, region.lons, epochs, choices.maps, lambda share: tell("maps", share), beyond, run
    )
    foretold = left_out.check(samples, region.lats, region.lons, epochs, choices.maps, run=run)
    tell("slopes", 0.0)
    steep = slopes.measure(rays, samples, fields, choices.slopes)
    tell("fronts", 0.0)
    moving = front_witness.at_least(fronts.track(rays, samples, steep, choices.fronts), steep)
    tell("irregular", 0.0)
    ragged = irregularity.assess(rays, moving, ragged_from(choices.irregularity, region.thresholds), samples)
    broken = faults.find(rays, samples, ragged, steep, moving)
    tell("states", 0.0)
    told = fronts.arrivals(moving, rays, region.sites)
    judged = states.judge(fields, steep, moving, ragged, region, broken, told)
    facts = {
        "calibration": dict(calibration.summary),
        "slopes": dict(steep.summary),
        "arrivals": arrivals.facts(told),
        "receivers_left_out": dict(foretold.facts()),
        "beyond_sight": (beyond or background.PLAIN).name,
        "planar_fit": augmentation_grid.planar_facts(
            samples, (region.south, region.north, region.west, region.east), epochs
        ),
    }
    samples = displacement.widened(samples, fields, choices.adjustment.shell_height_sigma_m)
    return Estimate(
        calibration, samples, judged.fields, judged.flags, judged.site_states, judged.site_reasons, facts,
        limits_of_sight(rays, calibration),
    )  # fmt: skip


def known_biases(
    choices: Choices, published: Biases | None, earlier: Biases | None
) -> tuple[Biases | None, AdjustmentChoices, tuple[str, ...]]:
    """What the adjustment is told of biases: the table, its choices with the way to use it, and sentences to tell.

    published  of bias files; earlier  of an earlier day
    """
    walk = replace(choices.adjustment, prior_walk_ns_per_day=choices.bias_walk_ns_per_day)
    said: list[str] = []
    if published is not None and choices.published_biases == IGNORE:
        said.append(f"bias files are there but not used, as asked for: {published.source}")
        published = None
    if published is not None:
        if earlier is not None:
            said.append(f"biases of {earlier.source} are not drawn upon, since bias files are in use")
        drawn = choices.published_biases == DRAW
        return published, walk if drawn else choices.adjustment, tuple(said)
    if earlier is not None:
        return earlier, walk, tuple(said)
    return None, choices.adjustment, tuple(said)


def limits_of_sight(rays: Rays, calibration: Calibration) -> tuple[str, ...]:
    """Sentences on what these data cannot tell."""
    said: list[str] = []
    names = sorted({receiver.name for receiver in rays.receivers})
    if len(names) == 1:
        said.append(
            f"One receiver alone ({names[0]}): no slope between receivers can be measured, no front or patch has a "
            "second witness, and satellite biases cannot be told apart from the shape of the ionosphere as well as a "
            "network can. The map beyond its own lines of sight is unseen."
        )
    elif len(names) < 4:
        said.append(
            f"{len(names)} receivers: a front needs three receivers to have a speed and a heading, and few places of "
            "the map have a second witness."
        )
    datum = str(calibration.summary.get("datum", ""))
    if "zero mean" in datum:
        said.append(
            "Not every signal pair has published satellite biases of this day: where it has none, the satellites' "
            "mean is set to zero. Maps do not depend on it; single biases compare with a product only after both are "
            "brought to one mean."
        )
    said += [str(note) for note in calibration.summary.get("notes", ())]
    return tuple(said)


def region_around(receivers: Sequence[Receiver], name: str = "", margin_km: float = 300.0) -> Region:
    """A region that holds the receivers and a margin, rounded outward to half degrees.

    The grid step grows with the region so that a map stays below some 2500 cells.
    """
    places = np.array([geometry.geodetic(np.asarray(receiver.position_m))[:2] for receiver in receivers], dtype=float)
    lat, lon = places[:, 0], places[:, 1]
    # Longitudes as one run, also across 180 degrees.
    reference = lon[0]
    lon = reference + np.mod(lon - reference + 180.0, 360.0) - 180.0
    margin_lat = np.degrees(margin_km * 1000.0 / SHELL_EARTH_RADIUS_M)
    south, north = max(lat.min() - margin_lat, -89.5), min(lat.max() + margin_lat, 89.5)
    margin_lon = min(margin_lat / max(np.cos(np.radians(np.mean(lat))), 0.1), 60.0)
    box = [np.floor(south * 2) / 2, np.ceil(north * 2) / 2]
    west, east = np.floor((lon.min() - margin_lon) * 2) / 2, np.ceil((lon.max() + margin_lon) * 2) / 2
    east = min(east, west + 360.0)
    step = next(
        (s for s in (0.5, 1.0, 2.0) if (box[1] - box[0]) / s * (east - west) / s <= 2500), 5.0
    )  # fmt: skip
    title = name or ("Around " + (receivers[0].name if len(receivers) == 1 else f"{len(receivers)} receivers"))
    return Region(title, float(box[0]), float(box[1]), float(west), float(east), step_deg=step)
