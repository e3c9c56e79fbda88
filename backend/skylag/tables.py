"""The nouns: every type that one stage hands to the next, each with its check.

Frozen dataclasses of numpy arrays.  One receiver-day of observations is dense (epoch x satellite), since slips are
sought along time; from rays on, tables are columns (one row per ray); gridded things are arrays with their axes.
House units: lengths m, angles degrees, content TECU, biases ns, slopes mm/km on 1575.42 MHz, times GPS time as
`datetime64[ns]`.  Never reads a file, never computes an estimate.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
import numpy.typing as npt

from skylag.errors import Refused

Floats = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]
Bools = npt.NDArray[np.bool_]
Bytes = npt.NDArray[np.uint8]
Times = npt.NDArray[np.datetime64]
Words = npt.NDArray[np.str_]

# The state of a place at a time.  The code is what is stored; the order is from "cannot say" to worst.
UNSEEN, HOLDS, STRAINED, BROKEN = 0, 1, 2, 3
STATE_NAMES = ("unseen", "holds", "strained", "broken")

# Why an arc began (codes of `Arcs.began`).
ARC_BEGAN = ("first", "gap", "slip", "reset", "clock", "outlier")

FLAG_KINDS = ("slope", "front", "irregular", "fault")


def _require(condition: bool, table: object, rule: str) -> None:
    if not condition:
        raise Refused(f"{type(table).__name__}: {rule}", name=type(table).__name__, allowed=rule)


def _same_length(table: object, *names: str) -> int:
    lengths = {name: len(getattr(table, name)) for name in names}
    _require(len(set(lengths.values())) <= 1, table, f"columns must be of one length, got {lengths}")
    return next(iter(lengths.values()))


# ---------------------------------------------------------------------------------------------- what files bring


@dataclass(frozen=True)
class Problem:
    """One thing wrong in a file that did not stop the reading: where, what, and what was done about it."""

    path: str
    line: int  # 1-based; 0 when the whole file is meant
    what: str
    done: str = "skipped"

    def __str__(self) -> str:
        where = f"{self.path}:{self.line}" if self.line else self.path
        return f"{where}: {self.what} ({self.done})"


@dataclass(frozen=True)
class Reading:
    """What `formats.read` gives: the table, the problems met, and header facts of interest."""

    table: "Signals | Ephemerides | PreciseOrbits | Biases | Indices | Fields"
    problems: tuple[Problem, ...] = ()
    header: Mapping[str, Any] = field(default_factory=dict)


@dataclass(frozen=True)
class Receiver:
    """A receiver of the network."""

    name: str  # four- or nine-character marker
    position_m: tuple[float, float, float]  # Earth-centred, Earth-fixed
    antenna: str = ""
    type: str = ""


@dataclass(frozen=True)
class Signals:
    """One receiver's observations as its file holds them: every wanted signal, dense over epoch x satellite.

    times       (E,) GPS time, strictly increasing
    satellites  (S,) like "G05", sorted
    values      RINEX 3 code -> (E, S): C codes in metres, L codes in CYCLES (the one place they stay: the wavelength
                of GLONASS may only be known from the navigation file), S codes in dB-Hz; NaN where there is none
    lock        L code -> (E, S) uint8, the loss-of-lock digit (bit 0 lost lock, bit 1 half cycle)
    channels    GLONASS satellite -> FDMA channel, as far as the file tells
    resets      (E,) True where the receiver lost power since the epoch before
    interval_s  nominal spacing of epochs
    """

    receiver: Receiver
    times: Times
    satellites: Words
    values: Mapping[str, Floats]
    lock: Mapping[str, Bytes]
    channels: Mapping[str, int]
    resets: Bools
    interval_s: float

    def __post_init__(self) -> None:
        shape = (len(self.times), len(self.satellites))
        _require(len(self.resets) == shape[0], self, "resets must have one value per epoch")
        _require(
            all(a.shape == shape for table in (self.values, self.lock) for a in table.values()),
            self,
            f"each signal must have the shape {shape} (epochs, satellites)",
        )
        _require(bool(np.all(np.diff(self.times.astype(np.int64)) > 0)), self, "times must strictly increase")


@dataclass(frozen=True)
class SignalPair:
    """Two codes of one constellation used together, e.g. C1W-C2W with phases L1W and L2W or the nearest phases."""

    system: str
    code1: str
    code2: str
    phase1: str
    phase2: str

    @property
    def name(self) -> str:
        """The pair as results name it, e.g. `C1W-C2W`."""
        return f"{self.code1}-{self.code2}"


@dataclass(frozen=True)
class Observations:
    """One receiver-day on one signal pair per constellation: what arc finding needs.  All arrays (E, S).

    code1, code2, phase1, phase2   metres, NaN where none
    lock1, lock2                   loss-of-lock digits
    snr1                           dB-Hz or NaN
    f1_hz, f2_hz                   (S,) carrier frequencies
    pairs                          system letter -> the pair in use
    """

    receiver: Receiver
    times: Times
    satellites: Words
    pairs: Mapping[str, SignalPair]
    f1_hz: Floats
    f2_hz: Floats
    code1: Floats
    code2: Floats
    phase1: Floats
    phase2: Floats
    lock1: Bytes
    lock2: Bytes
    snr1: Floats
    resets: Bools
    interval_s: float

    def __post_init__(self) -> None:
        shape = (len(self.times), len(self.satellites))
        for name in ("code1", "code2", "phase1", "phase2", "lock1", "lock2", "snr1"):
            _require(getattr(self, name).shape == shape, self, f"{name} must have the shape {shape}")
        _require(self.f1_hz.shape == self.f2_hz.shape == shape[1:], self, "one frequency per satellite")


@dataclass(frozen=True)
class Ephemerides:
    """Broadcast orbit records, one row each, of all constellations.

    satellites  (N,) like "G05"
    messages    (N,) "LNAV", "CNAV", "INAV", "FNAV", "D1", "D2", "CNV1", "FDMA", ...
    toe         (N,) reference time of the orbit, GPS time
    sent        (N,) transmission time (or toc where the file tells none), GPS time
    healthy     (N,) bool
    accuracy_m  (N,) stated accuracy, NaN where none
    kepler      (N, 16) for Keplerian systems, columns KEPLER below (radians, metres, seconds); NaN for GLONASS
    state       (N, 9) GLONASS position m, velocity m/s, acceleration m/s^2 (PZ-90); NaN for the others
    channels    (N,) GLONASS channel, 0 elsewhere
    group_delays_s   (N, 2): TGD and NaN (G, J), BGD E5a and E5b (E), TGD1 and TGD2 (C), NaN elsewhere
    ionosphere  name -> coefficients, e.g. {"GPSA": (a0, a1, a2, a3), "GPSB": ..., "GAL": (a0, a1, a2)}
    """

    satellites: Words
    messages: Words
    toe: Times
    sent: Times
    healthy: Bools
    accuracy_m: Floats
    kepler: Floats
    state: Floats
    channels: Ints
    group_delays_s: Floats
    ionosphere: Mapping[str, tuple[float, ...]] = field(default_factory=dict)
    rates: Floats | None = None  # (N, 2) change of the semi-major axis [m/s] and of delta_n [rad/s^2]; None = all zero

    KEPLER = ("sqrt_a", "e", "i0", "idot", "omega0", "omega_dot", "omega", "m0", "delta_n",
              "cuc", "cus", "crc", "crs", "cic", "cis", "toe_s")  # fmt: skip

    def __post_init__(self) -> None:
        rows = _same_length(self, "satellites", "messages", "toe", "sent", "healthy", "accuracy_m", "channels")
        _require(self.kepler.shape == (rows, 16), self, "kepler must have 16 columns")
        _require(self.state.shape == (rows, 9), self, "state must have 9 columns")
        _require(self.group_delays_s.shape == (rows, 2), self, "group_delays_s must have 2 columns")


@dataclass(frozen=True)
class PreciseOrbits:
    """Tabulated orbits (SP3): times (T,), satellites (S,), position_m (T, S, 3) ECEF, clock_s (T, S); NaN = none."""

    times: Times
    satellites: Words
    position_m: Floats
    clock_s: Floats

    def __post_init__(self) -> None:
        shape = (len(self.times), len(self.satellites))
        _require(self.position_m.shape == (*shape, 3), self, f"position_m must have the shape {(*shape, 3)}")
        _require(self.clock_s.shape == shape, self, f"clock_s must have the shape {shape}")


@dataclass(frozen=True)
class Biases:
    """Code biases, one row each, in ns.

    kind    "satellite" or "receiver"
    name    satellite like "G05", or receiver marker
    system  system letter (of the signals, for receivers too)
    code1   RINEX 3 code
    code2   RINEX 3 code, or "" for a bias of code1 alone (Bias-SINEX OSB)
    value_ns  bias of code1 minus bias of code2 (Bias-SINEX DSB sign), or of code1 alone
    sigma_ns  NaN where the file tells none
    start, end  span of validity, GPS time; NaT = open
    source  the file or agency; datum: how the level was chosen
    """

    kind: Words
    name: Words
    system: Words
    code1: Words
    code2: Words
    value_ns: Floats
    sigma_ns: Floats
    start: Times
    end: Times
    source: str = ""
    datum: str = ""

    def __post_init__(self) -> None:
        _same_length(self, "kind", "name", "system", "code1", "code2", "value_ns", "sigma_ns", "start", "end")

    def __len__(self) -> int:
        return len(self.value_ns)


@dataclass(frozen=True)
class Indices:
    """Daily geomagnetic and solar indices: day (D,) datetime64[D]; kp, ap (D, 8); daily_ap, f107 (D,); NaN = none."""

    day: npt.NDArray[np.datetime64]
    kp: Floats
    ap: Floats
    daily_ap: Floats
    f107_observed: Floats


@dataclass(frozen=True)
class ActivityOutlook:
    """ap foretold for UTC days, one row for each day and telling: day (N,), made (N,) UTC, ap (N, 8)."""

    day: npt.NDArray[np.datetime64]
    made: Times
    ap: Floats


# ---------------------------------------------------------------------------------------------- the region


@dataclass(frozen=True)
class Site:
    """A place somebody cares about: an aerodrome, a survey job, a port."""

    name: str
    lat: float
    lon: float
    kind: str = "site"


@dataclass(frozen=True)
class Thresholds:
    """What makes a state of a place: slope limits [mm/km] and delay-uncertainty limits; see `impact.states`."""

    strained_mm_per_km: float = 8.0
    broken_mm_per_km: float = 25.5
    strained_roti: float = 0.5  # TECU/min
    broken_roti: float = 1.0
    unseen_sigma_m: float = 1.5  # delay sigma [m] from which a cell is not seen


USE_KINDS = ("differential", "ground", "satellite", "single")


@dataclass(frozen=True)
class Use:
    """A way of working with corrections and what it has to spare; what follows from it is in `impact.uses`.

    kind           over a baseline to a reference; ground-, satellite-based augmentation; single frequency alone
    baseline_km    between user and reference
    spare_mm       delay error the job can bear (differential)
    elevation_deg  lowest line of sight the job still leans on (differential)
    speed_m_s, smoothing_s   of the approach and of the code (ground)
    strained_from, broken_from   own limits, mm/km for differential and ground, m else; 0: as published
    """

    name: str
    kind: str
    baseline_km: float = 10.0
    spare_mm: float = 95.1
    elevation_deg: float = 30.0
    speed_m_s: float = 70.0
    smoothing_s: float = 100.0
    strained_from: float = 0.0
    broken_from: float = 0.0

    def __post_init__(self) -> None:
        _require(self.kind in USE_KINDS, self, f"kind must be one of {', '.join(USE_KINDS)}, not {self.kind!r}")
        _require(bool(self.name.strip()), self, "name must not be empty")
        ranges = {"baseline_km": (0.1, 2000), "spare_mm": (1, 1e6), "elevation_deg": (5, 90), "speed_m_s": (0, 400),
                  "smoothing_s": (0, 1000)}  # fmt: skip
        for name, (least, most) in ranges.items():
            _require(least <= getattr(self, name) <= most, self, f"{name} must be from {least:g} to {most:g}")
        limits = (self.strained_from, self.broken_from)
        _require(limits == (0, 0) or 0 < limits[0] <= limits[1], self, "own limits: 0 < strained_from <= broken_from")


@dataclass(frozen=True)
class Region:
    """A rectangle of the map with its grid and sites.  Degrees; longitudes east, west <= east (may pass 180)."""

    name: str
    south: float
    north: float
    west: float
    east: float
    step_deg: float = 0.5
    shell_height_km: float = 400.0
    sites: tuple[Site, ...] = ()
    thresholds: Thresholds = Thresholds()
    timezone: str = "UTC"
    coast: str = ""  # path of a GeoJSON file with coast lines, where the world's built-in one is not wanted
    uses: tuple[Use, ...] = ()  # ways of working asked for; the published ones (`impact.uses`) where there are none

    def __post_init__(self) -> None:
        _require(-90 <= self.south < self.north <= 90, self, "south must be below north, both within -90 and 90")
        _require(self.west < self.east <= self.west + 360, self, "west must be below east, at most 360 apart")
        _require(0.1 <= self.step_deg <= 5, self, "step_deg must be from 0.1 to 5")
        _require(100 <= self.shell_height_km <= 1000, self, "shell_height_km must be from 100 to 1000")

    @property
    def lats(self) -> Floats:
        """Grid latitudes, south to north."""
        return self._axis(self.south, self.north)

    @property
    def lons(self) -> Floats:
        """Grid longitudes, west to east."""
        return self._axis(self.west, self.east)

    def _axis(self, first: float, last: float) -> Floats:
        count = int(np.floor((last - first) / self.step_deg + 1.0001))
        return np.asarray(first + self.step_deg * np.arange(count), dtype=np.float64)


# ---------------------------------------------------------------------------------------------- the science


@dataclass(frozen=True)
class Arcs:
    """Levelled slant content of one receiver-day, dense (E, S), with one summary row per arc.

    stec, stec_phase  TECU: levelled to the code (biases still inside), and phase only with an arbitrary arc level
    arc         (E, S) row number in the summary, -1 where there is no arc
    Summary columns (A,): arc_satellite (column number), arc_start, arc_end (epoch numbers, both inside),
    arc_began (codes of ARC_BEGAN), arc_level_sigma [TECU], arc_noise [TECU], arc_points
    rejected    what was left out, counted
    slips       one mapping per slip found: time, satellite, cycles on both carriers (None where no whole numbers fit),
                size_tecu, seen_by (names of the combinations that saw it), certain, repaired
    """

    observations: Observations
    stec: Floats
    stec_phase: Floats
    arc: Ints
    arc_satellite: Ints
    arc_start: Ints
    arc_end: Ints
    arc_began: Bytes
    arc_level_sigma: Floats
    arc_noise: Floats
    arc_points: Ints
    rejected: Mapping[str, int]
    slips: tuple[Mapping[str, Any], ...] = ()

    def __post_init__(self) -> None:
        shape = self.observations.code1.shape
        _require(self.stec.shape == self.arc.shape == shape, self, f"arrays must have the shape {shape}")
        _same_length(self, "arc_satellite", "arc_start", "arc_end", "arc_began", "arc_level_sigma", "arc_points")


@dataclass(frozen=True)
class Rays:
    """Lines of sight, one row each, of one or many receivers.

    time; receiver, satellite, arc (row numbers into `receivers`, `satellites`, arc summary); elevation, azimuth,
    pierce_lat, pierce_lon [deg]; mapping (slant over vertical); stec (levelled, biases inside), stec_phase [TECU];
    noise_sigma, level_sigma [TECU]; pair (row number into `pairs`).
    """

    receivers: tuple[Receiver, ...]
    satellites: Words
    pairs: tuple[SignalPair, ...]
    shell_height_m: float
    time: Times
    receiver: Ints
    satellite: Ints
    arc: Ints
    pair: Ints
    elevation: Floats
    azimuth: Floats
    pierce_lat: Floats
    pierce_lon: Floats
    mapping: Floats
    stec: Floats
    stec_phase: Floats
    noise_sigma: Floats
    level_sigma: Floats
    interval_s: float

    COLUMNS = ("time", "receiver", "satellite", "arc", "pair", "elevation", "azimuth", "pierce_lat", "pierce_lon",
               "mapping", "stec", "stec_phase", "noise_sigma", "level_sigma")  # fmt: skip

    def __post_init__(self) -> None:
        _same_length(self, *self.COLUMNS)

    def __len__(self) -> int:
        return len(self.time)

    def where(self, chosen: npt.NDArray[Any]) -> "Rays":
        """The rows chosen by a mask or by row numbers."""
        return replace(self, **{name: getattr(self, name)[chosen] for name in self.COLUMNS})


@dataclass(frozen=True)
class Calibration:
    """Biases found for a network day, and how well.

    biases       receivers and satellites, with sigma and datum
    ray_bias     (rays of the network day,) content [TECU] to take off each ray's levelled slant
    ray_bias_sigma  [TECU], the part common to a receiver and to a satellite, as one sigma per ray
    summary      plain facts: residual rms, counts, what could not be known
    """

    biases: Biases
    ray_bias: Floats
    ray_bias_sigma: Floats
    receiver_sigma: Floats  # (receivers,) sigma [TECU] of the level common to all rays of a receiver
    summary: Mapping[str, Any]
    arc_sigma: Floats  # (rays,) sigma [TECU] of the level of the ray's arc after the adjustment
    ray_bias_rows: Ints  # (rays, 2) rows of `biases`: the receiver's and the satellite's
    ray_per_ns: Floats  # (rays,) levelled slant content [TECU] per ns of either bias (negative)
    covariance: Floats  # (biases, biases) [ns^2], of chance alone: what the model may be off by is in `leanings`
    datum_of_row: tuple[str, ...]  # per bias, how its level was chosen
    shell_height_sigma_m: float
    leanings: Floats  # (2, rays) vertical content [TECU] by which each ray moves when the model is off by one sigma:
    # the height the shell stands for; the growth of the plasmasphere toward its feet
    high_layer: Floats | None = None  # (rays,) slant content [TECU] above the shell's reach, taken off before mapping
    high_layer_vertical: Floats | None = None  # (rays,) the same, straight up at the pierce point


@dataclass(frozen=True)
class Samples:
    """Calibrated rays: the rays and, per row, true slant content, vertical content at the pierce point, sigma [TECU].

    sigma is of the vertical content, all parts together; the parts shared along an arc and within a receiver are
    given apart, since they do not average out.
    """

    rays: Rays
    stec: Floats
    vtec: Floats
    sigma: Floats
    arc_sigma: Floats  # vertical, shared along the arc
    receiver_sigma: Floats  # vertical, shared by the receiver
    own_sigma: Floats  # vertical, the ray's own: noise and mapping
    bias_rows: Ints  # (N, 2) the two biases in each ray, rows of `bias_covariance`
    bias_factor: Floats  # vertical content [TECU] per ns of bias
    bias_covariance: Floats  # [ns^2], of chance alone
    lean_shell: Floats  # how the vertical contents move together when the shell stands one sigma higher
    lean_high: Floats  # the same when the plasmasphere grows one sigma faster toward its feet

    def __post_init__(self) -> None:
        _same_length(self, "rays", "stec", "vtec", "sigma", "arc_sigma", "receiver_sigma", "own_sigma", "bias_rows",
                     "bias_factor", "lean_shell", "lean_high")  # fmt: skip


@dataclass(frozen=True)
class Fields:
    """Maps of a span of time on one grid; all arrays (T, lat, lon) as float32 unless said.

    vtec, vtec_sigma [TECU]; support (uint16: lines of sight that carry the cell); slope, slope_sigma [mm/km];
    slope_east, slope_north [mm/km, growth per km toward east, north]; state (uint8: codes of STATE_NAMES).
    NaN where nothing can be said.
    """

    times: Times
    lats: Floats
    lons: Floats
    vtec: npt.NDArray[np.float32]
    vtec_sigma: npt.NDArray[np.float32]
    support: npt.NDArray[np.uint16]
    slope: npt.NDArray[np.float32]
    slope_sigma: npt.NDArray[np.float32]
    slope_east: npt.NDArray[np.float32]
    slope_north: npt.NDArray[np.float32]
    state: Bytes

    LAYERS = ("vtec", "vtec_sigma", "support", "slope", "slope_sigma", "slope_east", "slope_north", "state")

    def __post_init__(self) -> None:
        shape = (len(self.times), len(self.lats), len(self.lons))
        for name in self.LAYERS:
            _require(getattr(self, name).shape == shape, self, f"{name} must have the shape {shape}")

    def between(self, start: np.datetime64, end: np.datetime64) -> "Fields":
        """The maps with start <= time < end."""
        first, last = np.searchsorted(self.times, [start, end])
        layers = {name: getattr(self, name)[first:last] for name in self.LAYERS}
        return replace(self, times=self.times[first:last], **layers)


def cells_at(lats: Floats, lons: Floats, lat: Floats, lon: Floats) -> tuple[Ints, Ints, Bools]:
    """Row and column (P,) of the cell of a map that is nearest to places, and whether the place is on the map at all:
    within half a step of that cell's middle (and 0.1 m), whole turns of longitude aside.  The only such rule."""
    steps = [abs(float(axis[1] - axis[0])) for axis in (lats, lons) if len(axis) > 1] or [1.0]
    turn = np.abs((lon[:, None] - lons[None, :] + 180.0) % 360.0 - 180.0)
    row, column = np.abs(lat[:, None] - lats[None, :]).argmin(axis=1), turn.argmin(axis=1)
    inside = np.abs(lat - lats[row]) <= 0.5 * steps[0] + 1e-6
    return row, column, np.asarray(inside & (turn.min(axis=1) <= 0.5 * steps[-1] + 1e-6))


@dataclass(frozen=True)
class Flag:
    """One place and span where corrections are doubtful or data are at fault: a row of flags.csv.

    start, end  GPS time; kind of FLAG_KINDS; slope and its sigma [mm/km] (NaN where it has none); speed [m/s] and
    heading [deg, toward] for fronts; state name; evidence: who saw it, in words; confirmed: two independent witnesses.
    """

    start: np.datetime64
    end: np.datetime64
    lat: float
    lon: float
    kind: str
    slope_mm_per_km: float
    sigma_mm_per_km: float
    speed_m_s: float
    heading_deg: float
    state: str
    evidence: str
    confirmed: bool = True
    # A front is drawn as a line: (time, lat, lon) of its nearest point to the region's middle, every few minutes.
    track: tuple[tuple[np.datetime64, float, float], ...] = ()
    speed_sigma_m_s: float = float("nan")  # of the speed, where it is known

    def __post_init__(self) -> None:
        _require(self.kind in FLAG_KINDS, self, f"kind must be one of {FLAG_KINDS}")
        _require(self.state in STATE_NAMES, self, f"state must be one of {STATE_NAMES}")


@dataclass(frozen=True)
class Origin:
    """Where a product comes from: stored with it."""

    inputs: tuple[Mapping[str, Any], ...]  # path name, sha256, bytes, kind, used or why not
    options: Mapping[str, Any]
    versions: Mapping[str, str]
    timings_s: Mapping[str, float]
    counts: Mapping[str, Any]
    warnings: tuple[str, ...]
    simulated: bool = False  # invented data: said wherever it shows


@dataclass(frozen=True)
class Products:
    """All results of one network day."""

    region: Region
    day: np.datetime64  # datetime64[D], GPS-time day
    receivers: tuple[Receiver, ...]
    calibration: Calibration
    samples: Samples
    fields: Fields
    flags: tuple[Flag, ...]
    site_states: Bytes  # (T, sites)
    site_reasons: tuple[tuple[str, ...], ...]  # per site, per time: the sentence; "" where it holds
    origin: Origin


def concatenate(parts: Sequence[Rays]) -> Rays:
    """One table of the rays of many receivers; row numbers of receivers, satellites, pairs, arcs are made unique."""
    _require(len(parts) > 0, parts, "nothing to join")
    satellites = np.unique(np.concatenate([p.satellites for p in parts]))
    pairs = tuple(dict.fromkeys(pair for p in parts for pair in p.pairs))
    receivers = tuple(r for p in parts for r in p.receivers)
    columns: dict[str, list[npt.NDArray[Any]]] = {name: [] for name in Rays.COLUMNS}
    arcs_before = receivers_before = 0
    for part in parts:
        for name in Rays.COLUMNS:
            columns[name].append(getattr(part, name))
        columns["satellite"][-1] = np.searchsorted(satellites, part.satellites)[part.satellite]
        columns["pair"][-1] = np.array([pairs.index(pair) for pair in part.pairs], dtype=np.int64)[part.pair]
        columns["receiver"][-1] = part.receiver + receivers_before
        columns["arc"][-1] = part.arc + arcs_before
        receivers_before += len(part.receivers)
        arcs_before += int(part.arc.max(initial=-1)) + 1
    return Rays(
        receivers=receivers,
        satellites=satellites,
        pairs=pairs,
        shell_height_m=parts[0].shell_height_m,
        interval_s=max(p.interval_s for p in parts),
        **{name: np.concatenate(values) for name, values in columns.items()},
    )


# ---------------------------------------------------------------------------------------------- what is not smooth

# The ways a slope is seen (codes of `Slopes.way`).
SLOPE_WAYS = ("pair", "pair change", "path", "field")


@dataclass(frozen=True)
class Slopes:
    """Steep slopes, one row per witness and epoch; slopes are vertical, mm/km on 1575.42 MHz, never negative.

    way        codes of SLOPE_WAYS: two receivers on one satellite; the same, as departure from its own median over the
               common arc (free of biases); one satellite's pierce point along its path (mixes time and space)
    time; receiver, other (row numbers of receivers, other is -1 for a path); satellite (row number)
    lat, lon   [deg] middle of the two pierce points; distance_km between them; bearing_deg of the growth
    slope, sigma [mm/km]; slant [mm/km] as a user at the first receiver would see it on that line of sight
    claims     what the witnesses together say
    summary    plain facts: how many looked at, quantiles, how well the three ways agree
    """

    way: Bytes
    time: Times
    receiver: Ints
    other: Ints
    satellite: Ints
    lat: Floats
    lon: Floats
    distance_km: Floats
    bearing_deg: Floats
    slope: Floats
    sigma: Floats
    slant: Floats
    claims: "tuple[SlopeClaim, ...]"
    summary: Mapping[str, Any]

    COLUMNS = ("way", "time", "receiver", "other", "satellite", "lat", "lon", "distance_km", "bearing_deg", "slope",
               "sigma", "slant")  # fmt: skip

    def __post_init__(self) -> None:
        _same_length(self, *self.COLUMNS)

    def __len__(self) -> int:
        return len(self.time)


@dataclass(frozen=True)
class SlopeClaim:
    """Witnesses of a steep slope that touch in space and time, taken together.

    start, end; lat, lon of the steepest; slope, sigma [mm/km] of the steepest well-known witness; counts of pairs,
    receivers, satellites; confirmed: no single receiver explains all witnesses, and two pairs or satellites agree.
    cell_time, cell_lat, cell_lon, cell_slope, cell_sigma: where and when, on a grid of 5 minutes and 50 km.
    """

    start: np.datetime64
    end: np.datetime64
    lat: float
    lon: float
    slope: float
    sigma: float
    pairs: int
    receivers: tuple[str, ...]
    satellites: tuple[str, ...]
    ways: tuple[str, ...]
    confirmed: bool
    why: str
    cell_time: Times
    cell_lat: Floats
    cell_lon: Floats
    cell_slope: Floats
    cell_sigma: Floats


@dataclass(frozen=True)
class Onsets:
    """Steep runs of vertical content along lines of sight, one row each.

    start, time, end   first epoch, middle (centre of the change), last epoch
    receiver, satellite (row numbers); lat, lon [deg] of the pierce point at `time`; elevation, azimuth [deg]
    east_speed, north_speed [m/s on the ground] of the pierce point
    jump [TECU, signed], rate [TECU/s, signed, steepest], rate_sigma; time_sigma_s
    front      row number of the front it belongs to, -1 for none
    """

    start: Times
    time: Times
    end: Times
    receiver: Ints
    satellite: Ints
    lat: Floats
    lon: Floats
    elevation: Floats
    azimuth: Floats
    east_speed: Floats
    north_speed: Floats
    jump: Floats
    rate: Floats
    rate_sigma: Floats
    time_sigma_s: Floats
    front: Ints

    COLUMNS = ("start", "time", "end", "receiver", "satellite", "lat", "lon", "elevation", "azimuth", "east_speed",
               "north_speed", "jump", "rate", "rate_sigma", "time_sigma_s", "front")  # fmt: skip

    def __post_init__(self) -> None:
        _same_length(self, *self.COLUMNS)

    def __len__(self) -> int:
        return len(self.time)

    def where(self, chosen: npt.NDArray[Any]) -> "Onsets":
        """The rows chosen by a mask or by row numbers."""
        return replace(self, **{name: getattr(self, name)[chosen] for name in self.COLUMNS})


@dataclass(frozen=True)
class Front:
    """A moving wall: a straight line over the local map with constant velocity, seen from start to end.

    At time t it lies where the distance [km] from `centre` (lat, lon) toward heading_deg is
    offset_km + speed_m_s * seconds since `epoch` / 1000.  Sigmas are standard errors.
    slope [mm/km, vertical, steepest], width_km (jump over slope), jump_tecu (signed: what it brings), depth_km: how
    much broader a slanting line of sight sees it, per unit of lean;
    reach_km: how far it was seen to its left (negative) and right along the wall, from the foot of that distance
    track      (time, lat, lon) of its nearest point to the centre, every few minutes
    sweep_km   scatter of the lines of sight about the line; height_km of the wall's middle, as the lines of sight tell
    segments   (K, 7) stretches of half an hour: middle [s after epoch], offset [km], speed [km/s], heading [rad], and
               the sigmas of these three
    """

    start: np.datetime64
    end: np.datetime64
    epoch: np.datetime64
    centre: tuple[float, float]
    offset_km: float
    offset_sigma_km: float
    speed_m_s: float
    speed_sigma_m_s: float
    heading_deg: float
    heading_sigma_deg: float
    slope: float
    slope_sigma: float
    width_km: float
    width_sigma_km: float
    jump_tecu: float
    jump_sigma_tecu: float
    depth_km: float
    reach_km: tuple[float, float]
    sweep_km: float
    height_km: float
    height_sigma_km: float
    onsets: int
    receivers: tuple[str, ...]
    satellites: tuple[str, ...]
    confirmed: bool
    covariance: Floats  # (3, 3) of offset [km], speed [km/s], heading [rad]
    track: tuple[tuple[np.datetime64, float, float], ...]
    segments: Floats = field(default_factory=lambda: np.zeros((0, 7)))


@dataclass(frozen=True)
class Fronts:
    """All fronts of a day and the onsets they were fitted to."""

    fronts: tuple[Front, ...]
    onsets: Onsets


# ---------------------------------------------------------------------------------------------- the day ahead


@dataclass(frozen=True)
class Outlook:
    """What is expected at places for the hours ahead, made when a day was in and the next was not.

    known_until    the last day used; hours (H,) GPS time, starts of the hours spoken of
    names (P,)     of sites, "" for cells; lats, lons (P,) [deg]
    delay (H, P)   expected vertical delay on 1575.42 MHz [m]
    levels (Q,)    of delay_quantiles (H, P, Q) [m]; slope_levels (S,) of slope_quantiles (H, P, S) [mm/km]
    uses (U,)      names; strained, broken (U, H, P) chance that the hour is strained or worse, and broken; NaN for an
                   hour of the day that was hardly seen at the place
    phases (H,)    where each hour stands in a storm, as told
    seen_days (P,) of the last 27 days on which anything was said of corrections at the place
    basis          what it rests on, in words
    """

    known_until: np.datetime64
    hours: Times
    names: Words
    lats: Floats
    lons: Floats
    delay: Floats
    levels: Floats
    delay_quantiles: Floats
    slope_levels: Floats
    slope_quantiles: Floats
    uses: Words
    strained: Floats
    broken: Floats
    phases: Words
    seen_days: Floats
    basis: tuple[str, ...]

    def __post_init__(self) -> None:
        shape = (len(self.hours), len(self.lats))
        _require(self.delay.shape == shape, self, f"delay must have the shape {shape}")
        _require(self.delay_quantiles.shape == (*shape, len(self.levels)), self, "one delay quantile per level")
        _require(self.slope_quantiles.shape == (*shape, len(self.slope_levels)), self, "one slope quantile per level")
        _require(self.strained.shape == self.broken.shape == (len(self.uses), *shape), self, "one chance per use")
