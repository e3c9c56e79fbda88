"""The real server in a process of its own: it says where it is, answers, and ends when asked."""

import signal
import socket
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import httpx
import pytest
from tests.builders import write_archive

from skylag.archive import Archive
from skylag.errors import Refused
from skylag.web.app import create_app, serve

ROOT = Path(__file__).resolve().parents[2]
PROGRAM = """
import sys
from skylag.archive import open_archive
from skylag.web.app import create_app, serve
with open_archive(sys.argv[1]) as archive:
    serve(create_app(archive), "127.0.0.1", 0, lambda address: print(address, flush=True))
print("closed", flush=True)
"""


@pytest.fixture
def server(tmp_path: Path) -> Iterator[tuple[subprocess.Popen[str], str]]:
    """A running server and its address."""
    place = write_archive(tmp_path)
    process = subprocess.Popen(
        [sys.executable, "-c", PROGRAM, str(place)], cwd=ROOT, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True
    )
    try:
        yield process, process.stdout.readline().strip()
    finally:
        process.kill()
        process.communicate()


def test_it_answers_and_ends_well(server: tuple[subprocess.Popen[str], str]) -> None:
    process, address = server
    assert address.startswith("http://127.0.0.1:")
    answer = httpx.get(f"{address}healthz", timeout=30)
    assert answer.status_code == 200 and answer.json()["ok"] is True
    assert "server" not in answer.headers
    process.send_signal(signal.SIGINT)
    out, err = process.communicate(timeout=20)
    assert process.returncode == 0, err
    assert out.strip() == "closed", "the archive is closed after the server ends"
    assert "Traceback" not in err


def test_a_taken_port_is_said_in_words(small_archive: Archive) -> None:
    with socket.create_server(("127.0.0.1", 0)) as other:
        port = other.getsockname()[1]
        with pytest.raises(Refused, match=rf"cannot listen on 127\.0\.0\.1 port {port}"):
            serve(create_app(small_archive), "127.0.0.1", port)
    with pytest.raises(Refused, match="cannot listen on"):
        serve(create_app(small_archive), "192.0.2.1", 0)  # an address for documentation (RFC 5737), never ours
