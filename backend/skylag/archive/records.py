"""What the archive tells about a stored day, and the JSON texts in which plain facts are kept.

Never touches the database.  JSON here is for the archive's own columns only and may hold NaN.
"""

import json
from collections.abc import Mapping
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from skylag.tables import (
    STATE_NAMES,
    UNSEEN,
    Bytes,
    Fields,
    Floats,
    Origin,
    Products,
    Receiver,
    Region,
    Site,
    Thresholds,
    Times,
    Use,
    cells_at,
)


@dataclass(frozen=True)
class DayHead:
    """A day as a list of days shows it.

    day             GPS-time day; version chosen (the pinned one, or the newest), versions that exist
    saved_at        UTC
    highest         layer -> value that 99 of 100 seen cells of the day stay under
    state_shares    state name -> share of all cells and times of the day
    site_shares     site name -> state name -> share of the day
    flag_counts     kind -> number of flags
    provisional     the day is still being added to
    """

    region: str
    day: np.datetime64
    version: int
    versions: tuple[int, ...]
    pinned: bool
    saved_at: np.datetime64
    simulated: bool
    highest: Mapping[str, float]
    state_shares: Mapping[str, float]
    site_shares: Mapping[str, Mapping[str, float]]
    flag_counts: Mapping[str, int]
    warning_count: int
    receiver_count: int
    epoch_count: int
    provisional: bool = False


@dataclass(frozen=True)
class DayRecord:
    """All plain facts of one stored day; the arrays are asked for apart.

    times           (T,) GPS time of the maps; lats, lons the axes of their grid
    calibration     facts of the bias adjustment: residuals, counts, what could not be known
    slant_rows      rows of the slant table; slant_sha256 its address
    """

    head: DayHead
    region: Region
    receivers: tuple[Receiver, ...]
    times: Times
    lats: Floats
    lons: Floats
    origin: Origin
    calibration: Mapping[str, Any]
    bias_source: str
    bias_datum: str
    slant_rows: int
    slant_sha256: str

    def cell_of(self, lat: float, lon: float) -> tuple[int, int] | None:
        """Row and column of the cell that holds a place, None outside the grid.  Cells reach half a step around."""
        row, column, inside = cells_at(self.lats, self.lons, np.array([lat]), np.array([lon]))
        return (int(row[0]), int(column[0])) if inside[0] else None


@dataclass(frozen=True)
class SiteStates:
    """States of the sites through a day: codes (T, sites) of STATE_NAMES; reasons per site, per time, "" where none."""

    times: Times
    sites: tuple[Site, ...]
    codes: Bytes
    reasons: tuple[tuple[str, ...], ...]


def _plain(value: Any) -> Any:
    """What JSON cannot write by itself: numpy scalars and arrays, times, paths, sets."""
    if isinstance(value, np.datetime64 | np.timedelta64):
        return str(value)
    if isinstance(value, np.generic):
        return value.item()
    if isinstance(value, np.ndarray):
        return value.tolist()
    if isinstance(value, Mapping):
        return dict(value)
    if isinstance(value, set | frozenset):
        return sorted(value)
    return str(value)


def to_text(facts: Any) -> str:
    """Facts as JSON text."""
    return json.dumps(facts, default=_plain, separators=(",", ":"))


def from_text(text: str) -> Any:
    """Facts from JSON text."""
    return json.loads(text)


def _shares(codes: npt.NDArray[np.uint8], mapped: float) -> dict[str, float]:
    """Shares of the day by state; what no map of the day reaches is unseen.  mapped: share of the day with maps."""
    counts = np.bincount(codes.reshape(-1), minlength=len(STATE_NAMES))[: len(STATE_NAMES)]
    shares = {name: mapped * float(counts[k] / max(codes.size, 1)) for k, name in enumerate(STATE_NAMES)}
    shares[STATE_NAMES[UNSEEN]] = max(0.0, 1.0 - sum(shares[name] for k, name in enumerate(STATE_NAMES) if k != UNSEEN))
    return shares


def _mapped(times: Times) -> float:
    """Share of a day that maps at these times speak for."""
    step = np.median(np.diff(times)) if len(times) > 1 else np.timedelta64(300, "s")
    return min(1.0, len(times) * float(step / np.timedelta64(1, "D")))


def _highest(fields: Fields) -> dict[str, float]:
    high: dict[str, float] = {}
    for name in ("vtec", "vtec_sigma", "slope", "slope_sigma"):
        layer = getattr(fields, name)
        seen = layer[np.isfinite(layer) & (fields.support > 0)]
        high[name] = float(np.quantile(seen, 0.99)) if seen.size else float("nan")
    return high


def summarise(products: Products) -> dict[str, Any]:
    """The part of a `DayHead` that follows from the products."""
    kinds = [flag.kind for flag in products.flags]
    mapped = _mapped(products.fields.times)
    return {
        "highest": _highest(products.fields),
        "state_shares": _shares(products.fields.state, mapped),
        "site_shares": {
            site.name: _shares(products.site_states[:, k], mapped) for k, site in enumerate(products.region.sites)
        },
        "flag_counts": {kind: kinds.count(kind) for kind in sorted(set(kinds))},
        "warning_count": len(products.origin.warnings),
        "receiver_count": len(products.receivers),
        "epoch_count": len(products.fields.times),
    }


def record_of(products: Products) -> dict[str, Any]:
    """The plain facts of a day, as they are kept."""
    calibration = products.calibration
    return {
        "region": asdict(products.region),
        "receivers": [asdict(receiver) for receiver in products.receivers],
        "lats": products.fields.lats.tolist(),
        "lons": products.fields.lons.tolist(),
        "origin": {
            "inputs": [dict(one) for one in products.origin.inputs],
            "options": dict(products.origin.options),
            "versions": dict(products.origin.versions),
            "timings_s": dict(products.origin.timings_s),
            "counts": dict(products.origin.counts),
            "warnings": list(products.origin.warnings),
            "simulated": products.origin.simulated,
        },
        "calibration": dict(calibration.summary),
        "bias_source": calibration.biases.source,
        "bias_datum": calibration.biases.datum,
    }


def region_from(facts: Mapping[str, Any]) -> Region:
    """A region from its kept facts; keys this program does not know are left out."""
    known = {name: facts[name] for name in Region.__dataclass_fields__ if name in facts}
    known["sites"] = tuple(Site(**site) for site in known.get("sites", ()))
    known["uses"] = tuple(Use(**use) for use in known.get("uses", ()))
    limits = known.get("thresholds", {})
    known["thresholds"] = Thresholds(**{k: v for k, v in limits.items() if k in Thresholds.__dataclass_fields__})
    return Region(**known)


def receiver_from(facts: Mapping[str, Any]) -> Receiver:
    """A receiver from its kept facts."""
    x, y, z = facts["position_m"]
    return Receiver(facts["name"], (x, y, z), facts["antenna"], facts["type"])


def origin_from(facts: Mapping[str, Any]) -> Origin:
    """An origin from its kept facts."""
    return Origin(
        inputs=tuple(facts["inputs"]),
        options=facts["options"],
        versions=facts["versions"],
        timings_s=facts["timings_s"],
        counts=facts["counts"],
        warnings=tuple(facts["warnings"]),
        simulated=facts["simulated"],
    )
