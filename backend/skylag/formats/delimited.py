"""Result tables for people who script: biases.csv, flags.csv, slant.parquet.

Names and columns are a contract: they are documented in the README and do not change within a major version.  Times are
GPS time unless the column says UTC.  Never decides what is in the tables.
"""

import csv
import io
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from skylag.constants import L1_M_PER_TECU
from skylag.errors import FormatError
from skylag.tables import STATE_NAMES, Biases, Bools, Calibration, Fields, Flag, Samples, Times
from skylag.timescales import gps_to_utc

BIAS_COLUMNS = ("kind", "name", "system", "code1", "code2", "bias_ns", "sigma_ns", "datum")
FLAG_COLUMNS = ("start", "end", "lat_deg", "lon_deg", "kind", "slope_mm_per_km", "sigma_mm_per_km", "speed_m_s",
                "heading_deg", "state", "evidence")  # fmt: skip
SLANT_COLUMNS = ("time", "receiver", "satellite", "arc", "elevation_deg", "azimuth_deg", "pierce_lat_deg",
                 "pierce_lon_deg", "stec_tecu", "vtec_tecu", "sigma_tecu")  # fmt: skip


def harmless(value: Any) -> Any:
    """Text that a spreadsheet would take for a formula gets a leading apostrophe."""
    return "'" + value if isinstance(value, str) and value[:1] in ("=", "+", "@", "-", "\t") else value


def biases_csv(calibration: Calibration) -> str:
    """biases.csv: bias of code1 minus bias of code2 [ns], as in Bias-SINEX differential records."""
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow(BIAS_COLUMNS)
    table = calibration.biases
    for row in range(len(table)):
        writer.writerow([
            table.kind[row], table.name[row], table.system[row], table.code1[row], table.code2[row],
            f"{round(float(table.value_ns[row]), 4) + 0.0:.4f}",  # so that nought has no sign
            f"{table.sigma_ns[row]:.4f}", calibration.datum_of_row[row],
        ])  # fmt: skip
    return out.getvalue()


def read_biases_csv(text: str, name: str) -> Biases:
    """The biases of a biases.csv; their span is not in it.  Raises FormatError where a column or a number is amiss."""
    rows = list(csv.DictReader(io.StringIO(text)))
    try:
        words = {column: np.array([row[column] for row in rows], dtype=np.str_) for column in BIAS_COLUMNS[:5]}
        value, sigma = (np.array([float(row[column]) for row in rows]) for column in ("bias_ns", "sigma_ns"))
    except (KeyError, TypeError, ValueError) as trouble:
        raise FormatError(
            f"{name}: is not a biases.csv that `skylag day` wrote ({trouble}); its columns are "
            f"{', '.join(BIAS_COLUMNS)}",
            path=name, line=0,
        ) from trouble  # fmt: skip
    never = np.full(len(rows), np.datetime64("NaT", "ns"))
    return Biases(**words, value_ns=value, sigma_ns=sigma, start=never, end=never, source=name, datum="")


def flags_csv(flags: Sequence[Flag]) -> str:
    """flags.csv: one row per flag, start and end in UTC (ISO 8601)."""
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow(FLAG_COLUMNS)
    for flag in flags:
        writer.writerow([
            utc_text(flag.start), utc_text(flag.end), f"{flag.lat:.3f}", f"{flag.lon:.3f}", flag.kind,
            _number(flag.slope_mm_per_km, 1), _number(flag.sigma_mm_per_km, 1), _number(flag.speed_m_s, 0),
            _number(flag.heading_deg, 0), flag.state, flag.evidence,
        ])  # fmt: skip
    return out.getvalue()


MAP_COLUMNS = ("time_utc", "lat_deg", "lon_deg", "vertical_delay_m", "vertical_delay_sigma_m", "support",
               "slope_mm_per_km", "slope_sigma_mm_per_km", "state")  # fmt: skip


def maps_csv(fields: Fields) -> str:
    """One row per map and cell; numbers that are not known are empty."""
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow(MAP_COLUMNS)
    for number, time in enumerate(fields.times):
        text = utc_text(time)
        for row, lat in enumerate(fields.lats):
            for column, lon in enumerate(fields.lons):
                at = (number, row, column)
                writer.writerow([
                    text, f"{lat:g}", f"{lon:g}", _number(float(fields.vtec[at]) * L1_M_PER_TECU, 4),
                    _number(float(fields.vtec_sigma[at]) * L1_M_PER_TECU, 4), int(fields.support[at]),
                    _number(float(fields.slope[at]), 3), _number(float(fields.slope_sigma[at]), 3),
                    STATE_NAMES[int(fields.state[at])],
                ])  # fmt: skip
    return out.getvalue()


GRID_POINT_COLUMNS = ("time_utc", "band", "number", "lat_deg", "lon_deg", "vertical_delay_m", "vertical_delay_sigma_m",
                      "support", "chi_square", "chi_square_limit")  # fmt: skip


def grid_points_csv(times: Times, points: Sequence[Sequence[float]], values: Sequence[Any]) -> str:
    """The field at the standard augmentation grid points, a row per time and point.

    points  (band, number, latitude, longitude) each; values (T, P): delay [m], sigma [m], support, chi-square, limit
    """
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow(GRID_POINT_COLUMNS)
    for number, time in enumerate(times):
        for place, (band, igp, lat, lon) in enumerate(points):
            delay, sigma, support, chi_square, limit = (layer[number, place] for layer in values)
            writer.writerow([
                utc_text(time), int(band), int(igp), f"{lat:g}", f"{lon:g}", _number(float(delay), 4),
                _number(float(sigma), 4), int(support), _number(float(chi_square), 2), _number(float(limit), 2),
            ])  # fmt: skip
    return out.getvalue()


def utc_text(gps: np.datetime64) -> str:
    """ISO 8601 UTC, to the second, of a GPS time."""
    return str(np.asarray(gps_to_utc(gps)).astype("datetime64[s]")) + "Z"


def _number(value: float, digits: int) -> str:
    return f"{value:.{digits}f}" if np.isfinite(value) else ""


def slants_csv(samples: Samples, chosen: Bools) -> str:
    """The columns of slant.parquet as text, a row per chosen line of sight (N,), by time; GPS time without a zone."""
    rays = samples.rays
    names = np.array([receiver.name for receiver in rays.receivers])
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow(SLANT_COLUMNS)
    rows = np.flatnonzero(chosen)
    for i in rows[np.argsort(rays.time[rows], kind="stable")]:
        writer.writerow([
            str(rays.time[i].astype("datetime64[s]")), names[rays.receiver[i]], rays.satellites[int(rays.satellite[i])],
            int(rays.arc[i]), f"{rays.elevation[i]:.2f}", f"{rays.azimuth[i]:.2f}", f"{rays.pierce_lat[i]:.4f}",
            f"{rays.pierce_lon[i]:.4f}", _number(samples.stec[i], 3), _number(samples.vtec[i], 3),
            _number(samples.sigma[i], 3),
        ])  # fmt: skip
    return out.getvalue()


def write_slants(samples: Samples, path: Path) -> None:
    """slant.parquet: one row per line of sight; time is GPS time without a zone."""
    rays = samples.rays
    names = np.array([receiver.name for receiver in rays.receivers])
    table = pa.table({
        "time": pa.array(rays.time.astype("datetime64[ns]")),
        "receiver": pa.DictionaryArray.from_arrays(pa.array(rays.receiver.astype(np.int32)), pa.array(names)),
        "satellite": pa.DictionaryArray.from_arrays(
            pa.array(rays.satellite.astype(np.int32)), pa.array(rays.satellites)
        ),
        "arc": pa.array(rays.arc.astype(np.int32)),
        "elevation_deg": pa.array(rays.elevation.astype(np.float32)),
        "azimuth_deg": pa.array(rays.azimuth.astype(np.float32)),
        "pierce_lat_deg": pa.array(rays.pierce_lat.astype(np.float32)),
        "pierce_lon_deg": pa.array(rays.pierce_lon.astype(np.float32)),
        "stec_tecu": pa.array(samples.stec.astype(np.float32)),
        "vtec_tecu": pa.array(samples.vtec.astype(np.float32)),
        "sigma_tecu": pa.array(samples.sigma.astype(np.float32)),
    })  # fmt: skip
    table = table.replace_schema_metadata({
        "time_system": "GPS", "shell_height_m": f"{rays.shell_height_m:g}",
        "sigma_tecu": "of vtec_tecu, one sigma, noise, levelling, biases and mapping together",
    })  # fmt: skip
    pq.write_table(table, path, compression="zstd")
