"""The in-memory door to the invented network: `simulate` a day, or a `small_world` for quick tests.

Gives what files would give (`skylag.tables.Signals`, `Ephemerides`), value for value as a reader finds them in the
committed files, and beside it everything that was put in.  Chance comes from numpy generators seeded by (seed, day,
receiver, purpose), so a receiver's data do not depend on which others are simulated.  Never touches a disk.
"""

from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from functools import cached_property
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy.signal import lfilter

from invented import constellations, weather
from invented.constellations import LIGHT_M_S, Constellation
from invented.places import STATIONS, Station
from invented.plasma import GPS_HEIGHT_KM, Ionosphere
from invented.weather import Front, Patch, Scenario
from skylag.tables import Biases, Ephemerides, Receiver, Signals

Floats = npt.NDArray[np.float64]
Times = npt.NDArray[np.datetime64]

SEED = 2031
FREQUENCY_HZ = {"1": 1575.42e6, "2": 1227.60e6, "5": 1176.45e6}  # IS-GPS-200, IS-GPS-705, Galileo OS SIS ICD
DELAY_M_PER_TECU = {band: 40.3e16 / hz**2 for band, hz in FREQUENCY_HZ.items()}
GPS_CODES = {"W": ("C1W", "C2W"), "C": ("C1C", "C2W"), "CW": ("C1C", "C1W", "C2W")}
GALILEO_CODES = ("C1C", "C5Q")

# Hours of the fault and who has it: wild codes and phases that must not pass as weather.
FAULTS = {
    ("2031-03-11", "OXBR00XBS"): (5.0, 6.0),
    ("2031-03-12", "HLRN00XBS"): (9.5, 10.4),
}
# Spans [h] with no data at all, and whether the receiver lost power (RINEX epoch flag 1 on its return).
OUTAGES = {
    ("2031-03-11", "EDRO00XBS"): ((14.20, 14.32, False),),
    ("2031-03-11", "SKAR00XBS"): ((2.0, 2.15, True), (20.5, 20.55, False)),
    ("2031-03-12", "BRIM00XBS"): ((17.1, 17.9, True),),
    ("2031-03-12", "MRGT00XBS"): ((11.0, 11.05, False),),
    ("2031-03-13", "FENN00XBS"): ((8.0, 10.25, True),),
    ("2031-03-13", "ZOLL00XBS"): ((3.30, 3.38, False), (15.0, 15.1, True)),
}
# Slips worth finding, cycles on the first and second carrier: single, equal, and pairs that hide in one combination.
# GPS (9, 7) moves the geometry-free phase by 3 mm, (77, 60) not at all; Galileo (4, 3) by 3 mm, (154, 115) not at all.
SLIP_KINDS = {
    "G": ((1, 0), (0, 1), (1, 1), (-1, -1), (9, 7), (77, 60), (4, 3), (2, 0), (0, -2), (5, 4), (-9, -7), (37, -12),
          (2, 1), (-1, 0), (0, -1), (840, 655)),
    "E": ((1, 0), (0, 1), (1, 1), (-1, -1), (4, 3), (154, 115), (-4, -3), (2, 0), (0, -2), (5, 4), (8, 6), (-31, 16),
          (2, 1), (-1, 0), (0, -1), (540, 403)),
}  # fmt: skip


@dataclass(frozen=True)
class Slip:
    """A cycle slip put in: from this epoch on, cycles on the first and on the second carrier.

    told    the file sets the loss-of-lock bit there
    where   "start" or "end": three to nine epochs from an arc's edge; "patch": a ray through the patch; "" elsewhere
    """

    receiver: str
    satellite: str
    time: np.datetime64
    cycles1: int
    cycles2: int
    told: bool
    where: str = ""


@dataclass(frozen=True)
class Truth:
    """What was put into one receiver's day.  Arrays (E, S) on the axes of its Signals; NaN where not tracked.

    stec        slant content [TECU] along the ray to the satellite
    elevation, azimuth  [deg] at the receiver
    ambiguity   (E, S) int: arc number of constant ambiguities apart from the listed slips (-1 where not tracked); a
                new number is a new rise, or a gap after which the phase came back with other ambiguities
    slips, faults (spans of GPS time), outages (spans of GPS time)
    bursts      (satellite, code, first epoch, epochs) of outlying codes
    receiver_clock_s  (E,) offset as the codes carry it
    bias_ns     (system, code) -> receiver code bias
    """

    receiver: Receiver
    times: Times
    satellites: npt.NDArray[np.str_]
    stec: Floats
    elevation: Floats
    azimuth: Floats
    ambiguity: npt.NDArray[np.int64]
    slips: tuple[Slip, ...]
    faults: tuple[tuple[np.datetime64, np.datetime64], ...]
    bursts: tuple[tuple[str, str, np.datetime64, int], ...]
    outages: tuple[tuple[np.datetime64, np.datetime64], ...]
    receiver_clock_s: Floats
    bias_ns: dict[tuple[str, str], float]


@dataclass(frozen=True)
class Simulated:
    """A simulated span of the invented network: what files would hold, and the truth beside it.

    day, scenario, seed; times (E,) GPS time
    signals      one per receiver, as `formats.read` gives them
    ephemerides  the day's navigation file as a table; `navigation_text()` is the file itself
    truth        one per receiver, in the order of `signals`
    ionosphere   slant and vertical content anywhere
    """

    day: np.datetime64
    times: Times
    scenario: Scenario
    seed: int
    signals: tuple[Signals, ...]
    truth: tuple[Truth, ...]
    sky: Constellation = field(repr=False)
    ionosphere: Ionosphere = field(repr=False)

    @property
    def receivers(self) -> tuple[Receiver, ...]:
        """The receivers, in the order of `signals`."""
        return tuple(s.receiver for s in self.signals)

    @cached_property
    def ephemerides(self) -> Ephemerides:
        """The navigation records of the day."""
        return constellations.ephemerides(self.sky, self.day)

    def navigation_text(self) -> str:
        """The RINEX navigation file of the day."""
        return constellations.navigation_text(self.sky, self.day)

    def satellite_positions(self, times: Times) -> Floats:
        """Earth-fixed positions (T, S, 3) [m] of `sky.satellites` at GPS times, in the frame of that instant."""
        seconds = (np.asarray(times, dtype="datetime64[ns]") - constellations.REFERENCE).astype(np.int64) / 1e9
        return constellations.positions(self.sky, np.repeat(seconds[:, None], len(self.sky.a), axis=1))[0]

    def vertical_content(
        self, lat: npt.ArrayLike, lon: npt.ArrayLike, time: npt.ArrayLike, top_km: float = GPS_HEIGHT_KM
    ) -> Floats:
        """True vertical content [TECU] at places [deg] and GPS times (broadcast), up to the height of GPS satellites;
        `top_km=2000` leaves out the greater part of the plasmasphere."""
        return self.ionosphere.vertical(lat, lon, weather.hours_since(time), top_km=top_km)

    def vertical_slope(
        self, lat: npt.ArrayLike, lon: npt.ArrayLike, time: npt.ArrayLike, step_km: float = 4.0
    ) -> Floats:
        """True slope [mm/km on 1575.42 MHz] of the vertical delay, from columns `step_km` apart."""
        la, lo = np.asarray(lat, dtype=float), np.asarray(lon, dtype=float)
        up, across = step_km / 2 / 111.2, step_km / 2 / (111.2 * np.cos(np.radians(la)))
        north = self.vertical_content(la + up, lo, time) - self.vertical_content(la - up, lo, time)
        east = self.vertical_content(la, lo + across, time) - self.vertical_content(la, lo - across, time)
        return weather.L1_MM_PER_TECU / step_km * np.sqrt(north**2 + east**2)

    @property
    def front(self) -> Front:
        """The wall: `front.at(time)` gives its line, heading, speed, jump, slope, width, or None."""
        return self.ionosphere.front

    @property
    def patch(self) -> Patch:
        """The irregular patch: `patch.at(time)` gives centre, radius, strength, or None."""
        return self.ionosphere.patch

    @property
    def slips(self) -> tuple[Slip, ...]:
        """All slips of all receivers."""
        return tuple(slip for one in self.truth for slip in one.slips)

    def satellite_biases(self) -> Biases:
        """True satellite code biases [ns]: C1W-C2W and C1C-C1W (GPS), C1C-C5Q (Galileo), zero mean over each
        constellation of 24."""
        rows: list[tuple[str, str, str, str, float]] = []
        for k, name in enumerate(self.sky.satellites):
            system = str(self.sky.system[k])
            for code1, code2 in (("C1W", "C2W"), ("C1C", "C1W")) if system == "G" else (("C1C", "C5Q"),):
                value = self.scenario.biases * float(self.sky.bias_ns[code1][k] - self.sky.bias_ns[code2][k])
                rows.append((str(name), system, code1, code2, value))
        return _biases("satellite", rows)

    def receiver_biases(self) -> Biases:
        """True receiver code biases [ns], first minus second code, one row per receiver, system and pair brought."""
        rows: list[tuple[str, str, str, str, float]] = []
        for one in self.truth:
            codes = [code for system, code in one.bias_ns if system == "G"]
            for code1 in codes[:-1]:
                value = one.bias_ns["G", code1] - one.bias_ns["G", codes[-1]]
                rows.append((one.receiver.name, "G", code1, codes[-1], value))
            rows.append((one.receiver.name, "E", "C1C", "C5Q", one.bias_ns["E", "C1C"] - one.bias_ns["E", "C5Q"]))
        return _biases("receiver", rows)


def _biases(kind: str, rows: list[tuple[str, str, str, str, float]]) -> Biases:
    names, systems, first, second, values = zip(*rows, strict=True)
    count = len(rows)
    return Biases(
        kind=np.full(count, kind), name=np.array(names), system=np.array(systems), code1=np.array(first),
        code2=np.array(second), value_ns=np.array(values), sigma_ns=np.zeros(count),
        start=np.full(count, np.datetime64("NaT", "ns")), end=np.full(count, np.datetime64("NaT", "ns")),
        source="invented truth", datum="mean over the satellites of each constellation and pair is zero",
    )  # fmt: skip


# ------------------------------------------------------------------------------------------------------ the door


def simulate(
    day: str = "2031-03-12",
    receivers: Sequence[str] | None = None,
    hours: tuple[float, float] = (0.0, 24.0),
    interval_s: float = 30.0,
    seed: int = SEED,
    scenario: Scenario | None = None,
    stations: Sequence[Station] | None = None,
    **overrides: Any,
) -> Simulated:
    """Simulate a span of a day of the network.

    day        any day near the three of the scenario
    receivers  markers (nine characters or the first four), all when None
    hours      first and last hour of the day (the last epoch is before it)
    seed       of all invented things; the committed files use SEED with all hours at 30 s
    scenario   see `weather.Scenario`; single fields of it may be given by name instead: `slips=False, front=False`
    stations   other stations than the committed ones (then `receivers` chooses among these)

    The committed files are `simulate(day)`, but for one value in ten thousand that may differ by one unit of its last
    digit between processors (see make.py).  Other hours or intervals draw other noise and slips from the same
    biases, orbits and ionosphere.
    """
    chosen_scenario = replace(scenario or Scenario(), **overrides)
    network = tuple(stations) if stations is not None else STATIONS
    if receivers is not None:
        wanted = [next((s for s in network if m in (s.marker, s.marker[:4])), None) for m in receivers]
        if None in wanted:
            raise KeyError(
                f"no such invented receiver among {list(receivers)}; there are {[s.marker for s in network]}"
            )
        network = tuple(s for s in wanted if s is not None)
    start = np.datetime64(day, "D").astype("datetime64[ns]")
    first, last = round(hours[0] * 3600 / interval_s), round(hours[1] * 3600 / interval_s)
    times = start + np.arange(first, last) * np.timedelta64(round(interval_s * 1e9), "ns")
    sky = constellations.constellation(seed)
    ionosphere = Ionosphere(chosen_scenario, seed)
    pairs = [_receiver_day(station, times, interval_s, sky, ionosphere, seed) for station in network]
    return Simulated(
        day=np.datetime64(day, "D"), times=times, scenario=chosen_scenario, seed=seed,
        signals=tuple(p[0] for p in pairs), truth=tuple(p[1] for p in pairs), sky=sky, ionosphere=ionosphere,
    )  # fmt: skip


def small_world(
    day: str = "2031-03-12",
    receivers: Sequence[str] = ("VANP", "KELM", "FENN", "BRIM"),
    hours: tuple[float, float] = (6.0, 8.5),
    interval_s: float = 60.0,
    seed: int = 7,
    **overrides: Any,
) -> Simulated:
    """A few receivers around the strait for two and a half hours of the storm day: the wall and the patch pass."""
    return simulate(day, receivers, hours, interval_s, seed, **overrides)


# ------------------------------------------------------------------------------------------------- one receiver


def _code_steps(metres: Floats) -> Floats:
    """Codes as these receivers give them: in steps of 5 cm, well below their noise; it spares a tenth of the files."""
    return np.asarray(np.round(np.round(metres * 20.0) / 20.0, 2))


def _noise(rng: np.random.Generator, shape: tuple[int, int], correlation_s: float, interval_s: float) -> Floats:
    """First-order autoregressive noise of unit variance along time (E, S)."""
    keep = float(np.exp(-interval_s / correlation_s))
    white = rng.standard_normal(shape)
    white[0] /= np.sqrt(1.0 - keep**2)
    return np.asarray(lfilter([np.sqrt(1.0 - keep**2)], [1.0, -keep], white, axis=0))


def _clock(station: Station, hours: Floats, rng: np.random.Generator) -> tuple[Floats, Floats]:
    """Receiver clock [s] as the phases and as the codes carry it (E,); smooth, so that files stay small."""
    offset, phase = rng.uniform(-1, 1), rng.uniform(0, 2 * np.pi)
    if station.clock == "jumps":  # drifts 0.21 ms an hour; the codes alone are set back by whole milliseconds
        smooth = 2.1e-4 * hours + 1e-4 * offset + 2e-8 * np.sin(2 * np.pi * hours / 7.0 + phase)
        return smooth, smooth - 1e-3 * np.rint(smooth / 1e-3)
    if station.clock == "slow":
        smooth = 2e-7 * offset * hours + 3e-5 * offset + 4e-8 * np.sin(2 * np.pi * hours / 11.0 + phase)
        return smooth, smooth
    smooth = 5e-8 * offset + 1.5e-8 * np.sin(2 * np.pi * hours / 6.0 + phase)
    return smooth, smooth


def receiver_bias_ns(station: Station, seed: int) -> dict[tuple[str, str], float]:
    """Code biases [ns] of a receiver, the same on all days: (system, code) -> value, common part left to the clock."""
    number = [ord(c) for c in station.marker[:4]]
    rng = np.random.default_rng([seed, 31, *number])
    gps, galileo, civil = rng.uniform(-15, 15), rng.uniform(-15, 15), rng.uniform(-2.5, 2.5)
    every = {"C1C": gps / 2 + civil, "C1W": gps / 2, "C2W": -gps / 2}
    bias = {("G", code): every[code] for code in GPS_CODES[station.gps]}
    return bias | {("E", "C1C"): galileo / 2, ("E", "C5Q"): -galileo / 2}


def _receiver_day(
    station: Station, times: Times, interval_s: float, sky: Constellation, ionosphere: Ionosphere, seed: int
) -> tuple[Signals, Truth]:
    scenario = ionosphere.scenario
    day = str(times[0].astype("datetime64[D]"))
    day_number = int(times[0].astype("datetime64[D]").astype(np.int64))
    letters = [ord(c) for c in station.marker[:4]]

    def chance(purpose: int) -> np.random.Generator:
        return np.random.default_rng([seed, day_number, purpose, *letters])

    position = station.position_m
    hours = weather.hours_since(times)
    day_hours = (times - np.datetime64(day).astype("datetime64[ns]")).astype(np.int64) / 3.6e12
    shape = (len(times), len(sky.satellites))

    # Geometry at the true instant of measurement: the receiver's tag is off by its clock.
    clock_phase, clock_code = _clock(station, day_hours, chance(1))
    clock_phase, clock_code = clock_phase * scenario.clocks, clock_code * scenario.clocks
    seconds = (times - constellations.REFERENCE).astype(np.int64) / 1e9
    elevation, azimuth, satellite, distance, satellite_clock = constellations.look_from(
        sky, station, seconds - clock_code
    )
    up = np.sin(np.radians(elevation))

    tracked = _tracked(station, elevation, azimuth, day_hours, scenario, day, chance(2))
    stec = np.full(shape, np.nan)
    e, s = np.nonzero(tracked)
    stec[e, s] = ionosphere.slant(position, satellite[e, s], hours[e])
    in_patch = _in_patch(ionosphere, satellite, position, hours, tracked)

    arcs, renewed = _arcs(tracked, interval_s, chance(3))
    fault = _fault_span(station, day, scenario)
    in_fault = (day_hours >= fault[0] - 0.05) & (day_hours < fault[1] + 0.05)
    slips, slip1, slip2, told = _slips(
        station, times, sky, arcs, elevation, in_patch, in_fault, scenario, interval_s, chance(4)
    )

    # Everything that is not the ionosphere, a code bias or noise [m].
    troposphere = 2.35 * np.exp(-station.height_m / 8000.0) / np.sqrt(up**2 + 0.0021)
    base = distance + troposphere - LIGHT_M_S * satellite_clock
    steep = np.exp(-np.maximum(elevation, 0.0) / 16.0)
    noise = chance(5)
    correlation_s = 240.0
    values: dict[str, Floats] = {}
    lock: dict[str, npt.NDArray[np.uint8]] = {}
    bias = {k: v * scenario.biases for k, v in receiver_bias_ns(station, seed).items()}
    drift = dict(scenario.bias_drift_ns).get(station.marker, 0.0) * np.sin(2 * np.pi * day_hours / 24.0)
    start_phase = chance(6).integers(-900_000, 900_000, (int(arcs.max(initial=0)) + 2, 2))
    gps, galileo = sky.system == "G", sky.system == "E"
    code_names = tuple(dict.fromkeys((*GPS_CODES[station.gps], *GALILEO_CODES)))
    phase_of = {"C1C": "L1C", "C1W": "L1W", "C2W": "L2W", "C5Q": "L5Q"}
    multipath = {band: _noise(noise, shape, correlation_s, interval_s) for band in "125"}
    carrier = {band: _noise(noise, shape, 180.0, interval_s) for band in "125"}

    no_code, no_phase = _second_losses(shape, float(day_hours[-1] - day_hours[0]), scenario, chance(8))
    for code in code_names:
        band = code[1]
        code_lost = no_code if band != "1" else np.zeros(shape, dtype=bool)
        phase_lost = no_phase if band != "1" else np.zeros(shape, dtype=bool)
        owners = np.zeros(shape[1], dtype=bool)
        if code in GPS_CODES[station.gps]:
            owners |= gps
        if code in GALILEO_CODES:
            owners |= galileo
        receiver_bias = np.where(gps, bias.get(("G", code), 0.0), bias.get(("E", code), 0.0))
        total_bias = receiver_bias + np.nan_to_num(scenario.biases * sky.bias_ns[code])
        second = (drift if band != "1" else 0.0 * drift)[:, None]
        white = noise.standard_normal(shape) * (0.10 + 0.22 * steep) * scenario.code_noise
        reflected = multipath[band] * (0.10 + 0.75 * steep) * scenario.multipath * station.multipath
        value = base + LIGHT_M_S * (clock_code[:, None] + (total_bias + second) * 1e-9)
        value = value + DELAY_M_PER_TECU[band] * stec + white + reflected
        values[code] = np.where(tracked & owners & ~code_lost, _code_steps(value), np.nan)

        phase = phase_of[code]
        # A receiver with both first-frequency codes follows one carrier: L1C for Galileo and civil GPS, else L1W.
        if code == "C1W" and station.gps == "CW":
            continue
        length = LIGHT_M_S / FREQUENCY_HZ[band]
        white = noise.standard_normal(shape) * (0.0010 + 0.0022 * steep) * scenario.phase_noise
        reflected = carrier[band] * (0.0008 + 0.0030 * steep) * scenario.phase_noise
        metres = base + LIGHT_M_S * clock_phase[:, None] - DELAY_M_PER_TECU[band] * stec + white + reflected
        cycles = metres / length + start_phase[arcs, 0 if band == "1" else 1] + (slip1 if band == "1" else slip2)
        values[phase] = np.where(tracked & owners & ~phase_lost, np.round(cycles, 3), np.nan)
        lock[phase] = np.where(tracked & owners & ~phase_lost & (told | renewed), 1, 0).astype(np.uint8)
    strength = np.round(30.0 + 21.0 * np.sqrt(np.clip(up, 0.0, 1.0)) - 1.5 * np.abs(multipath["1"]) * steep)
    if station.gps == "W":
        values["S1W"] = np.where(tracked & gps, strength, np.nan)
        values["S1C"] = np.where(tracked & galileo, strength, np.nan)
    else:
        values["S1C"] = np.where(tracked, strength, np.nan)

    bursts = _bursts(values, tracked, times, sky, float(day_hours[-1] - day_hours[0]), scenario, chance(9))
    faults = _spoil(station, day, day_hours, values, scenario, chance(7))
    resets = np.zeros(len(times), dtype=bool)
    outages = []
    for first, last, power in _outages(station, day, scenario):
        inside = (day_hours >= first) & (day_hours < last)
        if inside.any():
            outages.append((times[inside][0], times[inside][-1] + np.timedelta64(round(interval_s * 1e9), "ns")))
            back = np.flatnonzero(day_hours >= last)
            if power and len(back):
                resets[back[0]] = True
    receiver = Receiver(station.marker, position, antenna="INVENTED        NONE", type="INVENTED")
    held = tracked.any(axis=1)
    shown = {name: array[held] for name, array in values.items()}
    signals = Signals(
        receiver=receiver, times=times[held], satellites=sky.satellites.copy(), values=shown,
        lock={name: array[held] for name, array in lock.items()}, channels={}, resets=resets[held],
        interval_s=float(interval_s),
    )  # fmt: skip
    # A fault ends every ambiguity: what comes after it is another arc.
    arcs = np.where(tracked & (day_hours >= fault[1])[:, None] & (fault[1] > 0.0), arcs + 100_000, arcs)
    truth = Truth(
        receiver=receiver, times=times[held], satellites=sky.satellites.copy(), stec=stec[held],
        elevation=elevation[held], azimuth=azimuth[held], ambiguity=np.where(tracked, arcs, -1)[held],
        slips=slips, faults=faults, bursts=bursts, outages=tuple(outages), receiver_clock_s=clock_code[held],
        bias_ns=bias,
    )  # fmt: skip
    return signals, truth


def _outages(station: Station, day: str, scenario: Scenario) -> tuple[tuple[float, float, bool], ...]:
    return OUTAGES.get((day, station.marker), ()) if scenario.gaps else ()


def _tracked(
    station: Station, elevation: Floats, azimuth: Floats, day_hours: Floats, scenario: Scenario, day: str,
    rng: np.random.Generator,
) -> npt.NDArray[np.bool_]:  # fmt: skip
    """(E, S) where the receiver follows the satellite: above its horizon, outside gaps."""
    turn = rng.uniform(0, 2 * np.pi, 3)
    azimuth_rad = np.radians(azimuth)
    horizon = scenario.mask_deg + sum(1.1 * (1 + np.sin((k + 1) * azimuth_rad + turn[k])) for k in range(3))
    tracked = elevation > horizon
    if not scenario.gaps:
        return np.asarray(tracked)
    # Short losses, one to six epochs, one an hour of a satellite drawn from all: one in three is in sight.
    for _ in range(int(rng.poisson(float(day_hours[-1] - day_hours[0])))):
        e, s, length = rng.integers(0, len(day_hours)), rng.integers(0, tracked.shape[1]), rng.integers(1, 7)
        tracked[e : e + length, s] = False
    for first, last, _ in _outages(station, day, scenario):
        tracked[(day_hours >= first) & (day_hours < last)] = False
    return np.asarray(tracked)


def _second_losses(
    shape: tuple[int, int], span_h: float, scenario: Scenario, rng: np.random.Generator
) -> tuple[npt.NDArray[np.bool_], npt.NDArray[np.bool_]]:
    """(E, S) where the second code, and where the second phase, is missing for one to four epochs.

    The first frequency goes on and the ambiguities hold; half of the losses take the code alone.
    """
    no_code, no_phase = np.zeros(shape, dtype=bool), np.zeros(shape, dtype=bool)
    if scenario.gaps:
        for _ in range(int(rng.poisson(1.5 * span_h))):
            e, s, length = rng.integers(0, shape[0]), rng.integers(0, shape[1]), rng.integers(1, 5)
            no_code[e : e + length, s] = True
            no_phase[e : e + length, s] = bool(rng.random() < 0.5)
    return no_code, no_phase


def _in_patch(
    ionosphere: Ionosphere, satellite: Floats, position: tuple[float, float, float], hours: Floats,
    tracked: npt.NDArray[np.bool_],
) -> npt.NDArray[np.bool_]:  # fmt: skip
    """(E, S) where the ray crosses the irregular patch."""
    inside = np.zeros(tracked.shape, dtype=bool)
    strength = ionosphere.patch.strength(hours)
    e, s = np.nonzero(tracked & (strength > 0.1)[:, None])
    if not len(e):
        return inside
    receiver = np.array(position)
    unit = satellite[e, s] - receiver
    unit /= np.sqrt((unit**2).sum(axis=-1))[:, None]
    along = (unit * receiver).sum(axis=-1)
    radius = np.sqrt((receiver**2).sum()) + ionosphere.patch.sheet_km * 1e3
    reach = np.sqrt(along**2 + radius**2 - (receiver**2).sum()) - along
    x, y = weather.plane_km((receiver + reach[:, None] * unit) / radius)
    cx, cy = ionosphere.patch.centre_km(hours[e])
    inside[e, s] = (x - cx) ** 2 + (y - cy) ** 2 < ionosphere.patch.radius_km**2
    return inside


def _arcs(
    tracked: npt.NDArray[np.bool_], interval_s: float, rng: np.random.Generator
) -> tuple[npt.NDArray[np.int64], npt.NDArray[np.bool_]]:
    """(E, S) number of the ambiguity in force (0 where not tracked), and where a new one is told by the lock bit.

    A gap up to five epochs keeps its ambiguity in three of five cases; a longer one never.
    """
    arcs = np.zeros(tracked.shape, dtype=np.int64)
    renewed = np.zeros(tracked.shape, dtype=bool)
    number = 0
    for s in range(tracked.shape[1]):
        column = tracked[:, s].astype(np.int8)
        starts = np.flatnonzero(np.diff(column, prepend=0) == 1)
        ends = np.flatnonzero(np.diff(column, append=0) == -1)
        previous_end = -(10**9)
        for first, last in zip(starts, ends, strict=True):
            short = (first - previous_end - 1) <= 5
            if not (short and rng.random() < 0.6):
                number += 1
                # Most receivers tell a new start; one in ten forgets after a short gap.
                renewed[first, s] = not short or rng.random() < 0.9
            arcs[first : last + 1, s] = number
            previous_end = int(last)
    return arcs, renewed


def _slips(
    station: Station, times: Times, sky: Constellation, arcs: npt.NDArray[np.int64], elevation: Floats,
    in_patch: npt.NDArray[np.bool_], in_fault: npt.NDArray[np.bool_], scenario: Scenario, interval_s: float,
    rng: np.random.Generator,
) -> tuple[tuple[Slip, ...], npt.NDArray[np.int64], npt.NDArray[np.int64], npt.NDArray[np.bool_]]:  # fmt: skip
    """The slips, their running sums on both carriers (E, S), and the loss-of-lock bits set beside arc starts."""
    shape = arcs.shape
    slip1, slip2 = np.zeros(shape, dtype=np.int64), np.zeros(shape, dtype=np.int64)
    told = np.zeros(shape, dtype=bool)
    if not scenario.slips:
        return (), slip1, slip2, told
    # Not in the first or last three epochs of an arc, where a slip is no more than a shorter arc.
    inside = (arcs > 0) & ~in_fault[:, None]
    for step in (-3, -2, -1, 1, 2, 3):
        inside &= np.roll(arcs, step, axis=0) == arcs
    inside[:3] = inside[-3:] = False
    good = np.argwhere(inside & (elevation > 10.0))
    taken: list[tuple[int, int, str]] = []
    span_h = len(times) * interval_s / 3600.0
    if len(good):
        for e, s in good[rng.integers(0, len(good), round(span_h))]:  # one an hour
            taken.append((int(e), int(s), ""))
        # Near the edges of arcs: three to nine epochs after the start or before the end.
        for arc in rng.permutation(np.unique(arcs[arcs > 0]))[: round(span_h / 3)]:
            rows, columns = np.nonzero(arcs == arc)
            step = int(rng.integers(3, 10))
            if len(rows) > 40:
                e, where = (rows[step], "start") if rng.random() < 0.5 else (rows[-step], "end")
                taken.append((int(e), int(columns[0]), where))
    stormy = np.argwhere(inside & in_patch)
    if len(stormy):
        count = int(rng.binomial(len(stormy), min(1.0, 0.012 * interval_s / 30.0)))
        for e, s in stormy[rng.integers(0, len(stormy), count)]:
            taken.append((int(e), int(s), "patch"))
    slips: list[Slip] = []
    used: set[tuple[int, int]] = set()
    for e, s, where in taken:
        near = {(e + k, s) for k in range(-4, 5)}
        if used & near or not inside[e, s]:
            continue  # never two within two minutes: neither could be listed alone
        used.add((e, s))
        system = str(sky.system[s])
        kind = SLIP_KINDS[system][int(rng.integers(0, len(SLIP_KINDS[system])))]
        said = bool(rng.random() < 0.4)
        same = arcs[:, s] == arcs[e, s]
        same[:e] = False
        slip1[same, s] += kind[0]
        slip2[same, s] += kind[1]
        told[e, s] |= said
        slips.append(Slip(station.marker, str(sky.satellites[s]), times[e], kind[0], kind[1], said, where))
    # The bit set for nothing, about once in two hours.
    if len(good):
        for e, s in good[rng.integers(0, len(good), round(span_h / 2))]:
            told[e, s] = True
    return tuple(sorted(slips, key=lambda slip: (slip.time, slip.satellite))), slip1, slip2, told


def _bursts(
    values: dict[str, Floats], tracked: npt.NDArray[np.bool_], times: Times, sky: Constellation, span_h: float,
    scenario: Scenario, rng: np.random.Generator,
) -> tuple[tuple[str, str, np.datetime64, int], ...]:  # fmt: skip
    """Put outlying codes in place: one code of one satellite, 6 to 40 m off for two to eight epochs, thrice a day."""
    bursts = []
    codes = sorted(name for name in values if name[0] == "C")
    for _ in range(int(rng.poisson(span_h / 8.0)) if scenario.faults else 0):
        rows = np.argwhere(tracked)
        e, s = rows[rng.integers(0, len(rows))]
        length, code = int(rng.integers(2, 9)), codes[int(rng.integers(0, len(codes)))]
        size = rng.uniform(6.0, 40.0) * rng.choice([-1.0, 1.0]) + rng.standard_normal(length)
        part = values[code][e : e + length, s]
        if not np.isnan(part).all():
            part += np.round(20.0 * size[: len(part)]) / 20.0
            part[:] = np.round(part, 2)
            bursts.append((str(sky.satellites[s]), code, times[e], len(part)))
    return tuple(bursts)


def _fault_span(station: Station, day: str, scenario: Scenario) -> tuple[float, float]:
    """First and last hour of the receiver's fault; an empty span where it has none."""
    return FAULTS.get((day, station.marker), (-1e3, -1e3)) if scenario.faults else (-1e3, -1e3)


def _spoil(
    station: Station, day: str, day_hours: Floats, values: dict[str, Floats], scenario: Scenario,
    rng: np.random.Generator,
) -> tuple[tuple[np.datetime64, np.datetime64], ...]:  # fmt: skip
    """Corrupt the fault span in place: wild codes, phases stepping and running away together on one carrier."""
    span = _fault_span(station, day, scenario)
    inside = np.flatnonzero((day_hours >= span[0]) & (day_hours < span[1]))
    if not len(inside):
        return ()
    satellites = next(iter(values.values())).shape[1]
    for name in sorted(values):
        shape = (len(inside), satellites)
        if name.startswith("C"):
            wild = np.where(rng.random(shape) < 0.15, rng.uniform(-300, 300, shape), 12.0 * rng.standard_normal(shape))
            values[name][inside] = _code_steps(values[name][inside] + wild)
        elif name.startswith("L"):
            steps = np.where(rng.random(shape) < 0.12, rng.integers(-2000, 2000, shape), 0)
            # A common run-away of the second carrier: looks like a wall to whoever trusts this receiver.
            ramp = 0.0 if name[1] == "1" else 0.35
            run = np.cumsum(steps + ramp + 0.08 * rng.standard_normal(shape), axis=0)
            values[name][inside] = np.round(values[name][inside] + run, 3)
            values[name][inside[-1] + 1 :] = np.round(values[name][inside[-1] + 1 :] + np.round(run[-1]), 3)
    start = np.datetime64(day).astype("datetime64[ns]")
    return ((start + np.timedelta64(round(span[0] * 3600), "s"), start + np.timedelta64(round(span[1] * 3600), "s")),)
