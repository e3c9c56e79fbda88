"""Routes about work: what is queued and how far it is, sending files, following along, and figures for whoever runs it.

Following is by server-sent events (WHATWG HTML, section 9.2): one look at the archive serves all who follow.  A route
parses, asks and encodes; the gate has asked for the key already.
"""

import asyncio
import contextlib
from collections.abc import AsyncIterator, Callable, Sequence
from pathlib import Path
from typing import Annotated, Any

import numpy as np
from fastapi import APIRouter, Query, Request
from fastapi.responses import Response, StreamingResponse
from starlette.concurrency import run_in_threadpool
from starlette.requests import ClientDisconnect

from skylag.archive import Archive, Task
from skylag.archive.notices import Delivery, Notice
from skylag.errors import NotEnough, Refused, SkylagError
from skylag.jobs import board
from skylag.jobs.guard import Inbox, Limits, by_sent_names, inbox_folder, sent_names
from skylag.web import asking, payloads
from skylag.web.access import Traffic

router = APIRouter()
_LOOK_S = 0.5  # how often the archive is looked at while somebody follows
_QUIET_S = 15.0  # after so long without news a line is sent that says nothing, so that nobody in between hangs up
_SHOWN = 200


def inbox_of(archive: Archive, limits: Limits) -> Inbox:
    """The folder for what people send: beside the slant tables."""
    return Inbox(inbox_folder(archive), limits)


def _inbox(request: Request) -> Inbox:
    return inbox_of(request.app.state.archive, request.app.state.limits)


def _now(request: Request) -> np.datetime64:
    clock: Callable[[], np.datetime64] | None = request.app.state.clock
    if clock is None:
        raise Refused(
            "this server was started without a clock and takes no work; start it with `skylag serve`",
            name="clock", value=None, allowed="a clock",
        )  # fmt: skip
    return clock()


# ---------------------------------------------------------------------------------------------- shapes


def _utc(time: np.datetime64) -> str | None:
    """These times are UTC already, unlike those of the maps."""
    return None if np.isnat(time) or not int(time.astype(np.int64)) else f"{np.datetime_as_string(time, unit='ms')}Z"


def task_shape(task: Task) -> dict[str, Any]:
    """A task as JSON shows it; paths of the server are not told, names of files are."""
    spec = dict(task.spec)
    region = spec.get("region")
    return {
        "id": task.id, "kind": task.kind, "title": task.title, "state": task.state, "stage": task.stage,
        "share": round(task.share, 4), "word": task.word, "attempts": task.attempts, "losses": task.losses,
        "said": task.said, "day": spec.get("day"), "region": region["name"] if isinstance(region, dict) else region,
        "files": [Path(path).name for path in spec.get("paths", ())], "result": dict(task.result),
        "added_utc": _utc(task.added), "changed_utc": _utc(task.changed),
        "next_try_utc": _utc(task.not_before) if task.state == "waiting" and task.attempts else None,
    }  # fmt: skip


def notice_shape(notice: Notice, ways: Sequence[Delivery]) -> dict[str, Any]:
    """A notice as JSON shows it; where it goes to is told by its way alone: addresses may hold secrets."""
    return {
        "id": notice.id, "subject": notice.subject, "sentence": notice.sentence, "made_utc": _utc(notice.made),
        "facts": {name: value for name, value in notice.facts.items() if not name.endswith("_ns")},
        "deliveries": [
            {"way": way.target.split('"')[1], "attempts": way.attempts, "delivered_utc": _utc(way.delivered)}
            for way in ways
        ],
    }  # fmt: skip


# ---------------------------------------------------------------------------------------------- the queue


@router.get("/api/notices", summary="Alerts")
def notices(request: Request) -> Response:
    """What alerts had to tell, newest first, and how each was delivered."""
    archive: Archive = request.app.state.archive
    return payloads.reply({"notices": [notice_shape(one, ways) for one, ways in archive.notices.newest(_SHOWN)]})


@router.get("/api/work", summary="The work queue")
def work(request: Request, state: str = "") -> Response:
    """Counts by state, and the tasks that changed last, newest first; of one state where it is named."""
    archive: Archive = request.app.state.archive
    counts = archive.tasks.counts()
    if state and state not in counts:
        raise Refused(
            f"state={state}: choose from {', '.join(counts)}", name="state", value=state, allowed=tuple(counts)
        )
    tasks = archive.tasks.newest(_SHOWN, (state,) if state else tuple(counts))
    return payloads.reply({"counts": counts, "tasks": [task_shape(task) for task in tasks]})


@router.get("/api/work/news", summary="Follow along")
async def news(request: Request) -> Response:
    """Server-sent events: `work` a task that changed, `day` a version that is new, `notice` something to know.

    At first everything recent is sent once, then only what changes.
    """
    feed: Feed = request.app.state.feed
    return StreamingResponse(
        feed.follow(), media_type="text/event-stream", headers={"Cache-Control": "no-store", "X-Accel-Buffering": "no"}
    )


@router.get("/api/work/{number}", summary="One task")
def one(request: Request, number: int) -> Response:
    """State, stage, progress, last error and result of a task."""
    archive: Archive = request.app.state.archive
    return payloads.reply(task_shape(archive.tasks.one(number)))


@router.post("/api/work/{number}/cancel", summary="Cancel a task")
def cancel(request: Request, number: int) -> Response:
    """Waiting or running work is taken off the queue; nothing of it is kept."""
    archive: Archive = request.app.state.archive
    return payloads.reply(task_shape(archive.tasks.cancel(number, _now(request))))


@router.post("/api/work/{number}/again", summary="Queue a task once more")
def again(request: Request, number: int) -> Response:
    """Failed or cancelled work is queued as if new."""
    archive: Archive = request.app.state.archive
    return payloads.reply(task_shape(archive.tasks.again(number, _now(request))))


# ---------------------------------------------------------------------------------------------- sending files


@router.post("/api/batches", summary="Begin to send files", status_code=201)
def open_batch(request: Request) -> Response:
    """A new batch; files are sent into it one by one, then work is begun with all of them."""
    inbox = _inbox(request)
    limits = inbox.limits
    return payloads.reply(
        {"batch": inbox.open_batch(), "file_bytes": limits.file_bytes, "batch_bytes": limits.batch_bytes,
         "batch_files": limits.batch_files}, 201,
    )  # fmt: skip


@router.put("/api/batches/{batch}/files", summary="Send a file", status_code=201)
async def send_file(request: Request, batch: str, name: Annotated[str, Query(max_length=300)]) -> Response:
    """The body is the file as it is; its kind is told by its content, its name only tells the receiver.

    Of observations the answer tells the receiver's marker and the day, as far as the header has them.
    """
    inbox = _inbox(request)
    told = request.headers.get("content-length", "")
    coming = await run_in_threadpool(inbox.receive, batch, name, int(told) if told.isdigit() else None)
    try:
        async for part in request.stream():
            if part:
                await run_in_threadpool(coming.write, part)
        got = await run_in_threadpool(coming.finish)
    except ClientDisconnect:
        coming.abandon()
        return payloads.error("the file broke off; send it again", "Refused", {"name": "file"}, 400)
    except BaseException:
        coming.abandon()
        raise
    shape = {"name": got.name, "kept_as": got.kept_as, "kind": got.kind, "bytes": got.size, "sha256": got.sha256,
             "marker": got.marker, "day": None if got.day is None else str(got.day)}  # fmt: skip
    return payloads.reply(shape, 201)


@router.post("/api/batches/{batch}/work", summary="Begin work with what was sent")
def begin(request: Request, batch: str, region: str = "", day: str = "") -> Response:
    """Queue one task per day of the batch, for a region the archive knows, or for one drawn around the receivers."""
    archive: Archive = request.app.state.archive
    inbox = _inbox(request)
    wanted = None
    if region:
        heads = archive.days(region)
        wanted = archive.day(region, heads[0].day if heads else "2000-01-01").region
    folder = inbox.path_of(batch)
    names = sent_names([folder])
    try:
        numbers, left_out = board.add(
            archive, [folder], now=_now(request), region=wanted,
            day=np.datetime64(asking.day(day), "D").item() if day else None,
        )  # fmt: skip
    except NotEnough as failure:
        files = [by_sent_names(str(one), names) for one in failure.details["left_out"]]
        raise NotEnough(by_sent_names(failure.message, names), **{**failure.details, "left_out": files}) from None
    return payloads.reply(
        {
            "tasks": [task_shape(archive.tasks.one(number)) for number in numbers],
            "left_out": [{"file": Path(item.path).name, "line": item.line, "reason": by_sent_names(item.reason, names)}
                         for item in left_out],
        },
        202,
    )  # fmt: skip


@router.put("/api/pins/{region}/{day}", summary="Pin a version of a day")
def pin(request: Request, region: str, day: str, version: int | None = None) -> Response:
    """The version that is shown even when newer ones come; none takes the pin off."""
    archive: Archive = request.app.state.archive
    archive.pin(region, asking.day(day), version)
    return payloads.reply({"region": region, "day": day, "version": archive.day(region, asking.day(day)).head.version})


# ---------------------------------------------------------------------------------------------- following along


class Feed:
    """What changes in an archive, looked at by one task for all who follow, and by none while nobody does."""

    def __init__(self, archive: Archive, look_s: float = _LOOK_S) -> None:
        self._archive, self._look_s = archive, look_s
        self._now: dict[str, tuple[str, str]] = {}  # what -> event, text
        self._change: asyncio.Event = asyncio.Event()
        self._followers = 0
        self._looking: asyncio.Task[None] | None = None

    async def follow(self) -> AsyncIterator[str]:
        """Events as text, from everything recent to whatever comes."""
        sent: dict[str, tuple[str, str]] = {}
        self._followers += 1
        if self._looking is None or self._looking.done():
            self._looking = asyncio.get_running_loop().create_task(self._look())
        try:
            yield "retry: 2000\n\n"
            while True:
                change = self._change
                for what, (event, text) in list(self._now.items()):
                    if sent.get(what) != (event, text):
                        sent[what] = (event, text)
                        yield f"event: {event}\ndata: {text}\n\n"
                for what in sent.keys() - self._now.keys():
                    del sent[what]
                try:
                    await asyncio.wait_for(change.wait(), _QUIET_S)
                except TimeoutError:
                    yield ": quiet\n\n"
        finally:
            self._followers -= 1

    async def _look(self) -> None:
        while self._followers:
            with contextlib.suppress(SkylagError):  # the archive is away: what is known stays known
                found = await run_in_threadpool(self._recent)
                if found != self._now:
                    self._now, change, self._change = found, self._change, asyncio.Event()
                    change.set()
            await asyncio.sleep(self._look_s)

    def _recent(self) -> dict[str, tuple[str, str]]:
        def text(content: Any) -> str:
            return bytes(payloads.reply(content).body).decode()

        found = {f"task {t.id}": ("work", text(task_shape(t))) for t in self._archive.tasks.newest(_SHOWN)}
        for region, day, version in self._archive.newest_versions(20):
            found[f"{region} {day}"] = ("day", text({"region": region, "day": day, "version": version}))
        for notice, ways in self._archive.notices.newest(20):
            found[f"notice {notice.id}"] = ("notice", text(notice_shape(notice, ways)))
        return found


# ---------------------------------------------------------------------------------------------- figures


@router.get("/metrics", summary="Figures for monitoring", include_in_schema=False)
def metrics(request: Request) -> Response:
    """Counters and gauges in the Prometheus text format (version 0.0.4)."""
    archive: Archive = request.app.state.archive
    traffic: Traffic = request.app.state.traffic
    lines: list[str] = []

    def tell(name: str, kind: str, words: str, rows: list[tuple[str, float]]) -> None:
        lines.extend([f"# HELP skylag_{name} {words}", f"# TYPE skylag_{name} {kind}"])
        lines.extend(f"skylag_{name}{labels} {value:.10g}" for labels, value in rows)

    counts = archive.tasks.counts()
    tell("tasks", "gauge", "Tasks by state.", [(f'{{state="{state}"}}', n) for state, n in counts.items()])
    days, versions = archive.size()
    tell("days", "gauge", "Days of all regions in the archive.", [("", days)])
    tell("deliveries_waiting", "gauge", "Alerts not delivered yet.", [("", archive.notices.undelivered())])
    tell("versions", "gauge", "Versions of days in the archive.", [("", versions)])
    with traffic.lock:
        answers, buckets, seconds = dict(traffic.answers), dict(traffic.buckets), traffic.seconds
        away = dict(traffic.turned_away)
    tell(
        "http_requests_total", "counter", "Answers by method and status.",
        [(f'{{method="{method}",status="{status}"}}', n) for (method, status), n in sorted(answers.items())],
    )  # fmt: skip
    total = sum(answers.values())
    lines.append("# HELP skylag_http_request_seconds Time from a request to the end of its answer.")
    lines.append("# TYPE skylag_http_request_seconds histogram")
    for limit in traffic.limits_s:
        lines.append(f'skylag_http_request_seconds_bucket{{le="{limit:g}"}} {buckets.get(limit, 0)}')
    lines.append(f'skylag_http_request_seconds_bucket{{le="+Inf"}} {total}')
    lines.append(f"skylag_http_request_seconds_sum {seconds:.6f}")
    lines.append(f"skylag_http_request_seconds_count {total}")
    tell(
        "turned_away_total", "counter", "Requests the gate did not let pass, by status.",
        [(f'{{status="{status}"}}', n) for status, n in sorted(away.items())],
    )  # fmt: skip
    return Response("\n".join(lines) + "\n", media_type="text/plain; version=0.0.4; charset=utf-8")
