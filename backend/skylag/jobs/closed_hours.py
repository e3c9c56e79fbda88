"""Maps of hours that were made already, kept in memory while a day goes on, so that only what changed is made again.

What comes in late moves the biases of the whole day a little and the levels of arcs that go on, so no hour's inputs
stay the same to the last digit.  An hour is kept while what it is made from stays near what its maps were made from:
that, and not the step before, is what is compared, so that small changes never add up unseen.  How near is told by
`Nearness`; a day that is final is made whole.  Never changes what was made.
"""

import threading
from dataclasses import dataclass
from typing import Any

import numpy as np

from skylag.ionosphere.covariance import Epoch
from skylag.ionosphere.field import Hour
from skylag.tables import Floats


@dataclass(frozen=True)
class Nearness:
    """How far the rays of an hour may move before its maps are made again.

    most_tecu  in 95 of 100 rays content and each part of its sigma move by less: 0.1 TECU is 16 mm of delay, a tenth
               of what the maps' sigma is at best
    share      of rays that must
    of_sigma   the content of no ray moves by more than so much of its own sigma
    """

    most_tecu: float = 0.1
    share: float = 0.95
    of_sigma: float = 1.0


class ClosedHours:
    """The hours of days that go on, as they were last made; any thread may keep and forget."""

    def __init__(self, nearness: Nearness | None = None) -> None:
        self._nearness = nearness or Nearness()
        self._kept: dict[tuple[str, np.datetime64], tuple[Hour, Any]] = {}
        self._lock = threading.Lock()
        self.age = 0  # how often was forgotten

    def given(self, use: str, hour: Hour) -> Any:
        """What was made of an hour that is near this one, for a use; None where it must be made."""
        with self._lock:
            there = self._kept.get(_key(use, hour))
        return there[1] if there is not None and near(there[0], hour, self._nearness) else None

    def keep(self, use: str, hour: Hour, made: Any, age: int | None = None) -> None:
        """Keep what was made of an hour, in place of what was there.

        age  the `age` when it was begun: what has been forgotten since does not come back
        """
        with self._lock:
            if age is None or age == self.age:
                self._kept[_key(use, hour)] = (hour, made)

    def forget(self, day: np.datetime64) -> None:
        """Let go of the hours of a day and of all before it."""
        with self._lock:
            self.age += 1
            self._kept = {key: value for key, value in self._kept.items() if key[1].astype("datetime64[D]") > day}


def near(before: Hour, now: Hour, nearness: Nearness) -> bool:
    """Whether maps made of an hour still stand for another: same places, epochs, rays and choices, contents near."""
    same = (
        before.choices == now.choices and before.background == now.background
        and all(np.array_equal(getattr(before, name), getattr(now, name)) for name in ("epochs", "lat", "lon"))
        and all(_same_rays(*pair) for pair in zip(before.parts, now.parts, strict=True))
    )  # fmt: skip
    if not same:
        return False
    old, new = _sizes(before), _sizes(now)
    change = np.abs(new - old)
    if not change.size:
        return True
    close = (change <= nearness.most_tecu).mean(axis=0)
    sigma = np.sqrt(np.sum(old[:, 1:] ** 2, axis=1))
    return bool(np.all(close >= nearness.share) and np.all(change[:, 0] <= nearness.of_sigma * sigma))


def _same_rays(before: Epoch | None, now: Epoch | None) -> bool:
    """Whether two epochs hold the same lines of sight, at the same places."""
    if before is None or now is None:
        return before is None and now is None
    return all(np.array_equal(getattr(before, name), getattr(now, name)) for name in ("x", "y", "receiver"))


def _sizes(hour: Hour) -> Floats:
    """Content and the parts of its sigma [TECU] of all rays of an hour: own, arc, biases, leanings; (rays, 6)."""
    columns = []
    for part in hour.parts:
        if part is not None:
            a, b = part.rows[:, 0], part.rows[:, 1]
            variance = hour.covariance[a, a] + hour.covariance[b, b] + 2.0 * hour.covariance[a, b]
            biases = np.abs(part.factor) * np.sqrt(np.maximum(variance, 0.0))
            columns.append(np.column_stack([part.vtec, part.own, part.arc, biases, part.leanings]))
    return np.concatenate(columns) if columns else np.zeros((0, 6))


def _key(use: str, hour: Hour) -> tuple[str, np.datetime64]:
    return use, hour.epochs[0].astype("datetime64[h]")
