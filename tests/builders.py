"""A small invented archive, written directly and not by the estimator: for the page and for tests.

    python -m tests.builders DIR [--serve PORT]

writes DIR/archive.sqlite with a calm and a stormy day over an invented network and, if asked, serves it.  All values
are smooth inventions, marked as simulated.
"""

import argparse
from dataclasses import replace
from pathlib import Path

import numpy as np

from skylag.archive import open_archive
from skylag.constants import L1_M_PER_TECU, WGS84_F
from skylag.events import Arrival
from skylag.impact import arrivals
from skylag.ionosphere.geometry import earth_fixed
from skylag.tables import (
    BROKEN,
    HOLDS,
    STATE_NAMES,
    STRAINED,
    UNSEEN,
    Biases,
    Calibration,
    Fields,
    Flag,
    Floats,
    Origin,
    Products,
    Rays,
    Receiver,
    Region,
    Samples,
    SignalPair,
    Site,
    Times,
)

REGION = Region(
    name="Strait of trials",
    south=-43.0,
    north=-36.0,
    west=142.0,
    east=150.0,
    step_deg=0.5,
    sites=(
        Site("Northport", -37.8, 145.0, "port"),
        Site("Gannet Field", -41.1, 147.1, "aerodrome"),
        Site("Kelp Island", -40.0, 148.1, "aerodrome"),
        Site("Southmere quarry", -42.4, 147.0, "survey"),
    ),
    timezone="Australia/Hobart",
)
CALM_DAY, STORM_DAY = np.datetime64("2031-05-10", "D"), np.datetime64("2031-05-11", "D")

_PLACES = {
    "ARDN": (-37.6, 143.9), "BOLT": (-38.3, 146.2), "CINE": (-37.1, 147.6), "DUNE": (-38.4, 144.2),
    "EDDY": (-39.9, 143.9), "FERN": (-40.9, 145.3), "GULL": (-41.2, 146.4), "HULL": (-41.4, 147.8),
    "IRON": (-40.1, 148.0), "JETT": (-42.9, 147.3),
}  # fmt: skip


def at_geocentric(layer: Floats, lats: Floats, rows: Floats) -> Floats:
    """Maps (T, lat, lon) at geocentric latitudes: what a file of them must hold, reckoned column by column."""
    geographic = np.degrees(np.arctan(np.tan(np.radians(rows)) / (1.0 - WGS84_F) ** 2))
    return np.apply_along_axis(lambda column: np.interp(geographic, lats, column), 1, layer.astype(np.float64))


def _receiver(name: str, lat: float, lon: float) -> Receiver:
    x, y, z = earth_fixed(lat, lon, 50.0)
    return Receiver(name, (float(x), float(y), float(z)))


RECEIVERS = tuple(_receiver(name, *place) for name, place in _PLACES.items())


def _front_lat(hours: Floats) -> Floats:
    """Where the invented storm front stands: it enters from the south at 04:00 and leaves to the north at 08:00."""
    return -43.5 + (hours - 4.0) * 2.0


def invented_fields(region: Region, times: Times, storm: bool) -> Fields:
    """Smooth maps: a day's rise and fall, more content toward the equator, and a wall of content on the storm day."""
    hours = (times - times[0].astype("datetime64[D]")).astype("timedelta64[s]").astype(float) / 3600.0
    hour, lat, lon = hours[:, None, None], region.lats[None, :, None], region.lons[None, None, :]
    local = (hour + lon / 15.0) % 24.0
    vtec = 6.0 + 14.0 * np.clip(np.cos((local - 14.0) / 24.0 * 2 * np.pi), 0, None) ** 1.5 + 0.6 * (lat + 43.0)
    if storm:
        wall = _front_lat(hour)
        present = 1.0 / (1.0 + np.exp(-(hour - 3.7) * 6)) / (1.0 + np.exp((hour - 8.3) * 6))
        vtec = vtec + present * 25.0 / (1.0 + np.exp((lat - wall) / 0.25))
        patch = np.exp(-((hour - 10.5) ** 2) - (lat + 38) ** 2 - (lon - 148) ** 2)
        vtec = vtec + 3.0 * patch * np.sin(lon * 9)
    north, east = np.gradient(vtec, region.step_deg * 111.2, axis=1), np.gradient(vtec, region.step_deg * 85.0, axis=2)
    to_mm = 1000.0 * L1_M_PER_TECU
    slope_north, slope_east = north * to_mm, east * to_mm
    slope = np.hypot(slope_east, slope_north)
    places = np.array(list(_PLACES.values()))
    away = np.hypot((lat[0, :, :, None] - places[:, 0]), 0.76 * (lon[0, :, :, None] - places[:, 1])).min(axis=-1)
    sigma = np.broadcast_to(0.8 + 1.2 * away, vtec.shape).copy()
    seen = np.broadcast_to(away < 2.0, vtec.shape)
    support = np.where(seen, np.clip(22 - 9 * away, 2, None), 0).astype(np.uint16)
    state = np.where(slope > region.thresholds.broken_mm_per_km, BROKEN, HOLDS)
    state = np.where((slope > region.thresholds.strained_mm_per_km) & (state == HOLDS), STRAINED, state)
    state = np.where(seen, state, UNSEEN).astype(np.uint8)

    def layer(values: Floats) -> np.ndarray:
        return np.where(seen, values, np.nan).astype(np.float32)

    return Fields(
        times=times, lats=region.lats, lons=region.lons, vtec=layer(vtec), vtec_sigma=layer(sigma), support=support,
        slope=layer(slope), slope_sigma=layer(1.0 + 0.15 * slope), slope_east=layer(slope_east),
        slope_north=layer(slope_north), state=state,
    )  # fmt: skip


def invented_samples(region: Region, times: Times, satellites: int, rng: np.random.Generator) -> Samples:
    """Lines of sight that wander over the region; vertical content is a smooth invention."""
    shape = (len(times), len(RECEIVERS), satellites)
    epoch, receiver, satellite = (a.reshape(-1) for a in np.indices(shape))
    turn = 2 * np.pi * epoch / len(times)
    elevation = 50.0 + 35.0 * np.sin(turn * 2 + satellite * 1.7)
    azimuth = np.rad2deg(turn + satellite * 2.4) % 360.0
    places = np.array(list(_PLACES.values()))
    reach = 3.4 * np.cos(np.deg2rad(elevation)) / np.sin(np.deg2rad(elevation)).clip(0.3)
    pierce_lat = places[receiver, 0] + reach * np.cos(np.deg2rad(azimuth))
    pierce_lon = places[receiver, 1] + reach * np.sin(np.deg2rad(azimuth)) / 0.76
    mapping = 1.0 / np.sqrt(1.0 - (0.94 * np.cos(np.deg2rad(elevation))) ** 2)
    vtec = 10.0 + 0.6 * (pierce_lat + 43.0) + rng.normal(0.0, 0.3, len(epoch))
    rows = len(epoch)
    rays = Rays(
        receivers=RECEIVERS,
        satellites=np.array([f"G{n + 1:02d}" for n in range(satellites)]),
        pairs=(SignalPair("G", "C1W", "C2W", "L1W", "L2W"),),
        shell_height_m=1000.0 * region.shell_height_km,
        time=times[epoch], receiver=receiver.astype(np.int64), satellite=satellite.astype(np.int64),
        arc=(receiver * satellites + satellite).astype(np.int64), pair=np.zeros(rows, dtype=np.int64),
        elevation=elevation, azimuth=azimuth, pierce_lat=pierce_lat, pierce_lon=pierce_lon, mapping=mapping,
        stec=vtec * mapping + 9.0, stec_phase=vtec * mapping + 300.0, noise_sigma=np.full(rows, 0.05),
        level_sigma=np.full(rows, 0.4), interval_s=float((times[1] - times[0]) / np.timedelta64(1, "s")),
    )  # fmt: skip
    return Samples(
        rays=rays, stec=vtec * mapping, vtec=vtec, sigma=np.full(rows, 0.8), arc_sigma=np.full(rows, 0.4),
        receiver_sigma=np.full(rows, 0.5), own_sigma=np.full(rows, 0.3),
        bias_rows=np.column_stack([satellites + receiver, satellite]).astype(np.int64), bias_factor=-2.854 / mapping,
        bias_covariance=np.eye(satellites + len(RECEIVERS)) * 0.09,
        lean_shell=np.full(rows, 0.3), lean_high=np.full(rows, 0.2),
    )  # fmt: skip


def _invented_flags(day: np.datetime64) -> tuple[Flag, ...]:
    start = day.astype("datetime64[ns]")
    minutes = np.arange(4 * 60, 8 * 60 + 1, 15)
    track = tuple(
        (start + np.timedelta64(int(m), "m"), float(_front_lat(np.array(m / 60.0))), 146.0) for m in minutes
    )
    nan = float("nan")
    return (
        Flag(
            start=track[0][0], end=track[-1][0], lat=-40.0, lon=146.0, kind="front", slope_mm_per_km=95.0,
            sigma_mm_per_km=9.0, speed_m_s=61.8, heading_deg=0.0, state="broken",
            evidence="Seven receiver pairs and five satellites saw the same wall pass from south to north.",
            track=track,
        ),
        Flag(
            start=start + np.timedelta64(10, "h"), end=start + np.timedelta64(690, "m"), lat=-38.0, lon=148.0,
            kind="irregular", slope_mm_per_km=nan, sigma_mm_per_km=nan, speed_m_s=nan, heading_deg=nan,
            state="strained", evidence="CINE sees the content of four satellites flutter, 0.8 TECU a minute.",
        ),
        Flag(
            start=start + np.timedelta64(5, "h"), end=start + np.timedelta64(320, "m"), lat=-41.4, lon=147.8,
            kind="fault", slope_mm_per_km=nan, sigma_mm_per_km=nan, speed_m_s=nan, heading_deg=nan, state="strained",
            evidence="Only HULL sees a step on G07; no neighbour agrees, so the receiver is suspected.",
            confirmed=False,
        ),
    )  # fmt: skip


def _invented_arrivals(day: np.datetime64) -> tuple[Arrival, ...]:
    """Two forecasts of the front: one that came true, one that nobody could check yet."""
    start, never = day.astype("datetime64[ns]"), np.datetime64("NaT", "ns")

    def at(minutes: int) -> np.datetime64:
        return np.datetime64(start + np.timedelta64(minutes, "m"))

    return (
        Arrival(0, "Gannet Field", at(300), at(345), 240.0, at(347), True),
        Arrival(0, "Northport", at(480), at(525), 600.0, never, None),
    )


def invented_day(
    day: np.datetime64 = STORM_DAY,
    *,
    storm: bool = True,
    region: Region = REGION,
    step_minutes: int = 15,
    satellites: int = 8,
    rays_every_s: int | None = None,
    seed: int = 11,
) -> Products:
    """Products of one invented day: maps every `step_minutes`, lines of sight at the same times unless told."""
    rng = np.random.default_rng(seed)
    midnight = np.datetime64(day, "ns")
    times = midnight + np.arange(0, 24 * 60, step_minutes).astype("timedelta64[m]")
    fields = invented_fields(region, times, storm)
    ray_times = times
    if rays_every_s is not None:
        ray_times = midnight + np.arange(0, 86400, rays_every_s).astype("timedelta64[s]")
    samples = invented_samples(region, ray_times, satellites, rng)
    rows = [int(np.argmin(np.abs(fields.lats - site.lat))) for site in region.sites]
    columns = [int(np.argmin(np.abs(fields.lons - site.lon))) for site in region.sites]
    site_states = fields.state[:, rows, columns].astype(np.uint8).reshape(len(times), len(region.sites))
    reasons = tuple(
        tuple(
            ""
            if code == HOLDS
            else f"{STATE_NAMES[code]}: the delay changes by {slope:.0f} mm per km"
            if code != UNSEEN
            else "too few lines of sight"
            for code, slope in zip(site_states[:, k], fields.slope[:, rows[k], columns[k]], strict=True)
        )
        for k in range(len(region.sites))
    )
    names = [*samples.rays.satellites, *(receiver.name for receiver in RECEIVERS)]
    count = len(names)
    biases = Biases(
        kind=np.array(["satellite"] * satellites + ["receiver"] * len(RECEIVERS)),
        name=np.array(names),
        system=np.array(["G"] * count),
        code1=np.array(["C1W"] * count),
        code2=np.array(["C2W"] * count),
        value_ns=rng.normal(0.0, 5.0, count),
        sigma_ns=np.full(count, 0.3),
        start=np.full(count, midnight),
        end=np.full(count, midnight + np.timedelta64(1, "D")),
        source="invented",
        datum="the satellites' mean is zero",
    )
    nothing = np.zeros(len(samples.rays))
    return Products(
        region=region,
        day=np.datetime64(day, "D"),
        receivers=RECEIVERS,
        calibration=Calibration(
            biases=biases,
            ray_bias=nothing + 9.0,
            ray_bias_sigma=nothing + 0.5,
            receiver_sigma=np.full(len(RECEIVERS), 0.5),
            summary={"residual_rms_tecu": 0.42, "rays": len(samples.rays)},
            arc_sigma=samples.arc_sigma,
            ray_bias_rows=samples.bias_rows,
            ray_per_ns=nothing - 2.854,
            covariance=samples.bias_covariance,
            datum_of_row=tuple("mean of satellites" for _ in names),
            shell_height_sigma_m=0.0,
            leanings=np.stack([samples.lean_shell, samples.lean_high]),
        ),
        samples=samples,
        fields=fields,
        flags=_invented_flags(np.datetime64(day, "D")) if storm else (),
        site_states=site_states,
        site_reasons=reasons,
        origin=Origin(
            inputs=({"path": "invented", "sha256": "0" * 64, "bytes": 0, "kind": "invention", "used": True},),
            options={"step_minutes": step_minutes},
            versions={"skylag": "0.1.0"},
            timings_s={"all": 0.1},
            counts={
                "rays": len(samples.rays),
                "receivers": len(RECEIVERS),
                "arrivals": arrivals.facts(_invented_arrivals(np.datetime64(day, "D")) if storm else ()),
            },
            warnings=("Invented data: nothing here was measured.",),
            simulated=True,
        ),
    )


def one_site_less(products: Products) -> Products:
    """The same day without sites: what a region that names none gives."""
    region = replace(products.region, sites=())
    return replace(products, region=region, site_states=products.site_states[:, :0], site_reasons=())


def write_archive(folder: Path) -> Path:
    """Write the two invented days into folder/archive.sqlite; gives the path."""
    path = folder / "archive.sqlite"
    with open_archive(path) as archive:
        archive.save(invented_day(CALM_DAY, storm=False, seed=10))
        archive.save(invented_day(STORM_DAY, storm=True, seed=11))
    return path


def main() -> None:
    """Write, and serve if asked."""
    parser = argparse.ArgumentParser(description="Write a small invented archive, and serve it if asked.")
    parser.add_argument("folder", type=Path)
    parser.add_argument("--serve", type=int, metavar="PORT")
    asked = parser.parse_args()
    asked.folder.mkdir(parents=True, exist_ok=True)
    path = asked.folder / "archive.sqlite"
    if not path.exists():
        write_archive(asked.folder)
    print(f"archive: {path}")
    if asked.serve is not None:
        from skylag.web.app import create_app, serve

        with open_archive(path) as archive:
            serve(create_app(archive), "127.0.0.1", asked.serve)


if __name__ == "__main__":
    main()
