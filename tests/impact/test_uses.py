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
from skylag.impact import at_places, events, states, uses
from skylag.ionosphere import fronts, irregularity, slopes
from skylag.ionosphere.background import Background
from skylag.tables import BROKEN, HOLDS, STATE_NAMES, STRAINED, UNSEEN, Site, Use

DIFFERENTIAL, GROUND, SATELLITE, SINGLE = uses.PUBLISHED


def first_with(state, judged_at, low, high):
    """The smallest value, between two, from which a judged thing has a state: what is done, not what is said."""
    assert judged_at(low) < state <= judged_at(high)
    for _ in range(45):
        middle = 0.5 * (low + high)
        low, high = (low, middle) if judged_at(middle) >= state else (middle, high)
    return high


def by_slope(use):
    """The state of a site whose map slopes by so many mm/km, known exactly."""
    return lambda slope: int(uses.judge_for(use, flat_fields(hours=0.25, slope=slope, sigma=0.0), (), REGION)
                             .site_states[0, 0])  # fmt: skip


def by_content(use, shape):
    """The state at the middle cell of a map whose vertical delay is so many metres times a shape, known exactly."""

    def state(metres):
        fields = flat_fields(hours=0.25, vtec_sigma=0.0)
        fields.vtec[:] = metres / L1_M_PER_TECU * shape
        return int(uses.judge_for(use, fields, (), REGION).states[0, 7, 9])

    return state


def test_states_begin_at_published_limits(evidence):
    """Each limit found by trying what makes a site or cell strained or broken."""
    evidence("differential over 10 km breaks from", source="half a cycle of 1575.42 MHz, 95.1 mm, over 10 km: 9.51 ppm "
             "(references 9)", expected=9.51, got=first_with(BROKEN, by_slope(DIFFERENTIAL), 1.0, 40.0),
             tolerance=0.006, unit="mm/km")  # fmt: skip
    evidence("ground-based is strained from", source="nominal slopes are bounded by 4 mm/km: Mayer et al. 2009, ION "
             "GNSS, 1091-1099", expected=4.0, got=first_with(STRAINED, by_slope(GROUND), 1.0, 20.0), tolerance=1e-5,
             unit="mm/km")  # fmt: skip
    evidence("ground-based breaks from", source="largest slope sigma that can be sent, 2.55e-5 m/m: ICAO Annex 10 "
             "App. B", expected=2.55e-5 * 1e6, got=first_with(BROKEN, by_slope(GROUND), 5.0, 60.0), tolerance=1e-5,
             unit="mm/km")  # fmt: skip
    for state, expected in ((STRAINED, 4.5), (BROKEN, 9.0)):
        half_removed = first_with(state, by_content(SINGLE, 2.0), 0.5, 20.0)  # half of the delay is left by the model
        evidence(f"single frequency is {STATE_NAMES[state]} from, of delay left", expected=expected, got=half_removed,
                 source=f"vertical sigma of receivers at {('middle', 'low')[state == BROKEN]} latitudes: RTCA DO-229, "
                 "J.2.3 (from memory)", tolerance=1e-5, unit="m")  # fmt: skip
    lon, lat = np.meshgrid(LONS, LATS)
    spike = (np.abs(lat - LATS[7]) < 0.1) & (np.abs(lon - LONS[9]) < 0.1)
    off = {}
    for state, source, expected in (
        (STRAINED, "two nominal spreads of 0.35 m about a plane: Walter et al. 2000 (from memory)", 0.70),
        (BROKEN, "3.29 spreads (99.9 %, as GIVE is announced: DO-229 table A-17) of 0.35 m", 1.1515),
    ):
        height = first_with(state, by_content(SATELLITE, 1.0 * spike), 0.1, 5.0)
        # A spike of one cell in 285 pulls the plane up by little: its foot is where the others are.
        off[state] = height
        evidence(f"satellite-based is {STATE_NAMES[state]} from, above a plane", source=source, expected=expected,
                 got=height, tolerance=0.015 * expected, unit="m")  # fmt: skip
    assert off[BROKEN] / off[STRAINED] == pytest.approx(3.29 / 2.0, rel=1e-4)


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


@pytest.mark.parametrize("use", uses.PUBLISHED, ids=lambda use: use.kind)
def test_around_a_silent_receiver_nothing_holds_for_any_use(use):
    """The day took back what its map would let hold; beside it a cell of which the slope is hardly known."""
    fields = flat_fields(slope=0.5)
    fields.state[:] = HOLDS
    fields.state[5:8, 6:9, 8:11] = UNSEEN
    fields.slope_sigma[5:8, 6, 8] = 30.0
    judged = uses.judge_for(use, fields, (), REGION)
    assert (judged.states[5:8, 6:9, 8:11] == UNSEEN).all()
    rest = np.ones(judged.states.shape, dtype=bool)
    rest[5:8, 6:9, 8:11] = False
    assert (judged.states[rest] == HOLDS).all()


def test_what_is_unseen_for_its_slope_may_hold_for_an_easier_use():
    fields = flat_fields(slope=0.5, sigma=10.0)
    fields.state[:] = states.field_states(fields, REGION.thresholds)
    assert (fields.state == UNSEEN).all()
    easy = Use("next door", "differential", baseline_km=0.5)
    assert (uses.judge_for(easy, fields, (), REGION).states == HOLDS).all()


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
    fields = replace(fields, vtec_sigma=np.full_like(fields.vtec, 0.5), state=np.full_like(fields.state, HOLDS))
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


@pytest.mark.parametrize("use", [DIFFERENTIAL, GROUND], ids=lambda use: use.kind)
def test_a_site_aside_of_its_cells_middle_takes_the_warnings_that_lie_over_it(use):
    fields = flat_fields(slope=0.5)
    aside = Site("aside", float(fields.lats[7]), float(fields.lons[9]) + 0.2)
    fields.state[:] = HOLDS
    fields.state[5:8, 7, 10] = BROKEN  # the cell to the east, by more than the map's own slope
    region = replace(REGION, sites=(aside,))
    judged = uses.judge_for(use, fields, (), region)
    assert (judged.site_states[5:8, 0] == BROKEN).all()
    assert all("reaches the site and makes" in reason for reason in judged.site_reasons[0][5:8])
    assert (np.delete(judged.site_states[:, 0], [5, 6, 7]) == HOLDS).all()
    assert judged.states[6, 7, 9] == HOLDS  # of the cell's middle nothing else is said


def test_a_front_over_a_site_counts_by_the_limits_of_the_use(stormy):
    """Wherever the day's own judging warns a site by a front, a slope use says what the front's slope means to it."""
    fields, flags = stormy
    rng = np.random.default_rng(3)
    places = zip(rng.uniform(-40.5, -38.0, 40), rng.uniform(144.5, 146.5, 40), strict=True)
    region = replace(REGION, sites=tuple(Site(f"{n}", float(a), float(b)) for n, (a, b) in enumerate(places)))
    day, _ = at_places.judge(region.sites, fields, flags, region.thresholds)
    ground = uses.judge_for(GROUND, fields, flags, region).site_states
    assert (day >= STRAINED).any()
    assert (ground[day >= STRAINED] >= STRAINED).all()
    easy = uses.judge_for(Use("next door", "differential", baseline_km=0.5), fields, flags, region).site_states
    assert (easy[day == BROKEN] < BROKEN).any()


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


def test_a_patch_stops_satellite_based_corrections_where_no_plane_fits():
    """By the chi-square test that such services make (Walter et al. 2000), whatever the index of the patch."""
    steep, moving, none = nothing()
    got = {}
    cases = {"fails": (80.0, 55.0, 0.8), "passes": (20.0, 55.0, 1.4), "unknown": (np.nan, np.nan, 1.4)}
    for words, (chi_square, limit, index) in cases.items():
        ragged = Patches((some_patch(planar=(chi_square, limit), index_highest=index),),
                         *(getattr(none, name) for name in list(Patches.__dataclass_fields__)[1:]))  # fmt: skip
        judged = states.judge(flat_fields(), steep, moving, ragged, REGION)
        said = [uses.judge_for(use, judged.fields, judged.flags, REGION) for use in (SATELLITE, GROUND)]
        got[words] = tuple(int(one.states[18].max()) for one in said)
    assert got == {"fails": (BROKEN, STRAINED), "passes": (STRAINED, BROKEN), "unknown": (BROKEN, BROKEN)}


@pytest.mark.parametrize(
    ("said", "expected"),
    [
        ("planar fit passes (chi-square 20, limit 55)", STRAINED),  # 30 lines of sight
        ("planar fit passes (chi-square 24, limit 25)", BROKEN),  # ten: too few to see anything
        ("planar fit passes (chi-square 50, limit 54)", BROKEN),  # 29
        ("planar fit passes (chi-square 3, limit 55)", BROKEN),  # residuals far under their sigmas: these are too large
        ("planar fit passes (chi-square 60, limit 55)", BROKEN),  # contradicts itself
        ("planar fit passes", BROKEN),
        ("planar fit passes (chi-square nan, limit 55)", BROKEN),
        ("no planar fit passes here: chi-square 20, limit 55", BROKEN),
    ],
)
def test_a_passed_planar_fit_lowers_only_where_it_means_something(said, expected):
    steep, moving, none = nothing()
    ragged = Patches((some_patch(planar=(20.0, 55.0), index_highest=1.4),),
                     *(getattr(none, name) for name in list(Patches.__dataclass_fields__)[1:]))  # fmt: skip
    (flag,) = states.judge(flat_fields(), steep, moving, ragged, REGION).flags
    own = "planar fit passes (chi-square 20, limit 55)"  # as the sentence of a patch has it
    assert own in flag.evidence and flag.state == "broken"
    assert uses.flag_state(SATELLITE, replace(flag, evidence=flag.evidence.replace(own, said)), (0.7, 1.15)) == expected


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


def test_what_nobody_saw_is_no_worst_value_of_an_event():
    """A warning reaches over cells that no line of sight carries; what the maps fade into there is not its slope."""
    fields = flat_fields(slope=30.0)
    fields.state[:] = HOLDS
    fields.state[10:14, 5:8, 5:8] = BROKEN
    fields.support[:, :, 7:] = 0
    fields.slope[:, :, 7:] = 300.0
    (event,) = events.of_day(fields, (), REGION)
    assert event.slope == 30.0 and event.cells == 9
    fields.support[:] = 0
    (blind,) = events.of_day(fields, (), REGION)
    assert np.isnan(blind.slope) and blind.reason == "slopes between receivers nearby reach over 9 cells"


def test_an_event_that_ends_out_of_sight_says_so():
    fields = flat_fields(slope=30.0)
    fields.state[:] = HOLDS
    fields.state[10:14, 5:8, 5:8] = BROKEN
    (over,) = events.of_day(fields, (), REGION)
    assert "unseen" not in over.reason
    fields.state[14, 5:7, 5:8] = UNSEEN
    (lost,) = events.of_day(fields, (), REGION)
    assert lost.reason == f"{over.reason}; 6 of its last 9 cells turn unseen: it may have gone on"
    fields.state[10:, 5:8, 5:8] = BROKEN  # to the last map
    (open_end,) = events.of_day(fields, (), REGION)
    assert open_end.reason == over.reason


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
    shapes = json.loads(event_files.to_geojson(listed, {"simulated": True}))
    assert shapes["type"] == "FeatureCollection" and shapes["simulated"] is True
    ring = shapes["features"][0]["geometry"]["coordinates"][0]
    assert ring[0] == ring[-1] and len(ring) == 5 and 140 < ring[0][0] < 151
    told = json.loads(event_files.to_json(listed, {"simulated": False}))["events"]
    assert told[0]["state"] == "broken" and told[0]["reason"].startswith("front of")


@pytest.mark.parametrize(
    ("west", "east", "south", "north", "kind", "coordinates", "bounds"),
    [
        (178.5, 182.0, -41.0, -40.0, "MultiPolygon",
         [[[[178.5, -41.0], [180.0, -41.0], [180.0, -40.0], [178.5, -40.0], [178.5, -41.0]]],
          [[[-180.0, -41.0], [-178.0, -41.0], [-178.0, -40.0], [-180.0, -40.0], [-180.0, -41.0]]]],
         [178.5, -41.0, -178.0, -40.0]),
        (179.0, 181.0, -41.0, -41.0, "MultiLineString",
         [[[179.0, -41.0], [180.0, -41.0]], [[-180.0, -41.0], [-179.0, -41.0]]], [179.0, -41.0, -179.0, -41.0]),
        (182.0, 182.0, -41.0, -40.0, "LineString", [[-178.0, -41.0], [-178.0, -40.0]], [-178.0, -41.0, -178.0, -40.0]),
        (182.0, 182.0, -41.0, -41.0, "Point", [-178.0, -41.0], [-178.0, -41.0, -178.0, -41.0]),
        (183.0, 185.0, -41.0, -40.0, "Polygon",
         [[[-177.0, -41.0], [-175.0, -41.0], [-175.0, -40.0], [-177.0, -40.0], [-177.0, -41.0]]],
         [-177.0, -41.0, -175.0, -40.0]),
        (178.0, 180.0, 1.0, 2.0, "Polygon",
         [[[178.0, 1.0], [180.0, 1.0], [180.0, 2.0], [178.0, 2.0], [178.0, 1.0]]], [178.0, 1.0, 180.0, 2.0]),
    ],
)  # fmt: skip
def test_geojson_is_cut_at_the_antimeridian(stormy, west, east, south, north, kind, coordinates, bounds):
    """RFC 7946: no part crosses the antimeridian (3.1.9), the outer ring runs against the clock (3.1.6), bbox (5.2)."""
    event = replace(events.of_day(*stormy, REGION)[0], west=west, east=east, south=south, north=north)
    (feature,) = json.loads(event_files.to_geojson([event], {"simulated": False}))["features"]
    assert feature["geometry"] == {"type": kind, "coordinates": coordinates}
    assert feature["bbox"] == bounds


def test_a_track_is_cut_at_the_antimeridian():
    east = event_files.line([179.0, 181.0, 182.0], [-40.0, -41.0, -41.5])
    assert east == {"type": "MultiLineString", "coordinates": [
        [[179.0, -40.0], [180.0, -40.5]], [[-180.0, -40.5], [-179.0, -41.0], [-178.0, -41.5]],
    ]}  # fmt: skip
    west = event_files.line([-179.5, 179.5], [10.0, 11.0])
    assert west["coordinates"] == [[[-179.5, 10.0], [-180.0, 10.5]], [[180.0, 10.5], [179.5, 11.0]]]
    assert event_files.line([145.0, 146.0], [-40.0, -39.0]) == {
        "type": "LineString", "coordinates": [[145.0, -40.0], [146.0, -39.0]],
    }  # fmt: skip


def test_a_wall_over_the_antimeridian_is_one_event_cut_for_geojson():
    fields = flat_fields()
    fields.slope[6:12, 4:7, 5:12] = 20.0
    moved = replace(fields, lons=LONS + 180.0 - LONS[8])
    region = replace(REGION, west=float(moved.lons[0]), east=float(moved.lons[-1]), sites=())
    judged = states.judge(moved, *nothing(), region)
    (event,) = events.of_day(judged.fields, judged.flags, region)
    assert event.west < 180.0 < event.east
    (feature,) = json.loads(event_files.to_geojson([event], {"simulated": False}))["features"]
    assert feature["geometry"]["type"] == "MultiPolygon"
    longitudes = [[p[0] for p in part[0]] for part in feature["geometry"]["coordinates"]]
    assert [(min(part), max(part)) for part in longitudes] == [(178.5, 180.0), (-180.0, -178.5)]


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
