"""The normal equations of the network adjustment: biases, smooth vertical content, one high layer, one level per arc.

A ray meets two biases, the four time splines that live at its time, and the high layer; the splines live in bands, so
the equations are put together one time interval after another with small dense products, and cost grows linearly with
the number of rays.  The level error of each arc is a random effect and is eliminated at once.  Knows nothing of files,
names or datums: what is known beforehand comes in as `Knowledge`.
"""

import itertools
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from scipy.interpolate import BSpline
from scipy.linalg import cho_factor, cho_solve
from scipy.sparse import csr_matrix

from skylag.tables import Floats, Ints


@dataclass(frozen=True)
class Design:
    """What each row (ray) of the equations meets.  Rows are sorted by time interval, then by arc.

    receiver, satellite  (N,) columns of the two biases; factor (N,) content [TECU] per ns of either
    slant       (N, 4 terms) mapping times spline times term of the place; vertical the same without the mapping
    first       (N,) column, within the content, of a row's first spline
    high        (N,) slant content of the high layer's shape [TECU]
    starts      row numbers at which the intervals begin, and the number of rows
    """

    receiver: Ints
    satellite: Ints
    factor: Floats
    slant: Floats
    vertical: Floats
    first: Ints
    high: Floats
    starts: Ints
    biases: int
    splines: int
    terms: int
    degree: int

    @property
    def content(self) -> slice:
        """Columns of the smooth vertical content."""
        return slice(self.biases, self.biases + self.splines * self.terms)

    @property
    def size(self) -> int:
        """Number of unknowns; the last is the amplitude of the high layer."""
        return self.biases + self.splines * self.terms + 1

    @property
    def term_degree(self) -> Ints:
        """Degree in the place of every term."""
        return np.array([i + j for i in range(self.degree + 1) for j in range(self.degree + 1 - i)])

    @cached_property
    def spans(self) -> list[tuple[slice, slice]]:
        """(rows, columns of the whole system) of every time interval that has rows."""
        width = self.slant.shape[1]
        found = []
        for start, end in itertools.pairwise(self.starts):
            if end > start:
                column = self.biases + int(self.first[start])
                found.append((slice(int(start), int(end)), slice(column, column + width)))
        return found

    @cached_property
    def picks(self) -> list[csr_matrix]:
        """Per interval, (biases, rows): what each row has of each bias."""
        both = np.stack([self.receiver, self.satellite], axis=1)
        return [
            csr_matrix(
                (np.repeat(self.factor[rows], 2), both[rows].ravel(), np.arange(rows.stop - rows.start + 1) * 2),
                shape=(rows.stop - rows.start, self.biases),
            ).T.tocsr()
            for rows, _ in self.spans
        ]

    def smooth(self, x: Floats) -> Floats:
        """Vertical content [TECU] of the smooth model at every row."""
        found = np.empty(len(self.first))
        for rows, columns in self.spans:
            found[rows] = self.vertical[rows] @ x[columns]
        return found

    def predict(self, x: Floats) -> Floats:
        """Levelled slant content [TECU] of every row."""
        found = self.factor * (x[self.receiver] + x[self.satellite]) + self.high * x[-1]
        for rows, columns in self.spans:
            found[rows] += self.slant[rows] @ x[columns]
        return np.asarray(found)


def time_splines(seconds: Floats, knots_s: float) -> tuple[Floats, Ints, int]:
    """Values (N, 4) of the cubic B-splines that live at each time, the number of the first, and how many there are."""
    longest = max(float(seconds.max()), 1.0)
    intervals = max(1, round(longest / knots_s))
    inner = np.linspace(0.0, longest * (1 + 1e-9), intervals + 1)
    knots = np.concatenate([np.repeat(inner[0], 3), inner, np.repeat(inner[-1], 3)])
    spline = BSpline.design_matrix(seconds, knots, 3).tocsr()
    return spline.data.reshape(-1, 4), spline.indices.reshape(-1, 4)[:, 0].astype(np.int64), intervals + 3


def place_terms(lat: Floats, lon: Floats, middle: tuple[float, float], degree: int) -> Floats:
    """Monomials of the place, in units of ten degrees of arc from the middle; (N, terms)."""
    x = (np.mod(lon - middle[1] + 180.0, 360.0) - 180.0) * np.cos(np.radians(middle[0])) / 10.0
    y = (lat - middle[0]) / 10.0
    return np.stack([x**i * y**j for i in range(degree + 1) for j in range(degree + 1 - i)], axis=1)


@dataclass(frozen=True)
class Knowledge:
    """What is known of some unknowns before a ray is looked at: a piece of normal equations, matrix x = right."""

    columns: Ints
    matrix: Floats
    right: Floats


def known(columns: Ints, coefficients: Floats, value: float, weight: float) -> Knowledge:
    """The knowledge that a sum of unknowns has a value, with a weight (1 / sigma^2)."""
    return Knowledge(
        np.asarray(columns), weight * np.outer(coefficients, coefficients), weight * value * np.asarray(coefficients)
    )


class Normal:
    """The normal equations of one round, with one random effect per arc eliminated.

    weight  (N,) 1 / variance of a row's own part; arc_of_row (N,), arc_variance (arcs,) [TECU^2] of the arc's level
    """

    def __init__(
        self, design: Design, weight: Floats, arc_of_row: Ints, arc_variance: Floats,
        knowledge: list[Knowledge],
    ) -> None:  # fmt: skip
        self._design, self._weight, self._arc = design, weight, arc_of_row
        biases, size, arcs = design.biases, design.size, len(arc_variance)
        receiver, satellite, factor, high = design.receiver, design.satellite, design.factor, design.high
        normal = np.zeros((size, size))
        upper = normal[:biases, design.content]
        heavy = weight * factor
        square = heavy * factor
        crossed = np.bincount(receiver * biases + satellite, square, minlength=biases**2).reshape(biases, biases)
        normal[:biases, :biases] = crossed + crossed.T
        normal[np.arange(biases), np.arange(biases)] += self._by_bias(square)
        normal[:biases, -1] = self._by_bias(heavy * high)
        normal[-1, -1] = weight @ high**2
        coupling = np.zeros((arcs, upper.shape[1]))
        begins, ends = np.full(arcs, size), np.zeros(arcs, dtype=np.int64)
        for (rows, columns), pick in zip(design.spans, design.picks, strict=True):
            slant = design.slant[rows]
            weighted = slant * weight[rows, None]
            inside = slice(columns.start - biases, columns.stop - biases)
            normal[columns, columns] += slant.T @ weighted
            normal[columns, -1] += high[rows] @ weighted
            upper[:, inside] += pick @ weighted
            # Rows of an interval are sorted by arc.
            arc = arc_of_row[rows]
            turn = np.flatnonzero(np.concatenate([[True], arc[1:] != arc[:-1]]))
            coupling[arc[turn], inside] += np.add.reduceat(weighted, turn, axis=0)
            begins[arc[turn]] = np.minimum(begins[arc[turn]], inside.start)
            ends[arc[turn]] = np.maximum(ends[arc[turn]], inside.stop)
        self.mass = np.bincount(arc_of_row, weight, minlength=arcs)
        self._inner = 1.0 / (1.0 / arc_variance + self.mass)
        self._coupling = coupling
        self._of_bias = csr_matrix(
            (np.concatenate([heavy, heavy]),
             (np.concatenate([arc_of_row, arc_of_row]), np.concatenate([receiver, satellite]))),
            shape=(arcs, biases),
        )  # fmt: skip
        self._of_bias.sum_duplicates()
        self._of_high = np.bincount(arc_of_row, weight * high, minlength=arcs)
        shrunk = self._of_bias.multiply(self._inner[:, None]).tocsr()
        normal[:biases, :biases] -= (self._of_bias.T @ shrunk).toarray()
        upper -= shrunk.T @ coupling
        normal[:biases, -1] -= shrunk.T @ self._of_high
        normal[design.content, -1] -= coupling.T @ (self._inner * self._of_high)
        normal[-1, -1] -= self._inner @ self._of_high**2
        # Arcs that begin in one interval reach over few splines: take them out of that band alone.
        order = np.argsort(begins, kind="stable")
        for group in np.split(order, np.flatnonzero(np.diff(begins[order])) + 1):
            band = slice(int(begins[group[0]]), int(ends[group].max()))
            part = coupling[group, band] * np.sqrt(self._inner[group])[:, None]
            normal[biases + band.start : biases + band.stop, biases + band.start : biases + band.stop] -= part.T @ part
        normal[design.content, :biases] = upper.T
        normal[-1, :-1] = normal[:-1, -1]
        self._known = np.zeros(size)
        for piece in knowledge:
            normal[np.ix_(piece.columns, piece.columns)] += piece.matrix
            self._known[piece.columns] += piece.right
        self._factor = cho_factor(normal, overwrite_a=True, check_finite=False)

    def _by_bias(self, values: Floats) -> Floats:
        """Sum of row values over each bias."""
        design = self._design
        total = np.bincount(design.receiver, values, minlength=design.biases).astype(np.float64)
        return np.asarray(total + np.bincount(design.satellite, values, minlength=design.biases))

    def _right(self, content: Floats) -> tuple[Floats, Floats]:
        design = self._design
        heavy = self._weight * content
        sums = np.bincount(self._arc, heavy, minlength=len(self._inner)).astype(np.float64)
        right = np.zeros(design.size)
        right[: design.biases] = self._by_bias(heavy * design.factor)
        right[-1] = heavy @ design.high
        for rows, columns in design.spans:
            right[columns] += heavy[rows] @ design.slant[rows]
        taken = self._inner * sums
        right[: design.biases] -= self._of_bias.T @ taken
        right[design.content] -= self._coupling.T @ taken
        right[-1] -= self._of_high @ taken
        return right, sums

    def weigh(self, content: Floats) -> Floats:
        """The inverse covariance of the rows, arc effects and all, times a vector of rows."""
        heavy = self._weight * content
        sums = np.bincount(self._arc, heavy, minlength=len(self._inner))
        return np.asarray(heavy - self._weight * (self._inner * sums)[self._arc])

    def solve(self, content: Floats) -> tuple[Floats, Floats]:
        """The unknowns and the arc effects."""
        right, sums = self._right(content)
        x = np.asarray(cho_solve(self._factor, right + self._known))
        biases = self._design.biases
        told = self._of_bias @ x[:biases] + self._coupling @ x[self._design.content] + self._of_high * x[-1]
        return x, self._inner * (sums - told)

    def respond(self, disturbance: Floats) -> Floats:
        """How far the unknowns move when the content of each row is off by `disturbance`."""
        return np.asarray(cho_solve(self._factor, self._right(disturbance)[0]))

    def covariance(self) -> Floats:
        """Covariance of the biases [ns^2] that the weights promise."""
        biases = self._design.biases
        unit = np.zeros((self._design.size, biases))
        unit[np.arange(biases), np.arange(biases)] = 1.0
        return np.asarray(cho_solve(self._factor, unit))[:biases]
