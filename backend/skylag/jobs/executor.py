"""Where units of work run: processes or threads of this machine, or a Dask cluster; the caller sees one interface.

The only file that knows Dask.  Work handed in must be a top-level function with arguments that can be pickled.  Never
looks into the work or its results.
"""

import multiprocessing
import multiprocessing.connection
import os
import threading
from collections.abc import Iterator
from concurrent.futures import Executor, ProcessPoolExecutor, ThreadPoolExecutor
from contextlib import contextmanager

from skylag.errors import Refused, SkylagError

_CONNECT_WAIT_S = 10
_ALLOWED = "local:N (processes), threads:N, or dask://host:port"


@contextmanager
def open_executor(place: str) -> Iterator[Executor]:
    """An executor for the length of a `with`; what has not begun when an error leaves the block is cancelled.

    place  "local:4" four processes, "threads:2" two threads, "dask://host:8786" a Dask scheduler; "local" and "threads"
           alone take one per core.  Raises Refused for any other, SkylagError where no scheduler answers.
    """
    kind, _, rest = place.partition(":")
    if kind == "dask":
        yield from _dask(place)
        return
    count = _count(place, rest)
    if kind == "local":
        world = multiprocessing.get_context(_start_method())
        yield from _pool(ProcessPoolExecutor(count, mp_context=world, initializer=_end_with_parent))
    elif kind == "threads":
        yield from _pool(ThreadPoolExecutor(count, thread_name_prefix="work"))
    else:
        raise _refusal(place)


def _end_with_parent() -> None:
    """In a process of the pool: end when the one who made it is gone, also when that was killed."""
    parent = multiprocessing.parent_process()

    def watch() -> None:
        if parent is not None:
            multiprocessing.connection.wait([parent.sentinel])
            os._exit(1)

    threading.Thread(target=watch, name="parent-watch", daemon=True).start()


def _start_method() -> str:
    """How processes begin: not by plain fork, which copies locks that the archive's writing thread may hold."""
    return "forkserver" if "forkserver" in multiprocessing.get_all_start_methods() else "spawn"


def _count(place: str, text: str) -> int:
    if not text and ":" not in place:
        return os.cpu_count() or 1
    if not (text.isascii() and text.isdigit() and 1 <= int(text) <= 1024):
        raise _refusal(place)
    return int(text)


def _refusal(place: str) -> Refused:
    sentence = f"workers {place!r}: write {_ALLOWED}, N from 1 to 1024"
    return Refused(sentence, name="workers", value=place, allowed=_ALLOWED)


def _pool(pool: Executor) -> Iterator[Executor]:
    try:
        yield pool
    except BaseException:
        pool.shutdown(wait=True, cancel_futures=True)
        raise
    pool.shutdown(wait=True)


def _dask(place: str) -> Iterator[Executor]:
    try:
        from distributed import Client
    except ImportError as cause:
        raise Refused(
            f"workers {place!r}: Dask is not installed; run pip install 'skylag[server]', or write local:N",
            name="workers", value=place, allowed=_ALLOWED,
        ) from cause  # fmt: skip
    address = "tcp://" + place.removeprefix("dask://").removeprefix("dask:")
    try:
        client = Client(address, timeout=_CONNECT_WAIT_S, set_as_default=False)
    except ValueError as cause:
        raise _refusal(place) from cause
    except OSError as cause:
        raise SkylagError(
            f"workers {place!r}: no Dask scheduler answers there within {_CONNECT_WAIT_S} s; "
            "start one, correct the address, or write local:N",
            workers=place,
        ) from cause
    executor = client.get_executor()
    try:
        yield executor
    except BaseException:
        executor.shutdown(wait=False)  # which cancels what has not begun
        raise
    else:
        executor.shutdown(wait=True)
    finally:
        client.close()
