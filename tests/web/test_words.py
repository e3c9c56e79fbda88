"""Sentences about a place, and which flags are told with it."""

from dataclasses import replace

import numpy as np
import pytest
from tests.builders import STORM_DAY, invented_day

from skylag.tables import BROKEN, HOLDS, STRAINED, UNSEEN, Thresholds
from skylag.web import nearby, sentences

NAN = float("nan")


HOUR5 = np.datetime64(f"{STORM_DAY}T05:10", "ns")


def said(code: int, slope: float, slope_sigma: float, delay: float, sigma: float, support: int, near=()) -> str:
    return sentences.of_state(
        code, slope=slope, slope_sigma=slope_sigma, delay_m=delay, delay_sigma_m=sigma, support=support,
        limits=Thresholds(strained_mm_per_km=8, broken_mm_per_km=25.5, unseen_sigma_m=1.5), near=near,
    )  # fmt: skip


@pytest.mark.parametrize(
    "code, numbers, expected",
    [
        (STRAINED, (18.2, 6.1, 2.345, 0.12, 9),
         "Corrections are strained here: the delay changes by 18 ± 6 mm per km. The vertical delay is 2.35 ± 0.12 m."),
        (BROKEN, (95.0, 9.0, 5.0, 0.5, 7),
         "Corrections are broken here: the delay changes by 95 ± 9 mm per km. The vertical delay is 5.00 ± 0.50 m."),
        (HOLDS, (1.4, 0.6, 1.5, 0.1, 12),
         "Corrections hold here: the vertical delay is 1.50 ± 0.10 m, and the delay changes by 1.4 ± 0.6 mm per km."),
        (HOLDS, (NAN, NAN, 1.5, 0.1, 3), "Corrections hold here: the vertical delay is 1.50 ± 0.10 m."),
        (STRAINED, (NAN, NAN, 1.5, NAN, 3),
         "Corrections are strained here: receivers near by see more than the map shows. "
         "The vertical delay is 1.50 m, uncertainty not known."),
        (BROKEN, (9.0, 1.0, NAN, NAN, 0),
         "Corrections are broken here: receivers near by see more than the map shows. "
         "On the map itself the delay changes by 9 ± 1 mm per km. The vertical delay itself is not known here."),
        (UNSEEN, (5.0, 1.0, 1.5, 2.0, 1),
         "Unseen here: the vertical delay is known to 2.0 m only, and 1.5 m is needed to say more. "
         "Treat it as not covered."),
        (UNSEEN, (NAN, NAN, 1.5, 1.0, 1),
         "Unseen here: what one line of sight tells of the slope is too little to say that corrections hold. "
         "Treat it as not covered."),
        (UNSEEN, (NAN, NAN, NAN, NAN, 0),
         "Unseen here: no line of sight passes near enough to say anything. Treat it as not covered."),
    ],
)  # fmt: skip
def test_sentences(code: int, numbers: tuple[float, float, float, float, int], expected: str) -> None:
    assert said(code, *numbers) == expected


def test_no_value_never_holds() -> None:
    assert said(HOLDS, 1.0, 1.0, NAN, 1.0, 0).startswith("Unseen here")


def test_a_flag_is_named_where_the_map_is_flat() -> None:
    """A state that comes from a front or patch near by is not put down to the map's own gentle slope."""
    flags = invented_day().flags
    front, patch, fault = (nearby.NearFlag(flag, flag.lat, flag.lon, 50.0, 0.0) for flag in flags)
    flat = (2.0, 1.0, 3.0, 0.2, 9)
    assert said(BROKEN, *flat, near=(fault, front)).startswith(
        "Corrections are broken here: a front of 95 ± 9 mm per km is near, moving north. On the map itself the delay "
        "changes by 2 ± 1 mm per km."
    )
    assert "an irregular patch is near" in said(STRAINED, *flat, near=(front, patch)), "the one of that state speaks"
    assert "a front of" in said(STRAINED, *flat, near=(front,))
    assert "receivers near by" in said(STRAINED, *flat, near=(fault,)), "a fault in the data is no weather"
    slope = replace(flags[1], kind="slope", slope_mm_per_km=40.0, sigma_mm_per_km=6.0)
    near = (nearby.NearFlag(slope, 0.0, 0.0, 1.0, 0.0),)
    assert "a slope of 40 ± 6 mm per km is near" in said(STRAINED, *flat, near=near)


@pytest.mark.parametrize("heading, word", [(0, "north"), (359, "north"), (44, "north-east"), (180, "south"),
                                           (292.4, "west"), (292.6, "north-west")])  # fmt: skip
def test_compass(heading: float, word: str) -> None:
    assert sentences.compass(heading) == word


def test_a_front_is_where_its_track_has_it() -> None:
    front = invented_day().flags[0]
    half_past = np.datetime64(f"{STORM_DAY}T05:07:30", "ns")
    assert nearby.position_at(front, half_past) == (pytest.approx(-41.25), pytest.approx(146.0))
    over_180 = tuple((t, lat, lon) for (t, lat, _), lon in zip(front.track[:2], (179.8, -179.8), strict=True))
    _lat, lon = nearby.position_at(replace(front, track=over_180), np.datetime64(f"{STORM_DAY}T04:07:30", "ns"))
    assert lon % 360.0 == pytest.approx(180.0)


def test_only_active_flags_within_reach_nearest_first() -> None:
    flags = invented_day().flags
    near = nearby.active_near(flags, -41.4, 147.7, HOUR5)
    assert [one.flag.kind for one in near] == ["fault", "front"]
    assert near[0].distance_km < near[1].distance_km <= nearby.REACH_KM
    assert nearby.active_near(flags, -36.0, 142.0, HOUR5) == ()
    assert nearby.active_near(flags, -41.4, 147.7, np.datetime64(f"{STORM_DAY}T20:00", "ns")) == ()


def test_distance_and_bearing(evidence) -> None:
    """A quarter of the way round along the equator, and a degree of latitude."""
    distance, bearing = nearby.distance_and_bearing(0.0, 170.0, 0.0, -100.0)
    evidence("quarter of the mean sphere's equator", source="definition: 6371 km times pi/2", expected=10007.543,
             got=distance, tolerance=0.001, unit="km")  # fmt: skip
    assert bearing == pytest.approx(90.0)
    assert nearby.distance_and_bearing(-40.0, 147.0, -41.0, 147.0) == (pytest.approx(111.195, abs=1e-3), 180.0)
    assert nearby.distance_and_bearing(-40.0, 147.0, -40.0, 147.0)[0] == 0.0
