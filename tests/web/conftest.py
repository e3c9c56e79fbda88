"""A small invented archive and a client that asks the real application over it."""

from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest
from fastapi.testclient import TestClient
from tests.builders import write_archive

from skylag.archive import Archive, open_archive
from skylag.web.app import create_app


@pytest.fixture(scope="session")
def small_archive(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Archive]:
    """A calm and a stormy invented day."""
    with open_archive(write_archive(tmp_path_factory.mktemp("small"))) as archive:
        yield archive


@pytest.fixture(scope="session")
def page_folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A page of one file, so that these tests do not hang on the real one."""
    folder = tmp_path_factory.mktemp("page")
    (folder / "index.html").write_text("<!doctype html><title>Trial</title>", encoding="utf-8")
    return folder


@pytest.fixture
def client(small_archive: Archive, page_folder: Path) -> Iterator[TestClient]:
    """A client of the application over the small archive; the clock stands."""
    app = create_app(small_archive, clock=lambda: np.datetime64("2031-05-12T00:00:00"), frontend=page_folder)
    with TestClient(app, raise_server_exceptions=False) as asking:
        yield asking
