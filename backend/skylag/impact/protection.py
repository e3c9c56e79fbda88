"""Protection levels of satellite-based augmentation: the user's variances, and what they bound.

Equations and weights of RTCA DO-229, appendices A and J.  Arrays of any shape with satellites last.  Never decides what
is available: it gives metres.
"""

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from skylag.constants import SBAS_EARTH_RADIUS_M, SBAS_SHELL_HEIGHT_M
from skylag.impact import sky
from skylag.ionosphere import geometry
from skylag.tables import Floats

# RTCA DO-229, appendix J: precision approach vertical and horizontal; en route to non-precision approach.
K_VERTICAL = 5.33
K_HORIZONTAL_PRECISION = 6.0
K_HORIZONTAL_ROUTE = 6.18

# Variances [m^2] of fast and long-term corrections by index (RTCA DO-229, table A-6) and the bounds [m] they stand for.
CORRECTION_VARIANCE_M2 = (0.0520, 0.0924, 0.1444, 0.2830, 0.4678, 0.8315, 1.2992, 1.8709, 2.5465, 3.3260, 5.1968,
                          20.7870, 230.9661, 2078.695)  # fmt: skip
CORRECTION_M = (0.75, 1.0, 1.25, 1.75, 2.25, 3.0, 3.75, 4.5, 5.25, 6.0, 7.5, 15.0, 50.0, 150.0)


def pierce_factor(elevation: npt.ArrayLike) -> Floats:
    """Slant over vertical delay of augmentation's own shell: 350 km over 6378.1363 km (RTCA DO-229, A.4.4.10.4)."""
    return geometry.mapping(elevation, SBAS_SHELL_HEIGHT_M, SBAS_EARTH_RADIUS_M)


def airborne_variance(elevation: npt.ArrayLike, noise_m: float) -> Floats:
    """Variance [m^2] of multipath, and of noise with divergence as given (RTCA DO-229, J.2.4)."""
    multipath = 0.13 + 0.53 * np.exp(-np.asarray(elevation, dtype=np.float64) / 10.0)
    return np.asarray(multipath**2 + noise_m**2)


def troposphere_variance(elevation: npt.ArrayLike) -> Floats:
    """Variance [m^2] left by the standard model of the lower atmosphere, 4 degrees and up (RTCA DO-229, A.4.2.5)."""
    sine = np.sin(np.radians(elevation))
    return np.asarray((0.12 * 1.001) ** 2 / (0.002001 + sine**2))


@dataclass(frozen=True)
class Levels:
    """Variances of the position per unit of k: east, north, up [m^2], their cross term, and the levels [m]; NaN where
    there is no position."""

    east_m2: Floats
    north_m2: Floats
    east_north_m2: Floats
    up_m2: Floats
    major_m: Floats

    @property
    def vertical_m(self) -> Floats:
        """Vertical protection level, precision approach."""
        return np.asarray(K_VERTICAL * np.sqrt(self.up_m2))

    @property
    def horizontal_m(self) -> Floats:
        """Horizontal protection level, precision approach."""
        return np.asarray(K_HORIZONTAL_PRECISION * self.major_m)

    @property
    def horizontal_route_m(self) -> Floats:
        """Horizontal protection level, en route to non-precision approach."""
        return np.asarray(K_HORIZONTAL_ROUTE * self.major_m)


def levels(elevation: Floats, azimuth: Floats, variance_m2: Floats) -> Levels:
    """Protection levels (...,) of satellites (..., S); a satellite with no variance (NaN) is not used.

    Source: RTCA DO-229, appendix J.
    """
    with np.errstate(divide="ignore", invalid="ignore"):
        weight = np.where(np.isfinite(variance_m2) & np.isfinite(elevation), 1.0 / variance_m2, 0.0)
    covariance = sky.position_covariance(sky.rows_of(elevation, azimuth), weight)
    east, north, up = covariance[..., 0, 0], covariance[..., 1, 1], covariance[..., 2, 2]
    cross = covariance[..., 0, 1]
    major = np.sqrt((east + north) / 2 + np.sqrt(((east - north) / 2) ** 2 + cross**2))
    return Levels(east, north, cross, up, major)
