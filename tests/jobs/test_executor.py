"""The same work on processes, threads and a Dask cluster."""

import os
import threading
from concurrent.futures import as_completed

import pytest

from skylag.errors import Missing, Refused, SkylagError
from skylag.jobs.executor import open_executor


def square(value: int) -> tuple[int, int, int]:
    """A unit of work that tells where it ran."""
    return value * value, os.getpid(), threading.get_ident()


def fail(value: int) -> None:
    """A unit of work that cannot be done."""
    raise Missing(f"no part {value}", what=value, nearest=None)


@pytest.fixture(scope="module")
def dask_address():
    """A cluster of two worker processes on this machine."""
    distributed = pytest.importorskip("distributed", reason="needs distributed: pip install 'skylag[server]'")
    with distributed.LocalCluster(
        n_workers=2, threads_per_worker=1, processes=True, dashboard_address=None, host="127.0.0.1"
    ) as cluster:
        yield cluster.scheduler_address.replace("tcp://", "dask://")


@pytest.fixture(params=["local:2", "threads:2", "dask"])
def place(request: pytest.FixtureRequest) -> str:
    return request.getfixturevalue("dask_address") if request.param == "dask" else request.param


def test_work_comes_back_with_its_result(place: str) -> None:
    with open_executor(place) as executor:
        futures = [executor.submit(square, n) for n in range(12)]
        answers = [future.result() for future in as_completed(futures)]
        assert list(executor.map(square, range(3)))[2][0] == 4
    assert sorted(answer[0] for answer in answers) == [n * n for n in range(12)]
    own_process = {answer[1] for answer in answers} == {os.getpid()}
    assert own_process == place.startswith("threads"), "only threads may share this process"


def test_a_failure_comes_back_with_its_details(place: str) -> None:
    with open_executor(place) as executor, pytest.raises(Missing) as caught:
        executor.submit(fail, 7).result()
    assert caught.value.details["what"] == 7


def test_threads_are_not_this_thread() -> None:
    with open_executor("threads:1") as executor:
        assert executor.submit(square, 2).result()[2] != threading.get_ident()


@pytest.mark.parametrize("wrong", ["", "local:0", "local:x", "local:-1", "local:²", "local:5000", "many:2", "threads:"])
def test_other_places_are_refused(wrong: str) -> None:
    with pytest.raises(Refused, match="write local:N"), open_executor(wrong):
        pass


def test_no_scheduler_is_said_in_words(monkeypatch: pytest.MonkeyPatch) -> None:
    pytest.importorskip("distributed")
    monkeypatch.setattr("skylag.jobs.executor._CONNECT_WAIT_S", 0.5)
    with pytest.raises(SkylagError, match="no Dask scheduler answers"), open_executor("dask://127.0.0.1:9"):
        pass
