"""A published map beside our own: what was put into the difference comes out of it, and nothing is compared unseen."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from tests.conftest import Evidence
from tests.formats.test_ionex import invented as published_on

from skylag.constants import WGS84_F
from skylag.errors import NotEnough
from skylag.formats import ionex
from skylag.ionosphere.beside import Beside, lay_beside
from skylag.ionosphere.interpolation import at_geocentric_rows
from skylag.tables import Biases, Fields

LATS, LONS = np.arange(42.0, 48.1, 0.5), np.arange(-168.0, -157.9, 0.5)
START = np.datetime64("2024-03-30T00:00:00", "ns")


def geocentric(lat: np.ndarray) -> np.ndarray:
    return np.degrees(np.arctan((1.0 - WGS84_F) ** 2 * np.tan(np.radians(lat))))


def theirs(step: float = 1.0) -> Fields:
    """Hourly maps of content that grows by 1 TECU per degree of (geocentric) latitude; rms 0.5."""
    lats, count = np.arange(40.0, 50.1, step), 5
    content = np.broadcast_to(lats[None, :, None] - 30.0, (count, len(lats), 61))
    table = published_on(content, np.full(content.shape, 0.5), step)
    # Wide enough to be turned by an hour on either side.
    times = START + np.timedelta64(18, "s") + np.arange(count) * np.timedelta64(1, "h")
    return replace(table, lons=table.lons - 18.0, times=times)


def ours(extra: np.ndarray | float = 0.0, sigma: float = 1.0) -> Fields:
    """The same content on our grid every five minutes of four hours, and something on top."""
    times = START + np.arange(48) * np.timedelta64(300, "s")
    content = np.broadcast_to(geocentric(LATS)[None, :, None] - 30.0, (48, len(LATS), len(LONS))) + extra
    nothing = np.zeros(content.shape, dtype=np.float32)
    return Fields(
        times=times, lats=LATS, lons=LONS, vtec=content.astype(np.float32),
        vtec_sigma=np.full(content.shape, sigma, dtype=np.float32), support=np.full(content.shape, 5, dtype=np.uint16),
        slope=nothing, slope_sigma=nothing, slope_east=nothing, slope_north=nothing,
        state=np.zeros(content.shape, dtype=np.uint8),
    )  # fmt: skip


def parts_of(found: Beside) -> dict[str, float]:
    assert sum(v**2 for v in found.parts.values()) == pytest.approx(found.facts()["rms_tecu"] ** 2, abs=2e-3)
    return dict(found.parts)


def test_equal_maps_differ_by_nothing_though_their_latitudes_are_counted_otherwise() -> None:
    found = lay_beside(ours(), theirs())
    assert np.nanmax(np.abs(found.difference)) < 1e-4
    assert found.facts()["within_95"] == 1.0
    # A map read at our latitudes as they stand would be off by 0.19 degrees, 0.19 TECU.
    assert geocentric(np.array(45.0)) == pytest.approx(44.8076, abs=1e-3)


def test_our_own_map_through_the_format_is_our_own_map() -> None:
    """Written at geocentric latitudes and read there again: a tenth of a TECU is what the format rounds to.

    Written at geographic latitudes all of it would come back 0.19 TECU off, less or more by what the format rounds.
    """
    told = ionex.write(at_geocentric_rows(ours()), START, 400.0)
    back = ionex.parse(told.encode(), "ours").table
    assert isinstance(back, Fields)
    found = lay_beside(ours(), back)
    assert np.nanmax(np.abs(found.difference)) < 0.06
    assert abs(found.facts()["mean_tecu"]) < 0.02
    row = np.isfinite(found.difference).any(axis=(0, 2))
    assert row.sum() >= len(LATS) - 2
    plain = ionex.parse(ionex.write(ours(), START, 400.0).encode(), "as it stood").table
    assert isinstance(plain, Fields)
    assert lay_beside(ours(), plain).facts()["mean_tecu"] > 0.15


def test_each_part_is_told_apart() -> None:
    level = lay_beside(ours(-2.0), theirs())
    assert level.facts()["mean_tecu"] == pytest.approx(-2.0, abs=1e-3)
    assert parts_of(level)["level"] == pytest.approx(2.0, abs=1e-3)
    share = lay_beside(ours(0.2 * (geocentric(LATS)[None, :, None] - 45.0)), theirs())
    assert share.share_of_content == pytest.approx(0.2, abs=1e-3)
    assert parts_of(share)["share of content"] > 0.95 * share.facts()["scatter_tecu"]
    clock = np.repeat([1.0, -1.0, 1.0, -1.0], 12)[:, None, None]
    assert parts_of(lay_beside(ours(clock), theirs()))["hour by hour"] == pytest.approx(1.0, abs=0.02)
    east = (0.3 * (LONS - LONS.mean()))[None, None, :]
    tilted = parts_of(lay_beside(ours(east), theirs()))
    assert tilted["tilt"] == pytest.approx(np.sqrt(np.mean(east**2)), rel=1e-3) and tilted["finer"] < 1e-3
    board = (-1.0) ** (np.arange(len(LATS))[:, None] + np.arange(len(LONS)))[None]
    rough = lay_beside(ours(board), theirs())
    assert parts_of(rough)["finer"] == pytest.approx(1.0, abs=0.02)
    assert rough.coarse > 0.7  # so much a map of one degree cannot show


def test_only_what_we_see_is_compared_and_hours_are_those_of_utc() -> None:
    half = ours(1.0)
    support = half.support.copy()
    support[:, :, :10] = 0
    value = half.vtec.copy()
    value[:, :, :10] = 900.0
    found = lay_beside(replace(half, support=support, vtec=value), theirs())
    assert np.isnan(found.difference[:, :, :10]).all()
    assert found.facts()["mean_tecu"] == pytest.approx(1.0, abs=1e-3)
    start, mean, rms, count = found.hourly()
    # Our first epoch is 18 s before the hour of UTC and belongs to it all the same.
    assert [str(t) for t in start[:2]] == ["2024-03-30T00:00:18.000000000", "2024-03-30T01:00:18.000000000"]
    assert len(start) == 4 and count.tolist() == [12 * len(LATS) * (len(LONS) - 10)] * 4
    assert mean == pytest.approx(1.0, abs=1e-3) and rms == pytest.approx(1.0, abs=1e-3)
    assert found.hourly_maps().shape == (4, len(LATS), len(LONS))


def test_the_sigma_is_of_both() -> None:
    found = lay_beside(ours(2.0, sigma=1.2), theirs())
    assert np.nanmedian(found.sigma) == pytest.approx(1.3, abs=1e-3)  # 1.2 and 0.5
    assert found.facts()["within_95"] == 1.0
    assert lay_beside(ours(2.0, sigma=0.8), theirs()).facts()["within_95"] == 0.0


def biases(rows: list[tuple[str, str, str, str, float]]) -> Biases:
    kind, name, code1, code2, value = zip(*rows, strict=True)
    when = np.full(len(rows), START)
    return Biases(np.array(kind), np.array(name), np.full(len(rows), "G"), np.array(code1), np.array(code2),
                  np.array(value), np.full(len(rows), 0.1), when, when, source="", datum="")  # fmt: skip


def test_what_biases_do_to_the_level() -> None:
    """A nanosecond between C1W and C2W is 2.854 TECU along the line of sight; straight up, over the mapping at 45."""
    mine = biases([("receiver", "ARDN00XXX", "C1W", "C2W", 3.0), ("satellite", "G01", "C1W", "C2W", 1.5),
                   ("satellite", "G02", "C1W", "C2W", -0.5)])  # fmt: skip
    other = biases([("receiver", "ARDN", "C1W", "C2W", 2.0), ("satellite", "G01", "C1W", "C2W", 1.0),
                    ("satellite", "G02", "C1W", "C2W", -1.0)])  # fmt: skip
    (offset,) = lay_beside(ours(), theirs(), mine, other, 400e3).biases
    assert (offset.receiver_ns, offset.satellite_ns, offset.together_ns) == (1.0, 0.5, 1.5)
    assert offset.straight_up_tecu == pytest.approx(1.5 * 2.854 / 1.3395, rel=2e-3)
    # A receiver on another code of the same band is compared, its satellites are not.
    c1c = biases([("receiver", "ARDN", "C1C", "C2W", 3.0), ("satellite", "G01", "C1C", "C2W", 9.0)])
    (offset,) = lay_beside(ours(), theirs(), c1c, other, 400e3).biases
    assert (offset.receiver_ns, offset.satellites) == (1.0, 0)
    c1l5 = biases([("receiver", "ARDN", "C1C", "C5Q", 3.0)])
    assert lay_beside(ours(), theirs(), c1l5, other, 400e3).biases == ()


def test_maps_without_anything_in_common_are_refused() -> None:
    late = replace(theirs(), times=theirs().times + np.timedelta64(2, "D"))
    with pytest.raises(NotEnough, match="give the map of the same day"):
        lay_beside(ours(), late)
    elsewhere = replace(theirs(), lons=theirs().lons + 90.0)
    with pytest.raises(NotEnough, match="the published map does not reach there"):
        lay_beside(ours(), elsewhere)
    blind = replace(ours(), support=np.zeros_like(ours().support))
    with pytest.raises(NotEnough, match="the day's maps see nothing"):
        lay_beside(blind, theirs())


@pytest.mark.open_data
def test_a_published_map_beside_itself(open_data: Path, evidence: Evidence) -> None:
    """The published global map of 23 August 2015 as if it were ours: nothing but the geographic latitude differs."""
    from skylag import formats

    table = formats.read(open_data / "2015-235/ionex/corg2350.15i.gz").table
    assert isinstance(table, Fields)
    cut = {name: getattr(table, name)[:, 10:60] for name in Fields.LAYERS}
    geodetic = np.degrees(np.arctan(np.tan(np.radians(table.lats[10:60])) / (1.0 - WGS84_F) ** 2))
    mine = replace(table, lats=geodetic, **{**cut, "support": np.ones(cut["support"].shape, dtype=np.uint16)})
    found = lay_beside(mine, table)
    evidence("a published map laid beside itself, largest difference", source="CODE corg2350.15i", unit="TECU",
             expected=0.0, got=float(np.nanmax(np.abs(found.difference))), tolerance=1e-3)  # fmt: skip
