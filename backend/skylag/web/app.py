"""The web application: routes, the page's files, one shape of errors, protective headers.

`create_app` is given its world and opens nothing.  Content may come from the page's own address only.
"""

import contextlib
import gzip
import re
import socket
from collections.abc import Callable, MutableMapping
from concurrent.futures import Executor
from functools import cache
from importlib import metadata, resources
from pathlib import Path
from typing import Any

import numpy as np
import uvicorn
from fastapi import FastAPI, Request
from fastapi.exceptions import RequestValidationError
from fastapi.responses import Response
from fastapi.staticfiles import StaticFiles
from starlette.datastructures import MutableHeaders
from starlette.exceptions import HTTPException
from starlette.middleware.gzip import GZipMiddleware

import skylag
from skylag.archive import Archive
from skylag.errors import FormatError, Missing, NotEnough, Refused, SkylagError, Unsolvable
from skylag.jobs.guard import AtOnce
from skylag.web import advice, beside, described, maps, network, outlook, payloads, sites, slant_files, ways, work
from skylag.web.access import Access, Gate, Receive, Scope, Send, Traffic
from skylag.web.frames import Answers

Clock = Callable[[], np.datetime64]

# What each kind of failure is in HTTP.  A FormatError here means damaged stored data: nobody sent a file.
STATUS: dict[type[SkylagError], int] = {Missing: 404, Refused: 422, NotEnough: 422, Unsolvable: 422, FormatError: 500}

# plotly writes style attributes on what it draws, and makes pictures from blob: and data: addresses.  The page gives
# plotly's rules itself, so style elements added by script stay forbidden; so does eval, which only WebGL traces try.
CONTENT_POLICY = "; ".join(
    (
        "default-src 'self'",
        "script-src 'self'",
        "style-src 'self' 'unsafe-inline'",  # for browsers that do not know the two finer words below
        "style-src-elem 'self'",
        "style-src-attr 'unsafe-inline'",
        "img-src 'self' data: blob:",
        "connect-src 'self'",
        "object-src 'none'",
        "base-uri 'none'",
        "form-action 'self'",
        "frame-ancestors 'none'",
    )
)
HEADERS = {
    "Content-Security-Policy": CONTENT_POLICY,
    "X-Content-Type-Options": "nosniff",
    "X-Frame-Options": "DENY",
    "Referrer-Policy": "no-referrer",
    "Cross-Origin-Opener-Policy": "same-origin",
    "Cross-Origin-Resource-Policy": "same-origin",
    "Permissions-Policy": "camera=(), geolocation=(), microphone=()",
}


def frontend_folder() -> Path:
    """Where the page's files lie: `frontend` beside the backend."""
    return Path(skylag.__file__).parents[2] / "frontend"


class ProtectiveHeaders:
    """ASGI middleware: what every answer tells browsers, unless the route has told otherwise."""

    def __init__(self, app: Any) -> None:
        self._app = app

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """Pass on; headers are added to the start of the answer."""

        async def told(message: MutableMapping[str, Any]) -> None:
            if message["type"] == "http.response.start":
                headers = MutableHeaders(scope=message)
                for name, value in HEADERS.items():
                    headers.setdefault(name, value)
                headers.setdefault("Cache-Control", "no-cache")  # may be kept, but asked for again each time
            await send(message)

        await self._app(scope, receive, told if scope["type"] == "http" else send)


def create_app(
    archive: Archive,
    executor: Executor | None = None,
    clock: Clock | None = None,
    frontend: Path | None = None,
    access: Access | None = None,
) -> FastAPI:
    """The application over an archive.

    executor  runs units of work; None where nothing is to be computed
    clock     gives the present UTC time; None where the age of data is not told
    frontend  folder of the page's files; `frontend_folder()` when None
    access    who may read and change (`access.for_host`); everybody reads and nobody changes anything when None
    """
    app = FastAPI(title="Skylag", version=_version(), docs_url=None, redoc_url=None, openapi_url="/api/openapi.json")
    app.state.archive = archive
    app.state.executor = executor
    app.state.clock = clock
    access = access or Access()
    app.state.traffic = Traffic()
    app.state.limits = access.limits
    app.state.writing = access.writing
    app.state.feed = work.Feed(archive)
    app.state.answers = Answers()
    app.state.beside_at_once = AtOnce(beside.MOST_AT_ONCE, beside.MOST_OF_ONE)
    for part in (network.router, maps.router, advice.router, ways.router, sites.router, work.router, outlook.router,
                 beside.router, slant_files.router):  # fmt: skip
        app.include_router(part)
    _add_small_routes(app)
    _add_errors(app)
    app.openapi = described.describe(app)  # type: ignore[method-assign]
    app.add_middleware(Gate, archive=archive, access=access, traffic=app.state.traffic)
    app.add_middleware(GZipMiddleware, minimum_size=1024, compresslevel=5)
    app.add_middleware(ProtectiveHeaders)
    folder = frontend if frontend is not None else frontend_folder()
    if folder.is_dir():
        app.mount("/", StaticFiles(directory=folder, html=True), name="page")
    return app


def _version() -> str:
    try:
        return metadata.version("skylag")
    except metadata.PackageNotFoundError:
        return "unknown"


def _add_small_routes(app: FastAPI) -> None:
    @app.get("/healthz", summary="Is the server well")
    def health(request: Request) -> Response:
        """Looks into the archive once; answers 200 when it can be read."""
        regions = request.app.state.archive.regions()
        clock: Clock | None = request.app.state.clock
        now = None if clock is None else f"{np.datetime_as_string(clock(), unit='s')}Z"
        return payloads.reply({"ok": True, "version": app.version, "regions": list(regions), "now_utc": now})

    @app.get("/vendor/plotly.min.js", summary="plotly.js, from the Python package", include_in_schema=False)
    def plotly_script(request: Request) -> Response:
        """The drawing library; kept by browsers for a week, asked again by its tag."""
        plain, packed, tag = _plotly()
        headers = {"Cache-Control": "public, max-age=604800", "ETag": tag}
        if tag in request.headers.get("if-none-match", ""):
            return Response(status_code=304, headers=headers)
        if "gzip" in request.headers.get("accept-encoding", ""):
            return Response(packed, media_type="text/javascript", headers={**headers, "Content-Encoding": "gzip"})
        return Response(plain, media_type="text/javascript", headers=headers)


@cache
def _plotly() -> tuple[bytes, bytes, str]:
    """plotly.js as it is, compressed, and its tag; read and compressed once, at the first request."""
    plain = (resources.files("plotly") / "package_data" / "plotly.min.js").read_bytes()
    found = re.search(rb"plotly\.js v([0-9.]+)", plain[:300])
    number = found.group(1).decode("ascii") if found else str(len(plain))
    return plain, gzip.compress(plain, 6, mtime=0), f'"plotly-{number}"'


def _add_errors(app: FastAPI) -> None:
    """One shape for every failure, whoever raised it."""

    @app.exception_handler(SkylagError)
    async def known(_request: Request, failure: SkylagError) -> Response:
        # Any other failure of the family is the store itself: its disk, its server.
        return payloads.error(failure.message, type(failure).__name__, failure.details, STATUS.get(type(failure), 503))

    @app.exception_handler(RequestValidationError)
    async def wrong_question(_request: Request, failure: RequestValidationError) -> Response:
        first: dict[str, Any] = dict(failure.errors()[0])
        name = ".".join(str(part) for part in first.get("loc", ())[1:])
        sentence = f"{name}: {str(first.get('msg', 'not understood')).lower()}; see /api/openapi.json for what is taken"
        return payloads.error(sentence, "Refused", {"name": name, "value": str(first.get("input"))[:200]}, 422)

    @app.exception_handler(HTTPException)
    async def plain_http(request: Request, failure: HTTPException) -> Response:
        if failure.status_code == 404:
            return payloads.error(f"there is nothing at {request.url.path}", "Missing", {"what": request.url.path}, 404)
        if failure.status_code == 405:
            sentence = f"{request.method} is not taken at {request.url.path}"
            return payloads.error(sentence, "Refused", {"name": "method", "value": request.method}, 405)
        return payloads.error(str(failure.detail), "Refused", {}, failure.status_code)

    @app.exception_handler(Exception)
    async def defect(request: Request, failure: Exception) -> Response:
        sentence = f"{request.url.path} failed by a defect of this program; the server's log has the details"
        answer = payloads.error(sentence, "Defect", {"type": type(failure).__name__}, 500)
        answer.headers.update(HEADERS)  # this one passes outside the middleware
        return answer


def serve(app: FastAPI, host: str, port: int, ready: Callable[[str], None] | None = None) -> None:
    """Serve until interrupted; port 0 takes a free one.

    ready  called once with the address of the page, when connections are taken
    Raises Refused where the port is taken or the host is not an address of this machine.
    """
    listening = _listen(host, port)
    try:
        if ready is not None:
            taken = listening.getsockname()[1]
            ready(f"http://{f'[{host}]' if ':' in host else host}:{taken}/")
        config = uvicorn.Config(
            app, log_level="warning", access_log=False, server_header=False,
            timeout_graceful_shutdown=3,  # those who follow along never hang up by themselves
        )  # fmt: skip
        server = uvicorn.Server(config)
        with contextlib.suppress(KeyboardInterrupt):
            server.run(sockets=[listening])
    finally:
        listening.close()


def _listen(host: str, port: int) -> socket.socket:
    """A socket that takes connections from now on: those that come before the server runs wait a moment."""
    try:
        family, kind, protocol, _, address = socket.getaddrinfo(host, port, type=socket.SOCK_STREAM)[0]
        listening = socket.socket(family, kind, protocol)
        try:
            listening.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
            listening.bind(address)
            listening.listen(256)
        except OSError:
            listening.close()
            raise
    except OSError as cause:
        raise Refused(
            f"cannot listen on {host} port {port}: {cause.strerror}; choose another with --port, or 0 for any free "
            "one; or another address of this machine with --host",
            name="port", value=port, allowed="a free port of this machine",
        ) from cause  # fmt: skip
    return listening
