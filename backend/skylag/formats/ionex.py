"""Maps of vertical content (IONEX 1.0) to `Fields` and back, with the biases such files carry.

Content and its rms in TECU; 9999 is NaN.  Latitudes ascend in the table whatever the order in the file.  Reads maps of
one height (dimension 2); the latitudes are geocentric on the sphere of the header.  A broken map is a `Problem`, and
reading goes on.  Never opens a file, never interpolates.

Layout: IONEX 1.0 (Schaer, Gurtner and Feltens 1998): labels in columns 61-80, values 16I5.
"""

import re
from dataclasses import dataclass, field
from textwrap import wrap
from typing import Any

import numpy as np

from skylag.errors import FormatError, Refused
from skylag.formats.rinex_layout import Problems
from skylag.tables import Biases, Fields, Floats, Reading
from skylag.timescales import gps_to_utc, utc_to_gps

_NONE = 9999
_PER_LINE = 16
_MOST_VALUES = 50_000_000  # more nodes than this in a header is no map of the Earth


@dataclass
class _Header:
    """What the header tells, as it is gathered."""

    exponent: int = -1
    radius_km: float = 6371.0
    lat: tuple[float, float, float] | None = None
    lon: tuple[float, float, float] | None = None
    height: tuple[float, float, float] | None = None
    dimension: int = 2
    facts: dict[str, Any] = field(default_factory=dict)
    biases: list[tuple[str, str, str, str, str, float, float]] = field(default_factory=list)


def parse(data: bytes, name: str) -> Reading:
    """The maps of one file; `header` holds shell_height_km, base_radius_km, mapping_function and biases (`Biases`).

    Epochs are GPS time (the file's are UT).  rms maps become `vtec_sigma`; the layers IONEX does not know are NaN or 0.
    Raises FormatError when the file is no IONEX file, its grid makes no sense, or no map is whole.
    """
    lines = data.decode("latin-1").splitlines()
    if not lines or "IONEX VERSION" not in lines[0][60:80]:
        raise FormatError(f"{name}: line 1 lacks IONEX VERSION / TYPE in columns 61-80", path=name, line=1)
    problems = Problems(name)
    header, end = _header(lines, name, problems)
    lats, lons = _axis(header.lat, name, "LAT"), _axis(header.lon, name, "LON")
    if len(lats) * len(lons) > _MOST_VALUES:
        raise FormatError(f"{name}: {len(lats)} x {len(lons)} nodes are more than a map can have", path=name, line=0)
    content, spread = _maps(lines, end, (len(lats), len(lons)), header, problems)
    if not content:
        raise FormatError(f"{name}: no whole map of content in the file", path=name, line=len(lines))
    epochs = np.array(sorted(content), dtype="datetime64[ns]")
    upward = np.argsort(lats)
    blank = np.full((len(lats), len(lons)), np.nan)
    vtec = np.stack([content[epoch] for epoch in epochs])[:, upward].astype(np.float32)
    sigma = np.stack([spread.get(epoch, blank) for epoch in epochs])[:, upward].astype(np.float32)
    nothing = np.full(vtec.shape, np.nan, dtype=np.float32)
    times = utc_to_gps(epochs)
    table = Fields(
        times=times, lats=lats[upward], lons=lons, vtec=vtec, vtec_sigma=sigma,
        support=np.zeros(vtec.shape, dtype=np.uint16), slope=nothing, slope_sigma=nothing, slope_east=nothing,
        slope_north=nothing, state=np.zeros(vtec.shape, dtype=np.uint8),
    )  # fmt: skip
    facts: dict[str, Any] = {
        **header.facts,
        "base_radius_km": header.radius_km,
        "shell_height_km": header.height[0] if header.height else 450.0,
        "biases": _biases(header, times, name),
    }
    return Reading(table, problems.all(), facts)


def _header(lines: list[str], name: str, problems: Problems) -> tuple[_Header, int]:
    """Facts of the header and the first line behind it."""
    header = _Header()
    pairs = {"G": ("C1W", "C2W"), "R": ("C1P", "C2P"), "E": ("C1C", "C5Q"), "C": ("C2I", "C6I"), "J": ("C1C", "C2L")}
    station_pair: tuple[str, str] | None = None
    for number, line in enumerate(lines, start=1):
        label, text = line[60:80].strip(), line[:60]
        try:
            if label == "END OF HEADER":
                return header, number
            if label == "EXPONENT":
                header.exponent = _exponent(text)
            elif label == "BASE RADIUS":
                header.radius_km = float(text[:8])
            elif label == "MAP DIMENSION":
                header.dimension = int(text[:6])
            elif label == "MAPPING FUNCTION":
                header.facts["mapping_function"] = text.strip()
            elif label == "ELEVATION CUTOFF":
                header.facts["elevation_cutoff_deg"] = float(text[:8])
            elif label == "HGT1 / HGT2 / DHGT":
                header.height = _three(text)
            elif label == "LAT1 / LAT2 / DLAT":
                header.lat = _three(text)
            elif label == "LON1 / LON2 / DLON":
                header.lon = _three(text)
            elif label == "COMMENT":
                told = re.match(r"Reference observables for (\S+)(.*?)\s*:\s*(\w{3})-(\w{3})", text)
                if told:
                    codes = (told.group(3), told.group(4))
                    system = {"GPS": "G", "GLONASS": "R", "Galileo": "E", "GALILEO": "E", "BeiDou": "C"}
                    if told.group(1) in system:
                        pairs[system[told.group(1)]] = codes
                    else:
                        station_pair = codes
            elif label == "PRN / BIAS / RMS":
                letter = text[3:4].strip() or "G"
                row = ("satellite", f"{letter}{int(text[4:6]):02d}", letter, *pairs[letter])
                header.biases.append((*row, float(text[6:16]), float(text[16:26])))
            elif label == "STATION / BIAS / RMS":
                letter = text[3:4].strip() or "G"
                row = ("receiver", text[6:10].strip(), letter, *(station_pair or pairs[letter]))
                header.biases.append((*row, float(text[26:36]), float(text[36:46])))
                station_pair = None
        except (ValueError, KeyError):
            problems.note(number, f"{label}: not as the format has it")
    raise FormatError(f"{name}: no END OF HEADER; the file is cut", path=name, line=len(lines))


def _exponent(text: str) -> int:
    """The power of ten of the unit; ValueError outside what a map can have."""
    value = int(text[:6])
    if not -6 <= value <= 3:
        raise ValueError(f"exponent {value}")
    return value


def _three(text: str) -> tuple[float, float, float]:
    """2X,3F6.1."""
    return float(text[2:8]), float(text[8:14]), float(text[14:20])


def _axis(told: tuple[float, float, float] | None, name: str, which: str) -> Floats:
    """Nodes of an axis of the grid; FormatError when its three numbers make none."""
    if told is None or told[2] == 0 or (told[1] - told[0]) / told[2] < 1 or not np.all(np.isfinite(told)):
        raise FormatError(
            f"{name}: {which}1 / {which}2 / D{which} {told} make no axis; first, last and step are needed",
            path=name, line=0,
        )  # fmt: skip
    first, last, step = told
    limit = 90.0 if which == "LAT" else 360.0
    if max(abs(first), abs(last)) > limit or abs(step) < 0.01:
        raise FormatError(f"{name}: {which} from {first:g} to {last:g} by {step:g} is not on Earth", path=name, line=0)
    return np.asarray(first + step * np.arange(round((last - first) / step) + 1), dtype=np.float64)


def _epoch(text: str) -> np.datetime64:
    """6I6, in UT; ValueError when impossible."""
    year, month, day, hour, minute, second = (int(text[start : start + 6]) for start in range(0, 36, 6))
    if not (1950 <= year < 2200 and 0 <= hour <= 24 and 0 <= minute < 60 and 0 <= second <= 60):
        raise ValueError("epoch")
    midnight = np.datetime64(f"{year:04d}-{month:02d}-{day:02d}", "ns")
    return midnight + np.timedelta64(hour * 3600 + minute * 60 + second, "s")


def _maps(
    lines: list[str], end: int, shape: tuple[int, int], header: _Header, problems: Problems
) -> tuple[dict[np.datetime64, Floats], dict[np.datetime64, Floats]]:  # fmt: skip
    """Maps of content and of rms by epoch (UT), rows in the order of the file's latitudes."""
    content: dict[np.datetime64, Floats] = {}
    spread: dict[np.datetime64, Floats] = {}
    exponent = header.exponent
    number = end
    assert header.lat is not None
    while number < len(lines):
        label = lines[number][60:80].strip()
        if label == "END OF FILE":
            break
        if label not in ("START OF TEC MAP", "START OF RMS MAP"):
            if label == "EXPONENT":
                try:
                    exponent = _exponent(lines[number])
                except ValueError as what:  # the unit of all that follows is not known
                    problems.note(number + 1, f"EXPONENT: {what}", "left out the maps behind it")
                    break
            number += 1
            continue
        kind, begun = label.split()[2], number
        epoch: np.datetime64 | None = None
        rows: dict[int, Floats] = {}  # a map takes room only as it is read: its size is a claim of the header
        try:
            number += 1
            while lines[number][60:80].strip() != f"END OF {kind} MAP":
                label = lines[number][60:80].strip()
                if label == "EPOCH OF CURRENT MAP":
                    epoch = _epoch(lines[number])
                elif label == "EXPONENT":
                    exponent = _exponent(lines[number])
                elif label == "LAT/LON1/LON2/DLON/H":
                    row = _place(lines[number][2:8], header.lat)
                    if not 0 <= row < shape[0]:
                        raise ValueError("a latitude that is not in the header")
                    count = -(-shape[1] // _PER_LINE)
                    rows[row] = _row(lines[number + 1 : number + 1 + count], shape[1]) * 10.0**exponent
                    number += count
                elif label.startswith("START OF"):
                    raise ValueError("no end of the map before the next one")
                number += 1
            if epoch is None or len(rows) != shape[0]:
                raise ValueError("epoch missing" if epoch is None else f"{len(rows)} of {shape[0]} latitudes")
            (content if kind == "TEC" else spread)[epoch] = np.stack([rows[row] for row in range(shape[0])])
            number += 1
        except (ValueError, IndexError) as what:
            said = "the file is cut within" if isinstance(what, IndexError) else str(what)
            problems.note(begun + 1, f"{kind} map: {said}", kind=f"broken {kind} maps")
            number = max(number, begun + 1)
    return content, spread


def _place(text: str, lat: tuple[float, float, float]) -> int:
    """Row of a latitude on the axis of the header; ValueError when it is no number."""
    place = (float(text) - lat[0]) / lat[2]
    if not np.isfinite(place):
        raise ValueError(f"latitude {text.strip()}")
    return round(place)


def _row(lines: list[str], count: int) -> Floats:
    """Values of one latitude, NaN for 9999; ValueError when there are too few or one is no number."""
    text = "".join(line.rstrip("\r\n").ljust(5 * _PER_LINE)[: 5 * _PER_LINE] for line in lines)
    values = np.array([int(text[5 * k : 5 * k + 5]) for k in range(count)], dtype=np.float64)
    values[values == _NONE] = np.nan
    return values


def _biases(header: _Header, times: np.ndarray, name: str) -> Biases:
    """The biases of the header; their span is the days of the maps (a last map at 24:00 is of the day before)."""
    columns = list(zip(*header.biases, strict=True)) if header.biases else [()] * 7
    kind, who, system, code1, code2 = (np.array(column, dtype=np.str_) for column in columns[:5])
    start = times.min().astype("datetime64[D]").astype("datetime64[ns]")
    end = (times.max() - np.timedelta64(60, "s")).astype("datetime64[D]").astype("datetime64[ns]")
    return Biases(
        kind, who, system, code1, code2, np.array(columns[5], dtype=np.float64), np.array(columns[6], dtype=np.float64),
        np.full(len(who), start), np.full(len(who), end + np.timedelta64(1, "D")),
        source=name, datum="mean of the satellites is zero",
    )  # fmt: skip


def write(
    fields: Fields, created: np.datetime64, shell_height_km: float, program: str = "SKYLAG", description: str = "",
    base_radius_km: float = 6371.0, biases: Biases | None = None, comment: str = "",
) -> str:  # fmt: skip
    """IONEX 1.0 text of maps of content and its sigma (as RMS maps); to 0.1 TECU, epochs in UT to the second.

    created  GPS time written as the time of making
    fields   on geocentric latitudes, which the format counts
    biases   written as the header's auxiliary block, see `_auxiliary`
    comment  written as COMMENT lines, broken between words
    Raises Refused for a grid that is not on whole tenths of a degree, since the format has nothing finer.
    """
    lat_step, lon_step = _step(fields.lats, "latitudes"), _step(fields.lons, "longitudes")
    times = gps_to_utc(fields.times)
    spacing = np.unique(np.diff(times).astype("timedelta64[s]").astype(np.int64))
    interval = int(spacing[0]) if len(spacing) == 1 else 0
    made = str(gps_to_utc(np.array([created]))[0].astype("datetime64[m]")).replace("T", " ")
    head = [
        _line(f"{1.0:8.1f}{'':12s}{'IONOSPHERE MAPS':20s}{'GNSS':20s}", "IONEX VERSION / TYPE"),
        _line(f"{program[:20]:20s}{'':20s}{made:20s}", "PGM / RUN BY / DATE"),
        *(_line(description[k : k + 60], "DESCRIPTION") for k in range(0, len(description), 60)),
        *(_line(part, "COMMENT") for part in wrap(comment, 60)),
        _line(_six(times[0]), "EPOCH OF FIRST MAP"),
        _line(_six(times[-1]), "EPOCH OF LAST MAP"),
        _line(f"{interval:6d}", "INTERVAL"),
        _line(f"{len(times):6d}", "# OF MAPS IN FILE"),
        _line("  COSZ", "MAPPING FUNCTION"),
        _line(f"{0.0:8.1f}", "ELEVATION CUTOFF"),
        _line("", "OBSERVABLES USED"),
        _line(f"{base_radius_km:8.1f}", "BASE RADIUS"),
        _line(f"{2:6d}", "MAP DIMENSION"),
        _line(f"  {shell_height_km:6.1f}{shell_height_km:6.1f}{0.0:6.1f}", "HGT1 / HGT2 / DHGT"),
        _line(f"  {fields.lats[-1]:6.1f}{fields.lats[0]:6.1f}{-lat_step:6.1f}", "LAT1 / LAT2 / DLAT"),
        _line(f"  {fields.lons[0]:6.1f}{fields.lons[-1]:6.1f}{lon_step:6.1f}", "LON1 / LON2 / DLON"),
        _line(f"{-1:6d}", "EXPONENT"),
        *(_auxiliary(biases) if biases is not None and len(biases) else ()),
        _line("", "END OF HEADER"),
    ]
    body: list[str] = []
    for kind, layer in (("TEC", fields.vtec), ("RMS", fields.vtec_sigma)):
        for place, time in enumerate(times):
            body.append(_line(f"{place + 1:6d}", f"START OF {kind} MAP"))
            body.append(_line(_six(time), "EPOCH OF CURRENT MAP"))
            for row in range(len(fields.lats) - 1, -1, -1):
                body.append(
                    _line(
                        f"  {fields.lats[row]:6.1f}{fields.lons[0]:6.1f}{fields.lons[-1]:6.1f}{lon_step:6.1f}"
                        f"{shell_height_km:6.1f}",
                        "LAT/LON1/LON2/DLON/H",
                    )
                )
                tenths = np.rint(layer[place, row].astype(np.float64) * 10)
                told = np.where(np.isfinite(tenths) & (np.abs(tenths) < _NONE), tenths, _NONE).astype(np.int64)
                body.extend(
                    "".join(f"{value:5d}" for value in told[k : k + _PER_LINE]) for k in range(0, len(told), _PER_LINE)
                )
            body.append(_line(f"{place + 1:6d}", f"END OF {kind} MAP"))
    return "\n".join([*head, *body, _line("", "END OF FILE"), ""])


_SYSTEM_WORDS = {"G": "GPS", "R": "GLONASS", "E": "Galileo", "C": "BeiDou"}
_BLOCK = "DIFFERENTIAL CODE BIASES"


def _auxiliary(biases: Biases) -> list[str]:
    """The block of code biases [ns]: satellites of each constellation's most used pair, receivers of every pair.

    The satellites of a pair have zero mean, as is the use in such files; the level goes to the receivers.  A receiver
    with a bias per channel (GLONASS) has the mean of them here.  The names are cut to four letters.
    """
    pairs: dict[tuple[str, str, str], dict[str, dict[str, list[tuple[float, float]]]]] = {}
    for row in np.flatnonzero((biases.code2 != "") & np.isfinite(biases.value_ns)):
        pair = (str(biases.system[row]), str(biases.code1[row]), str(biases.code2[row]))
        name = str(biases.name[row])[:4] if biases.kind[row] == "receiver" else str(biases.name[row])
        of_pair = pairs.setdefault(pair, {"satellite": {}, "receiver": {}})
        of_pair[str(biases.kind[row])].setdefault(name, []).append(
            (float(biases.value_ns[row]), float(biases.sigma_ns[row]))
        )
    lines = [_line(_BLOCK, "START OF AUX DATA")]
    for system in sorted({pair[0] for pair in pairs} & set(_SYSTEM_WORDS)):
        own = {pair: of_pair for pair, of_pair in pairs.items() if pair[0] == system}
        main = max(own, key=lambda pair: (len(own[pair]["satellite"]), pair))
        told = f"Reference observables for {_SYSTEM_WORDS[system]:7s}: {main[1]}-{main[2]}"
        lines.append(_line(told, "COMMENT"))
        for pair, of_pair in sorted(own.items(), key=lambda item: item[0] != main):
            level = float(np.mean([values[0][0] for values in of_pair["satellite"].values()] or [0.0]))
            if pair == main:
                for name, values in sorted(of_pair["satellite"].items()):
                    value, spread = values[0][0] - level, values[0][1]
                    lines.append(_line(f"   {name:3.3s}{value:10.3f}{_spread(spread)}", "PRN / BIAS / RMS"))
            for name, values in sorted(of_pair["receiver"].items()):
                lines.append(_line(f"Reference observables for {name} ({system}): {pair[1]}-{pair[2]}", "COMMENT"))
                value = float(np.mean([one[0] for one in values])) + level
                spread = max(one[1] for one in values)
                text = f"   {system}  {name:4.4s} {'':15s}{value:10.3f}{_spread(spread)}"
                lines.append(_line(text, "STATION / BIAS / RMS"))
    return [*lines, _line(_BLOCK, "END OF AUX DATA")]


def _spread(sigma: float) -> str:
    """F10.3 of a sigma, blank where it is not known."""
    return f"{sigma:10.3f}" if np.isfinite(sigma) else " " * 10


def _line(text: str, label: str) -> str:
    """A labelled line."""
    return f"{text[:60]:60s}{label:20s}"


def _six(time: np.datetime64) -> str:
    """6I6 of an epoch."""
    day, clock = str(time.astype("datetime64[s]")).split("T")
    return "".join(f"{int(part):6d}" for part in (*day.split("-"), *clock.split(":")))


def _step(axis: Floats, what: str) -> float:
    """Step of an axis, or Refused when the format cannot hold it."""
    steps = np.diff(axis)
    step = float(steps[0]) if len(steps) else 0.0
    tenths = np.concatenate([axis, steps]) * 10
    if not len(steps) or np.max(np.abs(steps - step)) > 1e-6 or np.max(np.abs(tenths - np.rint(tenths))) > 1e-6:
        raise Refused(
            f"IONEX: the {what} from {axis[0]:g} to {axis[-1]:g} are not two or more nodes on equal steps of whole "
            "tenths of a degree; choose a grid step like 0.5",
            name="step_deg", value=step, allowed="multiples of 0.1 degrees",
        )  # fmt: skip
    return step
