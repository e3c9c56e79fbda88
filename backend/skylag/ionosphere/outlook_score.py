"""What became of an outlook: error, coverage of its ranges, scores of its chances, beside simple ways of foretelling.

- continuous ranked probability score (CRPS, m): twice the pinball loss over the quantiles told (Gneiting and Raftery
  2007, JASA 102, 359-378; Laio and Tamea 2007, HESS 11); of a single value it is the absolute error
- Brier score of the chances (Brier 1950, Monthly Weather Review 78, 1-3), and reliability by tenths
Beside it stand: `persistence`, the last day known; `recurrence`, the day one solar rotation before; `climatology`,
IRI times one factor that fits the last 27 days; `usual`, the median of the last 27 days at the same hour, which is
common practice.  Each is compared over the hours that both speak of.  Hours not seen are never scored.
"""

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import numpy.typing as npt

from skylag.errors import NotEnough
from skylag.ionosphere.climatology import Climate, climate_of, smoothed
from skylag.ionosphere.outlook import RANGES, ROTATION, Drivers, History
from skylag.tables import BROKEN, STRAINED, UNSEEN, Floats, Outlook

OTHERS = ("persistence", "recurrence", "climatology", "usual")
BINS = 10
_LEVELS = ("strained", "broken")


@dataclass
class Tally:
    """Sums of scores, for the day ahead and the day after it apart; sums of tallies are tallies.

    own        lead -> [count, sum of error, of squared error, of absolute error, of CRPS]
    inside     lead -> range in per cent -> hours inside it
    pairs      lead -> other -> [count, own squared, other squared, own CRPS, other CRPS]
    brier      use -> level -> [count, sum of own score, of the frequency of the last 27 days, of the last day's state]
    bins       use -> level -> tenth of the chance: [count, sum of chances, times it came]
    outlooks   how many were scored
    """

    own: dict[str, list[float]] = field(default_factory=dict)
    inside: dict[str, dict[str, float]] = field(default_factory=dict)
    pairs: dict[str, dict[str, list[float]]] = field(default_factory=dict)
    brier: dict[str, dict[str, list[float]]] = field(default_factory=dict)
    bins: dict[str, dict[str, list[list[float]]]] = field(default_factory=dict)
    outlooks: int = 0

    def add(self, other: "Tally") -> None:
        """Take another tally in."""
        for name in ("own", "inside", "pairs", "brier", "bins"):
            setattr(self, name, _sum(getattr(self, name), getattr(other, name)))
        self.outlooks += other.outlooks

    def facts(self) -> dict[str, Any]:
        """As plain facts, to be kept."""
        return {"own": self.own, "inside": self.inside, "pairs": self.pairs, "brier": self.brier, "bins": self.bins,
                "outlooks": self.outlooks}  # fmt: skip


def from_facts(facts: Mapping[str, Any]) -> Tally:
    """The tally kept as plain facts."""
    return Tally(**{name: facts[name] for name in Tally.__dataclass_fields__ if name in facts})


def _sum(one: Any, other: Any) -> Any:
    if isinstance(other, Mapping):
        return {key: _sum(one.get(key), other[key]) if key in other else one[key] for key in {**one, **other}} \
            if one else dict(other)  # fmt: skip
    if one is None:
        return other
    if isinstance(other, list):
        return [_sum(a, b) for a, b in zip(one, other, strict=True)]
    return one + other


def crps(quantiles: Floats, levels: Floats, value: Floats) -> Floats:
    """CRPS from quantiles (..., Q) at levels (Q,) for values (...): trapezoids over the levels, tails by their ends."""
    below = value[..., None] - quantiles
    loss = np.maximum(levels * below, (levels - 1.0) * below)
    middle = np.trapezoid(loss, levels, axis=-1)
    # The pinball loss falls to nothing toward both ends of the levels where the value lies within.
    ends = 0.5 * (loss[..., 0] * levels[0] + loss[..., -1] * (1.0 - levels[-1]))
    return np.asarray(2.0 * (middle + ends))


def score(
    outlook: Outlook, history: History, drivers: Drivers | None = None, climate: Climate | None = None
) -> Tally:
    """Scores of an outlook by the days that came, as far as the history holds them.

    climate  of the days and places of the history, where it is at hand: it saves most of the time
    Raises NotEnough where no hour of it was seen.
    """
    first = int((outlook.known_until - history.days[0]) / np.timedelta64(1, "D")) + 1
    tally = Tally(outlooks=1)
    seen_any = False
    for lead in range(len(outlook.hours) // 24):
        day = first + lead
        if not 0 < day < len(history.days):
            continue
        rows = slice(24 * lead, 24 * lead + 24)
        seen_any |= _score_delay(tally, str(lead + 1), outlook, rows, history, drivers, climate, first - 1, day)
        for use, name in enumerate(outlook.uses):
            _score_states(tally, str(name), use, outlook, rows, history, first - 1, day)
    if not seen_any and not tally.bins:
        raise NotEnough(f"the outlook made after {outlook.known_until}: no hour of it has been seen yet; add its days",
                        had=0, needed=1, where=str(outlook.known_until))  # fmt: skip
    return tally


def _score_delay(
    tally: Tally, lead: str, outlook: Outlook, rows: slice, history: History, drivers: Drivers | None,
    climate: Climate | None, last: int, day: int,
) -> bool:  # fmt: skip
    came = history.delay[day]
    seen = np.isfinite(came)
    if not seen.any():
        return False
    value, told = came[seen], outlook.delay[rows][seen]
    quantiles = outlook.delay_quantiles[rows][seen]
    error, ranked = told - value, crps(quantiles, outlook.levels, value)
    tally.own[lead] = [float(seen.sum()), float(error.sum()), float((error**2).sum()), float(np.abs(error).sum()),
                       float(ranked.sum())]  # fmt: skip
    tally.inside[lead] = {}
    for share, (low, high) in RANGES.items():
        ends = [quantiles[:, int(np.argmin(np.abs(outlook.levels - level)))] for level in (low, high)]
        tally.inside[lead][str(share)] = float(((value >= ends[0]) & (value <= ends[1])).sum())
    tally.pairs[lead] = {}
    for name, other in simple_ways(history, drivers, last, day, climate).items():
        both = np.isfinite(other[seen])
        off = np.abs(other[seen][both] - value[both])
        tally.pairs[lead][name] = [float(both.sum()), float((error[both] ** 2).sum()), float((off**2).sum()),
                                   float(ranked[both].sum()), float(off.sum())]  # fmt: skip
    return True


def simple_ways(
    history: History, drivers: Drivers | None, last: int, day: int, climate: Climate | None = None
) -> dict[str, Floats]:
    """What simple ways would have told (24, P) [m] of row `day` at the end of row `last`; NaN where they cannot."""
    nothing = np.full(history.delay.shape[1:], np.nan)
    month = history.delay[max(0, last + 1 - ROTATION) : last + 1]
    flux = np.full(len(month), np.nan) if drivers is None else smoothed(drivers.flux[: last + 1])[-len(month) :]
    rows = np.append(np.arange(last + 1 - len(month), last + 1), day)
    if climate is None:
        climate, rows = climate_of(history.days[rows], history.lats, history.lons), np.arange(len(rows))
    model = climate.delay(rows, np.append(flux, flux[-1:]))
    seen = np.isfinite(month)
    scaled = nothing
    if seen.any():
        scaled = model[-1] * float(np.where(seen, month, 0.0).sum() / np.where(seen, model[:-1], 0.0).sum())
    usual = nothing.copy()
    known = seen.any(axis=0)
    usual[known] = np.nanmedian(month[:, known], axis=0)
    turn = day - ROTATION
    return {
        "persistence": history.delay[last],
        "recurrence": history.delay[turn] if turn >= 0 else nothing,
        "climatology": scaled,
        "usual": usual,
    }


def _score_states(
    tally: Tally, name: str, use: int, outlook: Outlook, rows: slice, history: History, last: int, day: int
) -> None:
    came = history.states[use, day]
    seen = came != UNSEEN
    if not seen.any():
        return
    month = history.states[use, max(0, last + 1 - ROTATION) : last + 1]
    yesterday = history.states[use, last]
    for level, least, chances in zip(_LEVELS, (STRAINED, BROKEN), (outlook.strained, outlook.broken), strict=True):
        told = seen & np.isfinite(chances[use, rows])
        chance = chances[use, rows][told]
        happened = (came[told] >= least).astype(np.float64)
        known = (month != UNSEEN).sum(axis=0)
        often = ((month >= least).sum(axis=0) / np.maximum(known, 1))[told]
        same = (yesterday >= least)[told].astype(np.float64)
        both = (known[told] > 0) & (yesterday[told] != UNSEEN)
        row = [float(both.sum()), float(((chance - happened)[both] ** 2).sum()),
               float(((often - happened)[both] ** 2).sum()), float(((same - happened)[both] ** 2).sum())]  # fmt: skip
        before = tally.brier.setdefault(name, {}).setdefault(level, [0.0] * 4)
        tally.brier[name][level] = [a + b for a, b in zip(before, row, strict=True)]
        tenth = np.minimum((chance * BINS).astype(np.int64), BINS - 1)
        table = np.stack([np.bincount(tenth, weights=w, minlength=BINS) for w in (None, chance, happened)], axis=1)
        old = np.array(tally.bins.setdefault(name, {}).setdefault(level, [[0.0] * 3 for _ in range(BINS)]))
        tally.bins[name][level] = (old + table).tolist()


# ---------------------------------------------------------------------------------------------- what the sums say


@dataclass(frozen=True)
class Compared:
    """Against one simple way: hours compared, both RMS errors [m], both CRPS [m], and how much better, as shares."""

    hours: int
    rms: float
    other_rms: float
    crps: float
    other_crps: float
    better_rms: float
    better_crps: float


@dataclass(frozen=True)
class Verdict:
    """What a tally says of the delay of one lead: hours, mean error, RMS, mean absolute error, CRPS [m]; ranges."""

    hours: int
    mean_error: float
    rms: float
    absolute: float
    crps: float
    inside: Mapping[str, float]  # range in per cent -> share of hours inside
    against: Mapping[str, Compared]


def verdict(tally: Tally, lead: str = "1") -> Verdict | None:
    """What was reached for a lead ("1" the day ahead, "2" the day after it); None where nothing was scored."""
    if lead not in tally.own:
        return None
    count, error, square, absolute, ranked = tally.own[lead]
    against = {}
    for name, (hours, own, other, own_crps, other_crps) in tally.pairs[lead].items():
        if hours > 0:
            rms, other_rms = float(np.sqrt(own / hours)), float(np.sqrt(other / hours))
            against[name] = Compared(
                int(hours), rms, other_rms, own_crps / hours, other_crps / hours, 1.0 - rms / max(other_rms, 1e-9),
                1.0 - own_crps / max(other_crps, 1e-9),
            )  # fmt: skip
    shares = {share: hours / count for share, hours in tally.inside[lead].items()}
    return Verdict(int(count), error / count, float(np.sqrt(square / count)), absolute / count, ranked / count, shares,
                   against)  # fmt: skip


@dataclass(frozen=True)
class Tenth:
    """One tenth of the chances told: how many cases, their mean chance, how often it came."""

    cases: int
    told: float
    came: float


def reliability(tally: Tally, use: str, level: str) -> tuple[Tenth, ...]:
    """The tenths of a use and level that had any case."""
    table: npt.NDArray[np.float64] = np.array(tally.bins.get(use, {}).get(level, []), dtype=np.float64).reshape(-1, 3)
    return tuple(Tenth(int(n), told / n, came / n) for n, told, came in table if n > 0)
