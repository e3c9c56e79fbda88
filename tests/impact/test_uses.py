"""Limits of each use against published values, what a day's states become for it, sentences, and events."""

import json
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from tests.impact.test_states import LATS, LONS, REGION, flat_fields, nothing, some_patch
from tests.simulated.moving_wall import CENTRE, START, quiet, simulate, wall

from skylag.constants import L1_M_PER_TECU
from skylag.errors import Refused
from skylag.events import Patches
from skylag.formats import events as event_files
from skylag.impact import events, states, uses
from skylag.ionosphere import fronts, irregularity, slopes
from skylag.ionosphere.background import Background
from skylag.tables import BROKEN, HOLDS, STRAINED, UNSEEN, Use

DIFFERENTIAL, GROUND, SATELLITE, SINGLE = uses.PUBLISHED


def test_limits_are_the_published_ones(evidence):
    cycle_mm = 299_792_458.0 / 1575.42e6 * 1000.0
    evidence("differential: half a cycle over 10 km", source="half a wavelength of 1575.42 MHz (IS-GPS-200)",
             expected=cycle_mm / 2 / 10, got=uses.limits_of(DIFFERENTIAL)[1], tolerance=0.01, unit="mm/km")  # fmt: skip
    evidence("ground: nominal slopes bounded by", source="Mayer et al. 2009, ION GNSS, 1091-1099", expected=4.0,
             got=uses.limits_of(GROUND)[0], tolerance=0, unit="mm/km")  # fmt: skip
    evidence("ground: largest slope sigma that can be sent", source="ICAO Annex 10 App. B: 8 bits of 0.1 mm/km",
             expected=25.5, got=uses.limits_of(GROUND)[1], tolerance=0, unit="mm/km")  # fmt: skip
    evidence("satellite: 3.29 spreads of 0.35 m", source="Walter et al. 2000 (from memory); 99.9 % of a normal",
             expected=1.1515, got=uses.limits_of(SATELLITE)[1], tolerance=1e-9, unit="m")  # fmt: skip
    for number, expected in ((0, 4.5), (1, 9.0)):
        evidence(f"single: sigma of the broadcast model, {('middle', 'low')[number]} latitudes",
                 source="RTCA DO-229, J.2.3 (from memory)", expected=expected, got=uses.limits_of(SINGLE)[number],
                 tolerance=0, unit="m")  # fmt: skip


@pytest.mark.parametrize(("slope", "smoothing_s", "expected"), [(425, 100, 8.5), (425, 30, 4.335), (100, 100, 2.0),
                                                                (100, 30, 1.02), (4, 100, 0.08)])  # fmt: skip
def test_error_of_an_approach(slope, smoothing_s, expected, evidence):
    use = replace(GROUND, smoothing_s=smoothing_s)
    evidence(f"error at 6 km, 70 m/s, {smoothing_s} s, {slope} mm/km", source="references 8.5 (x + 2 tau v)",
             expected=expected, got=uses.approach_error_m(use, slope), tolerance=1e-3, unit="m")  # fmt: skip


@given(st.floats(1, 300), st.floats(10, 500), st.floats(1.1, 5))
def test_more_to_spare_or_a_shorter_baseline_never_tightens(baseline, spare, more):
    use = Use("a", "differential", baseline_km=baseline, spare_mm=spare)
    wider = replace(use, spare_mm=spare * more)
    shorter = replace(use, baseline_km=baseline / more)
    for easier in (wider, shorter):
        assert uses.limits_of(easier)[0] > uses.limits_of(use)[0]
        assert uses.limits_of(easier)[1] > uses.limits_of(use)[1]


@pytest.mark.parametrize("use", uses.PUBLISHED, ids=[use.kind for use in uses.PUBLISHED])
def test_unseen_is_unseen_for_every_use(use):
    fields = flat_fields(support=0)
    judged = uses.judge_for(use, fields, (), REGION)
    assert (judged.states == UNSEEN).all() and (judged.site_states == UNSEEN).all()
    assert all(reason for reasons in judged.site_reasons for reason in reasons)
    assert events.of_use(judged, fields, (), REGION) == ()


@pytest.mark.parametrize("use", uses.PUBLISHED, ids=[use.kind for use in uses.PUBLISHED])
def test_a_calm_map_holds_for_every_use(use):
    fields = states.judge(flat_fields(), *nothing(), REGION).fields
    judged = uses.judge_for(use, fields, (), REGION)
    assert (judged.states == HOLDS).all()
    assert set(judged.site_reasons[0]) == {""}
    assert set(judged.site_reasons[2]) == {"outside the map: nothing can be said"}


def test_one_slope_means_different_things():
    fields = flat_fields(slope=8.0, sigma=0.5)
    fields = states.judge(fields, *nothing(), REGION).fields
    got = {use.kind: int(uses.judge_for(use, fields, (), REGION).site_states[0, 0]) for use in uses.PUBLISHED}
    assert got == {"differential": STRAINED, "ground": STRAINED, "satellite": HOLDS, "single": HOLDS}
    near = Use("road job", "differential", baseline_km=2.0)
    assert uses.judge_for(near, fields, (), REGION).site_states[0, 0] == HOLDS
    far = Use("ship", "differential", baseline_km=60.0)
    judged = uses.judge_for(far, fields, (), REGION)
    assert judged.site_states[0, 0] == BROKEN
    assert judged.site_reasons[0][0].startswith("the map slopes by 8.0 ± 0.5 mm/km; 480 mm over 60 km, 95.1 mm")
    own = Use("own", "ground", strained_from=10.0, broken_from=20.0)
    assert uses.judge_for(own, fields, (), REGION).site_states[0, 0] == HOLDS


def test_a_bump_hurts_satellite_based_corrections_and_a_plane_does_not():
    fields = flat_fields()
    lon, lat = np.meshgrid(LONS, LATS)
    fields.vtec[:] = 20.0 + 1.5 * (lat + 39.0) - 0.7 * (lon - 145.0)
    fields = replace(fields, vtec_sigma=np.full_like(fields.vtec, 0.5))
    assert (uses.judge_for(SATELLITE, fields, (), REGION).states == HOLDS).all()
    bumped = fields.vtec + 14.0 * np.exp(-((lat + 39.3) ** 2 + (lon - 145.5) ** 2))
    judged = uses.judge_for(SATELLITE, replace(fields, vtec=bumped.astype(np.float32)), (), REGION)
    assert judged.site_states[0, 0] == BROKEN and judged.states[0, 0, 0] == HOLDS
    assert "off the plane through its surroundings" in judged.site_reasons[0][0]


def test_a_single_frequency_is_hurt_by_what_the_model_misses():
    fields = flat_fields()
    fields.vtec[:] = 50.0
    good = Background("as it is", "ntcm", (150.0, 0.0, 0.0))
    level = good.vertical(np.array([-39.3]), np.array([145.5]), fields.times[0])[0] * L1_M_PER_TECU
    judged = uses.judge_for(SINGLE, fields, (), REGION, model=good)
    assert judged.measure[0, 7, 9] == pytest.approx(abs(50.0 * L1_M_PER_TECU - level), abs=0.3)
    assert uses.judge_for(SINGLE, fields, (), REGION).measure[0, 0, 0] == pytest.approx(25.0 * L1_M_PER_TECU)
    fields.vtec[:] = 120.0
    assert (uses.judge_for(SINGLE, fields, (), REGION).states == BROKEN).all()


@pytest.fixture(scope="module")
def stormy():
    ramp = wall(60.0, 60.0, 180.0, 320.0, 2 * 3600)
    rays, samples = simulate(lambda x, y, t: quiet(x, y, t) + ramp(x, y, t), np.random.default_rng(71), hours=4.0)
    steep = slopes.measure(rays, samples)
    moving = fronts.track(rays, samples, steep)
    ragged = irregularity.assess(rays, moving, None, samples)
    judged = states.judge(flat_fields(), steep, moving, ragged, REGION)
    return judged.fields, judged.flags


def test_a_front_is_told_in_terms_of_the_use(stormy):
    fields, flags = stormy
    at = int(np.argmin(np.abs(fields.times - (START + np.timedelta64(2, "h")))))
    said = {use.kind: uses.judge_for(use, fields, flags, REGION) for use in uses.PUBLISHED}
    assert said["ground"].site_states[at, 0] == BROKEN and said["satellite"].site_states[at, 0] >= STRAINED
    assert "1.2" in said["ground"].site_reasons[0][at] and "approach 6 km out" in said["ground"].site_reasons[0][at]
    assert said["single"].site_states[at, 0] == HOLDS  # 0.7 m at least is little against what its model leaves
    (number,) = said["ground"].site_evidence[0][at]
    assert flags[number].kind == "front"
    early = int(np.argmin(np.abs(fields.times - (START + np.timedelta64(30, "m")))))
    assert said["ground"].site_states[early, 0] == HOLDS and said["ground"].site_evidence[0][early] == ()
    bold = Use("next door", "differential", baseline_km=0.5)
    assert uses.judge_for(bold, fields, flags, REGION).site_states[at, 0] == HOLDS


def test_a_front_is_one_event_and_a_patch_another(stormy):
    fields, flags = stormy
    steep, moving, none = nothing()
    ragged = Patches((some_patch(),), *(getattr(none, name) for name in list(Patches.__dataclass_fields__)[1:]))
    patch = states.judge(flat_fields(), steep, moving, ragged, REGION)
    both = replace(fields, state=np.maximum(fields.state, patch.fields.state))
    listed = events.of_day(both, (*flags, *patch.flags), REGION)
    assert sorted(event.cause for event in listed) == ["front", "irregular"]
    front = next(event for event in listed if event.cause == "front")
    assert front.state == "broken" and front.confirmed and "middle" in front.sites
    assert front.slope == pytest.approx(60, rel=0.15)
    assert front.start < START + np.timedelta64(2, "h") < front.end
    assert front.south <= CENTRE[0] <= front.north and front.west <= CENTRE[1] <= front.east
    rough = next(event for event in listed if event.cause == "irregular")
    assert rough.state == "strained" and (rough.end - rough.start) >= np.timedelta64(50, "m")
    cell_km2 = (0.5 * np.pi / 180 * 6371.0) ** 2 * np.cos(np.radians(39.0))
    assert rough.area_km2 == pytest.approx(rough.cells * cell_km2, rel=0.03)
    assert np.isnan(rough.slope) or rough.slope < 2.0
    # Every bad cell of the day is in one event: nothing is told twice, nothing is lost but specks.
    assert sum(event.cell_epochs for event in listed) == int((both.state >= STRAINED).sum())


def test_map_alone_makes_an_unconfirmed_event_and_specks_make_none():
    fields = flat_fields()
    fields.slope[6:12, 4:7, 5:8] = 20.0
    fields.slope[9, 5, 6] = 24.0
    fields.slope[30, 1, 1] = 20.0
    judged = states.judge(fields, *nothing(), REGION)
    (event,) = events.of_day(judged.fields, judged.flags, REGION)
    assert (event.cause, event.state, event.confirmed) == ("map", "strained", False)
    assert (event.start, event.end) == (fields.times[6], fields.times[12])
    assert (event.worst_time, event.lat, event.lon) == (fields.times[9], LATS[5], LONS[6])
    assert event.slope == pytest.approx(24.0) and event.cells == 9 and event.cell_epochs == 54
    assert [flag.kind for flag in (judged.flags[n] for n in event.flags)] == ["slope"]


def test_a_short_calm_does_not_part_an_event():
    fields = flat_fields()
    fields.slope[6:16, 4:7, 5:8] = 20.0
    fields.slope[10, 4:7, 5:8] = 1.0
    judged = states.judge(fields, *nothing(), REGION)
    assert [event.cell_epochs for event in events.of_day(judged.fields, judged.flags, REGION)] == [81]
    fields.slope[10:14, 4:7, 5:8] = 1.0
    judged = states.judge(fields, *nothing(), REGION)
    assert [event.cell_epochs for event in events.of_day(judged.fields, judged.flags, REGION)] == [36, 18]


def test_events_leave_as_csv_geojson_and_json(stormy):
    fields, flags = stormy
    listed = events.of_day(fields, flags, REGION)
    table = event_files.to_csv(listed).splitlines()
    assert table[0].split(",") == list(event_files.COLUMNS) and len(table) == 1 + len(listed)
    assert "true" in table[1] and "Z," in table[1]
    shapes = json.loads(event_files.to_geojson(listed, simulated=True))
    assert shapes["type"] == "FeatureCollection" and shapes["simulated"] is True
    ring = shapes["features"][0]["geometry"]["coordinates"][0]
    assert ring[0] == ring[-1] and len(ring) == 5 and 140 < ring[0][0] < 151
    told = json.loads(event_files.to_json(listed, simulated=False))["events"]
    assert told[0]["state"] == "broken" and told[0]["reason"].startswith("front of")


def test_uses_by_name_and_kind():
    assert uses.find_use(REGION, "ground").baseline_km == 6.0
    assert uses.find_use(REGION, "single frequency").kind == "single"
    with pytest.raises(Refused, match="there is no such use; choose from differential over 10 km"):
        uses.find_use(REGION, "sextant")
    own = replace(REGION, uses=(Use("pipeline", "differential", 30.0, 200.0),))
    assert [use.name for use in uses.uses_of(own)] == ["pipeline"]
    with pytest.raises(Refused):
        uses.find_use(own, "ground")


@pytest.mark.parametrize("wrong", [{"kind": "sextant"}, {"baseline_km": 0.0}, {"spare_mm": np.nan}, {"name": " "},
                                   {"strained_from": 5.0, "broken_from": 2.0}, {"strained_from": 0.0,
                                   "broken_from": 2.0}])  # fmt: skip
def test_a_use_outside_its_range_is_refused(wrong):
    with pytest.raises(Refused, match="Use: "):
        Use(**({"name": "a", "kind": "ground"} | wrong))
