"""No process of a pool outlives the one who made it, however that ended; a cluster's worker may vanish."""

import os
import re
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from concurrent.futures import as_completed
from pathlib import Path

import numpy as np
import pytest

from skylag.chain import Choices
from skylag.jobs import work
from skylag.jobs.board import _started
from skylag.jobs.executor import open_executor
from skylag.tables import Fields

ROOT = Path(__file__).resolve().parents[2]
PROGRAM = """
import os, sys, time
from skylag.jobs.executor import open_executor
if __name__ == "__main__":
    with open_executor("local:2") as pool:
        print(*set(pool.map(lambda_pid, range(8))), flush=True)
        time.sleep(60)
"""


def _alive(number: int) -> bool:
    return _started(number) != ""


def test_children_end_with_a_killed_parent(tmp_path: Path) -> None:
    program = tmp_path / "program.py"
    program.write_text(PROGRAM.replace("lambda_pid", "pid").replace("if __name__", "def pid(_):\n    time.sleep(0.05)\n"
                       "    return os.getpid()\n\nif __name__", 1))  # fmt: skip
    parent = subprocess.Popen([sys.executable, str(program)], stdout=subprocess.PIPE, text=True)
    try:
        children = [int(word) for word in parent.stdout.readline().split()]
        assert children and all(_alive(child) for child in children)
        os.kill(parent.pid, signal.SIGKILL)
        parent.wait()
        until = time.perf_counter() + 10
        while any(_alive(child) for child in children) and time.perf_counter() < until:
            time.sleep(0.05)
        assert not any(_alive(child) for child in children)
    finally:
        parent.kill()
        parent.communicate()


# ---------------------------------------------------------------------------------------------- a Dask cluster


@pytest.fixture
def cluster(tmp_path: Path) -> Iterator[tuple[str, list[subprocess.Popen[str]]]]:
    """A scheduler and two workers, each a process of its own; the scheduler's address."""
    pytest.importorskip("distributed")
    common = ["--no-dashboard"]
    world = {**os.environ, "PYTHONPATH": str(ROOT)}  # so that they find the unit of work below
    command = [sys.executable, "-m", "distributed.cli.dask_scheduler", "--host", "127.0.0.1", "--port", "0", *common]
    scheduler = subprocess.Popen(
        command, cwd=tmp_path, stderr=subprocess.PIPE, stdout=subprocess.DEVNULL, text=True, env=world
    )
    processes = [scheduler]
    try:
        address = ""
        while not address:
            line = scheduler.stderr.readline()
            assert line, "the scheduler ended"
            found = re.search(r"Scheduler at:\s+tcp://(\S+)", line)
            address = found.group(1) if found else ""
        for number in range(2):
            command = [sys.executable, "-m", "distributed.cli.dask_worker", f"tcp://{address}", "--nthreads", "1",
                       "--no-nanny", "--name", f"w{number}", "--local-directory", str(tmp_path), *common]  # fmt: skip
            processes.append(subprocess.Popen(command, cwd=tmp_path, stderr=subprocess.DEVNULL, env=world))
        yield f"dask://{address}", processes[1:]
    finally:
        for process in processes:
            process.kill()
            process.communicate()


def where(number: int) -> tuple[int, int]:
    """A unit of work that takes a moment and tells where it ran."""
    time.sleep(0.2)
    return number, os.getpid()


@pytest.mark.slow
def test_a_worker_of_the_cluster_is_killed_in_the_middle(
    cluster: tuple[str, list[subprocess.Popen[str]]], sample_folder: Path
) -> None:
    """First units that tell where they run: all come back, from both and then from one.  Then a real network day on
    what is left equals the same day on this machine."""
    address, workers = cluster
    with open_executor(address) as executor:
        until = time.perf_counter() + 60
        while len({pid for _, pid in executor.map(where, range(4))}) < 2:
            assert time.perf_counter() < until, "both workers must come"
        waiting = [executor.submit(where, number) for number in range(20, 60)]
        done: list[tuple[int, int]] = []
        for future in as_completed(waiting):
            done.append(future.result())
            if len(done) == 10:
                workers[0].kill()
                workers[0].wait()
        assert sorted(number for number, _ in done) == list(range(20, 60))
        assert {pid for _, pid in done[-10:]} == {workers[1].pid}
        folder = sample_folder / "2031-03-11"
        paths = [next(folder.glob(f"{name}*")) for name in ("MRGT", "FENN", "TARN")]
        choices = Choices(epoch_step_s=3600.0)
        there = work.network_day(paths, executor=executor, choices=choices, simulated=True).products
    with open_executor("threads:1") as executor:
        here = work.network_day(paths, executor=executor, choices=choices, simulated=True).products
    for layer in Fields.LAYERS:
        np.testing.assert_array_equal(getattr(there.fields, layer), getattr(here.fields, layer))
