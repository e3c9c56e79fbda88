"""A published map beside the day: chosen on the page, answered, drawn; a wrong file is said.  Lines to take."""

from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from fastapi.testclient import TestClient
from tests.builders import STORM_DAY, write_archive

from skylag.archive import open_archive
from skylag.formats import ionex
from skylag.web.access import Access
from skylag.web.app import create_app

pytestmark = pytest.mark.browser


def test_a_map_is_chosen_and_laid_beside_the_day(visit: Any, tmp_path: Path) -> None:
    """The page's server takes nothing; what the page sends is answered by the application that may."""
    with open_archive(write_archive(tmp_path / "kept")) as archive:
        fields = archive.fields(archive.regions()[0], str(STORM_DAY))
        made = ionex.write(replace(fields, vtec=fields.vtec + np.float32(2.0)), fields.times[0], 400.0)
        with TestClient(create_app(archive, access=Access(writing="open"))) as asked:
            one = visit(plotly=False).go(f"?day={STORM_DAY}")

            def answer(route: Any) -> None:
                path = route.request.url.removeprefix(one.server)
                told = asked.post(path, content=route.request.post_data_buffer)
                route.fulfill(status=told.status_code, content_type="application/json", body=told.text)

            lines = asked.get(str(one.page.get_attribute("#map-lines", "href"))).json()
            assert lines["features"] and lines["time_utc"].startswith(str(STORM_DAY))
            one.page.route("**/beside?**", answer)
            one.page.click("#beside summary")
            chooser = "#beside-file"
            one.page.set_input_files(chooser, {"name": "made.31i", "mimeType": "text/plain", "buffer": made.encode()})
            one.page.wait_for_selector("#beside-body canvas")
            assert "made.31i" in one.text("#beside-body") and "Invented data" in one.text("#beside-body")
            assert "ours less theirs" in str(one.page.get_attribute("#beside-body canvas", "aria-label"))
            painted = one.page.evaluate(
                """() => { const c = document.querySelector("#beside-body canvas");
                  return c.getContext("2d").getImageData(0, 0, c.width, c.height).data.some((v) => v > 0); }"""
            )
            assert painted
            assert one.page.locator("#beside-body table tbody tr").count() == 24
            before = one.text("#beside-body .fine >> nth=1")
            one.page.locator("#beside-body input[type=range]").press("ArrowRight")
            assert one.text("#beside-body .fine >> nth=1") != before
            one.page.set_input_files(chooser, {"name": "no.map", "mimeType": "text/plain", "buffer": b"no map"})
            one.page.wait_for_selector("#beside-body .trouble")
            assert "no format known" in one.text("#beside-body")
            one.complaints[:] = [said for said in one.complaints if "422" not in said]  # the browser notes refusals
