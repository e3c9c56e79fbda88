"""Answers about maps that were made already, kept in memory: many look at the same hours of the same day.

A version of a day never changes, so an answer about it stays good; only which version is shown is asked for anew each
time.  Kept packed as browsers take it.  Never keeps more than it was told, and nothing on disk.
"""

import gzip
import threading
from collections import OrderedDict
from collections.abc import Callable, Hashable
from dataclasses import dataclass

from fastapi import Request
from fastapi.responses import Response

_LEVEL = 5
_WORTH_PACKING = 1024


@dataclass(frozen=True)
class _Kept:
    plain: bytes
    packed: bytes
    media_type: str


class Answers:
    """The answers asked for last, up to so many bytes; for any number of threads."""

    def __init__(self, most_bytes: int = 64 * 2**20) -> None:
        self._most, self._size = most_bytes, 0
        self._kept: OrderedDict[Hashable, _Kept] = OrderedDict()
        self._lock = threading.Lock()
        self.made = 0

    def answer(self, request: Request, key: Hashable, make: Callable[[], Response]) -> Response:
        """The answer kept under a key, or made now and kept; packed where the request takes that."""
        with self._lock:
            there = self._kept.get(key)
            if there is not None:
                self._kept.move_to_end(key)
        if there is None:
            made = make()
            there = _Kept(bytes(made.body), gzip.compress(bytes(made.body), _LEVEL, mtime=0), str(made.media_type))
            self._keep(key, there)
        if len(there.plain) < _WORTH_PACKING or "gzip" not in request.headers.get("accept-encoding", ""):
            return Response(there.plain, media_type=there.media_type, headers={"Vary": "Accept-Encoding"})
        headers = {"Content-Encoding": "gzip", "Vary": "Accept-Encoding"}
        return Response(there.packed, media_type=there.media_type, headers=headers)

    def _keep(self, key: Hashable, one: _Kept) -> None:
        with self._lock:
            self.made += 1
            before = self._kept.pop(key, None)
            self._size -= _bytes(before) if before is not None else 0
            self._kept[key] = one
            self._size += _bytes(one)
            while self._size > self._most and self._kept:
                _, oldest = self._kept.popitem(last=False)
                self._size -= _bytes(oldest)


def _bytes(one: _Kept) -> int:
    return len(one.plain) + len(one.packed)
