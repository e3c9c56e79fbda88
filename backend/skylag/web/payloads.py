"""Every JSON shape of the web interface, and the only file in web that encodes.

Leaving here, GPS time becomes UTC (ISO 8601 with Z; the key says `_utc`), content becomes metres of delay where a user
thinks in metres, and what is not known becomes null.  Days are GPS-time days.  A number array of the maps is an object
    {"dtype": "float32" | "uint16" | "uint8", "shape": [T, rows, columns], "base64": text}
of little-endian values in C order, not-a-number where nothing is known.  A cell without a value is never said to hold.
"""

import base64
import csv
import io
import json
import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import replace
from typing import Any

import numpy as np
import numpy.typing as npt
from fastapi.responses import Response

from skylag import quantities, timescales
from skylag.archive import DayHead, DayRecord, SiteStates
from skylag.archive.activity import DayActivity
from skylag.archive.outlooks import Kept
from skylag.archive.sites import SiteChanges
from skylag.constants import L1_M_PER_TECU
from skylag.formats import events as event_files
from skylag.formats.delimited import harmless
from skylag.impact.coming import HORIZON, Coming
from skylag.impact.ground_augmentation import StationDay
from skylag.impact.satellite_augmentation import Availability
from skylag.impact.single_frequency import LeftOver
from skylag.impact.states import carried
from skylag.impact.survey import Advice, Explanation
from skylag.ionosphere.beside import Beside
from skylag.ionosphere.geometry import geodetic
from skylag.ionosphere.outlook import LEAST_DAYS, RANGES, Span
from skylag.tables import HOLDS, STATE_NAMES, UNSEEN, Biases, Fields, Flag, Problem, Rays, Region, Site
from skylag.web import nearby, sentences
from skylag.web.witnesses import DayNetwork, Sightline


def _metres(values: npt.NDArray[np.float32]) -> npt.NDArray[np.float32]:
    return np.asarray(values * np.float32(L1_M_PER_TECU))


# Layer name, as in the vocabulary, -> how it follows from maps that are `carried`.
LAYERS: dict[str, Callable[[Fields], npt.NDArray[Any]]] = {
    "vertical_delay": lambda fields: _metres(fields.vtec),
    "vertical_delay_sigma": lambda fields: _metres(fields.vtec_sigma),
    "vtec": lambda fields: fields.vtec,
    "vtec_sigma": lambda fields: fields.vtec_sigma,
    "support": lambda fields: fields.support,
    "slope": lambda fields: fields.slope,
    "slope_sigma": lambda fields: fields.slope_sigma,
    "slope_east": lambda fields: fields.slope_east,
    "slope_north": lambda fields: fields.slope_north,
    "state": lambda fields: fields.state,
}
USUAL_LAYERS = ("vertical_delay", "vertical_delay_sigma", "slope", "state")

# ---------------------------------------------------------------------------------------------- small pieces


def reply(content: Any, status: int = 200, headers: dict[str, str] | None = None) -> Response:
    """An answer in JSON; a value JSON does not know is a defect and raises."""
    text = json.dumps(content, ensure_ascii=False, allow_nan=False, separators=(",", ":"))
    return Response(text, status, headers=headers, media_type="application/json")


def utc(time: np.datetime64) -> str | None:
    """A GPS time as UTC text like 2031-05-11T05:29:42Z; None for no time."""
    return None if np.isnat(time) else utc_texts(np.array([time]))[0]


def utc_texts(times: npt.NDArray[np.datetime64]) -> list[str]:
    """GPS times as UTC texts, to the second, or to the millisecond where one of them needs it."""
    instants = timescales.gps_to_utc(times)
    fine = bool(np.any(instants.astype(np.int64) % 10**9))
    return [text + "Z" for text in np.datetime_as_string(instants, unit="ms" if fine else "s").tolist()]


def _number(value: float) -> float | None:
    """A float of at most seven figures; None for not-a-number."""
    return float(f"{value:.7g}") if math.isfinite(value) else None


def _numbers(values: npt.NDArray[Any]) -> list[float | None]:
    return [_number(float(value)) for value in values.reshape(-1)]


def array(values: npt.NDArray[Any]) -> dict[str, Any]:
    """An array as dtype, shape and base64 of its little-endian bytes."""
    little = np.ascontiguousarray(values).astype(values.dtype.newbyteorder("<"), copy=False)
    return {
        "dtype": values.dtype.name,
        "shape": list(values.shape),
        "base64": base64.b64encode(little.tobytes()).decode("ascii"),
    }


def _plain(value: Any) -> Any:
    """Facts of any kind as JSON takes them: not-a-number becomes null, keys become text."""
    if isinstance(value, dict):
        return {str(key): _plain(one) for key, one in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(one) for one in value]
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if value is None or isinstance(value, bool | int | str):
        return value
    return str(value)


# ---------------------------------------------------------------------------------------------- errors


def error(sentence: str, kind: str, details: dict[str, Any], status: int) -> Response:
    """The one shape of every failure."""
    content = {"ok": False, "error": sentence, "kind": kind, "details": _plain(details), "status": status}
    return reply(content, status, {"Cache-Control": "no-store"})


# ---------------------------------------------------------------------------------------------- days


def vocabulary() -> dict[str, Any]:
    """All quantities, the names of states in the order of their codes, and the layers that can be asked for."""
    return {
        "quantities": [
            {"name": q.name, "unit": q.unit, "dtype": q.dtype, "label": q.label, "meaning": q.meaning}
            for q in quantities.QUANTITIES
        ],
        "states": list(STATE_NAMES),
        "layers": list(LAYERS),
        "caution": sentences.CAUTION,
    }


def _head(head: DayHead) -> dict[str, Any]:
    return {
        "region": head.region,
        "day": str(head.day),
        "version": head.version,
        "versions": list(head.versions),
        "pinned": head.pinned,
        "saved_at_utc": f"{head.saved_at}Z",
        "simulated": head.simulated,
        "provisional": head.provisional,
        "state_shares": dict(head.state_shares),
        "site_shares": {name: dict(shares) for name, shares in head.site_shares.items()},
        "flag_counts": dict(head.flag_counts),
        "highest": {
            "vertical_delay": _number(L1_M_PER_TECU * head.highest.get("vtec", math.nan)),
            "slope": _number(head.highest.get("slope", math.nan)),
        },
        "warnings": head.warning_count,
        "receivers": head.receiver_count,
        "epochs": head.epoch_count,
    }


def days(heads: Sequence[DayHead], activity: Mapping[str, DayActivity]) -> dict[str, Any]:
    """The list of days, newest first.

    Each carries `activity`: `kp_highest` (highest of the eight Kp of the UTC day), `ap_daily` (its mean ap), `f107`
    (observed F10.7), each null where not told; `activity` itself is null where no indices of the day were imported.
    """
    listed = [{**_head(head), "activity": _activity(activity.get(str(head.day)))} for head in heads]
    return {
        "days": listed, "regions": sorted({head.region for head in heads}), "caution": sentences.CAUTION
    }  # fmt: skip


def _activity(told: DayActivity | None) -> dict[str, Any] | None:
    if told is None:
        return None
    return {name: _number(getattr(told, name)) for name in ("kp_highest", "ap_daily", "f107")}


def _round_up(value: float) -> float:
    """The next of 1, 2, 3, 5 times a power of ten: a scale end that a person reads at a glance."""
    if not math.isfinite(value) or value <= 0:
        return 1.0
    power = 10.0 ** math.floor(math.log10(value))
    return next(float(step * power) for step in (1, 2, 3, 5, 10) if value <= step * power * (1 + 1e-9))


def scales(heads: Sequence[DayHead]) -> dict[str, list[float]]:
    """Ends of colour scales: from 0 to what 99 of 100 cells of the worst of some days stay under.

    The same for all those days (a region's days of one year), so that two moments compare.
    """

    def top(name: str, factor: float = 1.0) -> list[float]:
        values = [head.highest.get(name, math.nan) for head in heads]
        finite = [factor * value for value in values if math.isfinite(value)]
        return [0.0, _round_up(max(finite, default=math.nan))]

    return {
        "vertical_delay": top("vtec", L1_M_PER_TECU),
        "vertical_delay_sigma": top("vtec_sigma", L1_M_PER_TECU),
        "vtec": top("vtec"),
        "vtec_sigma": top("vtec_sigma"),
        "slope": top("slope"),
        "slope_sigma": top("slope_sigma"),
    }


def day(record: DayRecord, heads: Sequence[DayHead]) -> dict[str, Any]:
    """All plain facts of a day; `heads` are the days of its region and year, for the scales."""
    region = record.region
    warnings = record.origin.warnings
    first = sentences.notices(record.origin.simulated, record.head.provisional)
    notices = [*(one for one in first if one not in warnings), *warnings]
    return {
        **_head(record.head),
        "warnings": notices,
        "region": _region(region),
        "receivers": [
            {
                "name": r.name, "lat": round(float(lat), 6), "lon": round(float(lon), 6),
                "height_m": round(float(height_m), 2), "antenna": r.antenna, "type": r.type,
            }
            for r in record.receivers
            for lat, lon, height_m in [geodetic(r.position_m)]
        ],
        "sites": [
            {"name": site.name, "lat": site.lat, "lon": site.lon, "kind": site.kind} for site in region.sites
        ],
        "grid": {"lats": _numbers(record.lats), "lons": _numbers(record.lons), "step_deg": region.step_deg},
        "times_utc": utc_texts(record.times),
        "scales": scales(heads),
        "calibration": _plain(dict(record.calibration)),
        "bias_source": record.bias_source,
        "bias_datum": record.bias_datum,
        "counts": _plain(dict(record.origin.counts)),
        "slant_rows": record.slant_rows,
        "origin": {
            "inputs": _plain([dict(one) for one in record.origin.inputs]),
            "options": _plain(dict(record.origin.options)),
            "versions": _plain(dict(record.origin.versions)),
            "timings_s": _plain(dict(record.origin.timings_s)),
        },
        "caution": sentences.CAUTION,
    }


def _region(region: Region) -> dict[str, Any]:
    limits = region.thresholds
    return {
        "name": region.name, "south": region.south, "north": region.north, "west": region.west, "east": region.east,
        "shell_height_km": region.shell_height_km, "timezone": region.timezone,
        "thresholds": {name: getattr(limits, name) for name in type(limits).__dataclass_fields__},
    }  # fmt: skip


# ---------------------------------------------------------------------------------------------- maps


def maps(fields: Fields, layers: Sequence[str]) -> dict[str, Any]:
    """Maps of a span of time; no number where no line of sight carries a cell."""
    fields = carried(fields)
    return {
        "times_utc": utc_texts(fields.times),
        "lats": _numbers(fields.lats),
        "lons": _numbers(fields.lons),
        "layers": {name: array(LAYERS[name](fields)) for name in layers},
        "units": {name: quantities.BY_NAME[name].unit for name in layers},
        "caution": sentences.CAUTION,
    }


def rays(table: Rays, asked: np.datetime64) -> dict[str, Any]:
    """Pierce points of one epoch; `time_utc` is null where there are none near the moment asked for."""
    return {
        "asked_utc": utc(asked),
        "time_utc": utc(table.time[0]) if len(table) else None,
        "shell_height_km": table.shell_height_m / 1000.0,
        "receiver": [table.receivers[k].name for k in table.receiver],
        "satellite": [str(table.satellites[k]) for k in table.satellite],
        "pierce_lat": _numbers(np.round(table.pierce_lat, 4)),
        "pierce_lon": _numbers(np.round(table.pierce_lon, 4)),
        "elevation": _numbers(np.round(table.elevation, 2)),
        "azimuth": _numbers(np.round(table.azimuth, 2)),
    }


def series(
    cell: Fields, record: DayRecord, near: Sequence[Sequence[nearby.NearFlag]], inside: bool, doubts: Sequence[str]
) -> dict[str, Any]:
    """The day at one cell; `near` holds the flags near it at each of its times, `doubts` why nothing may hold at the
    place then, "" where it may."""
    cell = _doubted(carried(cell), doubts)
    metres, metres_sigma, state = _metres(cell.vtec), _metres(cell.vtec_sigma), cell.state.reshape(-1)
    sentence = [sentences.OUTSIDE] * len(cell.times)
    if inside:
        sentence = [
            sentences.of_state(
                int(state[k]), slope=float(cell.slope[k, 0, 0]), slope_sigma=float(cell.slope_sigma[k, 0, 0]),
                delay_m=float(metres[k, 0, 0]), delay_sigma_m=float(metres_sigma[k, 0, 0]),
                support=int(cell.support[k, 0, 0]), limits=record.region.thresholds, near=near[k],
            )
            if not (doubts[k] and state[k] == UNSEEN and cell.support[k, 0, 0]) else sentences.of_doubt(doubts[k])
            for k in range(len(cell.times))
        ]  # fmt: skip
    return {
        "times_utc": utc_texts(cell.times),
        "lat": _number(float(cell.lats[0])),
        "lon": _number(float(cell.lons[0])),
        "inside": inside,
        "vertical_delay": _numbers(metres),
        "vertical_delay_sigma": _numbers(metres_sigma),
        "slope": _numbers(cell.slope),
        "slope_sigma": _numbers(cell.slope_sigma),
        "slope_east": _numbers(cell.slope_east),
        "slope_north": _numbers(cell.slope_north),
        "support": [int(n) for n in cell.support.reshape(-1)],
        "state": [STATE_NAMES[int(k)] for k in state],
        "sentence": sentence,
        "caution": sentences.CAUTION,
    }


def _doubted(cell: Fields, doubts: Sequence[str]) -> Fields:
    """A cell with `unseen` for `holds` at the times with a doubt."""
    doubted = np.array([bool(one) for one in doubts], dtype=bool)[:, None, None]
    return replace(cell, state=np.where(doubted & (cell.state == HOLDS), UNSEEN, cell.state).astype(np.uint8))


def reading(
    cell: Fields, record: DayRecord, lat: float, lon: float, near: Sequence[nearby.NearFlag], doubt: str
) -> dict[str, Any]:
    """What is known at a place and time: `cell` holds one map of one cell, `doubt` why nothing may hold at the place
    then, "" where it may.  Unseen places have no numbers."""
    inside = record.cell_of(lat, lon) is not None
    cell = _doubted(carried(cell), [doubt])
    code = int(cell.state[0, 0, 0])
    delay_m, sigma_m = float(_metres(cell.vtec)[0, 0, 0]), float(_metres(cell.vtec_sigma)[0, 0, 0])
    slope, slope_sigma = float(cell.slope[0, 0, 0]), float(cell.slope_sigma[0, 0, 0])
    support = int(cell.support[0, 0, 0])
    seen = code != UNSEEN
    sentence = sentences.OUTSIDE
    if inside and doubt and not seen and support:
        sentence = sentences.of_doubt(doubt)
    elif inside:
        sentence = sentences.of_state(
            code, slope=slope, slope_sigma=slope_sigma, delay_m=delay_m, delay_sigma_m=sigma_m, support=support,
            limits=record.region.thresholds, near=near,
        )  # fmt: skip
    return {
        "lat": lat,
        "lon": lon,
        "time_utc": utc(cell.times[0]),
        "cell": {"lat": _number(float(cell.lats[0])), "lon": _number(float(cell.lons[0]))} if inside else None,
        "state": STATE_NAMES[code],
        "sentence": sentence,
        "vertical_delay": _number(delay_m) if seen else None,
        "vertical_delay_sigma": _number(sigma_m) if seen else None,
        "slope": _number(slope) if seen else None,
        "slope_sigma": _number(slope_sigma) if seen else None,
        "slope_east": _number(float(cell.slope_east[0, 0, 0])) if seen else None,
        "slope_north": _number(float(cell.slope_north[0, 0, 0])) if seen else None,
        "support": support,
        "flags": [
            {
                **_flag(one.flag),
                "now_lat": _number(one.lat),
                "now_lon": _number(one.lon),
                "distance_km": round(one.distance_km, 1),
                "bearing_deg": round(one.bearing_deg),
            }
            for one in near
        ],
        "simulated": record.origin.simulated,
        "caution": sentences.CAUTION,
    }


def coast(lines: Sequence[npt.NDArray[np.float64]]) -> dict[str, Any]:
    """Coast lines, each a pair of lists: latitudes and longitudes in degrees."""
    return {
        "lines": [
            {"lat": np.round(line[:, 0], 4).tolist(), "lon": np.round(line[:, 1], 4).tolist()} for line in lines
        ]
    }


# ---------------------------------------------------------------------------------------------- flags, states, biases

_FLAG_COLUMNS = ("start_utc", "end_utc", "lat_deg", "lon_deg", "kind", "slope_mm_per_km", "sigma_mm_per_km",
                 "speed_m_s", "heading_deg", "state", "evidence", "confirmed", "speed_sigma_m_s")  # fmt: skip


def _flag(flag: Flag) -> dict[str, Any]:
    return {
        "start_utc": utc(flag.start), "end_utc": utc(flag.end), "lat_deg": _number(flag.lat),
        "lon_deg": _number(flag.lon), "kind": flag.kind, "slope_mm_per_km": _number(flag.slope_mm_per_km),
        "sigma_mm_per_km": _number(flag.sigma_mm_per_km), "speed_m_s": _number(flag.speed_m_s),
        "speed_sigma_m_s": _number(flag.speed_sigma_m_s),
        "heading_deg": _number(flag.heading_deg), "state": flag.state, "evidence": flag.evidence,
        "confirmed": flag.confirmed,
    }  # fmt: skip


def flags(table: Sequence[Flag]) -> dict[str, Any]:
    """The flags of a day, each with its track: [[time_utc, lat, lon], ...]."""
    return {
        "flags": [
            {**_flag(flag), "track": [[utc(t), _number(lat), _number(lon)] for t, lat, lon in flag.track]}
            for flag in table
        ],
        "caution": sentences.CAUTION,
    }


def flags_csv(table: Sequence[Flag], name: str) -> Response:
    """The flags of a day as a table of text; an unknown number is an empty cell."""
    text = io.StringIO()
    writer = csv.DictWriter(text, _FLAG_COLUMNS, lineterminator="\n")
    writer.writeheader()
    for flag in table:
        row = _flag(flag)
        row["confirmed"] = "true" if flag.confirmed else "false"
        writer.writerow({key: harmless(value) for key, value in row.items()})
    return Response(text.getvalue(), media_type="text/csv", headers=_download(f"{name}-flags.csv"))


def flags_geojson(table: Sequence[Flag], name: str, about: Mapping[str, Any]) -> Response:
    """The flags of a day as GeoJSON (RFC 7946): points, and lines for those with a track; longitude first."""
    features = []
    for flag in table:
        geometry: dict[str, Any] = {"type": "Point", "coordinates": [_number(flag.lon), _number(flag.lat)]}
        facts = _flag(flag)
        if len(flag.track) > 1:
            geometry = event_files.line([p[2] for p in flag.track], [p[1] for p in flag.track])
            facts["track_utc"] = [utc(p[0]) for p in flag.track]
        features.append({"type": "Feature", "geometry": geometry, "properties": facts})
    content = {"type": "FeatureCollection", **about, "features": features}
    answer = reply(content, headers=_download(f"{name}-flags.geojson"))
    answer.headers["Content-Type"] = "application/geo+json"
    return answer


def _download(name: str) -> dict[str, str]:
    plain = "".join(c if c.isascii() and (c.isalnum() or c in "-_.") else "_" for c in name)
    return {"Content-Disposition": f'attachment; filename="{plain}"'}


def site_states(states: SiteStates) -> dict[str, Any]:
    """States of the sites through a day: `codes` is one list per site, `reasons` one list per site, "" where none."""
    return {
        "times_utc": utc_texts(states.times),
        "sites": [{"name": s.name, "lat": s.lat, "lon": s.lon, "kind": s.kind} for s in states.sites],
        "states": list(STATE_NAMES),
        "codes": states.codes.T.tolist(),
        "reasons": [list(one) for one in states.reasons],
        "caution": sentences.CAUTION,
    }


def biases(table: Biases) -> dict[str, Any]:
    """The code biases of a day, one object each."""
    return {
        "source": table.source,
        "datum": table.datum,
        "biases": [
            {
                "kind": str(table.kind[n]), "name": str(table.name[n]), "system": str(table.system[n]),
                "code1": str(table.code1[n]), "code2": str(table.code2[n]),
                "bias_ns": _number(float(table.value_ns[n])), "sigma_ns": _number(float(table.sigma_ns[n])),
                "start_utc": utc(table.start[n]), "end_utc": utc(table.end[n]),
            }
            for n in range(len(table))
        ],
    }  # fmt: skip


# ---------------------------------------------------------------------------------------------- witnesses, network


def witnesses(lines: Sequence[Sightline]) -> dict[str, Any]:
    """Curves of single lines of sight: vertical delay [m], its uncertainty, where each pierces the shell."""
    return {
        "lines": [
            {
                "receiver": one.receiver, "satellite": one.satellite, "distance_km": round(one.distance_km, 1),
                "times_utc": utc_texts(one.times), "vertical_delay": _numbers(np.round(one.delay_m, 4)),
                "vertical_delay_sigma": _number(round(one.sigma_m, 3)), "change_m": _number(round(one.change_m, 3)),
                "elevation": _number(round(one.elevation, 1)), "lat": _numbers(np.round(one.lat, 3)),
                "lon": _numbers(np.round(one.lon, 3)),
            }
            for one in lines
        ]
    }  # fmt: skip


def network(days: Sequence[DayNetwork]) -> dict[str, Any]:
    """What each receiver gave on each day, newest day first; what is not known is null."""
    return {
        "days": [
            {
                "region": one.region, "day": str(one.day), "simulated": one.simulated,
                "receivers": [
                    {
                        "name": r.name, "received": _number(round(r.received, 4)), "satellites": r.satellites,
                        "rays": r.rays, "arcs": r.arcs, "gaps": r.gaps, "slips": r.slips, "resets": r.resets,
                        "level_sigma_tecu": _number(r.level_sigma_tecu),
                        "left_out_rms_tecu": _number(r.left_out_rms_tecu),
                        "left_out_sigma_tecu": _number(r.left_out_sigma_tecu),
                        "faults": list(r.faults),
                        "biases": [
                            {"pair": pair, "bias_ns": _number(value), "sigma_ns": _number(sigma)}
                            for pair, value, sigma in r.biases
                        ],
                    }
                    for r in one.receivers
                ],
            }
            for one in days
        ]
    }  # fmt: skip


def file(data: bytes, name: str, media_type: str) -> Response:
    """Bytes as a file to keep."""
    return Response(data, media_type=media_type, headers=_download(name))


# ---------------------------------------------------------------------------------------------- advice


def _span(start: np.datetime64, end: np.datetime64) -> dict[str, Any]:
    return {"start_utc": utc(start), "end_utc": utc(end)}


def survey(advice: Advice) -> dict[str, Any]:
    """A survey job through a day: errors and verdicts per epoch, hourly index, windows, assumptions."""
    job = advice.job
    return {
        "job": {
            "name": job.name, "shape": job.shape, "places": [list(place) for place in job.places],
            "method": job.method, "references": [list(place) for place in job.references],
            "session_min": job.session_min, "least_min": job.least_min,
            "baseline_km": job.baseline_km, "horizontal_mm": job.horizontal_mm, "vertical_mm": job.vertical_mm,
            "mask_deg": job.mask_deg, "least_satellites": job.least_satellites, "most_dilution": job.most_dilution,
            "fixing_chance": job.fixing_chance,
        },
        "times_utc": utc_texts(advice.times),
        **{
            name: _numbers(getattr(advice, name))
            for name in ("slope", "slope_sigma", "differential_68", "differential_95", "horizontal_68",
                         "horizontal_95", "vertical_68", "vertical_95", "longest_km", "fixing", "dilution")
        },
        "satellites": [int(n) if n >= 0 else None for n in advice.count],
        "verdict": [str(one) for one in advice.verdict],
        "reasons": list(advice.reasons),
        "hours_utc": utc_texts(advice.hours),
        "index_ppm": _numbers(advice.index),
        "index_words": list(advice.index_words),
        "windows": [{**_span(w.start, w.end), "verdict": w.verdict, "why": w.why} for w in advice.windows],
        "assumptions": list(advice.assumptions),
        "caution": advice.caution,
    }  # fmt: skip


def sites(
    record: DayRecord, listed: Sequence[Site], now: SiteChanges, history: Sequence[SiteChanges],
    problems: Sequence[Problem], writing: str,
) -> dict[str, Any]:  # fmt: skip
    """The sites of a region, what was changed lately, what a list had that could not be taken, who may change."""
    changed = {one.name for one in now.sites}
    return {
        "region": record.region.name, "revision": now.revision, "writing": writing,
        "sites": [
            {"name": one.name, "lat": one.lat, "lon": one.lon, "kind": one.kind, "changed": one.name in changed,
             "on_map": record.cell_of(one.lat, one.lon) is not None}
            for one in listed
        ],
        "gone": list(now.gone),
        "history": [
            {"revision": one.revision, "said": one.said,
             "made_utc": None if one.made_at is None else f"{np.datetime_as_string(one.made_at, unit='s')}Z"}
            for one in history
        ],
        "problems": [{"line": one.line, "what": one.what} for one in problems],
    }  # fmt: skip


def explanation(found: Explanation) -> dict[str, Any]:
    """Was it the ionosphere: verdict and evidence."""
    return {"time_utc": utc(found.time), "verdict": found.verdict, "evidence": list(found.evidence),
            "caution": found.caution}  # fmt: skip


def approaches(found: Availability) -> dict[str, Any]:
    """Protection levels, availability and outages of sites; minutes in which a level is available are 1."""
    return {
        "times_utc": utc_texts(found.times),
        "levels": [
            {"name": level.name, "horizontal_m": level.horizontal_m, "vertical_m": _number(level.vertical_m),
             "source": level.source}
            for level in found.levels
        ],
        "sites": [
            {
                "name": site.name,
                "share": {level.name: _number(float(found.share[n, k])) for n, level in enumerate(found.levels)},
                "available": {
                    level.name: found.available[n, k].astype(int).tolist() for n, level in enumerate(found.levels)
                },
                "vertical_m": _numbers(found.vertical_m[k]),
                "horizontal_m": _numbers(found.horizontal_m[k]),
                "horizontal_route_m": _numbers(found.route_m[k]),
                "in_view": found.in_view[k].tolist(),
                "with_grid": found.used[k].tolist(),
            }
            for k, site in enumerate(found.sites)
        ],
        "outages": [
            {**_span(one.start, one.end), "site": one.site, "level": one.level, "cause": one.cause, "why": one.why,
             "highest_vertical_m": _number(one.highest[0]), "highest_horizontal_m": _number(one.highest[1])}
            for one in found.outages
        ],
        "assumptions": list(found.assumptions),
        "caution": found.caution,
    }  # fmt: skip


def _coming(one: Coming) -> dict[str, Any]:
    return {
        "expected_utc": utc(one.expected), "minutes": one.minutes, "give_or_take_min": one.give_or_take_min,
        "sigma_s": round(one.sigma_s), "distance_km": _number(one.away_km), "aside_km": _number(one.aside_km),
        "slope_mm_per_km": _number(one.flag.slope_mm_per_km), "speed_m_s": _number(one.flag.speed_m_s),
        "heading_deg": _number(one.flag.heading_deg), "words": one.words,
    }  # fmt: skip


def coming_fronts(found: Sequence[Coming]) -> dict[str, Any]:
    """Fronts on their way, one row per site that one reaches within the hours named; two sigmas are given or taken."""
    return {
        "hours_ahead": float(HORIZON / np.timedelta64(1, "h")),
        "coming": [{"site": one.site.name, **_coming(one)} for one in found],
    }


def station(found: StationDay, coming: Sequence[Coming]) -> dict[str, Any]:
    """An aerodrome's ground-based augmentation through a day, and the front that comes next, if any."""
    return {
        "site": found.site.name,
        "times_utc": utc_texts(found.times),
        "slope": _numbers(found.slope),
        "slope_sigma": _numbers(found.slope_sigma),
        "error_95_m": _numbers(found.error_95_m),
        "state": [STATE_NAMES[int(code)] for code in found.state],
        "minutes": dict(found.minutes),
        "exceeded": [{**_span(one.start, one.end), "what": one.what, "why": one.why} for one in found.exceeded],
        "next_front": _coming(coming[0]) if coming else None,
        "assumptions": list(found.assumptions),
        "caution": found.caution,
    }  # fmt: skip


def broadcast_model(found: LeftOver) -> dict[str, Any]:
    """What the broadcast model leaves at a site, per epoch and per hour."""
    return {
        "site": found.site.name,
        "times_utc": utc_texts(found.times),
        "range_m": _numbers(found.range_m), "horizontal_m": _numbers(found.horizontal_m),
        "vertical_m": _numbers(found.vertical_m), "measured": found.measured.tolist(),
        "in_view": found.in_view.tolist(), "hours_utc": utc_texts(found.hours),
        "range_95_m": _numbers(found.range_95_m), "horizontal_95_m": _numbers(found.horizontal_95_m),
        "vertical_95_m": _numbers(found.vertical_95_m), "day_range_95_m": _number(found.day_range_95_m),
        "day_horizontal_95_m": _number(found.day_horizontal_95_m),
        "day_vertical_95_m": _number(found.day_vertical_95_m),
        "assumptions": list(found.assumptions), "caution": found.caution,
    }  # fmt: skip


def page(text: str) -> Response:
    """A page of its own."""
    return Response(text, media_type="text/html; charset=utf-8")


# ---------------------------------------------------------------------------------------------- the day ahead


def outlook_at(
    kept: Kept, place: int, away_km: float, use: int, spans: Sequence[Span], advice: Sequence[str], simulated: bool
) -> dict[str, Any]:
    """The outlook at one of its places for one of its uses; hours are starts, UTC.

    Chances are null at a place seen on too few days, and at hours of the day that were, as their windows are `not
    known`.
    """
    made = kept.outlook
    known = bool(made.seen_days[place] >= LEAST_DAYS)

    def chances(of_hours: npt.NDArray[Any]) -> list[float | None]:
        return _numbers(np.round(of_hours, 4)) if known else [None] * len(of_hours)

    def ends(low: float, high: float) -> dict[str, list[float | None]]:
        columns = [int(np.argmin(np.abs(made.levels - level))) for level in (low, high)]
        return {
            name: _numbers(np.round(made.delay_quantiles[:, place, column], 4))
            for name, column in zip(("low", "high"), columns, strict=True)
        }

    return {
        "region": kept.region,
        "known_until": str(made.known_until),
        "made_utc": None if np.isnat(kept.made_at) else f"{np.datetime_as_string(kept.made_at, unit='s')}Z",
        "name": str(made.names[place]),
        "lat": _number(float(made.lats[place])),
        "lon": _number(float(made.lons[place])),
        "distance_km": round(away_km, 1),
        "use": str(made.uses[use]),
        "hours_utc": utc_texts(made.hours),
        "vertical_delay": _numbers(np.round(made.delay[:, place], 4)),
        "ranges": {str(share): ends(*levels) for share, levels in RANGES.items()},
        "slope": {
            str(level): _numbers(np.round(made.slope_quantiles[:, place, number], 3))
            for number, level in enumerate(made.slope_levels)
        },
        "chance_strained": chances(made.strained[use, :, place]),
        "chance_broken": chances(made.broken[use, :, place]),
        "storm_phase": [str(word) for word in made.phases],
        "seen_days": int(made.seen_days[place]),
        "windows": [
            {
                "start_utc": utc(span.start), "end_utc": utc(span.end), "kind": span.kind,
                "chance_strained": _number(span.strained) if known else None,
                "chance_broken": _number(span.broken) if known else None,
            }
            for span in spans
        ],
        "advice": list(advice),
        "basis": list(made.basis),
        "simulated": simulated,
        "caution": sentences.CAUTION,
    }  # fmt: skip


def outlook_record(region: str, facts: Mapping[str, Any]) -> dict[str, Any]:
    """What became of the outlooks of a region."""
    return {"region": region, **_plain(dict(facts)), "caution": sentences.CAUTION}


# ---------------------------------------------------------------------------------------------- a published map


def beside(found: Beside, said: Sequence[str], name: str) -> dict[str, Any]:
    """A published map beside a day: sentences, facts, hours, and hourly maps of ours minus theirs [m of delay]."""
    start, mean, rms, count = found.hourly()
    return {
        "name": name,
        "said": list(said),
        "facts": _plain(found.facts()),
        "hours": {
            "start_utc": utc_texts(start), "mean_tecu": _numbers(mean), "rms_tecu": _numbers(rms),
            "cells": [int(one) for one in count],
        },
        "lats": _numbers(found.lats),
        "lons": _numbers(found.lons),
        "difference_m": array(_metres(found.hourly_maps())),
    }  # fmt: skip
