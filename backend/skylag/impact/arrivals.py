"""Arrivals of fronts at sites as plain facts that a day is kept with: what was foretold, when, and what came of it.

Times in the facts are GPS time, to the second.  Never foretells anything: see `ionosphere.fronts.arrivals`.
"""

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from skylag.events import Arrival
from skylag.tables import Flag


def facts(arrivals: Sequence[Arrival]) -> dict[str, Any]:
    """What a day is kept with: how many were told, how many could be checked and came true, and each of them."""
    checked = [one for one in arrivals if one.came_true is not None]
    return {
        "told": len(arrivals),
        "checked": len(checked),
        "came_true": sum(1 for one in checked if one.came_true),
        "each": [
            {
                "front": one.front, "site": one.place, "made": _text(one.made), "expected": _text(one.expected),
                "sigma_s": round(float(one.sigma_s)), "seen": _text(one.seen), "came_true": one.came_true,
            }
            for one in arrivals
        ],
    }  # fmt: skip


def of_facts(counts: Mapping[str, Any]) -> tuple[Arrival, ...]:
    """The arrivals among the facts of a kept day; none where the day was kept without them."""
    kept = counts.get("arrivals") or {}
    return tuple(
        Arrival(
            int(row["front"]), str(row["site"]), _time(row["made"]), _time(row["expected"]), float(row["sigma_s"]),
            _time(row["seen"]), row["came_true"],
        )
        for row in kept.get("each", ())
    )  # fmt: skip


def flag_rows(flags: Sequence[Flag]) -> list[int]:
    """Row numbers of the flags that are fronts, in the order in which fronts are numbered: by their start."""
    return [number for number, flag in enumerate(flags) if flag.kind == "front"]


def _text(time: np.datetime64) -> str | None:
    return None if np.isnat(time) else str(time.astype("datetime64[s]"))


def _time(text: str | None) -> np.datetime64:
    return np.datetime64("NaT", "ns") if text is None else np.datetime64(text, "ns")
