"""What the header lines of a RINEX observation file say, at its top or in the middle of it.

Header lines are taken in groups: the top of the file is one, each block behind an event is another; a group changes
what was said before it.  Never looks at an observation.
"""

import re
from collections.abc import Sequence
from dataclasses import dataclass, field, replace

from skylag.tables import Problem

# The first twenty characters behind column 60; RINEX 2.11 table A1, RINEX 3.05 table A2, RINEX 4.02 table A2.
LABELS = frozenset({
    "RINEX VERSION / TYPE", "PGM / RUN BY / DATE", "COMMENT", "MARKER NAME", "MARKER NUMBER", "MARKER TYPE",
    "OBSERVER / AGENCY", "REC # / TYPE / VERS", "ANT # / TYPE", "APPROX POSITION XYZ", "ANTENNA: DELTA H/E/N",
    "ANTENNA: DELTA X/Y/Z", "ANTENNA: PHASECENTER", "ANTENNA: B.SIGHT XYZ", "ANTENNA: ZERODIR AZI",
    "ANTENNA: ZERODIR XYZ", "CENTER OF MASS: XYZ", "WAVELENGTH FACT L1/2", "# / TYPES OF OBSERV",
    "SYS / # / OBS TYPES", "SIGNAL STRENGTH UNIT", "INTERVAL", "TIME OF FIRST OBS", "TIME OF LAST OBS",
    "RCV CLOCK OFFS APPL", "SYS / DCBS APPLIED", "SYS / PCVS APPLIED", "SYS / SCALE FACTOR", "SYS / PHASE SHIFT",
    "SYS / PHASE SHIFTS", "GLONASS SLOT / FRQ #", "GLONASS COD/PHS/BIS", "GLONASS COD/PHS/BIS#", "LEAP SECONDS",
    "# OF SATELLITES", "PRN / # OF OBS", "END OF HEADER", "DOI", "LICENSE OF USE", "STATION INFORMATION",
})  # fmt: skip

SYSTEMS = "GRECJSI"  # every letter a satellite may have
CARRIED = "CEGJR"  # the constellations that are read, in the order of their names
TIME_SYSTEMS = ("GPS", "GLO", "GAL", "BDT", "QZS", "IRN", "UTC")
_TIME_SYSTEM_OF = {"R": "GLO", "E": "GAL", "C": "BDT", "J": "QZS", "I": "IRN"}

# RINEX 2 names a band and a kind of code, RINEX 3 a band and a tracking.  P codes of GPS are named W: under
# anti-spoofing, that is since 1994, they are tracked without the key.  C2, C5 and all of Galileo and QZSS beyond L1 do
# not say whether pilot, data or both were tracked: X, unless a conversion comment in the header tells.  The letters A
# to D of RINEX 2.12 (from memory) are C/A, L1C, L2C and GLONASS L2 C/A.
_CODE_OF_2: dict[str, dict[str, str]] = {
    "G": {"C1": "C1C", "P1": "C1W", "C2": "C2X", "P2": "C2W", "C5": "C5X", "CA": "C1C", "CB": "C1X", "CC": "C2X"},
    "R": {"C1": "C1C", "P1": "C1P", "C2": "C2C", "P2": "C2P", "CA": "C1C", "CD": "C2C"},
    "E": {"C1": "C1X", "C5": "C5X", "C6": "C6X", "C7": "C7X", "C8": "C8X"},
    "C": {"C2": "C2I", "C1": "C2I", "C6": "C6I", "C7": "C7I"},
    "J": {"C1": "C1C", "C2": "C2X", "C5": "C5X", "C6": "C6X", "CA": "C1C", "CB": "C1X", "CC": "C2X"},
}
# The code whose tracking a RINEX 2 phase or strength takes over: the first of these that the file declares.  Semi-
# codeless L2 comes with P2, L1 with the C/A code (RINEX 2.11 does not say).
_PHASE_GOES_WITH: dict[str, dict[str, tuple[str, ...]]] = {
    "G": {"1": ("C1", "CA", "P1"), "2": ("P2", "C2", "CC"), "5": ("C5",), "A": ("CA",), "B": ("CB",), "C": ("CC",)},
    "R": {"1": ("C1", "CA", "P1"), "2": ("P2", "C2", "CD"), "A": ("CA",), "D": ("CD",)},
    "E": {"1": ("C1",), "5": ("C5",), "6": ("C6",), "7": ("C7",), "8": ("C8",)},
    "C": {"1": ("C1",), "2": ("C2",), "6": ("C6",), "7": ("C7",)},
    "J": {"1": ("C1", "CA"), "2": ("C2", "CC"), "5": ("C5",), "6": ("C6",), "A": ("CA",), "B": ("CB",), "C": ("CC",)},
}
_CONVERSION = re.compile(r"^\s*([GRECJ]) ([CLS][1-9][A-Z]) -> ([CPLS][1-9A-D])\s*$")


@dataclass
class Header:
    """The state of the header at some line of the file."""

    version: float = 0.0
    system: str = "G"
    types: dict[str, list[str]] = field(default_factory=dict)  # system, "" for RINEX 2 -> observation types in order
    scale: dict[tuple[str, str], float] = field(default_factory=dict)  # (system, type) -> divide by
    conversion: dict[tuple[str, str], str] = field(default_factory=dict)  # (system, RINEX 2 type) -> RINEX 3 code
    marker: str = ""
    marker_number: str = ""
    receiver_type: str = ""
    antenna: str = ""
    position_m: tuple[float, float, float] | None = None
    interval_s: float | None = None
    time_system: str = ""
    channels: dict[str, int] = field(default_factory=dict)
    squared: dict[str, set[str]] = field(default_factory=dict)  # band -> satellites, "" for all, of half wavelengths
    biases_removed: dict[str, str] = field(default_factory=dict)  # system -> what the header says removed them
    clock_applied: bool = False
    _open: str = ""  # the system, or "slots", whose continuation lines are being read
    _to_come: int = 0  # types announced and not yet listed
    _announced: str = ""  # label of the list of types being read

    def copy(self) -> "Header":
        """A state to change without touching this one."""
        return replace(
            self, types=dict(self.types), scale=dict(self.scale), channels=dict(self.channels),
            squared={band: set(who) for band, who in self.squared.items()}, biases_removed=dict(self.biases_removed),
            conversion=dict(self.conversion),
        )  # fmt: skip

    def decoding(self) -> tuple[object, ...]:
        """What decides how the columns of a record are read."""
        return self.types, self.scale, self.squared, self.conversion

    @property
    def time_scale(self) -> str:
        """The time system of the epochs: as stated, else the own one of a file of a single constellation, else GPS."""
        return self.time_system or _TIME_SYSTEM_OF.get(self.system, "GPS")

    def names(self, system: str) -> list[str]:
        """RINEX 3 names of the columns of a system, in file order; "" for a column that has none."""
        if self.version >= 3:
            old_beidou = system == "C"
            return [_beidou(name, self.version) if old_beidou else name for name in self.types.get(system, [])]
        return [self._name_of_2(system, name) for name in self.types.get("", [])]

    def _name_of_2(self, system: str, name: str) -> str:
        if (system, name) in self.conversion:
            return self.conversion[system, name]
        codes = _CODE_OF_2.get(system, {})
        if name[0] in "CP":
            return codes.get(name, "")
        if name[0] not in "LS":
            return ""
        declared = self.types.get("", [])
        partners = _PHASE_GOES_WITH.get(system, {}).get(name[1:], ())
        partner = next((p for p in partners if p in declared), partners[0] if partners else "")
        return name[0] + codes[partner][1:] if partner else ""


def _beidou(name: str, version: float) -> str:
    """B1I was band 1 in RINEX 3.02; later band 1 is B1C, which has no I and no Q."""
    if name[1:] in ("1I", "1Q") or (name[1:] == "1X" and version < 3.025):
        return name[0] + "2" + name[2:]
    return name


def label_of(line: str) -> str:
    """The header label of a line, "" where there is none."""
    label = line[60:80].strip()
    return label if label in LABELS else ""


def absorb(header: Header, lines: Sequence[tuple[int, str]], path: str) -> list[Problem]:
    """Take a group of header lines, given as (line number from 1, text), into the state; problems met."""
    problems: list[Problem] = []
    header._open = ""
    header._to_come = 0
    for number, line in lines:
        if header._announced and not line[60:80].startswith(header._announced):
            _check_complete(header, number - 1, path, problems)
        label = label_of(line)
        if not label:
            if line.strip():
                problems.append(Problem(path, number, f"no header label in columns 61 to 80: {line[:60].strip()!r}"))
            continue
        try:
            said = _take(header, label, line)
        except ValueError as error:
            said = f"{label}: {error}"
        if said:
            problems.append(Problem(path, number, said))
    if header._announced:
        _check_complete(header, lines[-1][0], path, problems)
    return problems


def _check_complete(header: Header, number: int, path: str, problems: list[Problem]) -> None:
    """Behind a list of types: whether all that were announced were listed."""
    if header._to_come:
        what = f"{header._announced}: {header._to_come} types fewer are listed than announced"
        problems.append(Problem(path, number, what, "took those that are"))
    header._announced = ""


def _take(header: Header, label: str, line: str) -> str:
    """One line into the state; a sentence where something about it is wrong."""
    body = line[:60]
    if label == "COMMENT":
        told = _CONVERSION.match(body)
        if told:
            header.conversion[told[1], told[3]] = told[2]
    elif label == "RINEX VERSION / TYPE":
        header.version = float(body[:9])
        header.system = body[40:41].strip() or "G"
    elif label == "MARKER NAME":
        header.marker = body.strip()
    elif label == "MARKER NUMBER":
        header.marker_number = body[:20].strip()
    elif label == "REC # / TYPE / VERS":
        header.receiver_type = body[20:40].strip()
    elif label == "ANT # / TYPE":
        header.antenna = body[20:40].strip()
    elif label == "APPROX POSITION XYZ":
        x, y, z = float(body[:14]), float(body[14:28]), float(body[28:42])
        if not all(abs(value) < 1e8 for value in (x, y, z)):
            return f"{label}: {body[:42].strip()} is no position near the Earth"
        header.position_m = (x, y, z) if (x, y, z) != (0.0, 0.0, 0.0) else None
    elif label == "INTERVAL":
        value = float(body[:10])
        header.interval_s = value if 0 < value < 86_400 else None
    elif label == "TIME OF FIRST OBS":
        system = body[48:51].strip().upper()
        if system and system not in TIME_SYSTEMS:
            return f"{label}: unknown time system {system!r}; taken as GPS time"
        header.time_system = system
    elif label == "RCV CLOCK OFFS APPL":
        header.clock_applied = body[:6].strip() == "1"
    elif label in ("SYS / # / OBS TYPES", "# / TYPES OF OBSERV"):
        return _take_types(header, label, body)
    elif label == "SYS / SCALE FACTOR":
        return _take_scale(header, body)
    elif label == "GLONASS SLOT / FRQ #":
        for k in range(8):
            slot, channel = body[4 + 7 * k : 7 + 7 * k], body[8 + 7 * k : 10 + 7 * k]
            if slot.strip():
                if not -7 <= int(channel) <= 13:
                    return f"{label}: {slot} cannot have channel {channel.strip()}"
                header.channels["R" + f"{int(slot[1:]):02d}"] = int(channel)
    elif label == "WAVELENGTH FACT L1/2":
        _take_wavelengths(header, body)
    elif label == "SYS / DCBS APPLIED" and body[2:].strip():
        header.biases_removed[body[:1].strip()] = " ".join(body[2:].split())
    return ""


def _take_types(header: Header, label: str, body: str) -> str:
    if label == "# / TYPES OF OBSERV":
        width, first, key = 6, body[:6].strip(), ""
        names = [body[start + 4 : start + 6].strip() for start in range(6, 60, width)]
    else:
        first, key = body[3:6].strip(), body[:1].strip()
        names = [body[start : start + 3].strip() for start in range(7, 59, 4)]
    said = ""
    if first and header._to_come and header._announced:
        said = f"{label}: {header._to_come} types of {header._open} fewer are listed than announced"
    if first:
        header._to_come = int(first)
        header._announced = label
        header._open = key or "all"
        header.types[key] = []
        if not 0 < header._to_come < 1000:
            header._to_come = min(max(header._to_come, 0), 999)
            said = f"{label}: {first} types cannot be"
    elif not header._open:
        return f"{label}: continues a list that did not begin"
    key = "" if header._open == "all" else header._open
    found = [name for name in names if name][: header._to_come]
    header._to_come -= len(found)
    header.types[key] = [*header.types[key], *found]
    return said


def _take_scale(header: Header, body: str) -> str:
    """RINEX 3.05 table A2: stored values are the true ones times 1, 10, 100 or 1000."""
    if body[:1].strip():
        header._open = body[:1]
        factor = float(body[2:6])
        if factor not in (1.0, 10.0, 100.0, 1000.0):
            header._open = ""
            return f"SYS / SCALE FACTOR: {body[2:6].strip()} is none of 1, 10, 100, 1000"
        header.scale[header._open, "factor"] = factor
        header._to_come = int(body[8:10].strip() or 0)
        if header._to_come == 0:
            header.scale[header._open, "all"] = factor
    if not header._open:
        return "SYS / SCALE FACTOR: continues a list that did not begin"
    for start in range(11, 59, 4):
        if name := body[start : start + 3].strip():
            header.scale[header._open, name] = header.scale[header._open, "factor"]
    return ""


def _take_wavelengths(header: Header, body: str) -> None:
    """RINEX 2.11 table A1: factor 2 is half wavelengths, from a squaring receiver; with satellites, for those only."""
    satellites = {body[start + 3 : start + 6].strip().replace(" ", "0") for start in range(18, 60, 6)} - {""}
    for band, text in (("1", body[:6]), ("2", body[6:12])):
        who = header.squared.setdefault(band, set())
        if text.strip() == "2":
            who |= satellites or {""}
        elif not satellites:
            who.clear()
        else:
            who -= satellites
