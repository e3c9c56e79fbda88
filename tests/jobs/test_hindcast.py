"""Outlooks over an archive: kept when made, scored once, replayed without peeking, the hours they rest on."""

from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import sqlalchemy as sa
from tests.builders import CALM_DAY, REGION, STORM_DAY, invented_day
from tests.simulated.year_of_content import simulate

from skylag.archive import Archive, open_archive, schema
from skylag.constants import L1_M_PER_TECU
from skylag.errors import Missing, NotEnough, Refused
from skylag.impact import outlook_advice, uses
from skylag.ionosphere.outlook import tomorrow, windows
from skylag.jobs import hindcast
from skylag.tables import BROKEN, HOLDS, STRAINED, UNSEEN, ActivityOutlook, Indices

DAYS = [CALM_DAY + n for n in range(3)]


def save(archive: Archive, day: np.datetime64) -> None:
    archive.save(invented_day(day, storm=day == STORM_DAY, step_minutes=30, satellites=2))


@pytest.fixture
def two_days(tmp_path: Path) -> Iterator[Archive]:
    with open_archive(tmp_path / "archive.sqlite") as archive:
        for day in DAYS[:2]:
            save(archive, day)
        yield archive


def test_hours_of_a_day(two_days: Archive) -> None:
    """Means of delay, worst states; an hour that no map sees is unseen, with no number."""
    history, heads = hindcast.history_of(two_days, REGION.name)
    assert [str(head.day) for head in heads] == [str(day) for day in DAYS[:2]]
    assert list(history.names[:4]) == [site.name for site in REGION.sites]
    fields = two_days.fields(REGION.name, STORM_DAY)
    lat, lon = REGION.sites[1].lat, REGION.sites[1].lon
    row, column = int(np.argmin(np.abs(fields.lats - lat))), int(np.argmin(np.abs(fields.lons - lon)))
    expected = fields.vtec[10:12, row, column].mean() * L1_M_PER_TECU
    assert history.delay[1, 5, 1] == pytest.approx(float(expected), rel=1e-5)
    assert history.slope[1, 5, 1] == pytest.approx(float(fields.slope[10:12, row, column].max()), rel=1e-5)
    judged = uses.judge_for(uses.PUBLISHED[1], fields, two_days.flags(REGION.name, STORM_DAY), REGION)
    worst = judged.states[10:12, row, column].max()
    assert worst >= STRAINED and history.states[1, 1, 5, 1] == worst
    nothing = ~np.isfinite(history.delay)
    assert nothing.any() and not (history.states[:, nothing] == HOLDS).any()
    assert set(np.unique(history.states)) <= {UNSEEN, HOLDS, STRAINED, BROKEN}


def test_kept_hours_give_the_same_history(two_days: Archive) -> None:
    first, _ = hindcast.history_of(two_days, REGION.name)
    again, _ = hindcast.history_of(two_days, REGION.name)
    for name in ("delay", "sigma", "slope", "states"):
        np.testing.assert_array_equal(getattr(first, name), getattr(again, name))


def test_a_missing_day_is_unseen(two_days: Archive) -> None:
    save(two_days, CALM_DAY + 4)
    history, _ = hindcast.history_of(two_days, REGION.name)
    assert len(history.days) == 5
    assert np.isnan(history.delay[2:4]).all() and (history.states[:, 2:4] == UNSEEN).all()


def test_an_outlook_is_kept_and_scored_when_its_days_come(two_days: Archive) -> None:
    kept = hindcast.newest(two_days, REGION.name)
    assert kept.outlook.known_until == STORM_DAY and kept.number > 0
    again = hindcast.newest(two_days, REGION.name)
    assert again.number == kept.number
    np.testing.assert_array_equal(again.outlook.delay, kept.outlook.delay)
    assert hindcast.track_record(two_days, REGION.name).outlooks == 0
    save(two_days, DAYS[2])
    later = hindcast.newest(two_days, REGION.name)
    assert later.number != kept.number and later.outlook.known_until == DAYS[2]
    record = hindcast.track_record(two_days, REGION.name)
    assert record.outlooks == 1 and record.own["1"][0] > 0 and "2" not in record.own
    save(two_days, DAYS[2] + 1)
    hindcast.newest(two_days, REGION.name)
    record = hindcast.track_record(two_days, REGION.name)
    assert record.outlooks == 2 and record.own["2"][0] > 0  # the first now with both its days, counted once


def test_a_replay_tells_what_was_told_then(two_days: Archive) -> None:
    """The outlook kept on the storm day equals that of a replay after the archive has grown, bit by bit."""
    then = hindcast.newest(two_days, REGION.name).outlook
    save(two_days, DAYS[2])
    history, _ = hindcast.history_of(two_days, REGION.name, until=STORM_DAY)
    np.testing.assert_array_equal(tomorrow(history).delay.astype(np.float32), then.delay.astype(np.float32))
    found = hindcast.hindcast(two_days, REGION.name, STORM_DAY, DAYS[2])
    assert found.tally.outlooks == 2 and found.days_with_data == 3
    lines = hindcast.told(found)
    assert "2 outlooks scored" in lines[0] and any("beside persistence" in line for line in lines)
    assert two_days.outlooks.scores(REGION.name) == ()  # a replay keeps nothing


def test_entered_activity(two_days: Archive) -> None:
    calm = hindcast.newest(two_days, REGION.name)
    storm = hindcast.newest(two_days, REGION.name, expected_ap=np.array([100.0, 10.0]), keep=False)
    assert storm.number == 0 and set(storm.outlook.phases[:24]) == {"onset", "main phase"}
    assert hindcast.newest(two_days, REGION.name).number == calm.number
    kept = hindcast.newest(two_days, REGION.name, expected_ap=np.array([100.0, 10.0]))
    assert kept.number not in (0, calm.number)
    with pytest.raises(Refused, match="from 0 to 400"):
        hindcast.newest(two_days, REGION.name, expected_ap=np.array([900.0, 1.0]))


def test_measured_indices_are_laid_on_their_days(two_days: Archive) -> None:
    ap = np.full((1, 8), 50.0)
    indices = Indices(np.array([STORM_DAY]), np.full((1, 8), 5.0), ap, np.array([50.0]), np.array([155.0]))
    drivers = hindcast.drivers_of(np.array(DAYS[:2]), indices)
    assert np.isnan(drivers.ap[0]).all() and (drivers.ap[1] == 50.0).all() and drivers.flux[1] == 155.0
    assert np.isnan(drivers.expected).all()
    told = hindcast.newest(two_days, REGION.name, indices).outlook
    assert set(told.phases[:24]) == {"first day after"}


def test_two_days_are_too_few_for_windows(two_days: Archive) -> None:
    made = hindcast.newest(two_days, REGION.name).outlook
    spans = windows(made, 0, 0)
    assert {span.kind for span in spans} == {"not known"}
    assert "treat the place as not covered" in outlook_advice.advice(uses.PUBLISHED[0], spans, False)[0]


def test_what_cannot_be_done_is_explained(two_days: Archive) -> None:
    with pytest.raises(Missing, match="has no whole day"):
        hindcast.newest(two_days, "Atlantis")
    with pytest.raises(NotEnough, match="give an earlier day"):
        hindcast.hindcast(two_days, REGION.name, CALM_DAY - 3, CALM_DAY)
    with pytest.raises(Refused, match="give the earlier day first"):
        hindcast.hindcast(two_days, REGION.name, STORM_DAY, CALM_DAY)


def foretell(archive: Archive, made: str, *told: tuple[np.datetime64, float]) -> None:
    days, ap = np.array([day for day, _ in told]), np.array([np.full(8, value) for _, value in told])
    outlook = ActivityOutlook(days, np.full(len(told), np.datetime64(made, "ns")), ap)
    archive.activity.keep_foretold(outlook, "office", np.datetime64("2031-06-01"))


def test_a_replay_knows_only_what_was_foretold_by_then(tmp_path: Path) -> None:
    """2031-05-10, -11, -12 kept; outlooks of activity made on several of these days."""
    with open_archive(tmp_path / "archive.sqlite") as archive:
        foretell(archive, "2031-05-10T12:00", (DAYS[1], 20.0), (DAYS[2], 30.0))
        foretell(archive, "2031-05-11T00:00", (DAYS[2], 40.0))  # at the very end of the tenth
        foretell(archive, "2031-05-11T00:01", (DAYS[1], 300.0), (DAYS[2], 50.0))  # the eleventh has begun
        foretell(archive, "2031-05-12T18:00", (DAYS[2] + 1, 60.0))
        foretell(archive, "2031-05-13T18:00", (DAYS[2] + 1, 70.0), (DAYS[2] + 2, 80.0))
        drivers, said = hindcast.known_then(archive, np.array(DAYS))
        assert drivers.expected[0, :, 0].tolist() == [20.0, 40.0]
        assert drivers.expected[1, 0, 0] == 50.0 and drivers.expected[1, 1, 0] != 60.0
        assert drivers.expected[2, 0, 0] == 60.0 and np.isnan(drivers.expected[2, 1]).all()
        assert len(said) == 1 and "as foretold 2031-05-12 18:00 UTC (office): up to 60" in said[0]
        # The outlook of now, made on the thirteenth: the fourteenth has not begun.
        drivers, said = hindcast.known_then(archive, np.array(DAYS), now=True)
        assert drivers.expected[2, :, 0].tolist() == [60.0, 80.0] and len(said) == 2
        drivers, said = hindcast.known_then(archive, np.array(DAYS), expected_ap=np.array([5.0, 6.0]))
        assert drivers.expected[2, :, 0].tolist() == [5.0, 6.0] and said == ("ap of the two days ahead as entered",)


def test_what_is_foretold_later_changes_no_replay(two_days: Archive) -> None:
    save(two_days, DAYS[2])
    before = hindcast.hindcast(two_days, REGION.name, STORM_DAY, DAYS[2]).tally
    foretell(two_days, "2031-05-11T00:01", (DAYS[1], 200.0))
    foretell(two_days, "2031-05-12T00:01", (DAYS[2], 200.0))
    assert hindcast.hindcast(two_days, REGION.name, STORM_DAY, DAYS[2]).tally == before
    foretell(two_days, "2031-05-10T18:00", (DAYS[1], 200.0))
    assert hindcast.hindcast(two_days, REGION.name, STORM_DAY, DAYS[2]).tally != before


def test_measured_indices_of_the_archive_are_used(two_days: Archive) -> None:
    day, kp, ap = np.array([STORM_DAY]), np.full((1, 8), 5.0), np.full((1, 8), 50.0)
    table = Indices(day, kp, ap, np.array([50.0]), np.array([150.0]))
    before = hindcast.newest(two_days, REGION.name)
    two_days.activity.keep_measured(table, "", np.datetime64("2031-05-12"))
    told = hindcast.newest(two_days, REGION.name)
    assert told.number != before.number and set(told.outlook.phases[:24]) == {"first day after"}
    assert not any("solar flux is not known" in sentence for sentence in told.outlook.basis)


def test_keeping_a_day_makes_and_scores(two_days: Archive) -> None:
    """What a worker, the watched folder and `skylag day` do after a day; nobody asks for an outlook."""
    heard: list[tuple[str, dict[str, Any]]] = []

    def log(event: str, **facts: Any) -> None:
        heard.append((event, facts))

    hindcast.day_kept(two_days, REGION.name, STORM_DAY, log)
    assert [event for event, _ in heard] == ["outlook kept"] and heard[0][1]["known_until"] == str(STORM_DAY)
    assert len(two_days.outlooks.unscored(REGION.name)) == 1
    save(two_days, DAYS[2])
    hindcast.day_kept(two_days, REGION.name, DAYS[2], log, more=True)  # more follow: the hours alone
    with two_days.at_one_moment() as connection:
        assert {row.day for row in connection.execute(sa.select(schema.day_digest.c.day))} == {str(day) for day in DAYS}
    assert hindcast.track_record(two_days, REGION.name).outlooks == 0
    save(two_days, DAYS[2] + 1)
    hindcast.day_kept(two_days, REGION.name, DAYS[2] + 1, log)
    record = hindcast.track_record(two_days, REGION.name)
    assert record.outlooks == 1 and record.own["1"][0] > 0 and record.own["2"][0] > 0
    hindcast.day_kept(two_days, "Atlantis", STORM_DAY, log)
    assert heard[-1][0] == "outlook not made" and "no whole day" in heard[-1][1]["why"]


def test_of_each_day_the_outlook_made_last_counts(two_days: Archive) -> None:
    hindcast.newest(two_days, REGION.name)
    hindcast.newest(two_days, REGION.name, expected_ap=np.array([100.0, 10.0]))
    save(two_days, DAYS[2])
    hindcast.newest(two_days, REGION.name)
    assert len(two_days.outlooks.unscored(REGION.name, days=1)) == 1  # both of the storm day are scored
    assert hindcast.track_record(two_days, REGION.name).outlooks == 1


def test_a_first_day_that_still_goes_on_gives_climatology(tmp_path: Path) -> None:
    with open_archive(tmp_path / "archive.sqlite") as archive:
        archive.save(invented_day(CALM_DAY, storm=False, step_minutes=30, satellites=2), provisional=True)
        made = hindcast.newest(archive, REGION.name)
    assert made.number == 0 and made.outlook.known_until == CALM_DAY - 1
    assert "climatology alone" in made.outlook.basis[0]
    assert {span.kind for span in windows(made.outlook, 0, 0)} == {"not known"}


def test_outlooks_on_both_databases(archive: Archive) -> None:
    """Kept, found, scored, and damage is found out; on SQLite and PostgreSQL."""
    made = tomorrow(simulate(2, days=3, places=2).history)
    number = archive.outlooks.keep("here", made, "mark")
    assert archive.outlooks.keep("here", made, "mark") == number
    found = archive.outlooks.find("here", made.known_until, "mark")
    assert found is not None and found.outlook.basis == made.basis
    np.testing.assert_allclose(found.outlook.delay, made.delay, rtol=1e-6)
    assert archive.outlooks.find("here", made.known_until, "other") is None
    assert [one.number for one in archive.outlooks.unscored("here")] == [number]
    archive.outlooks.keep_score(number, 1, {"outlooks": 1})
    archive.outlooks.keep_score(number, 2, {"outlooks": 2})
    archive.outlooks.keep_score(number, 2, {"outlooks": 3})
    assert archive.outlooks.unscored("here") == ()
    assert archive.outlooks.scores("here") == ({"outlooks": 2},)
    archive.outlooks.keep_hours("here", "2031-05-11", 1, "m", {"delay": np.arange(3.0)})
    hours = archive.outlooks.hours("here", "2031-05-11", 1, "m")
    assert hours is not None and hours["delay"].tolist() == [0.0, 1.0, 2.0]
    assert archive.outlooks.hours("here", "2031-05-11", 2, "m") is None
