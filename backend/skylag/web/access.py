"""Who may ask and who may change: the gate before all routes.

On the loopback address everybody of this machine may do all; elsewhere changing needs a key, and reading too where that
is chosen.  A question that a file goes with is reading: what is sent is not kept.  A page of another address can change
nothing through a visitor's browser.  Counts what passes, for /metrics.  Never keeps a key, and never reads a body.
"""

import re
import threading
import time
from collections import Counter
from collections.abc import Awaitable, Callable, MutableMapping
from dataclasses import dataclass, field
from typing import Any
from urllib.parse import urlsplit

from starlette.concurrency import run_in_threadpool
from starlette.datastructures import Headers
from starlette.responses import Response

from skylag.archive import Archive
from skylag.errors import SkylagError
from skylag.jobs import guard
from skylag.jobs.guard import Limits, Rates
from skylag.web import payloads

Scope = MutableMapping[str, Any]
Receive = Callable[[], Awaitable[MutableMapping[str, Any]]]
Send = Callable[[MutableMapping[str, Any]], Awaitable[None]]

LOOPBACK = ("127.0.0.1", "::1", "localhost")
_READING = ("GET", "HEAD", "OPTIONS")
_ADMIN = ("/api/pins/",)
_WITH_A_FILE = re.compile(r"/api/days/[^/]+/[^/]+/beside")  # questions that are sent by POST and change nothing
_OPEN_ALWAYS = ("/healthz",)  # whoever keeps the server running asks without a key
_BUCKETS_S = (0.005, 0.01, 0.025, 0.05, 0.1, 0.3, 1.0, 3.0, 10.0)


@dataclass(frozen=True)
class Access:
    """What is open and what needs a key.

    writing   "open", "key" or "nobody"; reading "open" or "key"
    hosts     names under which changes are taken; any where empty
    limits    on what is sent; rates per second and at once, per caller: changes, questions, questions that a file goes
              with, wrong keys
    """

    writing: str = "nobody"
    reading: str = "open"
    hosts: tuple[str, ...] = ()
    limits: Limits = field(default_factory=Limits)
    changes: tuple[float, float] = (20.0, 2500.0)  # a whole network's day of files at once, and then twenty a second
    questions: tuple[float, float] = (200.0, 2000.0)
    with_a_file: tuple[float, float] = (0.1, 10.0)  # each costs seconds of work
    wrong_keys: tuple[float, float] = (0.2, 10.0)


def for_host(host: str, reading: str = "open") -> Access:
    """Open on a loopback address, with keys on any other."""
    if host in LOOPBACK:
        return Access(writing="open", reading="open", hosts=LOOPBACK)
    return Access(writing="key", reading=reading)


@dataclass
class Traffic:
    """What passed the gate, since the start."""

    answers: Counter[tuple[str, int]] = field(default_factory=Counter)  # method, status -> count
    buckets: Counter[float] = field(default_factory=Counter)  # seconds, at most -> count
    seconds: float = 0.0
    turned_away: Counter[str] = field(default_factory=Counter)
    lock: threading.Lock = field(default_factory=threading.Lock)

    def note(self, method: str, status: int, seconds: float) -> None:
        """One answer."""
        with self.lock:
            self.answers[(method, status)] += 1
            self.seconds += seconds
            for limit in _BUCKETS_S:
                if seconds <= limit:
                    self.buckets[limit] += 1

    @property
    def limits_s(self) -> tuple[float, ...]:
        """The limits of the buckets."""
        return _BUCKETS_S


class _TurnedAway(Exception):
    """A request that goes no further."""

    def __init__(self, status: int, kind: str, sentence: str, **headers: str) -> None:
        super().__init__(sentence)
        self.status, self.kind, self.sentence, self.headers = status, kind, sentence, headers


class Gate:
    """ASGI middleware: asks each request for what it needs before any route sees it."""

    def __init__(self, app: Any, archive: Archive, access: Access, traffic: Traffic) -> None:
        self._app, self._archive, self._access, self._traffic = app, archive, access, traffic
        self._changes, self._questions = Rates(*access.changes), Rates(*access.questions)
        self._with_a_file, self._wrong_keys = Rates(*access.with_a_file), Rates(*access.wrong_keys)

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """Pass on, or answer in the one shape of failures."""
        if scope["type"] != "http":
            await self._app(scope, receive, send)
            return
        began, status = time.perf_counter(), 500

        async def told(message: MutableMapping[str, Any]) -> None:
            nonlocal status
            if message["type"] == "http.response.start":
                status = int(message["status"])
            await send(message)

        try:
            await self._ask(scope)
        except _TurnedAway as away:
            answer = payloads.error(away.sentence, away.kind, {"name": "access"}, away.status)
            answer.headers.update({name.replace("_", "-"): value for name, value in away.headers.items()})
            await self._answer(answer, scope, receive, told)
            self._traffic.turned_away[str(away.status)] += 1
        except SkylagError as failure:  # the store of keys itself
            answer = payloads.error(failure.message, type(failure).__name__, failure.details, 503)
            await self._answer(answer, scope, receive, told)
        else:
            await self._app(scope, receive, told)
        self._traffic.note(scope["method"], status, time.perf_counter() - began)

    @staticmethod
    async def _answer(answer: Response, scope: Scope, receive: Receive, send: Send) -> None:
        await answer(scope, receive, send)

    async def _ask(self, scope: Scope) -> None:
        """Raises _TurnedAway where the request may not pass."""
        method, path, headers = scope["method"], scope["path"], Headers(scope=scope)
        caller = str((scope.get("client") or ("unknown",))[0])
        now_s = time.perf_counter()
        sending = method not in _READING
        with_a_file = method == "POST" and _WITH_A_FILE.fullmatch(path) is not None
        changing = sending and not with_a_file
        rates = self._with_a_file if with_a_file else self._changes if changing else self._questions
        self._in_rate(rates, caller, now_s)
        if sending:
            self._own_page(headers)
        mode = self._access.writing if changing else self._access.reading
        if not changing and (path in _OPEN_ALWAYS or not path.startswith(("/api/", "/metrics"))):
            mode = "open"  # the page's files tell nothing
        if mode == "open":
            return
        if mode == "nobody":
            raise _TurnedAway(405, "Refused", f"{method} is not taken at {path}")
        wanted = "read" if not changing else "admin" if path.startswith(_ADMIN) else "write"
        await self._with_key(headers, wanted, caller, now_s)

    @staticmethod
    def _in_rate(rates: Rates, caller: str, now_s: float) -> None:
        wait_s = rates.wait_s(caller, now_s)
        if wait_s:
            seconds = str(max(1, round(wait_s + 0.5)))
            raise _TurnedAway(429, "Refused", f"too many requests; ask again in {seconds} s", Retry_After=seconds)

    def _own_page(self, headers: Headers) -> None:
        """What is sent comes from this server's own page or from a program, never from another page in a browser."""
        host = urlsplit(f"//{headers.get('host', '')}")
        if self._access.hosts and host.hostname not in self._access.hosts:
            raise _TurnedAway(403, "Refused", "what is sent is taken under a loopback name only, like 127.0.0.1")
        origin = headers.get("origin")
        if origin is not None and urlsplit(origin).netloc != host.netloc:
            raise _TurnedAway(403, "Refused", "what is sent is taken from this server's own page only")
        if headers.get("sec-fetch-site", "none") not in ("same-origin", "none"):
            raise _TurnedAway(403, "Refused", "what is sent is taken from this server's own page only")

    async def _with_key(self, headers: Headers, wanted: str, caller: str, now_s: float) -> None:
        kind, _, key = headers.get("authorization", "").partition(" ")
        way_out = "make one with `skylag token make` on the server and send it as `Authorization: Bearer KEY`"
        challenge = {"WWW_Authenticate": "Bearer"}
        if kind.lower() != "bearer" or not key:
            raise _TurnedAway(401, "Refused", f"this needs a key with the scope {wanted!r}; {way_out}", **challenge)
        if self._wrong_keys.level(caller, now_s) < 1.0:
            raise _TurnedAway(429, "Refused", "too many wrong keys; wait a minute", Retry_After="60")
        good = await run_in_threadpool(guard.allows, self._archive, key.strip(), wanted)
        if good is None:
            self._wrong_keys.wait_s(caller, now_s)
            raise _TurnedAway(401, "Refused", f"this key is not known or was revoked; {way_out}", **challenge)
        if not good:
            raise _TurnedAway(403, "Refused", f"this key may not do that; it needs the scope {wanted!r}")
