"""Which two signals of a constellation are used together, and the observations on them.

Knows the usable signal pairs of each constellation in order of preference, chooses the best one a receiver brings, and
turns carrier cycles into metres.  Never substitutes one code for another silently: the pair in use is named in every
result, since code biases belong to the pair.
"""

from collections.abc import Mapping

import numpy as np

from skylag.constants import SPEED_OF_LIGHT_M_S, carrier_hz
from skylag.errors import NotEnough, Refused
from skylag.tables import Bytes, Floats, Observations, SignalPair, Signals

# Usable pairs, best first.  Codes and bands: RINEX 3.05 tables 4 to 10.  The order is common practice: the codes that
# published bias products refer to come first, then the pairs most receivers bring.
USABLE_PAIRS: dict[str, tuple[tuple[str, str], ...]] = {
    "G": (("C1W", "C2W"), ("C1C", "C2W"), ("C1P", "C2P"), ("C1C", "C2P"), ("C1C", "C2L"), ("C1C", "C2S"),
          ("C1C", "C2X"), ("C1C", "C5Q"), ("C1C", "C5X"), ("C1C", "C5I")),
    "E": (("C1C", "C5Q"), ("C1X", "C5X"), ("C1C", "C7Q"), ("C1X", "C7X"), ("C1C", "C8Q"), ("C1X", "C8X"),
          ("C1C", "C5I"), ("C1B", "C5I"), ("C1C", "C6C"), ("C1X", "C6X")),
    "C": (("C2I", "C6I"), ("C2I", "C7I"), ("C2X", "C6X"), ("C1P", "C5P"), ("C1X", "C5X"), ("C2X", "C7X")),
    "R": (("C1P", "C2P"), ("C1C", "C2P"), ("C1C", "C2C")),
    "J": (("C1C", "C2L"), ("C1C", "C2X"), ("C1C", "C2S"), ("C1C", "C5Q"), ("C1C", "C5X"), ("C1X", "C2X")),
}  # fmt: skip

# A pair is passed over for one lower in the list when it fills less than this share of what the fullest pair fills.
_FULL_ENOUGH = 0.7


def parse_wanted(text: str) -> dict[str, tuple[str, str]]:
    """The choice of a person, `G=C1W-C2W,E=C1C-C5Q`, as system -> (code1, code2).

    Raises Refused where a part does not read like `G=C1W-C2W` or names a band the system has not got.
    """
    wanted: dict[str, tuple[str, str]] = {}
    for part in filter(None, (p.strip() for p in text.split(","))):
        system, equals, codes = part.partition("=")
        code1, dash, code2 = codes.partition("-")
        if not (equals and dash and len(code1) == len(code2) == 3 and code1[0] == code2[0] == "C"):
            raise Refused(
                f"signals: {part!r} is not a choice; write system=code1-code2, e.g. G=C1W-C2W,E=C1C-C5Q",
                name="signals", value=part, allowed="G=C1W-C2W",
            )  # fmt: skip
        if system not in USABLE_PAIRS:
            raise Refused(
                f"signals: {system!r} is no constellation here; use one of {', '.join(USABLE_PAIRS)}",
                name="signals", value=system, allowed=list(USABLE_PAIRS),
            )  # fmt: skip
        if code1[1] == code2[1]:
            raise Refused(
                f"signals: {codes} is one band twice; two frequencies are needed",
                name="signals", value=codes, allowed="two bands",
            )  # fmt: skip
        for code in (code1, code2):
            try:
                carrier_hz(system, code[1])
            except KeyError:
                raise Refused(
                    f"signals: {system} has no band {code[1]} ({code}); see RINEX 3.05 tables 4 to 10",
                    name="signals", value=code, allowed="a band of the system",
                ) from None  # fmt: skip
        wanted[system] = (code1, code2)
    return wanted


def wanted_codes(wanted: Mapping[str, tuple[str, str]] | None = None) -> dict[str, set[str]]:
    """What is worth reading: system -> code observables, and the bands of strength (S1) that are looked at.

    The phases of the codes' bands go with them.  Strengths are only looked at on first signals.
    """
    codes = {system: {code for pair in pairs for code in pair} for system, pairs in USABLE_PAIRS.items()}
    for system, pair in (wanted or {}).items():
        codes[system] = set(pair)
    for system, pairs in USABLE_PAIRS.items():
        chosen = (wanted[system],) if wanted and system in wanted else pairs
        codes[system] |= {"S" + first[1] for first, _ in chosen}
    return codes


def choose(
    signals: Signals,
    wanted: Mapping[str, tuple[str, str]] | None = None,
    channels: Mapping[str, int] | None = None,
) -> tuple[Observations, tuple[str, ...]]:
    """The observations on one signal pair per constellation, and sentences about what was left out.

    signals   one receiver's day
    wanted    system -> (code1, code2) where a person chose; the best pair present elsewhere
    channels  GLONASS satellite -> FDMA channel from the navigation file, for those the observation file does not tell
    Raises NotEnough when no constellation has a usable pair.
    """
    notes: list[str] = []
    shape = (len(signals.times), len(signals.satellites))
    systems = np.array([name[0] for name in signals.satellites])
    columns: dict[str, Floats] = {
        name: np.full(shape, np.nan) for name in ("code1", "code2", "phase1", "phase2", "snr1")
    }
    locks: dict[str, Bytes] = {name: np.zeros(shape, dtype=np.uint8) for name in ("lock1", "lock2")}
    f1, f2 = np.full(shape[1], np.nan), np.full(shape[1], np.nan)
    known = {**(channels or {}), **signals.channels}
    pairs: dict[str, SignalPair] = {}
    for system in [s for s in USABLE_PAIRS if s in systems]:
        here = np.flatnonzero(systems == system)
        if system == "R":
            without = [str(signals.satellites[i]) for i in here if str(signals.satellites[i]) not in known]
            if without:
                notes.append(f"{signals.receiver.name}: no GLONASS channel known for {', '.join(without)}; left out")
            here = np.array([i for i in here if str(signals.satellites[i]) in known], dtype=np.int64)
        pair = _best(signals, system, here, (wanted or {}).get(system))
        if pair is None:
            asked = f" {'-'.join(wanted[system])}" if wanted and system in wanted else " usable"
            notes.append(f"{signals.receiver.name}: no{asked} signal pair of {system} in the file; {system} left out")
            continue
        pairs[system] = pair
        channel = [known.get(str(signals.satellites[i]), 0) for i in here]
        f1[here] = [carrier_hz(system, pair.code1[1], k) for k in channel]
        f2[here] = [carrier_hz(system, pair.code2[1], k) for k in channel]
        columns["code1"][:, here] = signals.values[pair.code1][:, here]
        columns["code2"][:, here] = signals.values[pair.code2][:, here]
        columns["phase1"][:, here] = signals.values[pair.phase1][:, here] * (SPEED_OF_LIGHT_M_S / f1[here])
        columns["phase2"][:, here] = signals.values[pair.phase2][:, here] * (SPEED_OF_LIGHT_M_S / f2[here])
        for name, phase in (("lock1", pair.phase1), ("lock2", pair.phase2)):
            if phase in signals.lock:
                locks[name][:, here] = signals.lock[phase][:, here]
        strength = "S" + pair.phase1[1:]
        if strength in signals.values:
            columns["snr1"][:, here] = signals.values[strength][:, here]
    if not pairs:
        raise NotEnough(
            f"{signals.receiver.name}: no constellation has code and phase on two frequencies; "
            "the file must hold one of the pairs listed by `skylag day --help`",
            had=sorted(signals.values), needed="code and phase on two frequencies", where=signals.receiver.name,
        )  # fmt: skip
    keep = np.isfinite(f1)
    return (
        Observations(
            receiver=signals.receiver,
            times=signals.times,
            satellites=signals.satellites[keep],
            pairs=pairs,
            f1_hz=f1[keep],
            f2_hz=f2[keep],
            resets=signals.resets,
            interval_s=signals.interval_s,
            code1=columns["code1"][:, keep],
            code2=columns["code2"][:, keep],
            phase1=columns["phase1"][:, keep],
            phase2=columns["phase2"][:, keep],
            snr1=columns["snr1"][:, keep],
            lock1=locks["lock1"][:, keep],
            lock2=locks["lock2"][:, keep],
        ),
        tuple(notes),
    )


def _best(signals: Signals, system: str, here: np.ndarray, wanted: tuple[str, str] | None) -> SignalPair | None:
    """The first pair of the list that is about as full as the fullest."""
    found: list[tuple[int, SignalPair]] = []
    for code1, code2 in (wanted,) if wanted else USABLE_PAIRS[system]:
        if code1 not in signals.values or code2 not in signals.values:
            continue
        phase1, phase2 = _phase_for(signals, code1, here), _phase_for(signals, code2, here)
        if phase1 is None or phase2 is None:
            continue
        full = np.ones((len(signals.times), len(here)), dtype=bool)
        for name in (code1, code2, phase1, phase2):
            full &= np.isfinite(signals.values[name][:, here])
        found.append((int(full.sum()), SignalPair(system, code1, code2, phase1, phase2)))
    most = max((count for count, _ in found), default=0)
    return next((pair for count, pair in found if count > 0 and count >= _FULL_ENOUGH * most), None)


def _phase_for(signals: Signals, code: str, here: np.ndarray) -> str | None:
    """The phase of the code's own tracking, else the fullest phase on its band."""
    own = "L" + code[1:]
    counts = {
        name: int(np.isfinite(values[:, here]).sum())
        for name, values in signals.values.items()
        if name[0] == "L" and name[1] == code[1]
    }
    most = max(counts.values(), default=0)
    if most == 0:
        return None
    if counts.get(own, 0) >= _FULL_ENOUGH * most:
        return own
    return max(sorted(counts), key=lambda name: counts[name])
