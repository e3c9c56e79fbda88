"""Navigation texts for tests, written line by line from numbers: the mirror of what the reader must undo."""

import numpy as np

from skylag.tables import Ephemerides

# Place of the KEPLER columns among the broadcast orbit values, counted from 0 (RINEX 3.05, table A6).
AT = {"sqrt_a": 7, "e": 5, "i0": 12, "idot": 16, "omega0": 10, "omega_dot": 15, "omega": 14, "m0": 3, "delta_n": 2,
      "cuc": 4, "cus": 6, "crc": 13, "crs": 1, "cic": 9, "cis": 11, "toe_s": 8}  # fmt: skip


def header(version: float, kind: str = "N", system: str = "M", extra: tuple[tuple[str, str], ...] = ()) -> str:
    """Header lines; kind is the letter of the file type."""
    lines = [f"{version:9.2f}{'':11s}{kind + ': NAVIGATION DATA':20s}{system:20s}RINEX VERSION / TYPE"]
    lines += [f"{text:60s}{label}" for text, label in (*extra, ("", "END OF HEADER"))]
    return "\n".join(lines) + "\n"


def number(value: float | None, letter: str = "E") -> str:
    """D19.12; blank for None."""
    return " " * 19 if value is None else f"{value:19.12E}".replace("E", letter)


def orbit_values(kepler: dict[str, float], count: int = 28, **more: float | None) -> list[float | None]:
    """The broadcast orbit values of a record; `more` are given as v20=..., by place."""
    values: list[float | None] = [0.0] * count
    for name, place in AT.items():
        values[place] = kepler[name]
    for name, value in more.items():
        values[int(name[1:])] = value
    return values


def record(
    satellite: str, epoch: str, values: list[float | None], version: float = 3.05, letter: str = "E",
    clock: tuple[float, float, float] = (1e-5, 2e-12, 0.0), heading: str = "",
) -> str:  # fmt: skip
    """One record; epoch like '2020-06-25 12:00:00'; heading is the message of a RINEX 4 record."""
    day, time = epoch.split(" ")
    if version < 3:
        year, month, date = (int(part) for part in day.split("-"))
        hour, minute, second = (float(part) for part in time.split(":"))
        first = f"{int(satellite[1:]):2d} {year % 100:02d} {month:2d} {date:2d} {hour:2.0f} {minute:2.0f}{second:5.1f}"
        indent = 3
    else:
        first = f"{satellite} {day.replace('-', ' ')} {time.replace(':', ' ')}"
        indent = 4
    lines = [f"> EPH {satellite} {heading}"] if heading else []
    lines.append(first + "".join(number(value, letter) for value in clock))
    for start in range(0, len(values), 4):
        lines.append(" " * indent + "".join(number(value, letter) for value in values[start : start + 4]))
    return "\n".join(lines) + "\n"


def kepler_of(table: Ephemerides, row: int) -> dict[str, float]:
    """KEPLER columns of a row by name."""
    return dict(zip(Ephemerides.KEPLER, table.kepler[row].tolist(), strict=True))


# An invented satellite: a plausible orbit of 26 560 km.
INVENTED = {
    "sqrt_a": 5153.7, "e": 0.0123, "i0": 0.958, "idot": 1.1e-10, "omega0": -0.55, "omega_dot": -8.1e-9, "omega": -2.3,
    "m0": 1.7, "delta_n": 4.9e-9, "cuc": 1.2e-6, "cus": 4.4e-6, "crc": 280.5, "crs": 20.25, "cic": -3.0e-8,
    "cis": 9.0e-8, "toe_s": 388_800.0,
}  # fmt: skip
GLONASS_STATE_KM = (24328.43896484, -0.7724418640137, 4.656612873077e-9, -5366.442871094, 0.09229373931885,
                    -1.862645149231e-9, 5610.807617188, 3.458779335022, 1.862645149231e-9)  # fmt: skip
NOON = np.datetime64("2020-06-25T12:00:00", "ns")
