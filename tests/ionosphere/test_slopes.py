"""Slopes between receivers and along paths: published examples, honest sigmas, and what confirms a claim."""

import numpy as np
import pytest
from tests.simulated.moving_wall import PLACES, changed, quiet, samples_of, simulate, wall

from skylag.constants import carrier_hz
from skylag.ionosphere import slips, slopes
from skylag.tables import Receiver


def test_published_examples(evidence):
    source = "worked examples of references 8.4 (station pair, time step)"
    got = float(slopes.between(np.array(12.345), np.array(11.900), np.array(9.72)))
    evidence("station-pair slope", source=source, expected=45.781893, got=got, tolerance=1e-6, unit="mm/km")
    got = float(slopes.along_path(np.array(0.30), np.array(60.0), 30.0))
    evidence("time-step slope", source=source, expected=166.667, got=got, tolerance=1e-3, unit="mm/km")
    worst = float(slopes.between(np.array(8.2688), np.array(0.0), np.array(9.72)))
    evidence("largest slope seen in Brazil, 9.72 km apart", source="Yoon et al. 2017, NAVIGATION 64(3)",
             expected=850.7, got=worst, tolerance=0.01, unit="mm/km")  # fmt: skip
    assert worst == pytest.approx(slopes.BRAZIL_WORST, abs=0.01)


def test_scale_of_slopes_on_other_carriers(evidence):
    evidence("delay per TECU on 1227.60 MHz", source="note of a receiver maker, three digits; references 1.1",
             expected=0.267, got=slopes.MM_PER_TECU * slopes.CARRIER_SCALE["1227.60 MHz"] / 1000.0, tolerance=5e-4,
             unit="m")  # fmt: skip
    bands = {"1575.42": ("G", "1"), "1561.098": ("C", "2"), "1278.75": ("E", "6"), "1268.52": ("C", "6"),
             "1227.60": ("G", "2"), "1207.14": ("E", "7"), "1176.45": ("G", "5")}  # fmt: skip
    scale = {f"{name} MHz": (carrier_hz("G", "1") / carrier_hz(*band)) ** 2 for name, band in bands.items()}
    assert scale == pytest.approx(slopes.CARRIER_SCALE, rel=1e-12)


def test_arcs_hold_through_the_corner_of_the_threat_space():
    assert abs(slips.FASTEST_TECU_S - 1.963) < 1e-3  # 425 mm/km at 750 m/s
    assert slopes.MODEL_WORST * slopes.MODEL_WIDTH_KM[1] / 1000.0 > slopes.MODEL_DELAY_M  # the three bounds cut corners


def test_units_and_bound(evidence):
    evidence("1 TECU per 100 km on 1575.42 MHz", source="IS-GPS-200 refraction, references 8.2", expected=1.623724,
             got=slopes.MM_PER_TECU / 100.0, tolerance=1e-6, unit="mm/km")  # fmt: skip
    source = "threat model of the conterminous United States: Datta-Barua et al. 2010; elevation line from memory"
    for elevation, expected in ((10, 375), (15, 375), (30, 390), (40, 400), (65, 425), (90, 425)):
        evidence(f"slope bound at {elevation} degrees", source=source, expected=expected,
                 got=float(slopes.model_bound(np.array(elevation))), tolerance=1e-9, unit="mm/km")  # fmt: skip


@pytest.fixture(scope="module")
def calm():
    return simulate(quiet, np.random.default_rng(5), hours=5.0)


def test_a_calm_sky_has_no_claims(calm):
    found = slopes.measure(*calm)
    assert found.summary["pair_slopes"] > 50_000
    assert [claim for claim in found.claims if claim.confirmed] == []


def test_sigma_of_a_pair_is_honest(calm):
    # No slope at all: every pair slope is error, and its size over sigma must look like a unit normal.
    rays, samples = simulate(lambda x, y, t: 12.0 + 0 * x, np.random.default_rng(6), hours=5.0)
    every = slopes.SlopeChoices(claim_mm_per_km=0.0, claim_sigmas=0.0, mapping_share=0.0, step_s=600.0)
    found = slopes.measure(rays, samples, None, every)
    pair = found.way == slopes.PAIR
    over = found.slope[pair] / found.sigma[pair]
    assert pair.sum() > 10_000
    assert 0.8 < np.sqrt(np.mean(over**2)) < 1.2
    assert 0.60 < np.mean(over < 1.0) < 0.76


def test_a_wall_is_claimed_and_not_overstated():
    ramp = wall(150.0, 60.0, 200.0, 300.0, 2.5 * 3600)
    found = slopes.measure(*simulate(lambda x, y, t: quiet(x, y, t) + ramp(x, y, t), np.random.default_rng(7), hours=5))
    sure = [claim for claim in found.claims if claim.confirmed]
    assert sure
    best = max(sure, key=lambda claim: claim.slope)
    # The mean slope between two pierce points can reach the wall's own, never much more.
    assert 60.0 < best.slope < 150.0 * 1.1
    assert max(len(claim.satellites) for claim in sure) >= 3
    assert "agree" in best.why
    assert abs((best.start - np.datetime64("2030-03-05T02:30")) / np.timedelta64(1, "h")) < 2.0


def test_a_fault_of_one_receiver_is_not_confirmed(calm):
    rays, samples = calm
    rows = np.flatnonzero((rays.receiver == 6) & (rays.time > np.datetime64("2030-03-05T02:00"))
                          & (rays.time < np.datetime64("2030-03-05T03:00")))  # fmt: skip
    found = slopes.measure(*changed(rays, samples, rows, np.full(len(rows), 12.0)))
    assert len(found) > 100
    assert [claim for claim in found.claims if claim.confirmed] == []
    assert any("every witness includes RX06" in claim.why for claim in found.claims)


def test_one_receiver_alone_confirms_nothing():
    ramp = wall(300.0, 60.0, 200.0, 300.0, 1.5 * 3600)
    rng = np.random.default_rng(8)
    alone = simulate(lambda x, y, t: quiet(x, y, t) + ramp(x, y, t), rng, hours=3, places=PLACES[:1])
    found = slopes.measure(*alone)
    assert len(found) > 0
    assert all(not claim.confirmed and "one receiver alone" in claim.why for claim in found.claims)


@pytest.mark.parametrize(
    ("pairs", "satellites", "confirmed"),
    [
        ([(0, 1), (2, 3)], [5, 5], True),  # two pairs apart on one satellite
        ([(0, 1), (0, 2)], [5, 6], False),  # receiver 0 may be at fault, whatever the satellite
        ([(0, 1), (1, 2), (0, 2)], [5, 5, 5], False),  # one satellite, every two pairs share a receiver
        ([(0, 1), (1, 2), (0, 2)], [5, 6, 5], True),
        ([(0, 1)], [5], False),
        ([(0, -1), (1, -1)], [5, 6], False),  # paths alone
        ([(0, 1), (0, 2), (3, -1)], [5, 5, 6], False),  # a star of receiver 0 and a chance slip elsewhere
        ([(0, 1), (0, 2)] * 9 + [(1, 2)], [5, 6] * 9 + [7], False),  # the same with one short pair elsewhere
        ([(0, 1), (0, 2)] * 15 + [(1, 2), (2, 3), (1, 3)], [5, 6] * 15 + [7, 8, 8], True),  # the rest agrees by itself
        ([(0, 1), (2, -1)], [5, 6], True),  # a pair and another receiver's path on another satellite
    ],
)
def test_what_confirms(pairs, satellites, confirmed):
    receivers = tuple(Receiver(f"RX{n}", (6.4e6, 0.0, 0.0)) for n in range(4))
    first, second = np.array(pairs).T
    way = np.where(second < 0, slopes.PATH, slopes.PAIR)
    said, why = slopes.agreement(way, first, second, np.array(satellites), receivers)
    assert said is confirmed
    assert ("unconfirmed" in why) is not confirmed


def test_no_rays_no_slopes(calm):
    empty = calm[0].where(np.zeros(0, dtype=np.int64))
    found = slopes.measure(empty, samples_of(empty, np.zeros(0), np.zeros(0), np.zeros(0)))
    assert len(found) == 0 and found.claims == ()
