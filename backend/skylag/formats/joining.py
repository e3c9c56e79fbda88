"""Pieces of one receiver's observations made one: hours to days, overlaps once, thinned to a spacing.

Navigation files are put together likewise.

Never mixes receivers, never interpolates: an epoch is kept or it is not.
"""

from collections.abc import Sequence

import numpy as np

from skylag.errors import NotEnough, Refused
from skylag.tables import Bytes, Ephemerides, Floats, Ints, Reading, Signals, Times

# Epochs of two pieces that lie closer than this share of the spacing are one epoch (receiver clocks wander by up to
# a millisecond, and by much more in old files).
_SAME_SHARE = 0.1


def kept_when_thinned(times: Times, spacing_s: float) -> Ints:
    """Which epochs stay, ascending: of each multiple of the spacing the nearest epoch.

    It must lie within a tenth of the spacing and within three tenths of the usual step from epoch to epoch.
    Multiples are counted from midnight of GPS time, or from the first epoch where hardly any epoch lies on those (a
    file kept in another time system).  Raises Refused for a spacing that is not positive.
    """
    if not spacing_s > 0:
        raise Refused(
            f"thin_to_s: {spacing_s:g} s is no spacing; choose a positive number of seconds",
            name="thin_to_s", value=spacing_s, allowed="above 0",
        )  # fmt: skip
    if len(times) == 0:
        return np.empty(0, dtype=np.int64)
    step = round(spacing_s * 1e9)
    elapsed = (times - times[0].astype("datetime64[D]").astype("datetime64[ns]")).astype(np.int64)
    reach = step // 10
    if len(times) > 1:  # among dense epochs only the one at the multiple will do, not its neighbour
        reach = min(reach, int(0.3 * float(np.median(np.diff(elapsed)))))

    def on_multiples(phase: int) -> Ints:
        number = np.floor_divide(elapsed - phase + step // 2, step)
        distance = np.abs(elapsed - phase - number * step)
        order = np.lexsort((distance, number))
        first = np.diff(number[order], prepend=number[order[0]] - 1) != 0
        nearest = order[first]
        return np.sort(nearest[distance[nearest] <= reach])

    kept = on_multiples(0)
    expected = (elapsed[-1] - elapsed[0]) // step + 1
    shifted = on_multiples(int(elapsed[0] % step))
    return shifted if len(kept) < 0.5 * min(expected, len(shifted)) else kept


def thin(signals: Signals, spacing_s: float) -> Signals:
    """Only epochs on multiples of `spacing_s`; locks lost and power failures in between count at the next kept one."""
    kept = kept_when_thinned(signals.times, spacing_s)
    if len(kept) == len(signals.times):
        return signals
    resets = np.zeros(len(kept), dtype=bool)
    lock: dict[str, Bytes] = {}
    if len(kept):
        begin = np.concatenate(([0], kept[:-1] + 1))
        upto = kept[-1] + 1
        resets = np.logical_or.reduceat(signals.resets[:upto], begin)
        for code, digits in signals.lock.items():
            lost = np.bitwise_or.reduceat(digits[:upto] & np.uint8(1), begin, axis=0)
            lock[code] = digits[kept] | lost
    else:
        lock = {code: digits[:0] for code, digits in signals.lock.items()}
    return Signals(
        receiver=signals.receiver,
        times=signals.times[kept],
        satellites=signals.satellites,
        values={code: values[kept] for code, values in signals.values.items()},
        lock=lock,
        channels=signals.channels,
        resets=resets,
        interval_s=max(signals.interval_s, float(spacing_s)),
    )


def merge(pieces: Sequence[Reading | Signals], *, thin_to_s: float | None = None) -> Signals:
    """One receiver's pieces as one table, in time order whatever order they come in.

    Where pieces overlap, the one that comes first in the sequence is believed and the others fill its gaps.
    Raises NotEnough when there is no piece, Refused when the pieces are of different receivers.
    """
    parts: list[Signals] = []
    for piece in pieces:
        table = piece.table if isinstance(piece, Reading) else piece
        if not isinstance(table, Signals):
            raise Refused(
                f"merge: {type(table).__name__} is no table of observations; give observation files of one receiver",
                name="pieces", value=type(table).__name__, allowed="Signals",
            )  # fmt: skip
        parts.append(table)
    if not parts:
        raise NotEnough("merge: no piece of observations was given; give at least one", had=0, needed=1, where="merge")
    _same_receiver(parts)
    joined = parts[0] if len(parts) == 1 else _join(parts)
    return thin(joined, thin_to_s) if thin_to_s is not None else joined


def _same_receiver(parts: Sequence[Signals]) -> None:
    first = parts[0].receiver
    for part in parts[1:]:
        if part.receiver.name[:4].upper() != first.name[:4].upper():
            raise Refused(
                f"merge: {part.receiver.name} is not {first.name}; only pieces of one receiver make one table",
                name="pieces", value=part.receiver.name, allowed=first.name,
            )  # fmt: skip


def _join(parts: Sequence[Signals]) -> Signals:
    interval_s = min(part.interval_s for part in parts)
    times, into = _common_times([part.times for part in parts], interval_s)
    satellites = np.unique(np.concatenate([part.satellites for part in parts]))
    shape = (len(times), len(satellites))
    values: dict[str, Floats] = {}
    lock: dict[str, Bytes] = {}
    resets = np.zeros(len(times), dtype=bool)
    channels: dict[str, int] = {}
    for part, rows in zip(parts, into, strict=True):
        if not len(rows):
            continue
        columns = np.searchsorted(satellites, part.satellites)
        block = np.ix_(rows, columns)
        for code, there in part.values.items():
            if code not in values:
                values[code] = np.full(shape, np.nan)
            here = values[code][block]
            values[code][block] = np.where(np.isnan(here), there, here)
        for code, digits in part.lock.items():
            if code not in lock:
                lock[code] = np.zeros(shape, dtype=np.uint8)
            lock[code][block] |= digits
        resets[rows] |= part.resets
        channels = {**part.channels, **channels}
    return Signals(parts[0].receiver, times, satellites, values, lock, channels, resets, interval_s)


def _common_times(series: Sequence[Times], interval_s: float) -> tuple[Times, list[Ints]]:
    """The times of all pieces, each once, and where each piece's epochs went."""
    every = np.concatenate(series)
    order = np.argsort(every, kind="stable")
    piece = np.concatenate([np.full(len(times), k) for k, times in enumerate(series)])
    near = np.diff(every[order]).astype(np.int64) <= _SAME_SHARE * interval_s * 1e9
    # Two epochs of one piece are never one, however near.
    starts = np.concatenate(([True], ~near | (piece[order][1:] == piece[order][:-1])))
    group = np.cumsum(starts) - 1
    where = np.empty(len(every), dtype=np.int64)
    where[order] = group
    bounds = np.cumsum([0, *(len(times) for times in series)])
    into = [where[bounds[k] : bounds[k + 1]] for k in range(len(series))]
    # The earliest piece that has the epoch names its time.
    times = np.empty(int(group[-1]) + 1 if len(group) else 0, dtype="datetime64[ns]")
    for rows, own in zip(reversed(into), reversed(series), strict=True):
        times[rows] = own
    return times, into


def together(parts: Sequence[Ephemerides]) -> Ephemerides:
    """The records of several navigation files; ionospheric coefficients of the first that tells them."""
    names = ("satellites", "messages", "toe", "sent", "healthy", "accuracy_m", "kepler", "state", "channels",
             "group_delays_s")  # fmt: skip
    ionosphere: dict[str, tuple[float, ...]] = {}
    for part in reversed(parts):
        ionosphere.update(part.ionosphere)
    rates = [np.zeros((len(part.toe), 2)) if part.rates is None else part.rates for part in parts]
    return Ephemerides(
        **{name: np.concatenate([getattr(part, name) for part in parts]) for name in names},
        ionosphere=ionosphere, rates=np.concatenate(rates),
    )  # fmt: skip
