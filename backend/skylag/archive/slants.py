"""Slant tables as Parquet files beside the database, each addressed by the hash of its bytes.

Rows are kept in order of time, in groups, so that one moment is read without the rest.  A file is written under a
passing name and then moved, so that a half-written one never has a true address.  Never overwrites and never edits.
"""

import base64
import hashlib
import json
import os
import tempfile
from collections.abc import Container
from dataclasses import asdict, replace
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from skylag.errors import FormatError, Missing, SkylagError
from skylag.tables import Rays, Receiver, Samples, SignalPair

# Column -> type kept.  Angles keep 32 bits (1e-5 deg, one metre); contents keep 64 as they came.
_RAY_TYPES = {
    "time": "int64", "receiver": "int16", "satellite": "int16", "arc": "int32", "pair": "int16",
    "elevation": "float32", "azimuth": "float32", "pierce_lat": "float32", "pierce_lon": "float32",
    "mapping": "float32", "stec": "float64", "stec_phase": "float64", "noise_sigma": "float32",
    "level_sigma": "float32",
}  # fmt: skip
# What calibration adds.  `bias_rows` has two columns; `bias_covariance` is no column and goes with the facts.
_SAMPLE_TYPES = {"stec": "float64", "vtec": "float64", "sigma": "float32", "arc_sigma": "float32",
                 "receiver_sigma": "float32", "own_sigma": "float32", "bias_factor": "float64",
                 "lean_shell": "float32", "lean_high": "float32"}  # fmt: skip
_ROWS_PER_GROUP = 16_384


def path_of(folder: Path, sha256: str) -> Path:
    """Where the table of an address lies: two letters of the address make a folder, so that none grows too long."""
    return folder / sha256[:2] / f"{sha256}.parquet"


def write(samples: Samples, folder: Path) -> str:
    """Keep a slant table; gives its address.  A table already there is left as it is."""
    order = np.argsort(samples.rays.time, kind="stable")
    columns: dict[str, Any] = {}
    for name, kept in _RAY_TYPES.items():
        values = getattr(samples.rays, name)[order]
        columns[name] = values.astype("datetime64[ns]").astype(np.int64) if name == "time" else values.astype(kept)
    for name, kept in _SAMPLE_TYPES.items():
        columns[f"sample_{name}"] = getattr(samples, name)[order].astype(kept)
    for number in (0, 1):
        columns[f"sample_bias_row_{number}"] = samples.bias_rows[order, number].astype(np.int32)
    facts = {
        "receivers": [asdict(receiver) for receiver in samples.rays.receivers],
        "satellites": [str(name) for name in samples.rays.satellites],
        "pairs": [asdict(pair) for pair in samples.rays.pairs],
        "shell_height_m": samples.rays.shell_height_m,
        "interval_s": samples.rays.interval_s,
        "time": "GPS time, nanoseconds since 1970-01-01",
        "bias_covariance_shape": samples.bias_covariance.shape,
        "bias_covariance": base64.b64encode(samples.bias_covariance.astype("<f8").tobytes()).decode("ascii"),
    }
    table = pa.table(columns).replace_schema_metadata({"skylag": json.dumps(facts)})
    try:
        return _write_table(table, folder)
    except OSError as cause:
        raise SkylagError(
            f"cannot write a slant table into {folder}: {cause.strerror or cause}; nothing was kept; "
            "check the disk's room and rights",
            folder=str(folder),
        ) from cause


def _write_table(table: pa.Table, folder: Path) -> str:
    """Write under a passing name, then give the file its address as a name."""
    folder.mkdir(parents=True, exist_ok=True)
    handle, passing_name = tempfile.mkstemp(prefix="writing-", suffix=".parquet", dir=folder)
    os.close(handle)
    passing = Path(passing_name)
    try:
        pq.write_table(
            table,
            passing,
            compression="zstd",
            row_group_size=_ROWS_PER_GROUP,
            write_page_checksum=True,
            use_dictionary=["receiver", "satellite", "arc", "pair", "time"],
        )
        sha256 = _hash(passing)
        with passing.open("rb") as written:
            os.fsync(written.fileno())
        goal = path_of(folder, sha256)
        goal.parent.mkdir(exist_ok=True)
        passing.replace(goal)
    finally:
        passing.unlink(missing_ok=True)
    return sha256


def _hash(path: Path) -> str:
    with path.open("rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()


def verify(folder: Path, sha256: str) -> None:
    """Read the whole file and compare it with its address; raises FormatError or Missing."""
    path = _existing(folder, sha256)
    if _hash(path) != sha256:
        raise FormatError(f"{path}: the slant table is not the one its address names", path=str(path), line=0)


def strays(folder: Path, named: Container[str]) -> list[Path]:
    """Files of the folder whose address nobody names, or that were never finished; in order."""
    return sorted(path for path in folder.rglob("*.parquet") if path.stem not in named)


def _existing(folder: Path, sha256: str) -> Path:
    path = path_of(folder, sha256)
    if not path.is_file():
        raise Missing(
            f"the slant table {path} is not there; maps and flags of the day can still be read; "
            "restore the folder from a backup or process the day again",
            what=str(path),
            nearest=None,
        )
    return path


def read(folder: Path, sha256: str, start: np.datetime64 | None = None, end: np.datetime64 | None = None) -> Samples:
    """The slant table with start <= time <= end (all of it without), in order of time.

    Every page read is checked against its own checksum; a damaged one raises FormatError.
    """
    path = _existing(folder, sha256)
    try:
        with pq.ParquetFile(path, page_checksum_verification=True) as file:
            facts = json.loads(file.schema_arrow.metadata[b"skylag"])
            groups = _groups_between(file, start, end)
            table = file.read_row_groups(groups) if groups else file.schema_arrow.empty_table()
    except (OSError, pa.ArrowException, KeyError, ValueError) as cause:
        raise FormatError(
            f"{path}: the slant table is damaged ({cause}); restore it from a backup or process the day again",
            path=str(path),
            line=0,
        ) from cause
    columns = {name: table.column(name).to_numpy() for name in table.column_names}
    time = columns.pop("time").astype("datetime64[ns]")
    first = 0 if start is None else int(np.searchsorted(time, start, side="left"))
    last = len(time) if end is None else int(np.searchsorted(time, end, side="right"))
    rows = slice(first, last)

    def column(name: str, kept: str) -> Any:
        return columns[name][rows].astype(np.int64 if kept.startswith("int") else np.float64)

    rays = Rays(
        receivers=tuple(
            Receiver(r["name"], (r["position_m"][0], r["position_m"][1], r["position_m"][2]), r["antenna"], r["type"])
            for r in facts["receivers"]
        ),
        satellites=np.array(facts["satellites"], dtype=np.str_),
        pairs=tuple(SignalPair(**pair) for pair in facts["pairs"]),
        shell_height_m=facts["shell_height_m"],
        interval_s=facts["interval_s"],
        time=time[rows],
        **{name: column(name, kept) for name, kept in _RAY_TYPES.items() if name != "time"},
    )
    covariance = np.frombuffer(base64.b64decode(facts["bias_covariance"]), dtype="<f8").astype(np.float64)
    return Samples(
        rays=rays,
        bias_rows=np.column_stack([column(f"sample_bias_row_{number}", "int32") for number in (0, 1)]),
        bias_covariance=covariance.reshape(facts["bias_covariance_shape"]),
        **{name: column(f"sample_{name}", kept) for name, kept in _SAMPLE_TYPES.items()},
    )


def read_at(folder: Path, sha256: str, time: np.datetime64) -> Samples:
    """The rows of the epoch nearest to a time, none where the nearest is more than one interval away."""
    instant = time.astype("datetime64[ns]")
    try:
        facts = pq.read_schema(_existing(folder, sha256)).metadata[b"skylag"]
        interval = np.timedelta64(int(json.loads(facts)["interval_s"] * 1e9), "ns")
    except (OSError, pa.ArrowException, KeyError, ValueError, TypeError) as cause:
        path = path_of(folder, sha256)
        raise FormatError(f"{path}: the slant table is damaged ({cause})", path=str(path), line=0) from cause
    near = read(folder, sha256, instant - interval, instant + interval)
    if not len(near.rays):
        return near
    chosen = near.rays.time == near.rays.time[np.argmin(np.abs(near.rays.time - instant))]
    rest = {name: getattr(near, name)[chosen] for name in (*_SAMPLE_TYPES, "bias_rows")}
    return replace(near, rays=near.rays.where(chosen), **rest)


def _groups_between(file: Any, start: np.datetime64 | None, end: np.datetime64 | None) -> list[int]:
    """Row groups that may hold rows of the span, from the least and greatest time kept for each."""
    position = file.schema_arrow.get_field_index("time")
    low = -(2**63) if start is None else int(start.astype("datetime64[ns]").astype(np.int64))
    high = 2**63 - 1 if end is None else int(end.astype("datetime64[ns]").astype(np.int64))
    chosen = []
    for number in range(file.metadata.num_row_groups):
        known = file.metadata.row_group(number).column(position).statistics
        if known is None or (known.max >= low and known.min <= high):
            chosen.append(number)
    return chosen
