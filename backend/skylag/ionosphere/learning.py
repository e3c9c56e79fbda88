"""Learning day by day: weights of what is known beforehand, shifts by storm phase, spreads, and chances.

Each learner first foretells a day and is then shown it, so that what it foretells can rest on earlier days only.
Weights: linear regression with a prior (ridge: Hoerl and Kennard 1970, Technometrics 12, 55-67) and forgetting.
Chances: logistic regression brought up to date by the day with a quadratic approximation (Spiegelhalter and Lauritzen
1990, Networks 20, 579-605; West and Harrison 1997 for forgetting).  Rows of one day are far from independent, so a
day counts as much as a few of them.  Never sees a day twice, never draws a random number.
"""

from dataclasses import dataclass, field
from typing import Any

import numpy as np
import numpy.typing as npt

from skylag.ionosphere.activity import AFTER, LATER, MAIN, ONSET, PHASES
from skylag.tables import Bools, Floats

_BLOCKS = 8  # of three hours
_BLOCK_OF_HOUR = np.arange(24) // 3


@dataclass
class Weights:
    """Linear weights (K,) with their prior.

    prior, prior_sigma  (K,) where they start and how sure that is
    scatter    expected scatter of what is foretold, in its own unit
    days       how many days back the memory reaches
    day_worth  how many independent rows a day counts as
    """

    prior: Floats
    prior_sigma: Floats
    scatter: float
    days: float = 180.0
    day_worth: float = 4.0
    precision: Floats = field(init=False)
    moment: Floats = field(init=False)

    def __post_init__(self) -> None:
        self.precision = np.diag(1.0 / self.prior_sigma**2)
        self.moment = self.precision @ self.prior

    def now(self) -> Floats:
        """The weights as of now."""
        return np.asarray(np.linalg.solve(self.precision, self.moment), dtype=np.float64)

    def learn(self, known: Floats, value: Floats, weight: Floats) -> None:
        """Show a day: known (N, K), value (N,), weight (N,) of each row, 0 where there is nothing."""
        total = float(weight.sum())
        keep = 1.0 - 1.0 / self.days
        start = np.diag(1.0 / self.prior_sigma**2)
        self.precision = keep * self.precision + (1.0 - keep) * start
        self.moment = keep * self.moment + (1.0 - keep) * (start @ self.prior)
        if total <= 0.0:
            return
        share = self.day_worth * float((weight > 0).mean()) / (self.scatter**2 * total)
        self.precision = self.precision + share * (known.T * weight) @ known
        self.moment = self.moment + share * (known.T * weight) @ value


@dataclass
class Shifts:
    """How far hours of a storm lie off what recent days tell, by phase and three-hour block: analogues.

    Two tables: by phases as they were told beforehand, and as they were measured afterwards.  A shift is that of the
    told phase, drawn toward that of the measured phase (times `trust`) while few told ones have been seen, that toward
    the whole phase, and that toward none.  `few` blocks count half: one storm tells little of the next, and a table
    that follows each of them makes chances bold (found on invented years of seeds that no test uses).
    """

    few: float = 8.0
    few_of_phase: float = 8.0
    trust: float = 0.6
    told_sum: Floats = field(default_factory=lambda: np.zeros((len(PHASES), _BLOCKS)))
    told_count: Floats = field(default_factory=lambda: np.zeros((len(PHASES), _BLOCKS)))
    seen_sum: Floats = field(default_factory=lambda: np.zeros((len(PHASES), _BLOCKS)))
    seen_count: Floats = field(default_factory=lambda: np.zeros((len(PHASES), _BLOCKS)))

    def now(self, phase: npt.NDArray[Any]) -> Floats:
        """Shift (24,) of the hours of a day whose phases (24,) are told."""
        told = (self.told_sum + self.few * self.trust * self._seen()) / (self.told_count + self.few)
        return np.asarray(np.where(_stormy(phase), told[phase, _BLOCK_OF_HOUR], 0.0))

    def usual(self, phase: npt.NDArray[Any]) -> Floats:
        """What hours (24,) of phases that were measured did before: the part of a day that passes with its storm."""
        return np.asarray(np.where(_stormy(phase), self._seen()[phase, _BLOCK_OF_HOUR], 0.0))

    def _seen(self) -> Floats:
        """Shifts by measured phase; a block of few analogues leans on the whole phase."""
        whole = self.seen_sum.sum(axis=1) / (self.seen_count.sum(axis=1) + self.few_of_phase)
        return np.asarray((self.seen_sum + self.few * whole[:, None]) / (self.seen_count + self.few))

    def learn(self, error: Floats, told: npt.NDArray[Any], seen: npt.NDArray[Any]) -> None:
        """Show a day: error (24, P) before any shift, NaN where unseen; phases (24,) told and measured."""
        known = np.isfinite(error).sum(axis=1)
        mean = np.nansum(error, axis=1) / np.maximum(known, 1)
        share = np.where(known > 0, 1.0 / 3.0, 0.0)  # three hours make one analogue of a block
        for total, count, phase in (
            (self.told_sum, self.told_count, told),
            (self.seen_sum, self.seen_count, seen),
        ):
            np.add.at(total, (phase, _BLOCK_OF_HOUR), share * mean)
            np.add.at(count, (phase, _BLOCK_OF_HOUR), share)


def _stormy(phase: npt.NDArray[Any]) -> Bools:
    return np.asarray((phase >= ONSET) & (phase <= LATER))


_EDGES = np.linspace(-8.0, 8.0, 321)
_GROUPS = np.array([0, 0, 1, 1, 2, 2])  # of phases: calm or untold, storm, after
_NORMAL_DAYS = 20.0


@dataclass
class Spread:
    """How far values stray: a sigma by group of phases and block, and the shape of the whole distribution.

    The shape starts as normal and becomes that of the past errors over their sigma, so that ranges hold what they say
    (split conformal prediction: Vovk et al. 2005; here with a memory of `days`).
    """

    start: float
    days: float = 90.0
    few: float = 12.0
    square: Floats = field(default_factory=lambda: np.zeros((3, _BLOCKS)))
    count: Floats = field(default_factory=lambda: np.zeros((3, _BLOCKS)))
    shape: Floats = field(init=False)
    shape_days: float = 0.0
    places: Floats | None = None  # mean square of error over sigma at each place
    places_days: float = 0.0

    def __post_init__(self) -> None:
        middle = 0.5 * (_EDGES[1:] + _EDGES[:-1])
        normal = np.exp(-0.5 * middle**2)
        self.shape = np.zeros(len(middle))
        self._normal = normal / normal.sum()

    def sigma(self, phase: npt.NDArray[Any], places: int) -> Floats:
        """Sigma (24, P) of a day whose phases (24,) are told."""
        all_calm = (self.square[0].sum() + self.few * self.start**2) / (self.count[0].sum() + self.few)
        rough = np.array([1.0, 2.0, 1.5]) ** 2  # storms stray farther until they have been seen to
        group = (self.square.sum(axis=1) + self.few * rough * all_calm) / (self.count.sum(axis=1) + self.few)
        cell = (self.square + self.few * group[:, None]) / (self.count + self.few)
        variance = cell[_GROUPS[phase], _BLOCK_OF_HOUR]
        own = np.ones(places) if self.places is None else self.places
        own = (own * self.places_days + 10.0) / (self.places_days + 10.0)
        return np.asarray(np.sqrt(variance[:, None] * own[None, :]))

    def quantiles(self, levels: Floats) -> Floats:
        """Quantiles of error over sigma at levels."""
        mass = self.shape + self._normal * _NORMAL_DAYS
        cumulative = np.concatenate([[0.0], np.cumsum(mass)]) / mass.sum()
        return np.asarray(np.interp(levels, cumulative, _EDGES))

    def above(self, z: Floats) -> Floats:
        """Chance that error over sigma is more than z."""
        mass = self.shape + self._normal * _NORMAL_DAYS
        cumulative = np.concatenate([[0.0], np.cumsum(mass)]) / mass.sum()
        return np.asarray(1.0 - np.interp(z, _EDGES, cumulative))

    def learn(self, error: Floats, sigma: Floats, extra: Floats, phase: npt.NDArray[Any]) -> None:
        """Show a day: error, sigma (of this spread) and extra sigma from little history (24, P); phases told (24,)."""
        seen: Bools = np.isfinite(error)
        if not seen.any():
            return
        keep = 1.0 - 1.0 / self.days
        whole = np.sqrt(sigma**2 + extra**2)
        z = np.where(seen, error / whole, 0.0)
        # What little history explains is not held against the spread itself.
        square = np.where(seen, z**2 * sigma**2, 0.0)
        number = seen.sum(axis=1)
        hour = np.where(number > 0, square.sum(axis=1) / np.maximum(number, 1), 0.0)
        group = _GROUPS[phase]
        for one in range(3):
            if one == 0 and (group == one).any():  # storms are too seldom to be forgotten
                self.square[one] *= keep
                self.count[one] *= keep
        np.add.at(self.square, (group, _BLOCK_OF_HOUR), np.where(number > 0, hour / 3.0, 0.0))
        np.add.at(self.count, (group, _BLOCK_OF_HOUR), np.where(number > 0, 1.0 / 3.0, 0.0))
        found, _ = np.histogram(np.clip(z[seen], -7.99, 7.99), bins=_EDGES)
        worth = float(seen.mean())
        self.shape = keep * self.shape + worth * found / found.sum()
        self.shape_days = keep * self.shape_days + worth
        each = seen.sum(axis=0)
        square_of_place = np.where(each > 0, (z**2).sum(axis=0) / np.maximum(each, 1), 1.0)
        relative = square_of_place / max(float(square_of_place[each > 0].mean()), 1e-6)
        relative = np.where(each > 0, relative, 1.0)
        before = np.ones(error.shape[1]) if self.places is None else self.places
        self.places = before + (relative - before) / (self.places_days * keep + 1.0)
        self.places_days = min(self.places_days * keep + 1.0, self.days)


@dataclass
class Chances:
    """Chance of a state by logistic regression on what is known beforehand (K,)."""

    prior: Floats
    prior_sigma: Floats
    days: float = 365.0
    day_worth: float = 1.0
    weights: Floats = field(init=False)
    precision: Floats = field(init=False)

    def __post_init__(self) -> None:
        self.weights = self.prior.copy()
        self.precision = np.diag(1.0 / self.prior_sigma**2)

    def now(self, known: Floats, usual: float) -> Floats:
        """Chances (N,) from known (N, K).

        What is not known of the weights draws them (MacKay 1992, Neural Computation 4, 720-736) toward the odds of
        how often the state came at all, `usual` (logarithm).
        """
        covariance = np.linalg.inv(self.precision)
        unsure = np.einsum("nk,kl,nl->n", known, covariance, known, optimize=True)
        odds = usual + (known @ self.weights - usual) / np.sqrt(1.0 + np.pi / 8.0 * unsure)
        return np.asarray(1.0 / (1.0 + np.exp(-np.clip(odds, -12.0, 12.0))))

    def learn(self, known: Floats, came: Bools, seen: Bools) -> None:
        """Show a day: known (N, K), whether the state came (N,), whether anything was seen (N,)."""
        keep = 1.0 - 1.0 / self.days
        start = np.diag(1.0 / self.prior_sigma**2)
        before = keep * self.precision + (1.0 - keep) * start
        centre = np.linalg.solve(before, keep * self.precision @ self.weights + (1.0 - keep) * (start @ self.prior))
        self.weights, self.precision = np.asarray(centre, dtype=np.float64), before
        if not seen.any():
            return
        rows, yes = known[seen], came[seen].astype(np.float64)
        worth = self.day_worth * float(seen.mean()) / len(rows)
        point: Floats = self.weights
        for _ in range(2):
            chance = 1.0 / (1.0 + np.exp(-np.clip(rows @ point, -12.0, 12.0)))
            slope = worth * rows.T @ (yes - chance) - before @ (point - centre)
            curve = before + worth * (rows.T * (chance * (1.0 - chance))) @ rows
            point = np.asarray(point + np.linalg.solve(curve, slope), dtype=np.float64)
        self.weights, self.precision = point, curve


def storm_columns(phase: npt.NDArray[Any]) -> Floats:
    """(24, 4): told onset, main phase, first day after, second day after."""
    return np.stack([phase == one for one in (ONSET, MAIN, AFTER, LATER)], axis=1).astype(np.float64)
