"""A published map beside a kept day: the route, and the comparison put into words.

The map is sent with the question and not kept: who may read may ask, and what is sent is trusted in nothing.  So many
bytes are taken, so much text unpacked, nothing but a map is parsed, and few are at work at once.
"""

import asyncio
from pathlib import PurePath
from typing import Annotated

from fastapi import APIRouter, Query, Request
from fastapi.responses import Response
from starlette.concurrency import run_in_threadpool

from skylag import formats
from skylag.archive import Archive
from skylag.constants import L1_M_PER_TECU
from skylag.errors import FormatError, Refused
from skylag.formats.delimited import utc_text
from skylag.ionosphere.beside import Beside, lay_beside
from skylag.tables import Biases, Fields, Reading
from skylag.web import asking, payloads, sentences

router = APIRouter()
MOST_BYTES = 64 * 2**20  # a day of global maps every five minutes, as plain text; packed it holds no more either
MOST_AT_ONCE, MOST_OF_ONE = 3, 1  # questions at work, in all and of one caller: each may need hundreds of megabytes
SENT_WITHIN_S = 120.0  # a place at work is not held by whoever sends slowly


def published_maps(reading: Reading, name: str) -> tuple[Fields, Biases | None]:
    """The maps of a file and the biases that came with them.  Raises Refused where the file holds something else."""
    if not isinstance(reading.table, Fields):
        raise Refused(
            f"{name}: holds {reading.header.get('kind', 'something else')}, and a map of content is needed: give an "
            "IONEX file (plain, .gz, .Z)",
            name="map", value=name, allowed="IONEX",
        )  # fmt: skip
    found = reading.header.get("biases")
    return reading.table, found if isinstance(found, Biases) and len(found) else None


def told(found: Beside, name: str, simulated: bool) -> list[str]:
    """The comparison in sentences: how far apart, whether the sigmas cover it, and what the difference is made of."""
    facts = found.facts()
    mean, rms = facts["mean_tecu"], facts["rms_tecu"]
    side = "above" if mean >= 0 else "below"
    said = [
        f"Ours less {name}, where our map sees something ({facts['cells']} cells of {facts['maps']} maps): mean "
        f"{mean:+.2f} TECU ({mean * L1_M_PER_TECU:+.2f} m of delay), RMS {rms:.2f} TECU, scatter about the mean "
        f"{facts['scatter_tecu']:.2f} TECU; ours is {abs(mean):.2f} TECU {side} on a mean content of "
        f"{facts['published_mean_tecu']:.1f}.",
        f"{100.0 * facts['within_95']:.1f} % of the differences lie within the 95 % interval that both state "
        f"(sigma of the difference {facts['sigma_tecu']:.2f} TECU).",
        "What the difference is made of, as RMS of each part: " + ", ".join(
            f"{part} {value:.2f}" for part, value in facts["parts_tecu"].items()
        ) + f" TECU. The share of the content is {100.0 * found.share_of_content:+.1f} %: another height of the shell, "
        "mapping or plasmasphere makes one map a share of the other.",
        f"Within cells as large as the published map's our own map differs from its mean by "
        f"{facts['finer_than_their_cells_tecu']:.2f} TECU RMS: so much of the finer part no such map can show.",
    ]  # fmt: skip
    for one in found.biases:
        satellites = (
            f"{one.satellites} satellites are in both and scatter by {one.satellite_scatter_ns:.2f} ns"
            if one.satellites else "no satellite is in both on these codes"
        )  # fmt: skip
        receivers = "1 receiver is" if one.receivers == 1 else f"{one.receivers} receivers are"
        said.append(
            f"Biases of {one.system} {one.code1}-{one.code2}: {receivers} in both, together with the "
            f"satellites {one.together_ns:+.2f} ns from the published ones, which moves our content by "
            f"{one.straight_up_tecu:+.2f} TECU straight up (seen at 45 deg); {satellites}."
        )
    if not found.biases:
        said.append("The map file tells no bias of a receiver of ours, so the level cannot be traced to one.")
    if simulated:
        said.append(f"{sentences.INVENTED} A published map tells nothing about it.")
    return said


def hours_csv(found: Beside) -> str:
    """One row per hour: its beginning (UTC), cells, mean and rms of the difference [TECU]."""
    lines = ["hour_utc,cells,mean_tecu,rms_tecu"]
    for start, mean, rms, count in zip(*found.hourly(), strict=True):
        lines.append(f"{utc_text(start)},{count},{mean:.3f},{rms:.3f}")
    return "\n".join(lines) + "\n"


async def _body(request: Request) -> bytes:
    """What was sent, up to the limit.  Raises Refused for more, TimeoutError where it takes too long to come."""
    announced = request.headers.get("content-length", "")
    if announced.isdecimal() and int(announced[:20]) > MOST_BYTES:
        raise _too_large(int(announced[:20]))
    parts, size = [], 0
    async for part in request.stream():
        size += len(part)
        if size > MOST_BYTES:
            raise _too_large(size)
        parts.append(part)
    return b"".join(parts)


def _too_large(size: int) -> Refused:
    return Refused(
        f"the map file is larger than {MOST_BYTES // 2**20} MiB; send it compressed or with fewer maps",
        name="map", value=size, allowed=MOST_BYTES,
    )  # fmt: skip


@router.post("/api/days/{region}/{day}/beside", summary="A published map beside the day's own")
async def beside(
    request: Request, region: str, day: str, name: Annotated[str, Query(max_length=300)] = "map",
    version: int | None = None,
) -> Response:  # fmt: skip
    """The body is an IONEX file, plain or compressed: differences by hour, what they are made of, hourly maps.

    Nothing is kept or changed: whoever may read may ask, a few at once.
    """
    caller = request.client.host if request.client else "unknown"
    with request.app.state.beside_at_once.place(caller) as free:
        if not free:
            sentence = "other maps are being laid beside days just now; ask again in 5 s"
            answer = payloads.error(sentence, "Refused", {"name": "map", "allowed": MOST_OF_ONE}, 429)
            answer.headers["Retry-After"] = "5"
            return answer
        try:
            async with asyncio.timeout(SENT_WITHIN_S):
                data = await _body(request)
        except TimeoutError:
            sentence = f"the map file did not come within {SENT_WITHIN_S:g} s; send it compressed"
            return payloads.error(sentence, "Refused", {"name": "map", "allowed": SENT_WITHIN_S}, 408)
        return await run_in_threadpool(_answer, request.app.state.archive, region, asking.day(day), name, version, data)


def _answer(archive: Archive, region: str, day: str, name: str, version: int | None, data: bytes) -> Response:
    record = archive.day(region, day, version)
    short = PurePath(name.replace("\\", "/")).name or "map"
    try:
        reading = formats.read_bytes(data, short, only=("ionex",), largest=MOST_BYTES)
    except FormatError as trouble:  # here the file was sent: it is the question that is wrong, not the store
        raise Refused(trouble.message, name="map", value=short, allowed="IONEX, plain or compressed") from trouble
    maps, biases = published_maps(reading, short)
    number = record.head.version
    ours = archive.fields(region, record.head.day, None, None, number)
    found = lay_beside(
        ours, maps, archive.biases(region, record.head.day, number), biases, record.region.shell_height_km * 1000.0
    )
    return payloads.reply(payloads.beside(
        found, [*told(found, short, record.origin.simulated),
         *(f"Noticed in the file: {problem}" for problem in reading.problems[:10])], short,
    ))  # fmt: skip

