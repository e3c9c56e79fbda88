"""The command `maps`: the maps of a kept day or a results folder, in open formats.

Thin: parses, calls, prints or writes one file.
"""

import argparse
import sys
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np

from skylag import settings
from skylag.archive import DayRecord, open_archive
from skylag.errors import Refused
from skylag.formats import contours, delimited, ionex, netcdf, results
from skylag.impact.states import carried, honest_state
from skylag.ionosphere import augmentation_grid
from skylag.ionosphere.interpolation import at_geocentric_rows
from skylag.tables import Biases, Fields, Region, Samples, Thresholds
from skylag.timescales import gps_to_utc, utc_to_gps
from skylag.web import sentences


@dataclass(frozen=True)
class _Day:
    """What is known of a day, wherever it lies; samples only where an archive keeps them."""

    fields: Fields
    biases: Biases | None
    region: Region
    simulated: bool
    provisional: bool
    made: np.datetime64
    samples: Samples | None


def add(commands: Any, caution: str) -> None:
    """Add the command to the command line."""
    parser = commands.add_parser(
        "maps",
        help="write a day's maps in an open format",
        formatter_class=argparse.RawDescriptionHelpFormatter,
        description="The maps of a kept day, or of a folder that `skylag day --out` wrote: IONEX 1.0 with rms maps\n"
        "and biases, at geocentric latitudes as the format counts them; NetCDF with CF conventions; lines of equal\n"
        "delay as GeoJSON, of one map; CSV, a row per cell;\n"
        "the field at the standard augmentation grid points (350 km) with the test of the local planar fit, as CSV.",
        epilog="examples:\n"
        "  skylag maps --archive skylag-archive --day 2031-03-12 --format ionex --out storm.31i\n"
        "  skylag maps --archive skylag-archive --format geojson --at 07:00 --step 0.5 --out lines.geojson\n"
        "  skylag maps --archive skylag-archive --format gridpoints --every 60\n\n"
        "exit status: 0 written; 2 bad command; 3 no result (the reason is told).\n\n" + caution,
    )
    parser.add_argument("--results", type=Path, metavar="DIR", help="a folder of results, instead of an archive")
    settings.add_kept_day(parser)
    parser.add_argument("--format", default="csv", choices=("ionex", "netcdf", "geojson", "csv", "gridpoints"))
    parser.add_argument("--every", type=float, default=15.0, metavar="MINUTES", help="a map every so many minutes (15)")
    parser.add_argument("--at", default="", metavar="HH:MM", help="only the map nearest to this time of day (UTC)")
    parser.add_argument("--step", type=float, default=0.5, metavar="METRES", help="between lines of equal delay (0.5)")
    parser.add_argument("--out", type=Path, metavar="FILE", help="write here; printed without (netcdf needs it)")
    parser.set_defaults(run=_maps)


def _maps(options: argparse.Namespace) -> int:
    if options.format == "netcdf" and options.out is None:
        raise Refused("--format netcdf is a file: say where with --out FILE", name="out", value=None, allowed="a file")
    if options.format == "geojson" and not options.at:
        raise Refused(
            "--format geojson draws one map: say which with --at HH:MM (UTC)", name="at", value="", allowed="HH:MM"
        )
    day = _of_folder(options.results) if options.results is not None else _of_archive(options)
    fields = _chosen(day.fields, options.every, options.at)
    fields = replace(fields, state=honest_state(fields))
    if options.format == "netcdf":
        netcdf.write(
            fields, day.region, options.out, simulated=day.simulated, provisional=day.provisional,
            notices=sentences.notices(day.simulated, day.provisional),
        )  # fmt: skip
        return 0
    if options.format == "ionex":
        description = sentences.description(day.region.name, day.simulated, day.provisional)
        text = ionex.write(
            at_geocentric_rows(carried(fields)), day.made, day.region.shell_height_km, description=description,
            biases=day.biases, comment=sentences.GEOCENTRIC,
        )  # fmt: skip
    elif options.format == "geojson":
        about = sentences.about(day.simulated, day.provisional)
        text = contours.to_geojson(fields, 0, options.step, about, day.region.thresholds.unseen_sigma_m) + "\n"
    elif options.format == "gridpoints":
        text = _grid_points(day, fields)
    else:
        text = delimited.maps_csv(carried(fields))
        print(sentences.CAUTION, file=sys.stderr)  # a table has no place for it
    if options.out:
        options.out.write_text(text, encoding="utf-8")
    else:
        print(text, end="")
    return 0


def _grid_points(day: _Day, fields: Fields) -> str:
    """CSV of the field at the standard grid points of the region."""
    if day.samples is None:
        raise Refused(
            "--format gridpoints needs the day's lines of sight: keep it with `skylag day --archive` and name the "
            "archive",
            name="results", value="", allowed="--archive",
        )  # fmt: skip
    box = day.region
    points = augmentation_grid.points_in(box.south, box.north, box.west, box.east)
    return delimited.grid_points_csv(
        *augmentation_grid.rows_of(augmentation_grid.delays_at(day.samples, points, fields.times))
    )


def _chosen(fields: Fields, every_min: float, at: str) -> Fields:
    """The maps asked for."""
    if at:
        try:
            hour, minute = (int(part) for part in at.split(":"))
            if not (0 <= hour < 24 and 0 <= minute < 60):
                raise ValueError(at)
        except ValueError:
            raise Refused(f"--at {at}: a time of day is written like 07:30 (UTC)", name="at", value=at,
                          allowed="HH:MM") from None  # fmt: skip
        day = np.asarray(gps_to_utc(fields.times[len(fields.times) // 2 :][:1]))[0].astype("datetime64[D]")
        moment = utc_to_gps(np.array([day.astype("datetime64[ns]") + np.timedelta64(60 * hour + minute, "m")]))[0]
        number = int(np.argmin(np.abs(fields.times - moment)))
        rows = slice(number, number + 1)
    else:
        if not every_min > 0.0:
            raise Refused(f"--every {every_min:g}: give minutes above 0", name="every", value=every_min, allowed="> 0")
        steps = np.diff(fields.times) / np.timedelta64(1, "m")
        rows = slice(None, None, max(1, round(every_min / float(steps.min()))) if len(steps) else 1)
    return replace(fields, times=fields.times[rows], **{n: getattr(fields, n)[rows] for n in Fields.LAYERS})


def _of_folder(folder: Path) -> _Day:
    fields, facts, biases = results.read_maps(folder)
    step = float(fields.lats[1] - fields.lats[0]) if len(fields.lats) > 1 else 0.5
    region = Region(
        str(facts.get("title", "")).removeprefix("Ionospheric delay over "), float(fields.lats[0]),
        float(fields.lats[-1]), float(fields.lons[0]), float(fields.lons[-1]), step_deg=round(step, 4),
        shell_height_km=float(facts.get("shell_height_km", 400.0)),
        thresholds=Thresholds(unseen_sigma_m=float(facts.get("unseen_sigma_m", Thresholds().unseen_sigma_m))),
    )  # fmt: skip
    invented, goes_on = (str(facts.get(name, "")).startswith("yes") for name in ("simulated", "provisional"))
    return _Day(fields, biases, region, invented, goes_on, fields.times[-1], None)


def _of_archive(options: argparse.Namespace) -> _Day:
    place = options.archive or settings.from_environment().archive
    with open_archive(place, existing=True) as archive:
        newest = archive.newest(options.region, options.day, place)
        record: DayRecord = archive.day(newest.region, newest.day)
        samples = archive.samples(newest.region, newest.day) if options.format == "gridpoints" else None
        made = utc_to_gps(np.array([record.head.saved_at.astype("datetime64[ns]")]))[0]
        return _Day(
            archive.fields(newest.region, newest.day), archive.biases(newest.region, newest.day), record.region,
            record.origin.simulated, record.head.provisional, made, samples,
        )  # fmt: skip
