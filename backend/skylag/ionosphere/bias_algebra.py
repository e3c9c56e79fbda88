"""The bias of any pair of codes from whatever records there are.

Records of differential and of single-code biases are edges between codes; the bias of a pair is the sum along the
shortest chain, so C1C-C2W comes from C1W-C2W and C1W-C1C, or from two single-code biases.  Broadcast group delays are
turned into such records here.  Never mixes objects, never invents a bias: what no chain reaches is None.
"""

import heapq

import numpy as np

from skylag.constants import E5B_HZ, L1_HZ, L2_HZ, L5_HZ
from skylag.tables import Biases, Bools, Ephemerides, Floats, Ints

_NS = 1e9
# Uncertainty [ns] of differential biases from broadcast group delays, level of the constellation apart: scatter against
# published precise biases (GPS 0.75, Galileo 0.68 on 2024-03-30) and, for BeiDou, in one receiver (2.9 on 2020-06-25).
_BROADCAST_SIGMA_NS = {"G": 0.8, "J": 0.8, "E": 0.7, "C": 3.0}
# A chain is as good as its variance; where a record tells none, this one [ns] serves to rank chains only.
_RANK_SIGMA_NS = 0.3


def pair_bias(
    biases: Biases, kind: str, name: str, system: str, code1: str, code2: str, when: np.datetime64,
    within_days: float = 0.0,
) -> tuple[float, float] | None:  # fmt: skip
    """Bias of code1 minus bias of code2 and its sigma [ns], or None where no chain of records gives it.

    kind, name, system  whose bias: "satellite" "G05" "G", or "receiver" "ZIMM" "G"
    when          GPS time; only records whose span holds it count, and of two for one pair of codes the one of the
                  shorter span, then the one given last
    within_days   records whose span ended or begins up to so many days away count too, where none covers `when`
    The sigma is NaN when a record of the chain tells none.  Fewer records win over more, then the smaller sigma.
    """
    own = np.flatnonzero((biases.kind == kind) & (biases.system == system) & _same_name(biases, kind, name))
    if not len(own) or code1 == code2:
        return (0.0, 0.0) if code1 == code2 else None
    edges = _edges(biases, own, when, within_days)
    return _shortest(edges, code1, code2)


def _same_name(biases: Biases, kind: str, name: str) -> Bools:
    """Rows of the object.  Receivers are told by their first four characters, since nine-character names are newer."""
    if kind == "satellite":
        return np.asarray(biases.name == name)
    exact: Bools = np.asarray(biases.name == name)
    if exact.any():
        return exact
    short = np.char.upper(biases.name.astype("U4")) if len(biases) else biases.name
    return np.asarray(short == name[:4].upper())


def _edges(
    biases: Biases, own: Ints, when: np.datetime64, within_days: float
) -> dict[str, dict[str, tuple[float, float]]]:  # fmt: skip
    """code -> other code -> (bias of the first minus that of the other, sigma); "" is the zero of single-code ones."""
    distance = _distance_days(biases, own, when)
    own, distance = own[distance <= within_days], distance[distance <= within_days]
    span = (biases.end[own] - biases.start[own]).astype("timedelta64[s]").astype(np.float64)
    span[np.isnat(biases.start[own]) | np.isnat(biases.end[own])] = np.inf
    edges: dict[str, dict[str, tuple[float, float]]] = {}
    # The best record of a pair comes last and overwrites the others.
    for place in np.lexsort((np.arange(len(own)), -span, -distance)):
        row = own[place]
        first, second = str(biases.code1[row]), str(biases.code2[row])
        value, sigma = float(biases.value_ns[row]), float(biases.sigma_ns[row])
        if not np.isfinite(value):
            continue
        edges.setdefault(first, {})[second] = (value, sigma)
        edges.setdefault(second, {})[first] = (-value, sigma)
    return edges


def _distance_days(biases: Biases, rows: Ints, when: np.datetime64) -> Floats:
    """How far [days] an instant is from the span of each row; 0 inside (start <= when < end, open ends held open)."""
    start, end = biases.start[rows], biases.end[rows]
    before = np.where(np.isnat(start), 0.0, (start - when).astype(np.int64) / 86_400e9)
    after = np.where(np.isnat(end), -1.0, (when - end).astype(np.int64) / 86_400e9)
    # The end itself is outside by convention, but a span of no length still holds its instant.
    return np.asarray(np.where((before <= 0) & (after < 0), 0.0, np.maximum(np.maximum(before, after), 0.0)))


def of_day(biases: Biases, day: np.datetime64, within_days: float = 0.0) -> bool:
    """Whether the span of any record meets a GPS-time day, or lies up to so many days from it (open ends do)."""
    begin = day.astype("datetime64[ns]")
    margin = np.timedelta64(round(within_days * 86_400e9), "ns")
    start, end = biases.start, biases.end
    begun = np.isnat(start) | (start < begin + np.timedelta64(1, "D") + margin)
    over = ~np.isnat(end) & ((end < begin - margin) | ((end == begin - margin) & (start < end)))
    return bool((begun & ~over).any())


def _shortest(edges: dict[str, dict[str, tuple[float, float]]], first: str, last: str) -> tuple[float, float] | None:
    """Sum and sigma along the chain of fewest records, then least variance."""
    queue: list[tuple[int, float, str, float, float]] = [(0, 0.0, first, 0.0, 0.0)]
    done: set[str] = set()
    while queue:
        records, rank, code, value, variance = heapq.heappop(queue)
        if code == last:
            return value, float(np.sqrt(variance))
        if code in done:
            continue
        done.add(code)
        for other, (step, sigma) in edges.get(code, {}).items():
            if other not in done:
                ranked = sigma if np.isfinite(sigma) else _RANK_SIGMA_NS
                heapq.heappush(queue, (records + 1, rank + ranked**2, other, value + step, variance + sigma**2))
    return None


def from_group_delays(ephemerides: Ephemerides) -> Biases:
    """Satellite biases told by broadcast group delays, the latest healthy record of each satellite.

    GPS         C1W-C2W: (1 - gamma) T_GD (IS-GPS-200 20.3.3.3.3.2)
    QZSS        C1C-C2L and C1C-C2X, likewise (IS-QZSS-PNT; from memory, not met with data here)
    Galileo     C1C-C5Q, C1X-C5X from BGD(E1,E5a), C1C-C7Q, C1X-C7X from BGD(E1,E5b) (Galileo OS SIS ICD 5.1.5)
    BeiDou      C2I-C6I: TGD1; C2I-C7I: TGD1 - TGD2 (BDS-SIS-ICD B1I 5.2.4.10)
    Pilot and combined codes share one broadcast value, so their sigma is what such values are good for.  The level of a
    constellation is its operator's, not a zero mean.
    """
    gamma_l2, gamma_5 = (L1_HZ / L2_HZ) ** 2, (L1_HZ / L5_HZ) ** 2
    gamma_7 = (L1_HZ / E5B_HZ) ** 2
    rows: list[tuple[str, str, str, str, float, float, np.datetime64, np.datetime64]] = []
    for name in np.unique(ephemerides.satellites):
        system = str(name)[0]
        if system not in _BROADCAST_SIGMA_NS:
            continue
        own = ephemerides.satellites == name
        # The values change a few times a year, so a record speaks for the days next to its own too.
        start = ephemerides.toe[own].min().astype("datetime64[D]") - 1
        end = ephemerides.toe[own].max().astype("datetime64[D]") + 2
        first, second = (_latest(ephemerides, own, column) for column in (0, 1))
        told: list[tuple[str, str, float]] = []
        if system == "G":
            told = [("C1W", "C2W", (1 - gamma_l2) * first)]
        elif system == "J":
            told = [("C1C", code, (1 - gamma_l2) * first) for code in ("C2L", "C2X")]
        elif system == "E":
            told = [(one, five, (1 - gamma_5) * first) for one, five in (("C1C", "C5Q"), ("C1X", "C5X"))]
            told += [(one, seven, (1 - gamma_7) * second) for one, seven in (("C1C", "C7Q"), ("C1X", "C7X"))]
        elif system == "C":
            told = [("C2I", "C6I", first), ("C2I", "C7I", first - second)]
        rows.extend(
            (str(name), system, code1, code2, value * _NS, _BROADCAST_SIGMA_NS[system], start, end)
            for code1, code2, value in told
            if np.isfinite(value)
        )
    columns = list(zip(*rows, strict=True)) if rows else [()] * 8
    return Biases(
        kind=np.full(len(rows), "satellite"),
        name=np.array(columns[0], dtype=np.str_), system=np.array(columns[1], dtype=np.str_),
        code1=np.array(columns[2], dtype=np.str_), code2=np.array(columns[3], dtype=np.str_),
        value_ns=np.array(columns[4], dtype=np.float64), sigma_ns=np.array(columns[5], dtype=np.float64),
        start=np.array(columns[6], dtype="datetime64[ns]"), end=np.array(columns[7], dtype="datetime64[ns]"),
        source="group delays of the navigation message", datum="broadcast",
    )  # fmt: skip


def _latest(ephemerides: Ephemerides, own: Bools, column: int) -> float:
    """Group delay [s] of the satellite's latest healthy record that tells one; NaN where none does."""
    usable = np.flatnonzero(own & ephemerides.healthy & np.isfinite(ephemerides.group_delays_s[:, column]))
    if not len(usable):
        return np.nan
    return float(ephemerides.group_delays_s[usable[np.argmax(ephemerides.sent[usable].astype(np.int64))], column])


def join(parts: list[Biases]) -> Biases:
    """One table of several; later ones count where spans are alike."""
    names = ("kind", "name", "system", "code1", "code2", "value_ns", "sigma_ns", "start", "end")
    return Biases(
        **{name: np.concatenate([getattr(part, name) for part in parts]) for name in names},
        source="; ".join(dict.fromkeys(part.source for part in parts if part.source)),
        datum="; ".join(dict.fromkeys(part.datum for part in parts if part.datum)),
    )
