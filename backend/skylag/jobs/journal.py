"""What happens, one JSON object per line: for people who search and machines that collect.

Each line has `time` (UTC), `event` and plain facts.  Lines of several threads do not mix.  Never holds a key or a path
of a request's body.
"""

import json
import threading
from collections.abc import Callable
from typing import Any, TextIO

import numpy as np


class Journal:
    """A log: call it with an event and its facts."""

    def __init__(self, stream: TextIO, clock: Callable[[], np.datetime64]) -> None:
        self._stream, self._clock, self._lock = stream, clock, threading.Lock()

    def __call__(self, event: str, **facts: Any) -> None:
        """One line.  A value JSON does not know is written as its text."""
        time = f"{np.datetime_as_string(self._clock(), unit='ms')}Z"
        line = json.dumps({"time": time, "event": event, **facts}, ensure_ascii=False, default=str)
        with self._lock:
            self._stream.write(line + "\n")
            self._stream.flush()
