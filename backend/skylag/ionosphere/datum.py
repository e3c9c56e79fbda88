"""Which biases there are, what is known of each beforehand, and how the level of each group is chosen.

Receivers and satellites of one signal pair that see each other form a group: the rays tell only sums of a receiver's
and a satellite's bias, so each group lacks one level.  It comes from published satellite biases, from another pair of
the same satellites, or from a zero mean, and every bias says which.  Never invents a level silently.
"""

import itertools
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from scipy.sparse import csr_matrix
from scipy.sparse.csgraph import connected_components

from skylag.ionosphere.bias_algebra import pair_bias
from skylag.ionosphere.normal import Knowledge, known
from skylag.tables import Biases, Floats, Ints, Rays

# Biases of so many days away still are drawn upon.
DRAWN_WITHIN_DAYS = 60.0
# Weight [1/ns^2] of what is held: a hundred-thousandth of a nanosecond.
_EXACT = 1e10
# Nothing is known of a bias: GPS receiver biases lie within -22 to +46 ns (product of 2017-001).
_ANY_BIAS_NS = 100.0
# A satellite's C1C minus C1W bias when no product tells it: RMS of CODE's monthly P1-C1 tables, 0.84 ns over 29
# satellites in January 2004, 1.27 ns over 32 in August 2015.
_FIRST_CODES_SIGMA_NS = 1.3
_FIRST_CODES = {"C1C", "C1W", "C1P"}
# Numbers up to this are satellites of BeiDou-2, later ones of BeiDou-3 (BDS-SIS-ICD; as launched).
_LAST_BEIDOU_2 = 18
# Systems whose receiver biases come in parts that a table of biases does not tell apart: GLONASS by channel, BeiDou by
# generation.
_IN_PARTS = {"R": "by channel", "C": "by generation"}
# Sigma of a record that tells none: scatter of published biases between agencies is
# some tenths of a nanosecond (common practice).
_UNTOLD_SIGMA_NS = 0.3


@dataclass(frozen=True)
class Unknowns:
    """The list of biases and each ray's two rows in it.

    kind, name, pair (row number of the ray table's pairs), part (GLONASS: channel, BeiDou: generation 2 or 3, else 0),
    block (which span of the day, where receivers are found per few hours; else 0); receiver_row, satellite_row (rays,)
    """

    kind: tuple[str, ...]
    name: tuple[str, ...]
    pair: Ints
    part: Ints
    block: Ints
    receiver_row: Ints
    satellite_row: Ints

    def __len__(self) -> int:
        return len(self.kind)


def number(rays: Rays, channels: Mapping[str, int], block: Ints) -> Unknowns:
    """Number the biases: one per receiver, pair, block and part (GLONASS channel, BeiDou generation); one per satellite
    and pair.

    The broadcast group delays of the two generations of BeiDou stand 6 ns apart in level (over one receiver of
    2020-06-25 and one of 2024-03-30): held at them, one receiver bias cannot serve both.
    block  (rays,) number of the span of the day
    """
    part_of = np.array([_part(str(name), channels) for name in rays.satellites], dtype=np.int64)
    part = part_of[rays.satellite]
    # A code bias belongs to the two codes, whatever phases go with them.
    codes = [(pair.system, pair.code1, pair.code2) for pair in rays.pairs]
    same = np.array([codes.index(code) for code in codes], dtype=np.int64)[rays.pair]
    pairs, blocks = len(rays.pairs), int(block.max(initial=0)) + 1
    # Channels run from -7 to +6 (ICD GLONASS 5.1); keys are few, so a table of those present beats sorting rays.
    receiver_key, receiver_row = _present(((rays.receiver * pairs + same) * 32 + part + 8) * blocks + block)
    satellite_key, satellite_row = _present(rays.satellite * pairs + same)
    receiver_list = np.stack(
        [receiver_key // (blocks * 32 * pairs), receiver_key // (blocks * 32) % pairs,
         receiver_key // blocks % 32 - 8, receiver_key % blocks], axis=1,
    )  # fmt: skip
    satellite_list = np.stack([satellite_key // pairs, satellite_key % pairs], axis=1)
    count = len(receiver_list)
    return Unknowns(
        kind=("receiver",) * count + ("satellite",) * len(satellite_list),
        name=(*(rays.receivers[i].name for i in receiver_list[:, 0]),
              *(str(rays.satellites[i]) for i in satellite_list[:, 0])),
        pair=np.concatenate([receiver_list[:, 1], satellite_list[:, 1]]),
        part=np.concatenate([receiver_list[:, 2], part_of[satellite_list[:, 0]]]),
        block=np.concatenate([receiver_list[:, 3], np.zeros(len(satellite_list), dtype=np.int64)]),
        receiver_row=receiver_row,
        satellite_row=satellite_row + count,
    )  # fmt: skip


def _part(satellite: str, channels: Mapping[str, int]) -> int:
    """The GLONASS channel or BeiDou generation of a satellite, 0 elsewhere."""
    if satellite[0] == "R":
        return channels.get(satellite, 0)
    return (2 if int(satellite[1:]) <= _LAST_BEIDOU_2 else 3) if satellite[0] == "C" else 0


def _present(key: Ints) -> tuple[Ints, Ints]:
    """The keys that occur, ascending, and each row's place among them."""
    occurs = np.zeros(int(key.max(initial=-1)) + 1, dtype=bool)
    occurs[key] = True
    return np.flatnonzero(occurs), (np.cumsum(occurs) - 1)[key]


@dataclass(frozen=True)
class Held:
    """A sum of biases held at a published value, and the sigma [ns] of that value."""

    columns: Ints
    coefficients: Floats
    sigma_ns: float


@dataclass(frozen=True)
class Datum:
    """What is known of the biases before the rays, in words for every bias, and sentences on what cannot be known."""

    knowledge: list[Knowledge]
    held: tuple[Held, ...]
    of_row: tuple[str, ...]
    summary: str
    notes: tuple[str, ...]

    def with_records(self, covariance: Floats) -> Floats:
        """The covariance of the biases [ns^2] with the errors of the published values that they were held at.

        Holding makes a bias exact in the equations; its record is not.  An error of the record moves the bias by as
        much and the others as the equations have it.
        """
        if not self.held:
            return covariance
        moves = np.stack(
            [_EXACT * one.sigma_ns * (covariance[:, one.columns] @ one.coefficients) for one in self.held]
        )  # fmt: skip
        return np.asarray(covariance + moves.T @ moves)


def choose(
    rays: Rays, unknowns: Unknowns, used: Ints, prior: Biases | None, walk_ns_per_day: float | None
) -> Datum:
    """The level of every group of biases that see each other in the rays `used`.

    prior            published biases, or those of an earlier day
    walk_ns_per_day  None: satellites named in the prior are held at it.  Otherwise the prior is only drawn upon: each
                     bias may have walked so far from it since, beside its own sigma, while the mean is kept.
    """
    middle = rays.time[used].min() + (rays.time[used].max() - rays.time[used].min()) // 2
    book = _Book(rays, unknowns, prior, walk_ns_per_day, middle)
    seen_r, seen_s = unknowns.receiver_row[used], unknowns.satellite_row[used]
    count = len(unknowns)
    links = csr_matrix((np.ones(len(used)), (seen_r, seen_s)), shape=(count, count))
    _, group_of = connected_components(links, directed=False)
    rays_of = np.bincount(np.concatenate([seen_r, seen_s]), minlength=count)
    book.without_rays(np.flatnonzero(rays_of == 0))
    groups = [np.flatnonzero((group_of == g) & (rays_of > 0)) for g in np.unique(group_of[rays_of > 0])]
    # The pair with most rays gives the level, others of its satellites lean on it.
    per_pair = np.bincount(unknowns.pair, rays_of, minlength=len(rays.pairs))
    for rows in sorted(groups, key=lambda rows: (-per_pair[unknowns.pair[rows[0]]], -int(rays_of[rows].sum()))):
        book.level(rows)
    return book.close()


class _Book:
    """Collects knowledge and words group by group."""

    def __init__(
        self, rays: Rays, unknowns: Unknowns, prior: Biases | None, walk: float | None, when: np.datetime64
    ) -> None:
        self.rays, self.unknowns, self.prior, self.walk, self.when = rays, unknowns, prior, walk, when
        count = len(unknowns)
        self.knowledge = [
            Knowledge(np.array([row]), np.full((1, 1), 1.0 / _ANY_BIAS_NS**2), np.zeros(1)) for row in range(count)
        ]
        self.held: list[Held] = []
        self.words = [""] * count
        self.lines: dict[str, int] = {}
        self.notes: list[str] = []
        self.levelled: list[Ints] = []
        # The names of files without their folders.
        words = prior.source.split() if prior is not None else []
        self.source = " ".join(word.rsplit("/", 1)[-1] for word in words) or "the prior"

    def hold(self, columns: Ints, coefficients: Floats, value: float, sigma: float) -> None:
        """Hold a sum of biases at a published value."""
        self.knowledge.append(known(columns, coefficients, value, _EXACT))
        self.held.append(Held(columns, coefficients, sigma if np.isfinite(sigma) else _UNTOLD_SIGMA_NS))

    def told(self, row: int) -> tuple[float, float] | None:
        """What the prior says of a bias: value and sigma [ns]."""
        if self.prior is None:
            return None
        pair = self.rays.pairs[self.unknowns.pair[row]]
        kind, name = self.unknowns.kind[row], self.unknowns.name[row]
        within = 0.0 if self.walk is None else DRAWN_WITHIN_DAYS
        found = pair_bias(self.prior, kind, name, pair.system, pair.code1, pair.code2, self.when, within)
        return found if found is not None and np.isfinite(found[0]) else None

    def without_rays(self, rows: Ints) -> None:
        """Biases that no ray of the adjustment meets: known from the prior, or not at all."""
        lost = []
        for row in rows:
            found = self.told(int(row)) if self.unknowns.kind[row] == "satellite" else None
            if found is None:
                self.words[row] = "not known: no ray above the elevation limit"
                lost.append(f"{self.unknowns.name[row]} {self.rays.pairs[self.unknowns.pair[row]].name}")
            else:
                self.hold(np.array([row]), np.ones(1), *found)
                self.words[row] = f"held at {self.source}"
        if lost:
            self.notes.append(
                f"bias not known, no line of sight above the elevation limit: {', '.join(sorted(lost))}; their rays "
                "carry a sigma to match"
            )

    def level(self, rows: Ints) -> None:
        """Choose the level of one group."""
        satellites = [int(row) for row in rows if self.unknowns.kind[row] == "satellite"]
        told = {row: found for row in satellites if (found := self.told(row)) is not None}
        pair = self.rays.pairs[self.unknowns.pair[rows[0]]]
        partners = self._partners(satellites)
        what = f"{pair.system} {pair.name}" + (f" {_IN_PARTS[pair.system]}" if pair.system in _IN_PARTS else "")
        if told and self.walk is None:
            for row, (value, sigma) in told.items():
                self.hold(np.array([row]), np.ones(1), value, sigma)
                self.words[row] = f"held at {self.source}"
            free = len(satellites) - len(told)
            if free:
                names = ", ".join(self.unknowns.name[row] for row in satellites if row not in told)
                self.notes.append(f"{what}: {self.source} names no bias of {names}; found beside those that are held")
            self._say(rows, what, f"{len(told)} satellites held at {self.source}")
        elif told and self.walk is not None:
            self._lean_on_earlier(rows, told, self.walk)
            self._say(rows, what, f"mean of {len(told)} satellites as in {self.source}")
        elif partners:
            self._lean_on_partners(rows, satellites, partners, what)
        elif len(satellites) == 1:
            row = satellites[0]
            self.knowledge.append(known(np.array([row]), np.ones(1), 0.0, _EXACT))
            self._say(rows, what, "one satellite alone, set to zero: its bias is counted with the receivers'")
        else:
            self._zero_mean(satellites)
            self._say(rows, what, f"zero mean of {len(satellites)} satellites")
        self.levelled.append(rows)

    def _zero_mean(self, rows: Sequence[int]) -> None:
        count = len(rows)
        self.knowledge.append(known(np.array(rows), np.full(count, 1.0 / count), 0.0, _EXACT))

    def _lean_on_earlier(self, rows: Ints, told: Mapping[int, tuple[float, float]], walk: float) -> None:
        """Earlier biases as weak knowledge: the mean of the satellites is kept, each may have walked from there.

        Of receivers only the differences are used: what all of them err by together is not known to their sigmas.  Of
        GLONASS and BeiDou not even these, since a table of biases does not tell a receiver's parts apart.
        """
        count = len(told)
        mean = float(np.mean([value for value, _ in told.values()]))
        self.knowledge.append(known(np.array(list(told)), np.full(count, 1.0 / count), mean, _EXACT))
        in_parts = self.rays.pairs[self.unknowns.pair[rows[0]]].system in _IN_PARTS
        receivers = {
            int(row): found for row in rows
            if not in_parts and self.unknowns.kind[row] == "receiver" and (found := self.told(int(row))) is not None
        }  # fmt: skip
        for part, only_differences in ((told, False), (receivers, True)):
            if not part:
                continue
            columns = np.array(list(part))
            value = np.array([found[0] for found in part.values()])
            sigma = np.array([found[1] if np.isfinite(found[1]) else _UNTOLD_SIGMA_NS for found in part.values()])
            days = np.array([self._days_since(row) for row in part])
            weight = 1.0 / (sigma**2 + walk**2 * np.maximum(days, 1.0) + 1e-6)
            matrix = np.diag(weight)
            if only_differences:
                matrix -= np.outer(weight, weight) / weight.sum()
            self.knowledge.append(Knowledge(columns, matrix, matrix @ value))

    def _days_since(self, row: int) -> float:
        """Days from the nearest record of the object to the middle of this day."""
        assert self.prior is not None
        name = self.unknowns.name[row]
        own = np.flatnonzero(
            (self.prior.kind == self.unknowns.kind[row])
            & ((self.prior.name == name) | (self.prior.name == name[:4]))
        )
        end = self.prior.end[own]
        gap = (self.when - end[~np.isnat(end)]).astype("timedelta64[s]").astype(np.float64) / 86_400.0
        return float(np.min(np.abs(gap))) if len(gap) else 0.0

    def _partners(self, satellites: Sequence[int]) -> dict[int, int]:
        """Row -> row of the same satellite in a group already levelled, on another pair of the same two bands."""
        found: dict[int, int] = {}
        for other in self.levelled:
            second = self.rays.pairs[self.unknowns.pair[other[0]]]
            names = {self.unknowns.name[r]: int(r) for r in other if self.unknowns.kind[r] == "satellite"}
            for row in satellites:
                first = self.rays.pairs[self.unknowns.pair[row]]
                same_bands = (first.system, first.code1[1], first.code2[1]) == (
                    second.system, second.code1[1], second.code2[1],
                )  # fmt: skip
                if same_bands and self.unknowns.name[row] in names:
                    found.setdefault(row, names[self.unknowns.name[row]])
        return found

    def _lean_on_partners(
        self, rows: Ints, satellites: Sequence[int], partners: Mapping[int, int], what: str
    ) -> None:  # fmt: skip
        """A satellite's biases on two pairs of one band differ by its code differences: told by the prior, or small."""
        told = {row: gap for row, other in partners.items() if (gap := self._code_gap(row, other)) is not None}
        example = next(iter(partners.items()))
        first, second = (self.rays.pairs[self.unknowns.pair[row]] for row in example)
        if told:
            for row, (value, sigma) in told.items():
                self.hold(np.array([row, partners[row]]), np.array([1.0, -1.0]), value, sigma)
            self._say(rows, what, f"differences of {len(told)} satellites from {second.name} as in {self.source}")
            return
        small = first.code2 == second.code2 and {first.code1, second.code1} <= _FIRST_CODES
        if small:
            for row, other in partners.items():
                weight = _FIRST_CODES_SIGMA_NS**-2
                self.knowledge.append(known(np.array([row, other]), np.array([1.0, -1.0]), 0.0, weight))
        count = len(partners)
        columns = np.array([*partners, *partners.values()])
        signs = np.concatenate([np.full(count, 1.0 / count), np.full(count, -1.0 / count)])
        self.knowledge.append(known(columns, signs, 0.0, _EXACT))
        words = f"zero mean of the differences of {count} satellites from {second.name}"
        self._say(rows, what, words if count > 1 else f"its one common satellite as on {second.name}")

    def _code_gap(self, row: int, other: int) -> tuple[float, float] | None:
        """Bias of a row minus that of the same satellite on another pair, and sigma [ns], where the prior tells it."""
        if self.prior is None:
            return None
        first = self.rays.pairs[self.unknowns.pair[row]]
        second = self.rays.pairs[self.unknowns.pair[other]]
        name = self.unknowns.name[row]
        total, variance = 0.0, 0.0
        for sign, one, two in ((1.0, first.code1, second.code1), (-1.0, first.code2, second.code2)):
            found = pair_bias(self.prior, "satellite", name, first.system, one, two, self.when)
            if found is None or not np.isfinite(found[0]):
                return None
            total += sign * found[0]
            variance += found[1] ** 2
        return total, float(np.sqrt(variance))

    def _say(self, rows: Ints, what: str, words: str) -> None:
        part = int(self.unknowns.part[rows[0]])
        where = {"R": f"channel {part:+d}: ", "C": f"BeiDou-{part}: "}.get(what[0], "")
        for row in rows:
            self.words[row] = self.words[row] or where + words
        line = f"{what}: {words}"
        self.lines[line] = self.lines.get(line, 0) + 1

    def close(self) -> Datum:
        """All of it; groups with the same words are counted together."""
        lines = [line if times == 1 else f"{line} ({times} times)" for line, times in self.lines.items()]
        return Datum(self.knowledge, tuple(self.held), tuple(self.words), "; ".join(lines), tuple(self.notes))


def connect_blocks(unknowns: Unknowns, sigma_ns: float) -> list[Knowledge]:
    """A receiver's bias walks from one span of the day to the next by about `sigma_ns`."""
    found = []
    for rows in _blocks_of_receivers(unknowns):
        for row, later in itertools.pairwise(rows):
            steps = int(unknowns.block[later] - unknowns.block[row])
            found.append(known(np.array([row, later]), np.array([1.0, -1.0]), 0.0, 1.0 / (steps * sigma_ns**2)))
    return found


def _blocks_of_receivers(unknowns: Unknowns) -> list[list[int]]:
    """The rows of each receiver, pair and part, one per span of the day, in order of time."""
    groups: dict[tuple[str, int, int], list[int]] = {}
    for row in np.argsort(unknowns.block, kind="stable"):
        if unknowns.kind[row] == "receiver":
            key = (unknowns.name[row], int(unknowns.pair[row]), int(unknowns.part[row]))
            groups.setdefault(key, []).append(int(row))
    return list(groups.values())


def receiver_values(unknowns: Unknowns, value: Floats, seconds: Floats, drift_hours: float | None) -> Floats:
    """Receiver bias [ns] of every ray: the day's, or drawn straight between the middles of the spans."""
    found = value[unknowns.receiver_row]
    if drift_hours is None:
        return found
    for rows in _blocks_of_receivers(unknowns):
        own = np.isin(unknowns.receiver_row, rows)
        middles = (unknowns.block[rows] + 0.5) * drift_hours * 3600.0
        found[own] = np.interp(seconds[own], middles, value[rows])
    return found


def table(
    unknowns: Unknowns, rays: Rays, value: Floats, sigma: Floats, start: np.ndarray, end: np.ndarray, summary: str
) -> Biases:  # fmt: skip
    """The biases as a table; start, end (biases,) GPS times of validity."""
    pairs = [rays.pairs[p] for p in unknowns.pair]
    return Biases(
        kind=np.array(unknowns.kind),
        name=np.array(unknowns.name),
        system=np.array([pair.system for pair in pairs]),
        code1=np.array([pair.code1 for pair in pairs]),
        code2=np.array([pair.code2 for pair in pairs]),
        value_ns=value,
        sigma_ns=sigma,
        start=start,
        end=end,
        source="network adjustment",
        datum=summary,
    )
