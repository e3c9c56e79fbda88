"""Best linear unbiased estimation of content at places from the rays of one epoch, with its uncertainty.

The system of an epoch is solved once (`solve`); values, slopes and sigmas at any places follow (`at`), and so does
what the system would say of each receiver had it been left out (`left_out`).  Many rays are taken by neighbourhoods,
so that the cost grows with their number, not with its cube.  Never chooses the covariance (`covariance` does).

Source: universal kriging (Matheron 1969; Cressie 1993, chapter 3); residuals of left-out data from the inverse
(Dubrule 1983).
"""

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy.linalg import LinAlgError, cholesky
from scipy.linalg.lapack import dtrtri

from skylag.ionosphere.covariance import Epoch, Residual, plane_terms
from skylag.tables import Floats, Ints

# Places at a time: five matrices of places by rays must stay in the cache of a processor (measured with 216 rays: 1681
# at a time took 1.5 times as long as 200 or 400).
_PLACES_AT_A_TIME = 256
_WITHIN = 1.959964  # 95 % of a normal error lie within so many sigmas
_MEDIAN_OF_SQUARE = 0.4549  # of a unit normal: the median of chi-square with one degree of freedom
_ENOUGH_TO_TELL = 10  # rays from which the median of a region is worth something


@dataclass(frozen=True)
class System:
    """The solved equations of one epoch.

    whitening  inverse of the Cholesky factor of all covariances: whitening @ data is free of covariance
    weights    (N, 1 + leanings): data less the plane, weighted; plane (3, 1 + leanings)
    precision_diagonal  of P = K^-1 - K^-1 F (F' K^-1 F)^-1 F' K^-1
    chi_square of the data less plane, with N - 3 degrees of freedom; covariance of the biases [ns^2]
    """

    part: Epoch
    residual: Residual
    whitening: Floats
    white_drift: Floats
    normal_inverse: Floats
    weights: Floats
    plane: Floats
    precision_diagonal: Floats
    chi_square: float
    covariance: Floats

    @property
    def strangeness(self) -> Floats:
        """What each ray is off from what all others say of it, in sigmas of that difference."""
        return np.asarray(self.weights[:, 0] / np.sqrt(np.maximum(self.precision_diagonal, 1e-12)))


@dataclass(frozen=True)
class Estimates:
    """Content [TECU], slopes east and north [TECU/km] at places, each with its sigma."""

    value: Floats
    sigma: Floats
    east: Floats
    east_sigma: Floats
    north: Floats
    north_sigma: Floats


def solve(part: Epoch, covariance: Floats, residual: Residual) -> System:
    """Set up and solve the equations of one epoch."""
    matrix = part.noise(covariance)
    matrix += residual.spread**2 * np.exp(part.distances() / -residual.reach_km)
    diagonal = np.diag_indices_from(matrix)
    matrix[diagonal] += residual.grain**2
    try:
        lower = cholesky(matrix, lower=True, check_finite=False)
    except LinAlgError:
        # Errors of zero size at one place: a thousandth of a TECU^2 keeps the equations regular.
        matrix[diagonal] += 1e-3
        lower = cholesky(matrix, lower=True, check_finite=False)
    whitening = np.tril(dtrtri(lower, lower=1)[0])
    drift = part.drift()
    # The content, and beside it every way in which all contents may lean together: the map leans as they do.
    data = np.column_stack([part.vtec, part.leanings])
    white_drift = whitening @ drift
    white_data = whitening @ data
    normal_inverse = np.linalg.pinv(white_drift.T @ white_drift, hermitian=True)
    plane = normal_inverse @ (white_drift.T @ white_data)
    white_rest = white_data - white_drift @ plane
    weights = whitening.T @ white_rest
    of_drift = whitening.T @ white_drift
    precision_diagonal = np.einsum("ij,ij->j", whitening, whitening)
    precision_diagonal -= np.einsum("ij,jk,ik->i", of_drift, normal_inverse, of_drift)
    return System(
        part, residual, whitening, white_drift, normal_inverse, weights, plane, precision_diagonal,
        float(white_rest[:, 0] @ white_rest[:, 0]), covariance,
    )  # fmt: skip


def at(system: System, x: Floats, y: Floats, over_km: float, around_km: float) -> Estimates:
    """Content and slopes at places [km].

    over_km    length over which slopes are taken
    around_km  sigmas are brought to how well the rays within about this distance agree with what is said of them
               (`Surroundings`); 0: the covariance alone speaks
    """
    pieces = [
        _at(system, x[first : first + _PLACES_AT_A_TIME], y[first : first + _PLACES_AT_A_TIME], over_km, around_km)
        for first in range(0, len(x), _PLACES_AT_A_TIME)
    ]
    return Estimates(**{
        name: np.concatenate([getattr(piece, name) for piece in pieces]) for name in Estimates.__dataclass_fields__
    })


def _at(system: System, x: Floats, y: Floats, over_km: float, around_km: float) -> Estimates:
    part, residual = system.part, system.residual
    spread2, reach = residual.spread**2, residual.reach_km
    east_km, north_km = x[:, None] - part.x, y[:, None] - part.y
    distance = np.sqrt(east_km**2 + north_km**2)
    around = surroundings(system, x, y, distance, around_km)

    def estimate(k: npt.NDArray[Any], f: Floats, own: float) -> tuple[Floats, Floats, Floats]:
        """Value, variance by the covariance, and the square by which all contents lean together."""
        white = k @ system.whitening.T.astype(k.dtype)  # (places, rays)
        answer = k @ system.weights.astype(k.dtype) + f @ system.plane
        open_drift = f - white @ system.white_drift.astype(k.dtype)
        variance = own - np.einsum("ij,ij->i", white, white).astype(np.float64)
        variance += np.einsum("ij,jk,ik->i", open_drift, system.normal_inverse, open_drift)
        return answer[:, 0], np.maximum(variance, 0.0), np.sum(answer[:, 1:] ** 2, axis=1)

    # A cell's value is that of a place in it, so the unresolved grain is part of its uncertainty.
    alone = spread2 + residual.grain**2
    value, variance, together = estimate(spread2 * np.exp(distance / -reach), plane_terms(x, y), alone)
    # Of what content departs from a plane around, beyond what was expected, the rays leave unknown the share that they
    # leave of the residual.
    unknown = np.minimum(variance / alone, 1.0) * around.unexpected2
    sigma = np.sqrt(variance * np.maximum(around.roughness, 1.0) + unknown + together)
    # Slopes need no more than single precision: measured on a storm to differ by less than 1e-4 of their sigma.
    half, decay = np.float32(0.5 * over_km), np.float32(-1.0 / reach)
    east4, north4 = east_km.astype(np.float32), north_km.astype(np.float32)

    def difference(along: npt.NDArray[np.float32], across: npt.NDArray[np.float32]) -> npt.NDArray[np.float32]:
        across2 = across * across
        ahead, behind = along + half, along - half
        ahead = np.exp(np.sqrt(ahead * ahead + across2) * decay)
        ahead -= np.exp(np.sqrt(behind * behind + across2) * decay)
        ahead *= np.float32(spread2)
        return np.asarray(ahead)

    apart = 2.0 * spread2 * (1.0 - np.exp(-over_km / reach))
    still, step = np.zeros(len(x)), np.full(len(x), over_km / 1000.0)
    slopes = []
    for along, across, drift in (
        (east4, north4, np.stack([still, step, still], axis=1)),
        (north4, east4, np.stack([still, still, step], axis=1)),
    ):
        change, variance, together = estimate(difference(along, across), drift, apart)
        # Two places this far apart may each depart from the local plane on their own.
        slopes += [
            change / over_km,
            np.sqrt(variance * around.usual_roughness + 2.0 * around.departure2 + together) / over_km,
        ]
    return Estimates(value, sigma, *slopes)


@dataclass(frozen=True)
class Surroundings:
    """How content behaves around places (P,), told by the rays near them.

    The covariance is one for the whole region; a wall makes content rougher along a line than anywhere else, and
    smoother elsewhere than the covariance of its hour says.
    roughness        factor on variances: the squared strangeness of the rays around, weighted by distance, with one
                     ray's worth of belief in the covariance itself, so that a lonely ray does not decide
    usual_roughness  the same with one ray's worth of belief that it is here as at most rays of the moment
    departure2       square [TECU^2] by which content departs from a plane fitted around, beyond the rays' own errors,
                     widened as of a variance known from few rays only (Student's t: Fisher 1925; expansion in 1/nu)
    unexpected2      the same beyond what the covariance lets expect
    """

    roughness: Floats
    usual_roughness: Floats
    departure2: Floats
    unexpected2: Floats


def surroundings(system: System, x: Floats, y: Floats, distance: Floats, around_km: float) -> Surroundings:
    """How content behaves around places [km]; distance (P, N) from them to the rays."""
    count = len(x)
    if around_km <= 0.0:
        return Surroundings(np.ones(count), np.ones(count), np.zeros(count), np.zeros(count))
    odd = system.strangeness**2
    weight = np.exp((distance.astype(np.float32) / np.float32(around_km)) ** 2 * np.float32(-0.5)).astype(np.float64)
    total = weight.sum(axis=1)
    strange = weight @ odd
    usual = float(np.median(odd)) / _MEDIAN_OF_SQUARE if len(odd) >= _ENOUGH_TO_TELL else 1.0
    # Moments of the rays around each place: the plane's terms in hundreds of km, what content departs from the whole
    # region's plane, and its noise.
    part = system.part
    east, north = part.x / 100.0, part.y / 100.0
    rest = part.vtec - part.drift() @ system.plane[:, 0]
    noise = part.own**2 + part.arc**2 + part.bias_variance(system.covariance)
    one = np.ones(len(part))
    columns = np.stack(
        [one, east, north, east**2, east * north, north**2, rest, rest * east, rest * north, rest**2, noise], axis=1
    )
    s = weight @ columns
    normal = s[:, [0, 1, 2, 1, 3, 4, 2, 4, 5]].reshape(count, 3, 3)
    normal += 1e-6 * (s[:, 3] + s[:, 5] + 1e-6)[:, None, None] * np.eye(3)
    fit = np.linalg.solve(normal, s[:, 6:9, None])[:, :, 0]
    left = np.maximum(s[:, 9] - np.einsum("pi,pi->p", fit, s[:, 6:9]), 0.0)
    # How many rays of equal weight these are worth (Kish 1965), less the plane's three numbers.
    worth = total**2 / np.maximum((weight**2).sum(axis=1), 1e-12)
    beyond = left * worth / np.maximum(worth - 3.0, 1.0) - s[:, 10]
    # What the covariance lets expect of it: rays around a place are so far apart in the mean; a plane takes half of
    # what changes slowly, and little of what does not.
    alike = np.exp(-np.sqrt(np.pi) * around_km / system.residual.reach_km)
    expected = system.residual.spread**2 * (1.0 - alike) * (1.0 - 0.5 * alike) + system.residual.grain**2
    free = np.maximum(worth - 3.0, 2.0)
    z = _WITHIN
    student = z + (z**3 + z) / (4.0 * free) + (5.0 * z**5 + 16.0 * z**3 + 3.0 * z) / (96.0 * free**2)
    known = np.where(total > 1e-9, (student / z) ** 2, 0.0) / np.maximum(total, 1e-12)
    roughness, by_usual = (1.0 + strange) / (1.0 + total), (usual + strange) / (1.0 + total)
    return Surroundings(
        roughness, by_usual, np.maximum(beyond, 0.0) * known,
        np.maximum(beyond - expected * np.maximum(roughness, 1.0) * total, 0.0) * known,
    )  # fmt: skip


def left_out(system: System, rows: Ints) -> tuple[Floats, Floats]:
    """What some rays are off from what all others say of them [TECU], and the sigma of that difference.

    The rays' own errors are part of the sigma.
    """
    white = system.whitening[:, rows]
    of_drift = white.T @ system.white_drift
    precision = white.T @ white - of_drift @ system.normal_inverse @ of_drift.T
    spread = np.linalg.pinv(precision, hermitian=True)
    off = spread @ system.weights[rows]
    return off[:, 0], np.sqrt(np.diag(spread) + np.sum(off[:, 1:] ** 2, axis=1))
