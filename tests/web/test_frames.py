"""Answers about maps that are kept in memory: the same as made anew, of the version that is shown, never too many."""

import gzip
import json
from pathlib import Path

import pytest
from fastapi import Request
from fastapi.responses import Response
from fastapi.testclient import TestClient
from tests.builders import REGION, STORM_DAY, invented_day

from skylag.archive import open_archive
from skylag.web.app import create_app
from skylag.web.frames import Answers

ADDRESS = f"/api/days/{REGION.name}/{STORM_DAY}/fields"


def request(encoding: str = "gzip") -> Request:
    return Request({"type": "http", "headers": [(b"accept-encoding", encoding.encode())]})


def test_a_kept_answer_is_that_of_the_version_shown(tmp_path: Path, page_folder: Path) -> None:
    """A newer version, a pin and an unpinned day show at once; what is asked for twice is made once."""
    with open_archive(tmp_path) as archive:
        app = create_app(archive, frontend=page_folder)
        with TestClient(app) as client:
            archive.save(invented_day(STORM_DAY, step_minutes=60, satellites=2, seed=1))
            first = client.get(ADDRESS).json()
            assert client.get(ADDRESS).json() == first and app.state.answers.made == 1
            archive.save(invented_day(STORM_DAY, step_minutes=120, satellites=2, seed=2))
            second = client.get(ADDRESS).json()
            assert len(second["times_utc"]) == 12 != len(first["times_utc"])
            archive.pin(REGION.name, STORM_DAY, 1)
            assert client.get(ADDRESS).json() == first
            archive.pin(REGION.name, STORM_DAY, None)
            assert client.get(ADDRESS).json() == second == client.get(ADDRESS, params={"version": 2}).json()
            assert client.get(ADDRESS, params={"version": 1}).json() == first and app.state.answers.made == 2
            assert client.get(ADDRESS, params={"layers": "state"}).json() != second
            assert client.get(ADDRESS, params={"version": 3}).status_code == 404


def test_packed_for_those_who_take_it(tmp_path: Path, page_folder: Path) -> None:
    with open_archive(tmp_path) as archive, TestClient(create_app(archive, frontend=page_folder)) as client:
        archive.save(invented_day(STORM_DAY, step_minutes=60, satellites=2))
        plain = client.get(ADDRESS, headers={"Accept-Encoding": "identity"})
        packed = client.get(ADDRESS, headers={"Accept-Encoding": "gzip"})
        assert "content-encoding" not in plain.headers and packed.headers["content-encoding"] == "gzip"
        assert plain.json() == packed.json() and packed.headers["cache-control"] == "no-cache"
        assert "Accept-Encoding" in packed.headers["vary"]


def test_no_more_is_kept_than_was_told() -> None:
    answers = Answers(most_bytes=10_000)
    for number in range(50):
        body = json.dumps([number] * 600)
        for _ in range(2):
            given = answers.answer(request(), number, lambda body=body: Response(body, media_type="application/json"))
            assert gzip.decompress(bytes(given.body)).decode() == body
    assert answers.made == 50 and answers._size <= 10_000 and 1 < len(answers._kept) < 10
    large = "x" * 20_000
    assert bytes(answers.answer(request("identity"), "large", lambda: Response(large)).body).decode() == large
    assert answers._size == 0, "what is larger than all is given and not kept"


def test_a_failure_is_not_kept() -> None:
    answers = Answers()

    def broken() -> Response:
        raise OSError("the disk is away")

    for _ in range(2):
        with pytest.raises(OSError, match="away"):
            answers.answer(request(), "key", broken)
    assert answers.made == 0
    assert bytes(answers.answer(request(), "key", lambda: Response("short")).body) == b"short"
