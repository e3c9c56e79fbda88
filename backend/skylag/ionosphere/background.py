"""What is said of content where no receiver looks: a broadcast or plain model, and how wrong it may be.

Never used where a line of sight passes; never fitted to the day's data, only its error is measured on them.
"""

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from skylag.constants import L1_M_PER_TECU
from skylag.ionosphere.broadcast_delay import klobuchar, ntcm_vertical
from skylag.tables import Floats

# A broadcast model is designed to remove at least half of the ionospheric error, rms (IS-GPS-200, 20.3.3.5.2.5), so up
# to half of what it says is left.
ERROR_SHARE = 0.5
# A night's content is a few TECU whatever a model says; its error is no smaller than this [TECU].  Common practice.
LEAST_SIGMA = 2.0


@dataclass(frozen=True)
class Background:
    """A model of vertical content: its name in words, its kind ("ntcm" or "klobuchar") and coefficients."""

    name: str
    kind: str
    coefficients: tuple[float, ...]

    def vertical(self, lat: Floats, lon: Floats, time: np.datetime64) -> Floats:
        """Vertical content [TECU] at places [deg] at one GPS time."""
        times = np.full(np.shape(lat), time)
        if self.kind == "ntcm":
            return ntcm_vertical(self.coefficients, lat, lon, times)
        upward = np.full(np.shape(lat), 90.0)
        delay = klobuchar(self.coefficients[:4], self.coefficients[4:], lat, lon, upward, 0.0 * upward, times)
        return np.asarray(delay / L1_M_PER_TECU)

    def sigma(self, content: Floats, off: float) -> Floats:
        """Sigma [TECU] of what the model says, given by how much (rms) it is off where the network sees."""
        return np.asarray(np.maximum(ERROR_SHARE * np.abs(content), max(LEAST_SIGMA, off)))


# Where nothing was broadcast: NTCM-G at the level that Galileo receivers take then (Galileo OS ionospheric algorithm
# 1.2, 2016: all three coefficients zero stand for 63.7).
PLAIN = Background("a plain model of a mean day", "ntcm", (63.7, 0.0, 0.0))


def climatological(solar_flux: float = 0.0) -> Background:
    """NTCM-G at a solar radio flux (the unit of 10.7 cm measurements, in which its coefficient is told); 0: `PLAIN`."""
    if not solar_flux:
        return PLAIN
    return Background(f"a climatological model at a solar flux of {solar_flux:g}", "ntcm", (solar_flux, 0.0, 0.0))


def broadcast(ionosphere: Mapping[str, tuple[float, ...]]) -> Background | None:
    """The model that navigation records tell (`Ephemerides.ionosphere`): Galileo's first, else GPS's, else None."""
    galileo = ionosphere.get("GAL", ())
    if len(galileo) >= 3 and np.all(np.isfinite(galileo[:3])) and any(galileo[:3]):
        return Background("the model broadcast by Galileo", "ntcm", tuple(galileo[:3]))
    alpha, beta = ionosphere.get("GPSA", ()), ionosphere.get("GPSB", ())
    if len(alpha) >= 4 and len(beta) >= 4 and np.all(np.isfinite([*alpha[:4], *beta[:4]])) and any(alpha[:4]):
        return Background("the model broadcast by GPS", "klobuchar", (*alpha[:4], *beta[:4]))
    return None
