"""The interface asked from its own OpenAPI description: whatever the description allows, or forbids, no defect comes.

Questions are made by schemathesis: some that keep to the description, some that break it.  Most of what comes so has
no day behind it; so good values are put in for some parts, and the rest of the question meets real data.
"""

import json
from collections.abc import Iterator
from typing import Any

import jsonschema
import numpy as np
import pytest
import schemathesis
from fastapi.testclient import TestClient
from httpx import Response
from hypothesis import HealthCheck, Phase, given, settings
from hypothesis import strategies as st
from schemathesis import Case, GenerationMode
from tests.builders import REGION, STORM_DAY, invented_day
from urllib3.util import parse_url

from skylag.archive import open_archive
from skylag.formats import ionex
from skylag.web.access import Access
from skylag.web.app import create_app
from skylag.web.described import FAILURE

ENDLESS = ("/api/work/news",)  # a stream that never ends; it is followed in test_work_routes
# Good values by the names of what is asked with; others are left as they were made.
GOOD = {
    "region": REGION.name, "day": str(STORM_DAY), "version": "1", "lat": "-41", "lon": "147", "site": "Gannet Field",
    "time": "2031-05-11T05:00:00Z", "from": "2031-05-11T05:00:00Z", "to": "2031-05-11T06:00:00Z", "layers": "state",
    "south": "-43", "north": "-36", "west": "142", "east": "150", "since": "2031-05-01", "until": "2031-05-31",
    "number": "1", "batch": "0" * 32, "use": "ground", "method": "rtk", "baseline_km": "10", "hours": "07:00-16:00",
    "levels": "LPV-200", "horizontal_mm": "30", "vertical_mm": "50", "step_m": "0.5", "shape": "points", "places": "",
    "references": "", "session_min": "60", "least_min": "15", "mask_deg": "15", "least_satellites": "5",
    "most_dilution": "6", "fixing_chance": "0.1", "systems": "G", "lowest_deg": "15", "correction_m": "3",
    "noise_m": "0.36", "usual_grid_m": "3", "sigma_mm_per_km": "4", "distance_km": "6", "speed_m_s": "70",
    "smoothing_s": "100", "revision": "0", "name": "New quay", "kind": "port", "was": "", "after": "0", "state": "done",
    "expected_ap": "12,80", "most": "0.1", "newest": "3", "reach_km": "100", "minutes": "30",
}  # fmt: skip
_DAY = invented_day(STORM_DAY)
BODIES = (
    b"     2.11           OBSERVATION DATA    G (GPS)             RINEX VERSION / TYPE\n",
    b"name,lat,lon,kind\nNew quay,-40.5,146,port\n",
    ionex.write(_DAY.fields, _DAY.fields.times[0], 400.0).encode(),
)


@pytest.fixture(scope="module")
def everything(tmp_path_factory: pytest.TempPathFactory) -> Iterator[TestClient]:
    """The whole interface, all of it open and without limits of rate, over an archive of its own with a day in it."""
    folder = tmp_path_factory.mktemp("fuzz")
    now = np.datetime64("2031-05-12T08:00:00", "ns")
    with open_archive(folder) as archive:
        archive.save(_DAY)
        for number in range(3):
            archive.tasks.add("tiny", f"day {number}", {"number": number}, now)
        often = (1e9, 1e9)
        access = Access(writing="open", changes=often, questions=often, with_a_file=often)
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
    as_described(case, answer)


def as_described(case: Case, answer: Response) -> None:
    """Status, media type and, where there is one, shape of an answer are those of the description."""
    answers = case.operation.definition.raw["responses"]
    told = answers.get(str(answer.status_code)) or (answers["default"] if answer.status_code >= 400 else None)
    assert told, f"status {answer.status_code} is not described"
    media = answer.headers["content-type"].split(";")[0]
    assert list(told["content"]) == [media], f"{media} is not described"
    if answer.status_code >= 400:
        jsonschema.validate(answer.json(), FAILURE)


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
        names = sorted({*case.path_parameters, *(case.query or {})})
        some_names = set(data.draw(st.lists(st.sampled_from(names), max_size=6))) if names else set()
        good = set(names) - some_names if data.draw(st.booleans()) else some_names  # few wrong, or few good
        if data.draw(st.integers(0, 3)):  # three of four meet the stored day
            good |= set(case.path_parameters)
        body = data.draw(st.none() | st.binary(max_size=40) | st.sampled_from(BODIES)) if name.startswith("P") else None
        ask(client, case, good & set(GOOD), body)

    some()


def test_nothing_the_description_leads_to_is_a_defect(everything: TestClient) -> None:
    assert fuzz(everything, 2) >= 48


@pytest.mark.slow
def test_nor_after_very_many_questions(everything: TestClient) -> None:
    assert fuzz(everything, 100) >= 48
