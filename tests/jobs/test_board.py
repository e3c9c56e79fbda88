"""The queue: each task done once, whatever happens to those who do it."""

import json
import multiprocessing
import os
import random
import signal
import threading
import time
from collections.abc import Callable
from concurrent.futures import Executor, ThreadPoolExecutor
from dataclasses import replace
from datetime import date
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from tests.builders import REGION, invented_day

from skylag.archive import Archive, Task, open_archive
from skylag.chain import Choices
from skylag.errors import Missing, NotEnough, Refused, SkylagError
from skylag.jobs import advising, board, hindcast, kept, work
from skylag.jobs.board import Policy, Worker
from skylag.tables import Fields, Products

T0 = np.datetime64("2031-05-12T08:00:00", "ns")
NAME = REGION.name
QUICK = Policy(beat_s=0.02, held_s=60)


class HandClock:
    """A clock that stands until it is moved."""

    def __init__(self) -> None:
        self.now = T0

    def __call__(self) -> np.datetime64:
        return self.now

    def move(self, seconds: float) -> None:
        self.now = self.now + np.timedelta64(round(seconds * 1e9), "ns")


def wall_clock() -> np.datetime64:
    return T0 + np.timedelta64(time.monotonic_ns(), "ns")


def tiny_day(number: int) -> Products:
    """A day that differs from all others, quickly made."""
    region = replace(REGION, south=-39.0, north=-38.0, west=145.0, east=146.0)
    day = np.datetime64("2031-01-01") + number
    return invented_day(day, region=region, step_minutes=120, satellites=2, seed=number)


def tiny(task: Task, _executor: Executor, tell: work.Progress) -> Products:
    """Stands for the real computation: some stages, some time, a result that depends on the task alone."""
    for step in range(5):
        tell("maps", step / 5, "")
        time.sleep(0.002)
    return tiny_day(task.spec["number"])


def queue(archive: Archive, count: int, now: np.datetime64 = T0) -> list[int]:
    return [archive.tasks.add("tiny", f"day {n}", {"number": n}, now) for n in range(count)]


def worker(archive: Archive, clock: Callable[[], np.datetime64], compute: Any = tiny, policy: Policy = QUICK) -> Worker:
    return Worker(archive, "threads:1", clock, policy, compute=compute)


def run_all(one: Worker) -> int:
    """Until nothing is left; for ten minutes at most, since what waits for a clock that stands would wait for ever."""
    stop = threading.Event()
    guard = threading.Timer(600.0, stop.set)
    guard.start()
    try:
        return one.run(stop, until_empty=True, idle_s=0.01)
    finally:
        guard.cancel()
        guard.join()


# ---------------------------------------------------------------------------------------------- outlooks


def test_a_day_that_is_done_stays_done_where_preparing_for_questions_fails(archive: Archive, monkeypatch: Any) -> None:
    def prepare(*_: Any) -> None:
        raise MemoryError("too large")

    monkeypatch.setattr(advising, "prepare", prepare)
    log: list[tuple[str, dict[str, Any]]] = []
    (number,) = queue(archive, 1)
    one = Worker(archive, "threads:1", HandClock(), QUICK, lambda event, **facts: log.append((event, facts)), tiny)
    with ThreadPoolExecutor(1) as executor:
        assert one.one(executor)
    assert archive.tasks.one(number).state == "done"
    assert [event for event, _ in log] == ["task begun", "task done", "day not prepared"]
    assert log[-1][1]["why"] == "MemoryError: too large" and log[-1][1]["task"] == number


def queue_day(archive: Archive, number: int) -> int:
    return archive.tasks.add(board.NETWORK_DAY, f"day {number}", {"number": number}, T0)


def test_a_day_queues_the_outlook_after_it(archive: Archive) -> None:
    """Behind all days that wait; what was made is told and kept, and asked for again it is the same."""
    for number in range(2):
        queue_day(archive, number)
    one = worker(archive, HandClock())
    with ThreadPoolExecutor(1) as executor:
        one.one(executor)
        waiting = archive.tasks.newest(states=("waiting",))
        assert {task.kind for task in waiting} == {board.NETWORK_DAY, board.OUTLOOK}
        one.one(executor)
        one.one(executor)
        assert {task.title for task in archive.tasks.newest(states=("waiting",))} == {f"2031-01-02 outlook of {NAME}"}
    assert run_all(one) == 1
    ended = {task.title: task for task in archive.tasks.newest()}
    assert {task.state for task in ended.values()} == {"done"} and len(ended) == 4
    results = [ended[f"2031-01-0{day} outlook of {NAME}"].result for day in (1, 2)]
    assert [result["known_until"] for result in results] == ["2031-01-02"] * 2, "of the newest day, made once"
    kept_one = hindcast.newest(archive, NAME)
    assert {result["outlook"] for result in results} == {kept_one.number}


def test_an_outlook_that_fails_is_tried_again_and_the_day_stays(archive: Archive, monkeypatch: Any) -> None:
    real, calls = hindcast.newest, []

    def newest(*arguments: Any, **named: Any) -> Any:
        calls.append(1)
        if len(calls) == 1:
            raise OSError("cut off")
        return real(*arguments, **named)

    monkeypatch.setattr(hindcast, "newest", newest)
    clock = HandClock()
    queue_day(archive, 1)
    one = worker(archive, clock)
    with ThreadPoolExecutor(1) as executor:
        one.one(executor)
        one.one(executor)
        (task,) = (task for task in archive.tasks.newest() if task.kind == board.OUTLOOK)
        assert (task.state, task.said) == ("waiting", "OSError: cut off") and len(archive.days()) == 1
        clock.move(60)
        one.one(executor)
    assert archive.tasks.one(task.id).state == "done"


def test_an_outlook_cancelled_meanwhile_is_not_done(archive: Archive, monkeypatch: Any) -> None:
    real = hindcast.newest

    def newest(*arguments: Any, **named: Any) -> Any:
        (task,) = archive.tasks.newest(states=("running",))
        archive.tasks.cancel(task.id, T0)
        return real(*arguments, **named)

    monkeypatch.setattr(hindcast, "newest", newest)
    queue_day(archive, 1)
    log: list[str] = []
    one = Worker(archive, "threads:1", HandClock(), QUICK, compute=tiny, log=lambda event, **_: log.append(event))
    run_all(one)
    states = {task.kind: task.state for task in archive.tasks.newest()}
    assert states == {board.NETWORK_DAY: "done", board.OUTLOOK: "cancelled"} and "task done" in log


# ---------------------------------------------------------------------------------------------- the ordinary course


def test_tasks_are_done_in_order_and_tell_their_result(archive: Archive) -> None:
    numbers = queue(archive, 3)
    assert archive.tasks.counts() == {"waiting": 3, "running": 0, "done": 0, "failed": 0, "cancelled": 0}
    clock = HandClock()
    assert run_all(worker(archive, clock)) == 3
    tasks = [archive.tasks.one(number) for number in numbers]
    assert [task.state for task in tasks] == ["done"] * 3
    assert tasks[1].result == {"region": REGION.name, "day": "2031-01-02", "given": 0, "computed": 0, "warnings": 1,
                               "version": 1}  # fmt: skip
    np.testing.assert_array_equal(archive.fields(REGION.name, "2031-01-02").vtec, tiny_day(1).fields.vtec)


def test_the_same_work_is_queued_once(archive: Archive) -> None:
    (first,) = queue(archive, 1)
    assert queue(archive, 1) == [first]
    run_all(worker(archive, HandClock()))
    (second,) = queue(archive, 1)
    assert second != first, "what is done may be done again"


def test_adding_from_many_sides_at_once(archive_place: str) -> None:
    with open_archive(archive_place) as one, open_archive(archive_place) as two, ThreadPoolExecutor(6) as threads:
        found = set(threads.map(lambda k: queue((one, two)[k % 2], 1)[0], range(12)))
        assert len(found) == 1 and one.tasks.counts()["waiting"] == 1


def test_many_workers_take_each_task_once(archive_place: str) -> None:
    with open_archive(archive_place) as one, open_archive(archive_place) as two, ThreadPoolExecutor(4) as threads:
        queue(one, 12)
        workers = [worker(archive, HandClock()) for archive in (one, two, one, two)]
        assert sum(threads.map(run_all, workers)) == 12
        assert one.tasks.counts()["done"] == 12
        assert {head.versions for head in one.days()} == {(1,)}


def test_progress_is_told_while_it_runs(archive: Archive) -> None:
    (number,) = queue(archive, 1)
    seen, told, go_on = [], threading.Event(), threading.Event()

    def slowly(task: Task, executor: Executor, tell: work.Progress) -> Products:
        tell("receivers", 0.25, "ARDN")
        told.set()
        assert go_on.wait(10)
        return tiny(task, executor, tell)

    with ThreadPoolExecutor(1) as thread:
        running = thread.submit(run_all, worker(archive, HandClock(), slowly))
        assert told.wait(10)
        until = time.perf_counter() + 10
        while not seen and time.perf_counter() < until:
            task = archive.tasks.one(number)
            seen += [(task.stage, task.share, task.word)] if task.stage else []
        go_on.set()
        running.result()
    assert seen == [("receivers", 0.25, "ARDN")]


# ---------------------------------------------------------------------------------------------- errors


def test_an_error_is_tried_again_with_growing_waits(archive: Archive) -> None:
    (number,) = queue(archive, 1)
    clock, policy = HandClock(), replace(QUICK, most_attempts=4)
    waits = []

    def fail(*_: object) -> Products:
        raise OSError("the disk is away")

    one = worker(archive, clock, fail, policy)
    with ThreadPoolExecutor(1) as executor:
        while one.one(executor):
            task = archive.tasks.one(number)
            assert task.said == "OSError: the disk is away"
            if task.state == "failed":
                break
            waits.append(float((task.not_before - clock.now) / np.timedelta64(1, "s")))
            assert not one.one(executor), "not before its time"
            clock.move(waits[-1])
    assert waits == [5.0, 20.0, 80.0]
    assert (archive.tasks.one(number).state, archive.tasks.one(number).attempts) == ("failed", 4)
    assert archive.days() == ()


def test_a_passing_error_passes(archive: Archive) -> None:
    (number,) = queue(archive, 1)
    clock, tries = HandClock(), []

    def at_third(task: Task, executor: Executor, tell: work.Progress) -> Products:
        tries.append(task.attempts)
        if len(tries) < 3:
            raise SkylagError("the database is away")
        return tiny(task, executor, tell)

    one = worker(archive, clock, at_third)
    with ThreadPoolExecutor(1) as executor:
        for _ in range(3):
            assert one.one(executor)
            clock.move(60)
    assert tries == [0, 1, 2] and archive.tasks.one(number).state == "done"


def test_input_at_fault_is_not_tried_again(archive: Archive) -> None:
    (number,) = queue(archive, 1)

    def refuse(*_: object) -> Products:
        raise NotEnough("no observation file is among the inputs", had=0, needed=1, where="inputs")

    run_all(worker(archive, HandClock(), refuse))
    task = archive.tasks.one(number)
    assert (task.state, task.attempts, task.said) == ("failed", 1, "no observation file is among the inputs")
    again = archive.tasks.again(number, T0)
    assert (again.state, again.attempts) == ("waiting", 0)
    run_all(worker(archive, HandClock()))
    assert archive.tasks.one(number).state == "done"
    with pytest.raises(Refused, match="is done"):
        archive.tasks.again(number, T0)


def test_a_kind_of_work_nobody_knows(archive: Archive) -> None:
    queue(archive, 1)
    run_all(worker(archive, HandClock(), board.compute))
    assert "update the program" in archive.tasks.newest()[0].said


# ---------------------------------------------------------------------------------------------- cancelling


def test_cancelled_while_waiting(archive: Archive) -> None:
    numbers = queue(archive, 2)
    assert archive.tasks.cancel(numbers[0], T0).state == "cancelled"
    assert run_all(worker(archive, HandClock())) == 1
    assert [str(head.day) for head in archive.days()] == ["2031-01-02"]
    with pytest.raises(Refused, match="is cancelled already"):
        archive.tasks.cancel(numbers[0], T0)
    with pytest.raises(Missing, match="there is no work 99"):
        archive.tasks.cancel(99, T0)
    assert archive.tasks.again(numbers[0], T0).state == "waiting"


def test_cancelled_while_running_stops_and_keeps_nothing(archive: Archive) -> None:
    (number,) = queue(archive, 1)
    begun, steps = threading.Event(), []

    def endless(_task: Task, _executor: Executor, tell: work.Progress) -> Products:
        begun.set()
        for step in range(2000):
            tell("maps", step / 2000, "")
            steps.append(step)
            time.sleep(0.005)
        raise AssertionError("was not stopped")

    with ThreadPoolExecutor(1) as thread:
        running = thread.submit(run_all, worker(archive, HandClock(), endless))
        assert begun.wait(10)
        archive.tasks.cancel(number, T0)
        running.result(timeout=20)
    assert archive.tasks.one(number).state == "cancelled" and len(steps) < 2000
    assert archive.days() == ()


def test_cancelled_at_the_last_moment_keeps_nothing(archive: Archive) -> None:
    """The work is done, but it was cancelled before its result is written: the two are one transaction."""
    (number,) = queue(archive, 1)

    def cancelled(task: Task, executor: Executor, tell: work.Progress) -> Products:
        made = tiny(task, executor, tell)
        archive.tasks.cancel(number, T0)
        return made

    run_all(worker(archive, HandClock(), cancelled, replace(QUICK, beat_s=30)))
    assert archive.tasks.one(number).state == "cancelled"
    assert archive.days() == ()


# ---------------------------------------------------------------------------------------------- vanished holders


def test_a_claim_that_ran_out_is_anothers(archive: Archive) -> None:
    (number,) = queue(archive, 1)
    clock = HandClock()
    first = archive.tasks.claim("elsewhere/1", clock(), 60, 10)
    assert first is not None and archive.tasks.claim("elsewhere/2", clock(), 60, 10) is None
    clock.move(61)
    second = archive.tasks.claim("elsewhere/2", clock(), 60, 10)
    assert second is not None and second.losses == 1
    assert not archive.tasks.keep(number, "elsewhere/1", clock(), 60, "maps", 0.5, "")
    assert not archive.tasks.fail(number, "elsewhere/1", "late", clock(), None)
    with pytest.raises(SkylagError, match="is done by another"):
        archive.save(tiny_day(0), ending=board.Ending(number, "elsewhere/1", clock(), {}))
    assert archive.days() == (), "the one who lost the claim keeps nothing"
    assert archive.tasks.keep(number, "elsewhere/2", clock(), 60, "maps", 0.5, "")
    archive.save(tiny_day(0), ending=board.Ending(number, "elsewhere/2", clock(), {}))
    assert archive.tasks.one(number).state == "done" and len(archive.days()) == 1


def test_work_that_ends_its_processes_is_given_up(archive: Archive) -> None:
    (number,) = queue(archive, 1)
    clock = HandClock()
    for turn in range(4):
        task = archive.tasks.claim(f"elsewhere/{turn}", clock(), 60, most_losses=3)
        assert task is not None and task.losses == turn
        clock.move(61)
    assert archive.tasks.claim("elsewhere/9", clock(), 60, most_losses=3) is None
    task = archive.tasks.one(number)
    assert task.state == "failed" and "vanished 4 times" in task.said


def test_who_is_gone() -> None:
    mine = f"{board.process_name()}/1"
    assert not board.is_gone(mine)
    host, boot, number, started = board.process_name().split("/")
    assert board.is_gone(f"{host}/{boot}/{number}/{int(started) + 1}/1"), "an earlier process of the same number"
    assert not board.is_gone(f"other/{boot}/{number}/1/1"), "of other machines nothing is known"
    child = multiprocessing.get_context("fork").Process(target=time.sleep, args=(0,))
    child.start()
    its = f"{host}/{boot}/{child.pid}/{board._started(child.pid or 0)}/1"
    child.join()
    assert board.is_gone(its)


def _work_until_killed(place: str, ready: Any) -> None:
    """A process of its own: opens the archive, tells so, works."""
    with open_archive(place) as archive:
        ready.send("open")
        run_all(worker(archive, wall_clock, policy=Policy(beat_s=0.1, most_losses=1000)))
        ready.send("done")


def _kill_many(place: str, days: int, kills: int, seed: int) -> int:
    """Work on a queue with processes that are killed at random moments; gives how many kills met one at work."""
    chance, met = random.Random(seed), 0
    context = multiprocessing.get_context("fork")
    for turn in range(kills + 1):
        mine, its = context.Pipe()
        process = context.Process(target=_work_until_killed, args=(place, its))
        process.start()
        its.close()
        if turn < kills:
            # From the very opening of the database to the middle of the second day.
            if chance.random() < 0.8:
                mine.poll(20)
            time.sleep(chance.uniform(0.0, 0.12))
            met += process.is_alive()
            os.kill(process.pid or 0, signal.SIGKILL)
            process.join()
            _consistent(place, days)
        else:
            process.join(600)
            assert process.exitcode == 0
    return met


def _consistent(place: str, days: int) -> None:
    with open_archive(place) as archive:
        done = {task.result["day"] for task in archive.tasks.newest(days, ("done",))}
        assert {str(head.day) for head in archive.days()} == done, "done and stored are one"
        heads = archive.days()
        assert {head.versions for head in heads} <= {(1,)}
        for head in heads[:2]:
            assert len(archive.fields(REGION.name, head.day).times) == 12


def _killed_equals_undisturbed(place: str, days: int, kills: int) -> None:
    with open_archive(place) as archive:
        queue(archive, days, wall_clock())
    met = _kill_many(place, days, kills, seed=7)
    assert met >= kills * 0.7, f"{met} of {kills} kills met a process at work: the queue was empty too soon"
    with open_archive(place) as archive:
        assert archive.tasks.counts() == {"waiting": 0, "running": 0, "done": days, "failed": 0, "cancelled": 0}
        assert [line for line in archive.check() if not line.startswith("stray")] == []
        for number in range(days):
            made, expected = archive.fields(REGION.name, f"{np.datetime64('2031-01-01') + number}"), tiny_day(number)
            for layer in Fields.LAYERS:
                np.testing.assert_array_equal(getattr(made, layer), getattr(expected.fields, layer))


def test_twenty_kills_lose_nothing(tmp_path: Path) -> None:
    _killed_equals_undisturbed(str(tmp_path / "archive.sqlite"), days=25, kills=20)


@pytest.mark.slow
def test_a_hundred_kills_lose_nothing(archive_place: str) -> None:
    _killed_equals_undisturbed(archive_place, days=130, kills=100)


# ---------------------------------------------------------------------------------------------- real files


@pytest.fixture(scope="module")
def real_files(sample_folder: Path) -> list[Path]:
    folder = sample_folder / "2031-03-11"
    return [next(folder.glob(f"{name}*")) for name in ("MRGT", "TARN")]


def test_files_become_one_task_per_day(archive: Archive, sample_folder: Path, real_files: list[Path]) -> None:
    other = next((sample_folder / "2031-03-12").glob("MRGT*"))
    numbers, left_out = board.add(archive, [*real_files, other], now=T0, region=REGION, simulated=True)
    tasks = [archive.tasks.one(number) for number in numbers]
    assert [task.spec["day"] for task in tasks] == ["2031-03-11", "2031-03-12"] and left_out == ()
    assert len(tasks[0].spec["paths"]) == 2 and len(tasks[1].spec["paths"]) == 2, "the navigation file goes with both"
    assert board.region_of(json.loads(json.dumps(tasks[0].spec["region"]))) == REGION
    assert board.add(archive, real_files, now=T0, region=REGION, simulated=True)[0] == numbers[:1]
    with pytest.raises(NotEnough, match="no observation file of 2031-04-01"):
        board.add(archive, real_files, now=T0, day=date(2031, 4, 1))


def test_a_day_cut_off_goes_on_with_what_was_kept(tmp_path: Path, real_files: list[Path]) -> None:
    """The receiver-day is computed once; the second try is given it and makes the same maps, to the bit."""
    made: list[Products] = []

    def cut_off(task: Task, executor: Executor, tell: work.Progress) -> Products:
        made.append(board.compute(task, executor, tell))
        if len(made) == 1:
            raise OSError("cut off")
        return made[-1]

    clock = HandClock()
    with open_archive(tmp_path) as archive:
        (number,), _ = board.add(archive, real_files, now=T0, choices=Choices(epoch_step_s=3600.0), simulated=True)
        one = worker(archive, clock, cut_off)
        with ThreadPoolExecutor(1) as executor:
            one.one(executor)
            clock.move(60)
            one.one(executor)
        task = archive.tasks.one(number)
        assert (task.state, task.result["given"], task.result["computed"]) == ("done", 1, 0)
        folder = kept.folder_of(archive)
        (file,) = folder.rglob("*.npz")
        assert file.stat().st_size > 10_000
        assert kept.tidy(folder, 10.0, file.stat().st_mtime + 5) == 0
        assert kept.tidy(folder, 10.0, file.stat().st_mtime + 20) == 1
    for layer in Fields.LAYERS:
        np.testing.assert_array_equal(getattr(made[0].fields, layer), getattr(made[1].fields, layer))
    assert repr(made[0].origin.counts) == repr(made[1].origin.counts)  # repr: a nan is not equal to itself
    assert made[0].origin.warnings == made[1].origin.warnings
