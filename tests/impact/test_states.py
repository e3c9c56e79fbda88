"""States of places: limits, that unseen stays unseen, what a front and a patch reach, reasons, and few flags a day."""

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from tests.simulated.moving_wall import CENTRE, START, quiet, simulate, wall

from skylag.events import Patch, Patches
from skylag.impact import at_places, states
from skylag.ionosphere import faults, fronts, irregularity, slopes
from skylag.tables import (
    BROKEN,
    HOLDS,
    STRAINED,
    UNSEEN,
    Fields,
    Fronts,
    Region,
    Site,
    Thresholds,
)

LATS, LONS = np.arange(-43.0, -35.9, 0.5), np.arange(141.0, 150.1, 0.5)
REGION = Region(
    "strait", -43, -36, 141, 150, sites=(Site("middle", *CENTRE), Site("north", -37.0, 145.5), Site("away", 10.0, 20.0))
)


def flat_fields(hours=4.0, slope=1.0, sigma=0.5, vtec_sigma=1.0, support=5):
    times = START + np.arange(int(hours * 12)) * np.timedelta64(300, "s")
    shape = (len(times), len(LATS), len(LONS))

    def full(value):
        return np.full(shape, value, dtype=np.float32)

    return Fields(
        times, LATS, LONS, vtec=full(15.0), vtec_sigma=full(vtec_sigma),
        support=np.full(shape, support, dtype=np.uint16), slope=full(slope), slope_sigma=full(sigma),
        slope_east=full(slope), slope_north=full(0.0), state=np.zeros(shape, dtype=np.uint8),
    )  # fmt: skip


def nothing():
    none = irregularity.Patches(
        (), np.zeros(0, "datetime64[ns]"), *(np.zeros(0, np.int64),) * 2, *(np.zeros((0, 0)),) * 4,
        *(np.zeros((0, 0), np.int64),) * 2,
    )  # fmt: skip
    empty = {name: np.zeros(0) for name in slopes.Slopes.COLUMNS}
    return slopes.Slopes(**empty, claims=(), summary={}), Fronts((), fronts._no_onsets()), none


def some_patch(**changes):
    ragged = Patch(
        start=START + np.timedelta64(60, "m"), end=START + np.timedelta64(120, "m"), lat=-39.0, lon=145.5,
        radius_km=80.0, index_highest=0.8, index_median=0.6, windows=12, receivers=("RX01", "RX02"),
        satellites=("G05", "E11"), slips=3, losses=1, planar=(80.0, 55.0),
        drift_m_s=np.nan, drift_sigma_m_s=np.nan, drift_heading_deg=np.nan, confirmed=True,
        window_time=np.zeros(0, "datetime64[ns]"), window_lat=np.zeros(0), window_lon=np.zeros(0),
    )  # fmt: skip
    return replace(ragged, **changes)


def test_states_begin_at_published_limits(evidence):
    """The limits found by trying: the smallest slope of a map, known exactly, that makes a site strained or broken."""

    def first_with(state):
        low, high = 1.0, 60.0
        for _ in range(40):
            middle = 0.5 * (low + high)
            judged = states.judge(flat_fields(hours=0.25, slope=middle, sigma=0.0), *nothing(), REGION)
            low, high = (low, middle) if judged.site_states[0, 0] >= state else (middle, high)
        return high

    evidence("strained from", source="hourly 95 % index, class 'very strong' above 8 ppm: Wanninger 2004, ION GNSS, "
             "2849-2854, and two network operators", expected=8.0, got=first_with(STRAINED), tolerance=1e-5,
             unit="mm/km")  # fmt: skip
    evidence("broken from", source="largest broadcast vertical gradient sigma, 2.55e-5 m/m: ICAO Annex 10, App. B",
             expected=2.55e-5 * 1e6, got=first_with(BROKEN), tolerance=1e-5, unit="mm/km")  # fmt: skip


@pytest.mark.parametrize(
    ("slope", "sigma", "state"),
    [(2, 1, HOLDS), (8.5, 1, HOLDS), (9.5, 1, STRAINED), (26, 1, STRAINED), (27, 1, BROKEN), (np.nan, 1, UNSEEN),
     (30, 25, HOLDS), (5, np.nan, UNSEEN)],
)  # fmt: skip
def test_a_slope_counts_beyond_its_sigma(slope, sigma, state):
    assert states.state_of_slope(np.array(slope), np.array(sigma), Thresholds()) == state


@given(st.floats(0, 100), st.floats(0, 20), st.floats(1, 30), st.floats(0.1, 30))
def test_a_higher_limit_never_worsens_a_state(slope, sigma, limit, more):
    low = Thresholds(strained_mm_per_km=limit, broken_mm_per_km=limit + 10)
    high = Thresholds(strained_mm_per_km=limit + more, broken_mm_per_km=limit + 10 + more)
    assert states.state_of_slope(slope, sigma, high) <= states.state_of_slope(slope, sigma, low)


@pytest.mark.parametrize(
    "changes",
    [{"support": 0}, {"vtec_sigma": 12.0}, {"slope": np.nan}, {"sigma": np.nan}],
    ids=["no ray", "sigma too wide", "no slope", "no sigma"],
)
def test_unseen_is_never_told_as_good(changes):
    judged = states.judge(flat_fields(**changes), *nothing(), REGION)
    assert (judged.fields.state == UNSEEN).all()
    assert (judged.site_states == UNSEEN).all()
    assert all(reason for reasons in judged.site_reasons for reason in reasons)


def test_a_calm_map_holds_and_needs_no_reason():
    judged = states.judge(flat_fields(), *nothing(), REGION)
    assert (judged.fields.state == HOLDS).all()
    assert judged.flags == ()
    assert judged.site_states[:, :2].min() == judged.site_states[:, :2].max() == HOLDS
    assert set(judged.site_reasons[0]) == {""}
    assert (judged.site_states[:, 2] == UNSEEN).all()
    assert set(judged.site_reasons[2]) == {"outside the map: nothing can be said"}


def test_a_steep_stretch_of_map_is_one_unconfirmed_flag():
    fields = flat_fields()
    fields.slope[6:12, 4:7, 5:8] = 20.0
    judged = states.judge(fields, *nothing(), REGION)
    assert len(judged.flags) == 1
    flag = judged.flags[0]
    assert (flag.kind, flag.state, flag.confirmed) == ("slope", "strained", False)
    assert flag.start == fields.times[6] and flag.end == fields.times[12]
    assert "unconfirmed" in flag.evidence
    assert (judged.fields.state[6:12, 4:7, 5:8] == STRAINED).all()


@pytest.fixture(scope="module")
def stormy():
    ramp = wall(120.0, 60.0, 180.0, 320.0, 2 * 3600)
    rays, samples = simulate(lambda x, y, t: quiet(x, y, t) + ramp(x, y, t), np.random.default_rng(71), hours=4.0)
    fields = flat_fields(support=0)  # a map that sees nothing: only the witnesses speak
    steep = slopes.measure(rays, samples, fields)
    moving = fronts.track(rays, samples, steep)
    ragged = irregularity.assess(rays, moving, None, samples)
    found = faults.find(rays, samples, ragged, steep, moving)
    told = fronts.arrivals(moving, rays, REGION.sites)
    return fields, steep, moving, ragged, found, told


def test_a_front_breaks_what_it_passes_even_where_the_map_is_blind(stormy):
    fields, steep, moving, ragged, found, told = stormy
    judged = states.judge(fields, steep, moving, ragged, REGION, found, told)
    at = int(np.argmin(np.abs(fields.times - (START + np.timedelta64(2, "h")))))
    assert judged.site_states[at, 0] == BROKEN
    assert "mm/km" in judged.site_reasons[0][at] and "receivers" in judged.site_reasons[0][at]
    early = int(np.argmin(np.abs(fields.times - (START + np.timedelta64(60, "m")))))
    assert judged.site_states[early, 0] == UNSEEN  # nothing there yet, and the map sees nothing
    assert not (judged.fields.state == HOLDS).any()


def test_a_day_has_few_flags_and_the_front_is_one_with_a_track(stormy):
    _, steep, moving, ragged, found, told = stormy
    judged = states.judge(flat_fields(), steep, moving, ragged, REGION, found, told)
    assert 1 <= len(judged.flags) < 20
    front = [flag for flag in judged.flags if flag.kind == "front"]
    assert len(front) == 1
    assert front[0].state == "broken" and front[0].confirmed
    assert front[0].speed_m_s == pytest.approx(180, rel=0.05)
    assert abs(front[0].heading_deg - 320) < 3
    assert front[0].slope_mm_per_km == pytest.approx(120, abs=4 * front[0].sigma_mm_per_km + 5)
    times = [point[0] for point in front[0].track]
    assert len(times) > 5 and times == sorted(times)
    assert "came true" in front[0].evidence and "satellites agree" in front[0].evidence
    assert not [flag for flag in judged.flags if flag.kind in ("irregular", "fault")]


def test_a_patch_strains_its_place_and_span():
    steep, moving, none = nothing()
    ragged = Patches((some_patch(),), *(getattr(none, name) for name in list(Patches.__dataclass_fields__)[1:]))
    judged = states.judge(flat_fields(), steep, moving, ragged, REGION)
    lat, lon = int(np.argmin(np.abs(LATS + 39.0))), int(np.argmin(np.abs(LONS - 145.5)))
    assert set(np.flatnonzero(judged.fields.state[:, lat, lon] == STRAINED)) == set(range(11, 25))
    assert (judged.fields.state[:, 0, 0] == HOLDS).all()
    flag = judged.flags[0]
    assert (flag.kind, flag.state) == ("irregular", "strained")
    assert "planar fit fails" in flag.evidence and "3 broken arcs" in flag.evidence
    strong = replace(ragged, patches=(some_patch(index_highest=1.4),))
    assert states.judge(flat_fields(), steep, moving, strong, REGION).flags[0].state == "broken"


def test_what_one_receiver_says_changes_no_state():
    steep, moving, none = nothing()
    alone = Patches((some_patch(confirmed=False),), *(getattr(none, n) for n in list(Patches.__dataclass_fields__)[1:]))
    judged = states.judge(flat_fields(), steep, moving, alone, REGION)
    assert (judged.fields.state == HOLDS).all()
    assert judged.flags[0].confirmed is False and "unconfirmed" in judged.flags[0].evidence


def test_ways_of_seeing_a_slope_are_told_side_by_side(stormy):
    _, steep, moving, ragged, found, told = stormy
    judged = states.judge(flat_fields(), steep, moving, ragged, REGION, found, told)
    (front,) = [flag for flag in judged.flags if flag.kind == "front"]
    # Pairs see the wall; the map of this test is flat, and so much is said.
    assert "mm/km by receiver pairs, which agrees" in front.evidence
    assert "up to 1.0 ± 0.5 mm/km by the map, which sees little of it" in front.evidence
    nowhere = flat_fields(slope=np.nan)
    blind = states.judge(nowhere, steep, moving, ragged, REGION, found, told)
    assert "the map says nothing there" in next(flag.evidence for flag in blind.flags if flag.kind == "front")
    bare = replace(moving, fronts=())
    alone = states.judge(flat_fields(), steep, bare, ragged, REGION)
    claim = max((flag for flag in alone.flags if flag.kind == "slope"), key=lambda flag: flag.slope_mm_per_km)
    assert claim.confirmed and "it changes within arcs, where no bias can feign it" in claim.evidence
    assert claim.evidence.endswith("the map says nothing there")  # it is steepest off the map of this test
    here = replace(max(steep.claims, key=lambda one: one.slope), lat=-39.0, lon=145.5)
    one = replace(steep, claims=(here,))
    same = f"the map agrees: {here.slope:.1f} ± 0.4 mm/km"
    for slope, words in ((1.0, "the map disagrees: 1.0 ± 0.4 mm/km"), (here.slope, same)):
        flags = states.judge(flat_fields(slope=slope, sigma=0.4), one, bare, ragged, REGION).flags
        assert any(words in flag.evidence for flag in flags)


@pytest.mark.parametrize(
    ("sigma", "heading", "speed", "slope"),
    [(6.2, "320 ± 6°", "181 ± 6 m/s", "95 ± 6 mm/km"), (0.31, "320.4 ± 0.3°", "180.6 ± 0.3 m/s", "95.2 ± 0.3 mm/km"),
     (0.06, "320.4 ± 0.1°", "180.6 ± 0.1 m/s", "95.2 ± 0.1 mm/km"),
     (0.02, "320.38 ± 0.02°", "180.61 ± 0.02 m/s", "95.22 ± 0.02 mm/km")],
)  # fmt: skip
def test_no_number_of_a_front_reads_as_exact(stormy, sigma, heading, speed, slope):
    sigmas = {"slope_sigma": sigma, "heading_sigma_deg": sigma, "speed_sigma_m_s": sigma}
    front = replace(stormy[2].fronts[0], heading_deg=320.38, speed_m_s=180.61, slope=95.22, **sigmas)
    told = states.front_sentence(front)
    assert f"toward {heading} at {speed}" in told and f"front of {slope}" in told
    assert "± 0 " not in told and "± 0°" not in told


def test_what_is_not_confirmed_says_so_in_its_evidence(stormy):
    """flags.csv has no column for it: whoever reads the table must read it in the evidence."""
    _, steep, moving, ragged, found, told = stormy
    fields = flat_fields()
    fields.slope[6:12, 1:4, 0:3] = 20.0
    first = replace(steep.claims[0], confirmed=False, why="unconfirmed: every witness includes RX03",
                    lat=20.0, cell_lat=steep.claims[0].cell_lat + 60.0)  # fmt: skip
    doubtful = replace(steep, claims=(*steep.claims, first))
    alone = replace(ragged, patches=(some_patch(confirmed=False),))
    flags = states.judge(fields, doubtful, moving, alone, REGION, found, told).flags
    flags += states.judge(fields, *nothing(), REGION).flags  # the map alone
    open_ones = [flag for flag in flags if not flag.confirmed]
    assert sorted(flag.kind for flag in open_ones) == ["irregular", "slope", "slope"]
    assert all("unconfirmed" in flag.evidence for flag in open_ones)
    assert not any("unconfirmed" in flag.evidence for flag in flags if flag.confirmed)


@pytest.mark.parametrize("name", ["slope_sigma", "speed_sigma_m_s", "heading_sigma_deg", "width_sigma_km"])
def test_a_sigma_that_is_not_known_takes_no_warning_away(stormy, name):
    _, steep, moving, ragged, _, _ = stormy
    none = replace(steep, claims=())
    known = states.judge(flat_fields(), none, moving, ragged, REGION)
    (front,) = moving.fronts
    vague = replace(moving, fronts=(replace(front, **{name: np.nan}),))
    judged = states.judge(flat_fields(), none, vague, ragged, REGION)
    assert (known.fields.state == BROKEN).any() and (known.site_states == BROKEN).any()
    np.testing.assert_array_equal(judged.fields.state, known.fields.state)
    np.testing.assert_array_equal(judged.site_states, known.site_states)
    flag = next(one for one in judged.flags if one.kind == "front")
    assert flag.state == "broken" and "nan" not in flag.evidence
    gentle = replace(moving, fronts=(replace(front, slope=3.0, slope_sigma=np.nan),))
    flag = next(f for f in states.judge(flat_fields(), none, gentle, ragged, REGION).flags if f.kind == "front")
    assert flag.state == "unseen", "nor does it say that corrections hold"


def test_a_slope_between_receivers_without_a_sigma_warns(stormy):
    _, steep, moving, ragged, _, _ = stormy
    bare, unknown = replace(moving, fronts=()), []
    for claim in steep.claims:
        unknown.append(replace(claim, sigma=np.nan, cell_sigma=np.full(len(claim.cell_slope), np.nan)))
    known = states.judge(flat_fields(), steep, bare, ragged, REGION)
    judged = states.judge(flat_fields(), replace(steep, claims=tuple(unknown)), bare, ragged, REGION)
    assert (known.fields.state >= STRAINED).any()
    assert (judged.fields.state >= known.fields.state).all()
    told = [flag.state for flag in judged.flags if flag.kind == "slope" and flag.confirmed]
    assert told and "unseen" not in told


def test_nothing_holds_under_a_front_of_unknown_slope(stormy):
    """Fewer than three lines of sight tell how steep it is: it is there, and the map smears it out."""
    _, steep, moving, ragged, _, _ = stormy
    unknown = dict.fromkeys(("slope", "slope_sigma", "width_km", "width_sigma_km", "jump_sigma_tecu"), np.nan)
    none = replace(steep, claims=())
    vague = replace(moving, fronts=(replace(moving.fronts[0], **unknown),))
    known = states.judge(flat_fields(), none, moving, ragged, REGION)
    judged = states.judge(flat_fields(), none, vague, ragged, REGION)
    assert (judged.fields.state[known.fields.state == BROKEN] == UNSEEN).all()
    under = known.site_states == BROKEN
    assert under.any() and (judged.site_states[under] == UNSEEN).all()
    assert (judged.fields.state[0] == HOLDS).all()
    assert "front of unknown slope, moving toward" in judged.flags[0].evidence
    epochs = np.flatnonzero(under[:, 0])
    epoch, site = int(epochs[len(epochs) // 2]), 0
    assert judged.site_reasons[site][epoch] == states.DOUBTED
    later, reasons = at_places.judge(REGION.sites, flat_fields_of(judged, HOLDS), judged.flags, REGION.thresholds)
    assert later[epoch, site] == UNSEEN and reasons[site][epoch] == states.DOUBTED
    assert (later[0, :2] == HOLDS).all()
    steeper = flat_fields()
    steeper.slope[epoch, 4:7, 5:8] = 20.0
    flags = states.judge(steeper, none, vague, ragged, REGION).flags
    assert [one.state for one in flags if one.kind == "slope"] == ["strained"], "it explains no steep map away"


def flat_fields_of(judged, state):
    """The maps of a judged day with one state everywhere, as where their middles lay just beyond a front."""
    return replace(judged.fields, state=np.full_like(judged.fields.state, state))


def test_a_front_of_unknown_slope_never_says_that_corrections_hold(stormy):
    _, steep, moving, ragged, _, _ = stormy
    for slope, sigma in ((np.nan, np.nan), (60.0, 500.0)):
        vague = replace(moving, fronts=(replace(moving.fronts[0], slope=slope, slope_sigma=sigma),))
        flag = next(f for f in states.judge(flat_fields(), steep, vague, ragged, REGION).flags if f.kind == "front")
        assert flag.state == "unseen"
    gentle = replace(moving, fronts=(replace(moving.fronts[0], slope=3.0, slope_sigma=1.0),))
    flag = next(f for f in states.judge(flat_fields(), steep, gentle, ragged, REGION).flags if f.kind == "front")
    assert flag.state == "holds"
