"""The interface asked from its own OpenAPI description: whatever the description allows, or forbids, no defect comes.

Questions are made by schemathesis: some that keep to the description, some that break it.  Most of what comes so has
no day behind it; so good values are put in for some parts, and the rest of the question meets real data.
"""

import json
from collections.abc import Iterator
from typing import Any

import numpy as np
import pytest
import schemathesis
from fastapi.testclient import TestClient
from hypothesis import HealthCheck, Phase, given, settings
from hypothesis import strategies as st
from schemathesis import Case, GenerationMode
from tests.builders import REGION, STORM_DAY, invented_day
from urllib3.util import parse_url

from skylag.archive import open_archive
from skylag.web.access import Access
from skylag.web.app import create_app

ENDLESS = ("/api/work/news",)  # a stream that never ends; it is followed in test_work_routes
# Good values by the names of what is asked with; others are left as they were made.
GOOD = {
    "region": REGION.name, "day": str(STORM_DAY), "version": "1", "lat": "-41", "lon": "147", "site": "Gannet Field",
    "time": "2031-05-11T05:00:00Z", "from": "2031-05-11T05:00:00Z", "to": "2031-05-11T06:00:00Z", "layers": "state",
    "south": "-43", "north": "-36", "west": "142", "east": "150", "since": "2031-05-01", "until": "2031-05-31",
    "number": "1", "batch": "0" * 32, "use": "ground", "method": "rtk", "baseline_km": "10", "hours": "07:00-16:00",
    "levels": "LPV-200", "horizontal_mm": "30", "vertical_mm": "50",
}  # fmt: skip
BODY = b"     2.11           OBSERVATION DATA    G (GPS)             RINEX VERSION / TYPE\n"


@pytest.fixture(scope="module")
def everything(tmp_path_factory: pytest.TempPathFactory) -> Iterator[TestClient]:
    """The whole interface, all of it open and without limits of rate, over an archive of its own with a day in it."""
    folder = tmp_path_factory.mktemp("fuzz")
    now = np.datetime64("2031-05-12T08:00:00", "ns")
    with open_archive(folder) as archive:
        archive.save(invented_day(STORM_DAY))
        for number in range(3):
            archive.tasks.add("tiny", f"day {number}", {"number": number}, now)
        access = Access(writing="open", changes=(1e9, 1e9), questions=(1e9, 1e9))
        app = create_app(archive, clock=lambda: now, frontend=folder, access=access)
        with TestClient(app, raise_server_exceptions=False) as client:
            yield client


def cases(client: TestClient) -> dict[str, st.SearchStrategy[Case]]:
    """Method and path -> questions to it, as its description allows and as it does not."""
    schema = schemathesis.openapi.from_dict(client.get("/api/openapi.json").json())
    found = {}
    for made in schema.get_all_operations():
        operation = made.ok()
        if operation.path not in ENDLESS:
            name = f"{operation.method.upper()} {operation.path}"
            found[name] = st.one_of(*(operation.as_strategy(mode) for mode in GenerationMode))
    return found


def ask(client: TestClient, case: Case, good: set[str], body: bytes | None) -> None:
    """Ask, with good values where they are named; no answer is a defect, every refusal has the one shape."""
    for name in good:
        if name in case.path_parameters:
            case.path_parameters[name] = GOOD[name]
        elif name in GOOD and name in (case.query or {}):
            case.query[name] = GOOD[name]
    named: dict[str, Any] = {}
    if body is not None:
        named = {"content": body}
    elif isinstance(case.body, bytes | str):
        named = {"content": case.body}
    elif case.body is not schemathesis.core.NOT_SET:
        named = {"json": case.body}
    sent = case.as_transport_kwargs(base_url="http://testserver")
    address = parse_url(sent["url"]).url
    answer = client.request(
        case.method, address, params=sent.get("params"), headers=_plain(sent.get("headers") or {}), **named
    )
    assert answer.status_code < 500, (case.method, str(answer.request.url), named, answer.text)
    if answer.status_code >= 400:
        content = json.loads(answer.text)
        assert set(content) == {"ok", "error", "kind", "details", "status"} and content["ok"] is False


def _plain(headers: Any) -> dict[str, str]:
    """Headers that a client can send."""
    return {
        name: value for name, value in dict(headers).items()
        if name.isascii() and value.isascii() and value.isprintable() and name.lower() != "user-agent"
    }  # fmt: skip


def fuzz(client: TestClient, examples: int) -> int:
    """So many questions to each operation; gives how many operations there are."""
    found = cases(client)
    harm = []
    for name, strategy in found.items():
        try:
            put_questions(client, name, strategy, examples)
        except AssertionError as failure:
            harm.append(f"{name}: {failure}"[:2000])
    assert not harm, "\n".join(harm)
    return len(found)


def put_questions(client: TestClient, name: str, strategy: st.SearchStrategy[Case], examples: int) -> None:
    """Questions to one operation."""

    @settings(
        max_examples=examples, deadline=None, database=None, derandomize=True,
        phases=[Phase.generate], suppress_health_check=list(HealthCheck),
    )  # fmt: skip
    @given(data=st.data())
    def some(data: st.DataObject) -> None:
        case = data.draw(strategy)
        names = [*case.path_parameters, *(case.query or {})]
        good = set(data.draw(st.lists(st.sampled_from(names), max_size=6))) if names else set()
        if data.draw(st.integers(0, 3)):  # three of four meet the stored day
            good |= set(case.path_parameters)
        body = data.draw(st.none() | st.binary(max_size=40) | st.just(BODY)) if name.startswith("P") else None
        ask(client, case, good & set(GOOD), body)

    some()


def test_nothing_the_description_leads_to_is_a_defect(everything: TestClient) -> None:
    assert fuzz(everything, 2) >= 48


@pytest.mark.slow
def test_nor_after_very_many_questions(everything: TestClient) -> None:
    assert fuzz(everything, 100) >= 48
