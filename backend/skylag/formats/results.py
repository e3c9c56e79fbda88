"""The result folder of a network day: biases.csv, slant.parquet, field.nc, flags.csv, day.json.

Files are written beside the folder's old ones and put in their place only when all are whole, so a run that fails
leaves what was there.  Never decides what is in them.
"""

import json
import shutil
import tempfile
from pathlib import Path
from typing import Any

import numpy as np

from skylag.errors import Missing
from skylag.formats import delimited, netcdf
from skylag.tables import STATE_NAMES, Biases, Fields, Origin, Products

NAMES = ("biases.csv", "slant.parquet", "field.nc", "flags.csv", "day.json")


def write(products: Products, folder: Path) -> tuple[Path, ...]:
    """Write the five result files; returns their paths.

    Raises OSError where the folder cannot be made or written.
    """
    folder.mkdir(parents=True, exist_ok=True)
    fresh = Path(tempfile.mkdtemp(prefix=".unfinished-", dir=folder))
    try:
        (fresh / "biases.csv").write_text(delimited.biases_csv(products.calibration), encoding="utf-8")
        (fresh / "flags.csv").write_text(delimited.flags_csv(products.flags), encoding="utf-8")
        delimited.write_slants(products.samples, fresh / "slant.parquet")
        netcdf.write(products.fields, products.region, fresh / "field.nc", simulated=products.origin.simulated)
        (fresh / "day.json").write_text(json.dumps(day_facts(products), indent=1) + "\n", encoding="utf-8")
        for name in NAMES:
            (fresh / name).replace(folder / name)
    finally:
        shutil.rmtree(fresh, ignore_errors=True)
    return tuple(folder / name for name in NAMES)


def read_maps(folder: Path) -> tuple[Fields, dict[str, Any], Biases | None]:
    """Maps, the facts told with them, and the biases if they are there, of a folder that `write` made.

    Raises Missing where there is no field.nc, FormatError where a file is not whole.
    """
    path = folder / "field.nc"
    if not path.is_file():
        raise Missing(
            f"{folder}: holds no field.nc; give a folder that `skylag day --out` wrote", what=str(path), nearest=None
        )
    fields, facts = netcdf.read_with_facts(path)
    table = folder / "biases.csv"
    biases = delimited.read_biases_csv(table.read_text(encoding="utf-8"), str(table)) if table.is_file() else None
    return fields, facts, biases


def day_facts(products: Products) -> dict[str, Any]:
    """day.json: where the numbers come from, and what is to be known about them."""
    origin: Origin = products.origin
    state = products.fields.state
    shares = {name: round(float(np.mean(state == code)), 4) for code, name in enumerate(STATE_NAMES)}
    return {
        "day": str(products.day),
        "time_system": "GPS time, unless a column or field says UTC",
        "region": products.region.name,
        "simulated": origin.simulated,
        "caution": "Planning aid, not for navigation; official notices, local rules and licensed practice come first.",
        "receivers": [receiver.name for receiver in products.receivers],
        "inputs": [plain(dict(item)) for item in origin.inputs],
        "options": plain(dict(origin.options)),
        "versions": dict(origin.versions),
        "timings_s": dict(origin.timings_s),
        "counts": plain(dict(origin.counts)),
        "share_of_cells": shares,
        "warnings": list(origin.warnings),
    }


def plain(value: Any) -> Any:
    """Nested facts as JSON has them: no numpy types, no dates, no infinities."""
    if isinstance(value, dict):
        return {str(key): plain(item) for key, item in value.items()}
    if isinstance(value, list | tuple | set):
        return [plain(item) for item in value]
    if isinstance(value, np.ndarray):
        return plain(value.tolist())
    if isinstance(value, np.generic):
        return plain(value.item()) if not isinstance(value, np.datetime64 | np.timedelta64) else str(value)
    if isinstance(value, float):
        return value if np.isfinite(value) else None
    if value is None or isinstance(value, str | int | bool):
        return value
    return str(value)
