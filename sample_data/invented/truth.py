"""What was put into the committed days, kept beside the files: small tables, and the ionosphere itself as a function.

`load(day)` reads one npz.  Slant content is kept every five minutes; for every epoch ask `network.simulate(day)`, which
gives the very numbers the files were made of.
"""

import io
from dataclasses import dataclass, field
from functools import cached_property
from pathlib import Path

import numpy as np
import numpy.typing as npt

from invented import constellations, places, weather
from invented.network import SEED, Simulated, Slip
from invented.plasma import GPS_HEIGHT_KM, Ionosphere
from invented.weather import Front, Patch, Scenario

Floats = npt.NDArray[np.float64]
FOLDER = Path(__file__).resolve().parent.parent / "truth"
STEP_S = 300


@dataclass(frozen=True)
class DayTruth:
    """The truth of a committed day.

    times (T,) every five minutes, satellites (S,), receivers (R,) markers; stec (R, T, S) content [TECU] along the ray,
    NaN where not tracked; `elevation` and `azimuth` (R, T, S) [deg] of all satellites, worked out when asked for
    satellite_bias  (name, code1, code2) -> ns, code1 minus code2, zero mean over each constellation
    receiver_bias   (marker, system, code1, code2) -> ns
    slips; faults and outages: (marker, start, end) GPS time
    vertical_content(lat, lon, time, top_km), front.at(time), patch.at(time): anywhere, any time
    """

    day: np.datetime64
    times: npt.NDArray[np.datetime64]
    receivers: npt.NDArray[np.str_]
    satellites: npt.NDArray[np.str_]
    stec: Floats
    satellite_bias: dict[tuple[str, str, str], float]
    receiver_bias: dict[tuple[str, str, str, str], float]
    slips: tuple[Slip, ...]
    faults: tuple[tuple[str, np.datetime64, np.datetime64], ...]
    outages: tuple[tuple[str, np.datetime64, np.datetime64], ...]
    ionosphere: Ionosphere = field(default_factory=lambda: Ionosphere(Scenario(), SEED), repr=False)

    @cached_property
    def _look(self) -> tuple[Floats, Floats]:
        sky = constellations.constellation(SEED)
        seconds = (self.times - constellations.REFERENCE).astype(np.int64) / 1e9
        looks = [constellations.look_from(sky, places.station(str(m)), seconds)[:2] for m in self.receivers]
        return np.stack([one[0] for one in looks]), np.stack([one[1] for one in looks])

    @property
    def elevation(self) -> Floats:
        """(R, T, S) elevation [deg] of every satellite, below the horizon too."""
        return self._look[0]

    @property
    def azimuth(self) -> Floats:
        """(R, T, S) azimuth [deg], clockwise from north."""
        return self._look[1]

    @property
    def front(self) -> Front:
        """The wall."""
        return self.ionosphere.front

    @property
    def patch(self) -> Patch:
        """The irregular patch."""
        return self.ionosphere.patch

    def vertical_content(
        self, lat: npt.ArrayLike, lon: npt.ArrayLike, time: npt.ArrayLike, top_km: float = GPS_HEIGHT_KM
    ) -> Floats:
        """True vertical content [TECU], to the height of GPS satellites, or to `top_km` (2000: without the greater
        part of the plasmasphere); arguments broadcast."""
        return self.ionosphere.vertical(lat, lon, weather.hours_since(time), top_km=top_km)


def pack(day: Simulated) -> bytes:
    """The truth of a simulated whole day as the bytes of an npz file."""
    step = np.timedelta64(STEP_S, "s")
    times = day.times[(day.times - day.times[0]) % step == np.timedelta64(0, "s")]
    shape = (len(day.truth), len(times), len(day.sky.satellites))
    stec = np.full(shape, np.nan, dtype=np.float32)
    for r, one in enumerate(day.truth):
        rows = np.isin(one.times, times)
        where = np.searchsorted(times, one.times[rows])
        stec[r, where] = np.round(one.stec[rows], 3)
    satellite, receiver = day.satellite_biases(), day.receiver_biases()
    slips = day.slips
    spans = [(kind, one.receiver.name, a, b) for one in day.truth for kind, rows in
             (("fault", one.faults), ("outage", one.outages)) for a, b in rows]  # fmt: skip
    buffer = io.BytesIO()
    np.savez_compressed(
        buffer,
        day=np.array(str(day.day)), times=times, satellites=day.sky.satellites,
        receivers=np.array([r.name for r in day.receivers]), stec=stec,
        satellite_bias_name=satellite.name, satellite_bias_code1=satellite.code1, satellite_bias_code2=satellite.code2,
        satellite_bias_ns=satellite.value_ns,
        receiver_bias_name=receiver.name, receiver_bias_system=receiver.system, receiver_bias_code1=receiver.code1,
        receiver_bias_code2=receiver.code2, receiver_bias_ns=receiver.value_ns,
        slip_receiver=np.array([s.receiver for s in slips]), slip_satellite=np.array([s.satellite for s in slips]),
        slip_time=np.array([s.time for s in slips], dtype="datetime64[ns]"),
        slip_cycles=np.array([(s.cycles1, s.cycles2) for s in slips], dtype=np.int64).reshape(-1, 2),
        slip_told=np.array([s.told for s in slips], dtype=bool),
        slip_where=np.array([s.where for s in slips], dtype="U5"),
        span_kind=np.array([s[0] for s in spans], dtype="U6"),
        span_receiver=np.array([s[1] for s in spans], dtype="U9"),
        span_start=np.array([s[2] for s in spans], dtype="datetime64[ns]"),
        span_end=np.array([s[3] for s in spans], dtype="datetime64[ns]"),
    )  # fmt: skip
    return buffer.getvalue()


def load(day: str, folder: Path = FOLDER) -> DayTruth:
    """The truth of a committed day, e.g. load("2031-03-12")."""
    with np.load(folder / f"{day}.npz", allow_pickle=False) as kept:
        slips = tuple(
            Slip(str(r), str(s), t, int(c[0]), int(c[1]), bool(told), str(w))
            for r, s, t, c, told, w in zip(
                kept["slip_receiver"], kept["slip_satellite"], kept["slip_time"], kept["slip_cycles"],
                kept["slip_told"], kept["slip_where"], strict=True,
            )
        )  # fmt: skip
        spans = list(zip(kept["span_kind"], kept["span_receiver"], kept["span_start"], kept["span_end"], strict=True))
        return DayTruth(
            day=np.datetime64(str(kept["day"]), "D"), times=kept["times"], receivers=kept["receivers"],
            satellites=kept["satellites"], stec=kept["stec"].astype(float),
            satellite_bias={
                (str(n), str(a), str(b)): float(v)
                for n, a, b, v in zip(
                    kept["satellite_bias_name"], kept["satellite_bias_code1"], kept["satellite_bias_code2"],
                    kept["satellite_bias_ns"], strict=True,
                )
            },
            receiver_bias={
                (str(n), str(s), str(a), str(b)): float(v)
                for n, s, a, b, v in zip(
                    kept["receiver_bias_name"], kept["receiver_bias_system"], kept["receiver_bias_code1"],
                    kept["receiver_bias_code2"], kept["receiver_bias_ns"], strict=True,
                )
            },
            slips=slips,
            faults=tuple((str(r), a, b) for kind, r, a, b in spans if kind == "fault"),
            outages=tuple((str(r), a, b) for kind, r, a, b in spans if kind == "outage"),
        )  # fmt: skip
