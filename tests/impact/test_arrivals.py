"""Foretold arrivals as facts a day is kept with."""

import json

import numpy as np

from skylag.events import Arrival
from skylag.impact import arrivals
from skylag.tables import Flag

AT = np.datetime64("2031-05-11T05:00:00", "ns")
NEVER = np.datetime64("NaT", "ns")


def test_what_is_kept_is_what_was_told() -> None:
    told = (
        Arrival(0, "a", AT, AT + np.timedelta64(900, "s"), 120.4, AT + np.timedelta64(950, "s"), True),
        Arrival(0, "b", AT, AT + np.timedelta64(1800, "s"), 300.0, AT + np.timedelta64(2900, "s"), False),
        Arrival(1, "a", AT, AT + np.timedelta64(600, "s"), 60.0, NEVER, None),
    )
    kept = arrivals.facts(told)
    assert (kept["told"], kept["checked"], kept["came_true"]) == (3, 2, 1)
    again = arrivals.of_facts({"arrivals": json.loads(json.dumps(kept))})
    assert [one.came_true for one in again] == [True, False, None]
    assert [one.sigma_s for one in again] == [120.0, 300.0, 60.0]
    for before, after in zip(told, again, strict=True):
        assert (before.front, before.place, before.made, before.expected) == (
            after.front, after.place, after.made, after.expected
        )  # fmt: skip
        assert before.seen == after.seen or (np.isnat(before.seen) and np.isnat(after.seen))


def test_days_kept_without_them_have_none() -> None:
    assert arrivals.of_facts({}) == () == arrivals.of_facts({"arrivals": None})
    assert arrivals.facts(()) == {"told": 0, "checked": 0, "came_true": 0, "each": []}


def test_fronts_are_numbered_among_the_flags() -> None:
    def flag(kind: str) -> Flag:
        return Flag(AT, AT, 0.0, 0.0, kind, 1.0, 1.0, 1.0, 1.0, "strained", "seen")

    assert arrivals.flag_rows([flag("fault"), flag("front"), flag("slope"), flag("front")]) == [1, 3]
