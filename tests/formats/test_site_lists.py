"""Lists of sites: CSV and GeoJSON; a bad line is named, a text that is no list refused."""

import json

import pytest
from hypothesis import given
from hypothesis import strategies as st

from skylag.errors import FormatError, SkylagError
from skylag.formats.site_lists import sites_from
from skylag.tables import Site


@pytest.mark.parametrize(
    "text",
    [
        "name,lat,lon,kind\nOldbrook,-40.5,146,aerodrome\nDam,-41,147.25,\n",
        "# made by hand\n\nKind;Longitude;Latitude;Site\naerodrome;146;-40,5;Oldbrook\n;147,25;-41;Dam\n",
        "\ufeffname\tlat\tlon\tkind\nOldbrook\t-40.5\t146\taerodrome\n\nDam\t-41\t147.25\t\n",
    ],
)
def test_tables(text: str) -> None:
    sites, problems = sites_from(text)
    assert sites == (Site("Oldbrook", -40.5, 146.0, "aerodrome"), Site("Dam", -41.0, 147.25, "site"))
    assert problems == ()


def test_geojson() -> None:
    content = {"type": "FeatureCollection", "features": [
        {"type": "Feature", "properties": {"name": "Oldbrook", "kind": "aerodrome"},
         "geometry": {"type": "Point", "coordinates": [146.0, -40.5, 12.0]}},
        {"type": "Feature", "properties": {"NAME": "Quarry"},
         "geometry": {"type": "Polygon", "coordinates": [[[146, -41], [148, -41], [148, -40], [146, -41]]]}},
        {"type": "Feature", "properties": {"name": "Nowhere"}, "geometry": None},
        {"type": "Feature", "properties": None, "geometry": {"type": "Point", "coordinates": [1, 2]}},
    ]}  # fmt: skip
    sites, problems = sites_from(json.dumps(content), "sites.geojson")
    assert sites == (Site("Oldbrook", -40.5, 146.0, "aerodrome"), Site("Quarry", -40.5, 147.0, "site"))
    assert [str(problem) for problem in problems] == [
        "sites.geojson:3: Nowhere has no place (skipped)", "sites.geojson:4: has no name (skipped)",
    ]  # fmt: skip


def test_bad_lines_are_named() -> None:
    sites, problems = sites_from("name,lat,lon\nA,1,2\nA,3,4\nB,95,0\nC,x,0\n,1,1\nD,0,361\nE,0,nan\nF,5\n", "s.csv")
    assert [site.name for site in sites] == ["A"]
    assert [problem.line for problem in problems] == [3, 4, 5, 6, 7, 8, 9]
    assert "came before" in problems[0].what


@pytest.mark.parametrize("text", ["", "\n\n", "lat,lon\n1,2\n", "{", "[1]", '{"type": "Point"}', '{"features": 3}'])
def test_what_is_no_list_is_refused(text: str) -> None:
    with pytest.raises(FormatError):
        sites_from(text)


@given(st.text(max_size=200) | st.text(max_size=100).map(lambda rest: "name,lat,lon\n" + rest))
def test_any_text_gives_sites_or_a_failure_in_words(text: str) -> None:
    try:
        sites, _ = sites_from(text)
    except SkylagError:
        return
    assert all(-90 <= site.lat <= 90 and site.name for site in sites)
