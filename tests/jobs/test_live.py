"""Today as its files come in: what is asked for when, silence, maps that follow each arrival."""

import shutil
import threading
import time
from collections.abc import Iterator
from concurrent.futures import Executor, ThreadPoolExecutor
from dataclasses import replace
from pathlib import Path
from types import SimpleNamespace
from typing import Any

import hatanaka
import numpy as np
import pytest
from tests.builders import STORM_DAY, invented_day
from tests.web.test_coming import over_midnight, until

from skylag.archive import Archive, open_archive
from skylag.chain import Choices
from skylag.errors import NotEnough, SkylagError
from skylag.ionosphere.geometry import geodetic
from skylag.jobs import live, work
from skylag.jobs.alerts import Rule
from skylag.jobs.live import DayMade, Fell, FileCame, Folder, Make, Patience, State, Tick, Watch, step
from skylag.tables import HOLDS, UNSEEN, Fields
from skylag.timescales import gps_to_utc

DAY = np.datetime64("2031-03-11", "D")



def at(text: str, day: np.datetime64 = DAY) -> np.datetime64:
    return np.datetime64(f"{day}T{text}", "ns")


def replay(events: list, patience: Patience | None = None) -> list[tuple]:
    """What a list of events asks for, in order."""
    state, told = State(), []
    for event in events:
        state, asked = step(state, event, patience or Patience())
        told += asked
    return told


# ---------------------------------------------------------------------------------------------- the fold


def test_a_burst_of_files_is_one_computation() -> None:
    came = [FileCame(f"f{n}", DAY, at(f"10:00:0{n // 4}.{n % 4}")) for n in range(6)]
    assert replay([*came, Tick(at("10:00:01.500"))]) == []
    assert replay([*came, Tick(at("10:00:02.200")), Tick(at("10:00:04"))]) == [Make(DAY, False)]


def test_files_without_end_do_not_hold_it_up() -> None:
    events = []
    for n in range(12):
        events += [FileCame(f"f{n}", DAY, at(f"10:00:{n:02}")), Tick(at(f"10:00:{n:02}.500"))]
    assert replay(events).count(Make(DAY, False)) == 2, "five seconds after the first, and again"


def test_orbits_bring_all_open_days_up_to_date() -> None:
    before = DAY - 1
    events = [FileCame("a", before, at("00:30")), FileCame("b", DAY, at("00:30")), Tick(at("00:31"))]
    assert replay([*events, FileCame("nav", None, at("00:32")), Tick(at("00:33"))]) == [
        Make(before, False), Make(DAY, False)] * 2  # fmt: skip
    assert replay([FileCame("nav", None, at("00:32")), Tick(at("00:33"))]) == []


def test_days_long_gone_are_no_live_days() -> None:
    assert replay([FileCame("a", DAY - 3, at("10:00")), Tick(at("11:00"))]) == []


def test_a_day_is_final_two_hours_after_its_end() -> None:
    events = [FileCame("a", DAY, at("23:50")), Tick(at("23:51"))]
    ticks = [Tick(at(text, DAY + 1)) for text in ("01:59", "02:00", "02:01", "09:00")]
    assert replay([*events, *ticks]) == [Make(DAY, False), Make(DAY, True)]


def test_silence_is_told_once_and_ends() -> None:
    made = [DayMade(DAY, {"A": at("10:00"), "B": at("10:00")})]
    assert replay([*made, Tick(at("10:44"))]) == []
    later = [*made, DayMade(DAY, {"A": at("10:00"), "B": at("10:40")}), *(Tick(at(f"10:{n}")) for n in range(45, 59))]
    assert replay(later) == [Fell("A", at("10:00"))]
    again = [*later, DayMade(DAY, {"A": at("11:00"), "B": at("11:00")}), Tick(at("11:45"))]
    assert replay(again)[1:] == [Fell("A", at("11:00")), Fell("B", at("11:00"))]


def test_who_sends_hours_is_silent_after_an_hour_and_a_quarter() -> None:
    came = [FileCame("f", DAY, at("10:00:05"), 3600.0, "A"), Tick(at("10:00:15")), DayMade(DAY, {"A": at("10:00")})]
    assert replay([*came, Tick(at("11:14:50"))]) == [Make(DAY, False)]
    assert replay([*came, Tick(at("11:15:00"))])[1] == Fell("A", at("10:00"))
    quarter = [FileCame("f", DAY, at("10:00:05"), 900.0, "A"), *came[1:]]
    assert replay([*quarter, Tick(at("10:45:00"))])[1] == Fell("A", at("10:00")), "45 minutes are more"


def test_a_file_of_an_hour_delays_the_silence_of_its_own_receiver_alone_and_not_for_good() -> None:
    made = DayMade(DAY, {"A": at("10:00"), "B": at("10:00")})
    hour = [FileCame("f", DAY, at("10:00:05"), 3600.0, "A"), Tick(at("10:00:15")), made]
    asked = replay([*hour, Tick(at("10:45")), Tick(at("11:14")), Tick(at("11:15"))])
    assert asked[1] == Fell("B", at("10:00")) and Fell("A", at("10:00")) in asked[2:]
    assert Fell("A", at("10:00")) not in replay([*hour, Tick(at("10:45")), Tick(at("11:14"))])
    whole = [FileCame("day", DAY, at("10:00:20"), 0.0, "A"), Tick(at("10:00:30")), made]
    assert Fell("A", at("10:00")) in replay([*hour, *whole, Tick(at("10:45"))]), "it no longer sends hours"
    assert step(State(), FileCame("nav", None, at("10:00"), 3600.0), Patience())[0].spans == {}


@pytest.mark.parametrize(
    ("name", "span_s"),
    [("FENN00XBS_R_20310700800_01H_30S_MO.rnx", 3600), ("FENN00XBS_R_20310700800_15M_01S_MO.crx.gz", 900),
     ("FENN00XBS_R_20310700800_03H_30S_MO.rnx", 0), ("FENN00XBS_R_20310700000_01D_30S_MO.rnx", 0),
     ("fenn070i.31o", 3600), ("fenn070i15.31d.Z", 900), ("fenn0700.31o", 0), ("letter.txt", 0)],
)  # fmt: skip
def test_the_span_that_a_name_tells(name: str, span_s: float) -> None:
    assert live.span_of(name) == span_s


def test_while_all_are_silent_the_maps_go_on_unseen() -> None:
    events = [FileCame("a", DAY, at("10:00")), Tick(at("10:01")), DayMade(DAY, {"A": at("10:00")})]
    ticks = [Tick(at(f"{11 + n // 12}:{5 * (n % 12):02}")) for n in range(12)]
    asked = replay([*events, *ticks])
    assert asked[:2] == [Make(DAY, False), Fell("A", at("10:00"))]
    assert asked[2:] == [Make(DAY, False)] * 6, "every ten minutes"


def test_unseen_until_now() -> None:
    day = invented_day(STORM_DAY)
    kept = day.fields.times < at("10:00", STORM_DAY)
    layers = {name: getattr(day.fields, name)[kept] for name in Fields.LAYERS}
    early = replace(
        day, fields=replace(day.fields, times=day.fields.times[kept], **layers), site_states=day.site_states[kept],
        site_reasons=tuple(one[: kept.sum()] for one in day.site_reasons),
    )  # fmt: skip
    assert live.unseen_until(early, at("10:20", STORM_DAY), 2700.0) is early
    made = live.unseen_until(early, at("12:00", STORM_DAY), 2700.0)
    assert made.fields.times[-1] == at("12:00", STORM_DAY) and len(made.fields.times) == kept.sum() + 9
    new = made.fields.times >= at("10:00", STORM_DAY)
    assert (made.fields.state[new] == UNSEEN).all() and (made.fields.support[new] == 0).all()
    assert np.isnan(made.fields.vtec[new]).all() and (made.site_states[new] == UNSEEN).all()
    assert {one[-1] for one in made.site_reasons} == {"no data since 2031-05-11T09:45 GPS time"}
    np.testing.assert_array_equal(made.fields.vtec[~new], early.fields.vtec)
    own = {one.name: 4500.0 for one in early.samples.rays.receivers}
    assert live.unseen_until(early, at("10:45", STORM_DAY), 2700.0, own) is early
    assert len(live.unseen_until(early, at("11:00", STORM_DAY), 2700.0, own).fields.times) > kept.sum()
    end = live.unseen_until(early, at("12:00", STORM_DAY + 1), 2700.0)
    assert end.fields.times[-1] == at("23:45", STORM_DAY), "not past the end of the day"


def test_the_surroundings_of_a_silent_receiver_turn_unseen_and_come_back() -> None:
    """GULL gives nothing from 09:00 to 14:00: what holds near it is unseen from 09:45 until it is back."""
    day = invented_day(STORM_DAY)
    rays = day.samples.rays
    number = [one.name for one in rays.receivers].index("GULL")
    gone = (rays.receiver == number) & (rays.time >= at("09:00", STORM_DAY)) & (rays.time < at("14:00", STORM_DAY))
    rest = {name: getattr(day.samples, name)[~gone] for name in day.samples.__dataclass_fields__
            if name not in ("rays", "bias_covariance")}  # fmt: skip
    gap = replace(day, samples=replace(day.samples, rays=rays.where(~gone), **rest))
    made = live.silent_areas(gap, 2700.0)
    changed = made.fields.state != day.fields.state
    times = day.fields.times[changed.any(axis=(1, 2))]
    assert (times[0], times[-1]) == (at("09:45", STORM_DAY), at("13:45", STORM_DAY))
    assert (day.fields.state[changed] == HOLDS).all() and (made.fields.state[changed] == UNSEEN).all()
    rows, columns = np.nonzero(changed.any(axis=0))
    assert np.abs(day.fields.lats[rows] + 41.2).max() < 2.5 and np.abs(day.fields.lons[columns] - 146.4).max() < 2.5
    gannet = made.site_states[:, 1] != day.site_states[:, 1]  # some 60 km from GULL, 70 from HULL
    assert gannet.any() and made.site_reasons[1][int(np.flatnonzero(gannet)[0])].startswith("GULL, the nearest")
    assert live.silent_areas(day, 2700.0) is day
    slow = live.silent_areas(gap, 2700.0, {"GULL": 4500.0, "HULL": 60.0 * 86400.0})
    late = day.fields.times[(slow.fields.state != day.fields.state).any(axis=(1, 2))]
    assert late[0] > at("10:15", STORM_DAY) - np.timedelta64(1, "s"), "its own span"
    assert (slow.fields.state == UNSEEN).sum() < (made.fields.state == UNSEEN).sum()


# ---------------------------------------------------------------------------------------------- the folder


def test_a_file_counts_when_it_is_whole(tmp_path: Path) -> None:
    folder = Folder(tmp_path)
    (tmp_path / "a.rnx").write_text("half")
    assert folder.look() == []
    (tmp_path / "a.rnx").write_text("half and half")
    assert folder.look() == [], "still growing"
    assert folder.look() == [tmp_path / "a.rnx"] and folder.look() == []
    (tmp_path / "a.rnx").write_text("another text")
    assert folder.look() == [] and folder.look() == [tmp_path / "a.rnx"], "a changed file comes again"
    for name in (".hidden", "b.part", "c.tmp", "region.toml", "empty"):
        (tmp_path / name).write_text("" if name == "empty" else "x")
    (tmp_path / "deep").mkdir()
    (tmp_path / "deep" / "d.rnx").write_text("x")
    assert [*folder.look(), *folder.look()] == [tmp_path / "deep" / "d.rnx"]


# ---------------------------------------------------------------------------------------------- the archive is away


class AwayArchive:
    """An archive that now and then cannot be written; takes turns with a real one."""

    def __init__(self, real: Archive) -> None:
        self._real, self.away = real, True

    def __getattr__(self, name: str) -> Any:
        return getattr(self._real, name)

    def save(self, *what: Any, **named: Any) -> int:
        if self.away:
            raise SkylagError("cannot write to the archive: disk is full; nothing was changed")
        return self._real.save(*what, **named)


def test_what_was_asked_for_while_the_archive_was_away_is_made_up_for(
    tmp_path: Path, executor: Executor, archive: Archive, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A day that goes on and then its last version, both owed; files at fault are owed nothing."""
    made: list[str] = []

    def network_day(*_: Any, day: Any, **named: Any) -> Any:
        made.append(str(day))
        if len(made) == 1:
            raise NotEnough("no receiver can be used", had=0, needed=1, where="")
        return work.DayResult(invented_day(DAY, satellites=2, step_minutes=120), (), ())

    monkeypatch.setattr(work, "network_day", network_day)
    log: list[str] = []
    clock, away = Clock("11:00:00"), AwayArchive(archive)
    watch = Watch(away, tmp_path, executor, clock, log=lambda event, **_: log.append(event))  # type: ignore[arg-type]
    watch._step(FileCame("f", DAY, at("10:59:00")))
    assert watch.turn() == 0 and log == ["day not made"]
    watch._step(FileCame("g", DAY, at("10:59:00")))
    for _ in range(2):
        with pytest.raises(SkylagError, match="disk is full"):
            watch.turn()
    clock.set("23:59:59")
    clock._utc = clock._utc + np.timedelta64(3, "h")
    stop = threading.Event()
    watch._log = lambda event, **facts: (log.append(event), stop.set())
    watch.run(stop, every_s=0.0, away_s=0.0)
    assert log[-1] == "archive away" and archive.days() == ()
    away.away = False
    assert watch.turn() == 1
    (head,) = archive.days()
    assert not head.provisional and head.version == 1 and watch.turn() == 0
    assert len(made) == 5, "the whole day, once; not the part of it that was owed as well"


# ---------------------------------------------------------------------------------------------- files as they come


class Pieces:
    """A day of a receiver cut into hours, as a receiver would send it."""

    def __init__(self, sample_folder: Path, marker: str, day: np.datetime64 = DAY) -> None:
        path = next((sample_folder / str(day)).glob(f"{marker}*"))
        self.name, self._day = path.name[:9], path.name[12:19]
        text = hatanaka.decompress(path.read_bytes())
        head, rest = text.split(b"END OF HEADER", 1)
        first, *epochs = rest.split(b"\n> ")
        self._head, self._epochs = head + b"END OF HEADER" + first, epochs

    def write(self, folder: Path, first_hour: int, last_hour: int) -> None:
        """Hours first to last - 1 as one file, which appears whole."""
        wanted = [one for one in self._epochs if first_hour <= int(one[11:13]) < last_hour]
        passing = folder / f".{self.name}"
        passing.write_bytes(self._head + b"\n> " + b"\n> ".join(wanted) + b"\n")
        passing.rename(folder / f"{self.name}_R_{self._day}{first_hour:02}00_{last_hour - first_hour:02}H_30S_MO.rnx")


class Clock:
    """UTC at a GPS time that is set by hand."""

    def __init__(self, text: str, day: np.datetime64 = DAY) -> None:
        self._day = day
        self.set(text)

    def set(self, text: str) -> None:
        self._utc = gps_to_utc(np.array([at(text, self._day)]))[0]

    def __call__(self) -> np.datetime64:
        return self._utc


@pytest.fixture(scope="module")
def executor() -> Iterator[Executor]:
    with ThreadPoolExecutor(1) as pool:
        yield pool


def turn_until_made(watch: Watch, turns: int = 6) -> int:
    return sum(watch.turn() for _ in range(turns))


def test_each_arrival_moves_the_maps_and_a_silent_one_turns_unseen(
    tmp_path: Path, sample_folder: Path, executor: Executor
) -> None:
    """Two receivers far apart; both come, then one goes on and the other falls silent."""
    incoming = tmp_path / "in"
    incoming.mkdir()
    near, far = Pieces(sample_folder, "FENN"), Pieces(sample_folder, "SKAR")
    shutil.copy(next((sample_folder / str(DAY)).glob("TARN*")), incoming)
    clock, log = Clock("11:00:05"), []
    rules = [Rule("r", "silence", targets=(f'{{"file": "{tmp_path / "told"}"}}',))]
    with open_archive(tmp_path / "archive.sqlite") as archive:
        watch = Watch(
            archive, incoming, executor, clock, choices=Choices(epoch_step_s=1800.0), rules=rules, simulated=True,
            patience=Patience(calm_s=0.0), log=lambda event, **facts: log.append((event, facts)),
        )  # fmt: skip
        near.write(incoming, 8, 11)
        far.write(incoming, 8, 11)
        assert turn_until_made(watch) == 1
        (head,) = archive.days()
        assert head.provisional and head.simulated and head.receiver_count == 2
        first = archive.fields(head.region, DAY)
        assert first.times[-1] == at("10:30")

        near.write(incoming, 11, 13)
        assert watch.turn() == 0, "seen for the first time, perhaps not whole"
        clock.set("13:00:05")
        assert turn_until_made(watch) == 1
        (head,) = archive.days()
        second = archive.fields(head.region, DAY)
        assert second.times[-1] == at("12:30") and head.version == 2
        made = [facts for event, facts in log if event == "day made"]
        assert [(one["computed"], one["given"]) for one in made] == [(2, 0), (1, 1)], "only what changed"
        assert [one["hours_given"] + one["hours_made"] for one in made] == [3, 5], "every hour is one or the other"
        almost_whole(second, incoming, executor)
        silent = [facts["receiver"] for event, facts in log if event == "receiver silent"]
        assert silent == [far.name]
        assert far.name in (tmp_path / "told").read_text()
        receivers = {r.name: r for r in archive.day(head.region, DAY).receivers}
        assert set(receivers) == {near.name, far.name}
        series = {}
        for name, receiver in receivers.items():
            lat, lon, _ = geodetic(np.asarray(receiver.position_m))
            series[name] = archive.series(head.region, DAY, float(lat), float(lon)).state[:, 0, 0]
        then, now = second.times == at("10:00"), second.times >= at("12:00")
        assert series[far.name][then][0] == HOLDS and (series[far.name][now] == UNSEEN).all()
        assert (series[near.name][now] != UNSEEN).all(), "the other goes on being seen"

        clock.set("23:00:00")
        assert turn_until_made(watch) == 1, "all are silent: drawn once, and then every ten minutes"
        third = archive.fields(head.region, DAY)
        assert third.times[-1] == at("23:00") and (third.state[third.times > at("13:30")] == UNSEEN).all()


def test_a_file_that_is_none_is_left_out_and_the_rest_goes_on(
    tmp_path: Path, executor: Executor, archive: Archive
) -> None:
    log: list[tuple[str, dict]] = []
    (tmp_path / "in").mkdir()
    (tmp_path / "in" / "letter.rnx").write_text("Dear surveyor,\n")
    watch = Watch(archive, tmp_path / "in", executor, Clock("11:00"), log=lambda event, **f: log.append((event, f)))
    assert turn_until_made(watch) == 0
    assert log == [("file left out", {"file": "letter.rnx", "why": "is unknown"})]


def test_a_file_of_a_past_day_is_told_with_the_way_out(
    archive: Archive, sample_folder: Path, executor: Executor, tmp_path: Path
) -> None:
    (tmp_path / "in").mkdir()
    shutil.copy(next((sample_folder / "2031-03-11").glob("MRGT*")), tmp_path / "in")
    log: list[tuple[str, dict]] = []
    clock = Clock("11:00")
    watch = Watch(archive, tmp_path / "in", executor, lambda: clock() + np.timedelta64(3, "D"),
                  log=lambda event, **f: log.append((event, f)))  # fmt: skip
    assert turn_until_made(watch) == 0
    ((event, facts),) = log
    assert event == "file left out" and "is of 2031-03-11" in facts["why"] and "skylag add" in facts["why"]


# How far maps made step by step may be from the same made whole, in any cell: content [TECU] and slope [mm/km]; the
# factor between sigmas in 99 of 100 cells (the spread of a residual is sought in steps of 1.41, and whether an epoch
# tells its own by a threshold: small changes may turn either); and the share of cells whose state differs.  An hour is
# kept while its rays moved by less than 0.1 TECU.
NEAR = {"vtec": 0.25, "slope": 0.6}
NEAR_SIGMAS = 1.5
NEAR_STATES = 0.005


def almost_whole(steps: Fields, incoming: Path, executor: Executor, **named: Any) -> dict[str, float]:
    """Assert that maps made step by step are near those made of the same files at once; gives the differences.

    States are compared where the whole day sees: those that a silent receiver turned unseen are of another kind.
    """
    named = {"choices": Choices(epoch_step_s=1800.0), **named}
    whole = work.network_day([incoming], executor=executor, simulated=True, **named).products.fields
    np.testing.assert_array_equal(steps.times, whole.times)
    np.testing.assert_array_equal(steps.support, whole.support)
    off = {name: float(np.nanmax(np.abs(getattr(steps, name) - getattr(whole, name)))) for name in NEAR}
    for name in ("vtec_sigma", "slope_sigma"):
        ratio = np.abs(np.log(getattr(steps, name) / getattr(whole, name)))
        off[name], most = (float(np.exp(np.nanquantile(ratio, share))) for share in (0.99, 1.0))
        print(f"{name}: factor {off[name]:.2f} in 99 of 100 cells, at most {most:.2f}")
    off["states"] = float(np.mean((steps.state != whole.state) & (steps.state != UNSEEN)))
    print(off)
    assert all(off[name] <= NEAR[name] for name in NEAR), off
    assert off["vtec_sigma"] <= NEAR_SIGMAS and off["slope_sigma"] <= NEAR_SIGMAS and off["states"] <= NEAR_STATES, off
    return off


@pytest.mark.slow
@pytest.mark.parametrize("day", [DAY, DAY + 1])
def test_sixteen_receivers_within_twenty_seconds(
    tmp_path: Path, sample_folder: Path, executor: Executor, evidence, day: np.datetime64
) -> None:
    """Hours come for all receivers at once, the worst moment: from then to kept maps, on a calm and on a stormy day.

    The sample network has fourteen; two more stand beside others under names of their own.  At the end the maps are
    near those made at once, and once the day is over they are the same to the bit.
    """
    incoming = tmp_path / "in"
    incoming.mkdir()
    markers = sorted({p.name[:4] for p in (sample_folder / str(day)).glob("*_MO.crx.gz")})
    pieces = [Pieces(sample_folder, marker, day) for marker in markers]
    for number, twin in enumerate([Pieces(sample_folder, marker, day) for marker in markers[:2]]):
        old, twin.name = twin.name[:4].encode(), f"TWN{number}00XBS"
        twin._head = twin._head.replace(old, twin.name[:4].encode())
        pieces.append(twin)
    pieces = pieces[:16]
    shutil.copy(next((sample_folder / str(day)).glob("TARN*")), incoming)
    clock, log = Clock("06:00:05", day), []
    region = region_of(sample_folder)
    with open_archive(tmp_path / "archive.sqlite") as archive:
        watch = Watch(archive, incoming, executor, clock, region=region, simulated=True,
                      patience=Patience(calm_s=0.0), log=lambda event, **facts: log.append((event, facts)))  # fmt: skip
        first, taken = 0, []
        for hour in (7, 22, 23, 24):
            for number in range(first, hour):
                for piece in pieces:
                    piece.write(incoming, number, number + 1)
            clock.set(f"{hour - 1:02}:59:55")
            began, busy = time.perf_counter(), time.process_time()
            made_now = turn_until_made(watch, 3)
            assert made_now == 1 or (made_now == 2 and hour - first > 1), "after a gap all were silent for a moment"
            if hour - first == 1:
                taken.append((hour, time.perf_counter() - began, time.process_time() - busy))
            first = hour
        (head,) = archive.days()
        assert head.receiver_count == len(pieces) and head.provisional
        steps = archive.fields(head.region, day)
        assert (steps.state == HOLDS).any()
        for hour, wall_s, busy_s in taken:
            print(f"{day} hour {hour}: {wall_s:.1f} s of time, {busy_s:.1f} s of one processor")
        print([(facts["hours_given"], facts["hours_made"]) for event, facts in log if event == "day made"])
        almost_whole(steps, incoming, executor, region=region, choices=Choices())
        clock = Clock("02:05:00", day + 1)
        watch._clock = clock
        assert turn_until_made(watch, 3) == 1
        (head,) = archive.days()
        assert not head.provisional
        final = archive.fields(head.region, day)
        whole = work.network_day([incoming], executor=executor, simulated=True, region=region).products
        for name in ("vtec", "slope", "slope_sigma", "support"):
            np.testing.assert_array_equal(getattr(final, name), getattr(whole.fields, name))
    evidence(
        f"live: an hour of all 16 receivers at the end of {day}, to kept maps (processor time)",
        source="own requirement: 20 s for a 16-receiver network", expected=20.0, got=round(taken[-1][2], 1),
        tolerance=0.0, unit="s", at_most=True,
    )  # fmt: skip


def region_of(sample_folder: Path):
    from skylag.settings import read_region

    return read_region(sample_folder / "region.toml")


def test_a_front_that_the_day_before_saw_last_is_told_by_the_first_maps_of_a_day(
    tmp_path: Path, executor: Executor, monkeypatch: pytest.MonkeyPatch
) -> None:
    first, second = over_midnight()
    second = until(second, 1)
    monkeypatch.setattr(work, "network_day", lambda *_asked, **_named: SimpleNamespace(products=second))
    rules = [Rule("r", "arrival", site="Northport", within_min=180, targets=(f'{{"file": "{tmp_path / "told"}"}}',))]
    clock = Clock("00:05:00", second.day)
    (tmp_path / "in").mkdir()
    for kept in (False, True):
        with open_archive(tmp_path / f"{kept}.sqlite") as archive:
            if kept:
                archive.save(first)
            watch = Watch(archive, tmp_path / "in", executor, clock, rules=rules, patience=Patience(calm_s=0.0))
            came = second.day.astype("datetime64[ns]")
            watch.state = State(frozenset({second.day}), {second.day: (came, came)})
            assert watch.turn() == 1
            assert (tmp_path / "told").exists() is kept
    assert "front to Northport" in (tmp_path / "told").read_text()
