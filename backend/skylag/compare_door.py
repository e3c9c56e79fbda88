"""The command `compare`: a published map laid beside a kept day or a results folder.

Thin: parses, calls, prints or writes one file.
"""

import argparse
import json
import sys
from pathlib import Path
from typing import Any

import numpy as np

from skylag import formats, settings
from skylag.errors import Missing, Refused
from skylag.formats import delimited, netcdf, results
from skylag.formats.results import plain
from skylag.ionosphere.beside import Beside, lay_beside
from skylag.tables import Biases, Fields
from skylag.web.beside import hours_csv, published_maps, told


def add(commands: Any, caution: str) -> None:
    """Add the command to the command line."""
    parser = commands.add_parser(
        "compare",
        help="lay a published map (IONEX) beside a day",
        formatter_class=argparse.RawDescriptionHelpFormatter,
        description="How far a day's maps are from a published map of the same day (IONEX: plain, .gz, .Z): mean,\n"
        "RMS, hour by hour, whether the stated uncertainties cover it, and what the difference is made of. Ours minus\n"
        "theirs, where our map sees something. The day is a kept one, or a folder that `skylag day --out` wrote.",
        epilog="examples:\n"
        "  skylag compare map.24i.Z --archive skylag-archive --day 2024-03-30\n"
        "  skylag compare map.INX.gz --results results/ --format netcdf --out difference.nc\n\n"
        "exit status: 0 all of the map was read; 1 done, parts of it were broken (named); 3 no result.\n\n" + caution,
    )
    parser.add_argument("map", type=Path, metavar="MAP", help="the published map, an IONEX file")
    parser.add_argument("--results", type=Path, metavar="DIR", help="a folder of results, instead of an archive")
    settings.add_kept_day(parser, without="without: the day of the map, if it is kept")
    parser.add_argument(
        "--format", default="text", choices=("text", "csv", "json", "netcdf"),
        help="text; csv, a row per hour; json, all facts; netcdf, the difference maps",
    )  # fmt: skip
    parser.add_argument("--out", type=Path, metavar="FILE", help="write here; printed without (netcdf needs it)")
    parser.set_defaults(run=_compare)


def _compare(options: argparse.Namespace) -> int:
    if options.format == "netcdf" and options.out is None:
        raise Refused("--format netcdf is a file: say where with --out FILE", name="out", value=None, allowed="a file")
    reading = formats.read(options.map)
    maps, their_biases = published_maps(reading, options.map.name)
    for problem in reading.problems:
        print(f"noticed: {problem}", file=sys.stderr)
    status = 1 if reading.problems else 0
    if options.results is not None:
        ours, our_biases, height_km, simulated = _of_folder(options.results)
    else:
        ours, our_biases, height_km, simulated = _of_archive(options, maps)
    found = lay_beside(ours, maps, our_biases, their_biases, height_km * 1000.0)
    said = told(found, options.map.name, simulated)
    if options.format == "netcdf":
        netcdf.write_difference(
            options.out, found.times, found.lats, found.lons, found.ours, found.theirs, found.sigma, options.map.name
        )
        print("\n".join([*said, f"difference maps: {options.out}"]))
        return status
    if options.format == "csv":
        text = hours_csv(found)
    else:
        text = _json(found, said) if options.format == "json" else _text(found, said)
    if options.out:
        options.out.write_text(text, encoding="utf-8")
    else:
        print(text, end="")
    return status


def _text(found: Beside, said: list[str]) -> str:
    lines = [*said, "hour (UTC)            cells   mean    RMS  TECU"]
    for start, mean, rms, count in zip(*found.hourly(), strict=True):
        lines.append(f"{delimited.utc_text(start)}  {count:6d} {mean:+6.2f} {rms:6.2f}")
    return "\n".join(lines) + "\n"


def _json(found: Beside, said: list[str]) -> str:
    start, mean, rms, count = found.hourly()
    hours = [
        {"hour_utc": delimited.utc_text(s), "cells": int(c), "mean_tecu": round(float(m), 3),
         "rms_tecu": round(float(r), 3)}
        for s, m, r, c in zip(start, mean, rms, count, strict=True)
    ]  # fmt: skip
    return json.dumps(plain({**found.facts(), "hours": hours, "said": said}), indent=1) + "\n"


def _of_folder(folder: Path) -> tuple[Fields, Biases | None, float, bool]:
    """Maps, biases, shell height [km] and whether they are invented, of a folder of results."""
    fields, facts, biases = results.read_maps(folder)
    return fields, biases, float(facts.get("shell_height_km", 400.0)), str(facts.get("simulated", "")).startswith("yes")


def _of_archive(options: argparse.Namespace, maps: Fields) -> tuple[Fields, Biases | None, float, bool]:
    from skylag.archive import open_archive  # a database is opened only where one is asked for

    place = options.archive or settings.from_environment().archive
    middle = maps.times[len(maps.times) // 2]
    day = options.day or str(np.datetime64(middle, "D"))
    with open_archive(place, existing=True) as archive:
        heads = [head for head in archive.days() if options.region in ("", head.region) and day == str(head.day)]
        if not heads:
            raise Missing(
                f"{place}: {' '.join(part for part in (options.region, day) if part)} is not kept here; see "
                "`skylag day --archive`, or give --day",
                what=day, nearest=None,
            )  # fmt: skip
        if len({head.region for head in heads}) > 1:
            names = sorted({head.region for head in heads})
            raise Refused(f"name a region with --region: {day} is kept of {', '.join(names)}", name="region", value="",
                          allowed=names)  # fmt: skip
        record = archive.day(heads[0].region, heads[0].day)
        fields, biases = archive.fields(heads[0].region, day), archive.biases(heads[0].region, day)
    return fields, biases, record.region.shell_height_km, record.origin.simulated
