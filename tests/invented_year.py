"""Years of invented days in a scratch archive, for the year view, the tests and the benchmarks.

    python -m tests.invented_year DIR [--years 1] [--first 2031-01-01] [--seed 2031]

writes DIR/archive.sqlite.  Fields and events are drawn directly from a seeded course of quiet and disturbed days, not
estimated; every day is marked as simulated.  With more than one year, the later years repeat the first, so that ten of
them are quickly there.
"""

import argparse
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

import numpy as np
import sqlalchemy as sa
from tests.builders import invented_day

from skylag.archive import Archive, chunks, open_archive, schema
from skylag.tables import BROKEN, HOLDS, STRAINED, UNSEEN, Products

SEED = 2031
WARNING = "Invented data: nothing here was measured."


def activity(days: int, seed: int = SEED) -> np.ndarray:
    """How disturbed each day is, 0 quiet to 2 severe: storms begin at once and fade over days, more near equinoxes."""
    rng = np.random.default_rng(seed)
    level, course = 0.0, np.zeros(days)
    for number in range(days):
        season = 0.5 + 0.5 * np.cos(4.0 * np.pi * (number - 80) / 365.25)
        level = 0.45 * level + (rng.uniform(0.8, 1.9) if rng.random() < 0.02 + 0.05 * season else 0.0)
        course[number] = min(level, 2.0)
    return course


def day_of(day: np.datetime64, number: int, level: float, seed: int = SEED) -> Products:
    """One day: the calm or the stormy pattern, its content by season, its slopes by how disturbed it is."""
    made = invented_day(day, storm=level > 0.6, satellites=2, seed=seed + number)
    fields, limits = made.fields, made.region.thresholds
    content = np.float32(1.0 + 0.3 * np.cos(4.0 * np.pi * (number - 80) / 365.25) + 0.1 * level)
    steep = np.float32(0.6 + 0.5 * level)
    slope = fields.slope * steep
    state = np.where(slope > limits.strained_mm_per_km, STRAINED, HOLDS)
    state = np.where(slope > limits.broken_mm_per_km, BROKEN, state)
    state = np.where(fields.state == UNSEEN, UNSEEN, state).astype(np.uint8)
    fields = replace(
        fields, vtec=fields.vtec * content, slope=slope, slope_sigma=fields.slope_sigma * steep,
        slope_east=fields.slope_east * steep, slope_north=fields.slope_north * steep, state=state,
    )  # fmt: skip
    rows = [int(np.argmin(np.abs(fields.lats - site.lat))) for site in made.region.sites]
    columns = [int(np.argmin(np.abs(fields.lons - site.lon))) for site in made.region.sites]
    flags = tuple(
        replace(flag, slope_mm_per_km=flag.slope_mm_per_km * float(steep), evidence=f"{flag.evidence} {WARNING}")
        for flag in made.flags
    )
    origin = replace(made.origin, options={"seed": seed, "day_number": number, "activity": round(level, 3)})
    site_states = np.ascontiguousarray(fields.state[:, rows, columns])
    return replace(made, fields=fields, flags=flags, site_states=site_states, origin=origin)


def days(first: np.datetime64, count: int, seed: int = SEED) -> Iterator[Products]:
    """The days of a span."""
    for number, level in enumerate(activity(count, seed)):
        yield day_of(first + number, number, float(level), seed)


def write(folder: Path, years: int = 1, first: str = "2031-01-01", seed: int = SEED) -> Path:
    """Write years of 365 days; gives the path of the archive."""
    path = folder / "archive.sqlite"
    start = np.datetime64(first, "D")
    with open_archive(path) as archive:
        for products in days(start, 365, seed):
            archive.save(products)
        for year in range(1, years):
            repeat(archive, 365 * year)
    return path


def repeat(archive: Archive, later: int, count: int = 365) -> None:
    """The first `count` days once more, so many days later: the rows are copied, and sealed anew for their place."""

    def copy(connection: sa.Connection) -> None:
        product = schema.product
        first = connection.execute(sa.select(product).order_by(product.c.id).limit(count)).mappings().all()
        highest = connection.scalar(sa.select(sa.func.max(product.c.id)))
        for number, row in enumerate(first):
            key = highest + 1 + number
            day = str(np.datetime64(row["day"], "D") + later)
            connection.execute(sa.insert(product).values({**row, "id": key, "day": day}))
            shift = later * 86_400 * 10**9
            for table in (schema.document, schema.chunk, schema.flag, schema.bias):
                rows = [dict(one) for one in connection.execute(
                    sa.select(table).where(table.c.product == row["id"])).mappings()]  # fmt: skip
                for one in rows:
                    one["product"] = key
                    for name in ("start_ns", "end_ns"):
                        if name in one and one[name] is not None:
                            one[name] += shift
                    if "sha256" in one:
                        label = f"product {key}, {one.get('name', one.get('layer'))}"
                        label += f", hour {one['hour']}" if "hour" in one else ""
                        if one.get("name") == "times":
                            old = chunks.Packed(one["dtype"], one["shape"], one["data"], one["sha256"])
                            times = chunks.unpack(old, f"product {row['id']}, times") + shift
                            one.update(vars(chunks.pack(times, label)))
                        one["sha256"] = chunks._digest(label, one["dtype"], one["shape"], one["data"])
                if rows:
                    connection.execute(sa.insert(table), rows)

    archive.fill(copy)


def main() -> None:
    """Write, and tell where."""
    parser = argparse.ArgumentParser(description="Write years of invented days into a scratch archive.")
    parser.add_argument("folder", type=Path)
    parser.add_argument("--years", type=int, default=1)
    parser.add_argument("--first", default="2031-01-01", metavar="YYYY-MM-DD")
    parser.add_argument("--seed", type=int, default=SEED)
    asked = parser.parse_args()
    asked.folder.mkdir(parents=True, exist_ok=True)
    print(f"archive: {write(asked.folder, asked.years, asked.first, asked.seed)}")


if __name__ == "__main__":
    main()
