"""Jobs in the workers: one end each whatever happens, in the window's thread, and no thread left."""

from __future__ import annotations

import gc
import threading
import weakref
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from PySide6.QtCore import QThread
from pytestqt.qtbot import QtBot

from pulsemend.errors import Cancelled, PlanError
from pulsemend.model.recording import FloatArray, RecordingFacts
from pulsemend.progress import Progress, Work
from pulsemend.window.job import Job, Pace
from pulsemend.window.jobs import Debounce, Jobs, Shelf, Start

WAIT_S = 20.0


class FakeRecording:
    """A recording that tells who opened, read and closed it."""

    def __init__(self, path: Path, log: list[str]) -> None:
        self.path = path
        self.thread = threading.current_thread().name
        self.log = log
        log.append(f"open {path} in {self.thread}")

    @property
    def facts(self) -> RecordingFacts:
        return RecordingFacts("x", "none", 1.0, 0, (), ())

    def read(self, start: int, stop: int, out: FloatArray, offset: Any = None) -> None:
        out[:] = 0

    def fingerprint_paths(self) -> tuple[str, ...]:
        return ()

    def close(self) -> None:
        self.log.append(f"close {self.path} in {threading.current_thread().name}")


class Bench:
    """Workers with a session's revision and a log of recordings."""

    def __init__(self) -> None:
        self.revision = 1
        self.log: list[str] = []
        self.jobs = Jobs(lambda path: FakeRecording(path, self.log), lambda: self.revision)


@pytest.fixture
def bench(qtbot: QtBot) -> Iterator[Bench]:
    before = set(threading.enumerate())
    bench = Bench()
    yield bench
    assert bench.jobs.close(WAIT_S)
    assert set(threading.enumerate()) <= before
    assert bench.jobs.under_way == ()


class Listener:
    """Writes down what a job says, and in which thread."""

    def __init__(self, job: Job) -> None:
        self.said: list[Any] = []
        self.threads: set[QThread] = set()
        job.progressed.connect(lambda progress, _left: self.note(progress.done))
        job.returned.connect(lambda result: self.note("returned", result))
        job.failed.connect(lambda error: self.note("failed", type(error).__name__, str(error)))
        job.cancelled.connect(lambda: self.note("cancelled"))
        job.finished.connect(lambda: self.note("finished"))

    def note(self, *said: object) -> None:
        self.said.append(said if len(said) > 1 else said[0])
        self.threads.add(QThread.currentThread())

    @property
    def ends(self) -> list[Any]:
        return [one for one in self.said if not isinstance(one, (int, float))]


def counting(last: int, result: object = "done") -> Start:
    def start(_shelf: Shelf) -> Work[object]:
        for done in range(last):
            yield Progress("counting", done, last)
        return result

    return start


class Gate:
    """A job that waits at its first yield until it is let on."""

    def __init__(self, then: object = "done") -> None:
        self.reached = threading.Event()
        self.opened = threading.Event()
        self.cleaned = threading.Event()
        self.then = then

    def start(self, _shelf: Shelf) -> Work[object]:
        try:
            yield Progress("waiting", 0, 2)
            self.reached.set()
            assert self.opened.wait(WAIT_S)
            yield Progress("waiting", 1, 2)
            if isinstance(self.then, BaseException):
                raise self.then
            return self.then
        finally:
            self.cleaned.set()


def test_a_result_comes_in_the_windows_thread_after_its_progress(qtbot: QtBot, bench: Bench) -> None:
    threads: list[str] = []

    def start(_shelf: Shelf) -> Work[object]:
        threads.append(threading.current_thread().name)
        yield Progress("counting", 1, 2)
        return np.arange(3)

    job = bench.jobs.submit("fit", start)
    heard = Listener(job)
    with qtbot.waitSignal(job.finished, timeout=20_000):
        assert bench.jobs.under_way == (job,)
    assert threads[0].startswith("pulsemend-worker-")
    assert [heard.said[0], *(one[0] for one in heard.said[1:2]), heard.said[2]] == [1, "returned", "finished"]
    np.testing.assert_array_equal(heard.said[1][1], [0, 1, 2])
    assert heard.threads == {QThread.currentThread()}


@pytest.mark.parametrize(
    "error",
    [
        RuntimeError("odd"),
        ValueError("odd"),
        StopIteration("odd"),
        KeyboardInterrupt("odd"),
        SystemExit("odd"),
        GeneratorExit("odd"),
        BaseException("odd"),
        PlanError("epochs", "odd"),
    ],
    ids=lambda error: type(error).__name__,
)
@pytest.mark.parametrize("at", ["start", "first step", "later step"])
def test_whatever_is_raised_is_one_failure(qtbot: QtBot, bench: Bench, error: BaseException, at: str) -> None:
    def work() -> Work[object]:
        if at == "later step":
            yield Progress("odd", 0, 1)
        raise error
        yield Progress("never", 0, 1)

    def start(_shelf: Shelf) -> Work[object]:
        if at == "start":
            raise error
        return work()

    job = bench.jobs.submit("odd", start)
    heard = Listener(job)
    with qtbot.waitSignal(job.finished, timeout=20_000):
        pass
    (failed, name, text), finished = heard.ends
    # Python itself turns a StopIteration inside a generator into a RuntimeError.
    expected = RuntimeError if isinstance(error, StopIteration) and at != "start" else type(error)
    assert (failed, name, finished) == ("failed", expected.__name__, "finished")
    assert "odd" in text or expected is RuntimeError

    # The worker lives on.
    after = bench.jobs.submit("after", counting(3))
    with qtbot.waitSignal(after.returned, timeout=20_000) as got:
        pass
    assert got.args == ["done"]


def test_work_that_stops_itself_is_cancelled(qtbot: QtBot, bench: Bench) -> None:
    gate = Gate(Cancelled())
    gate.opened.set()
    job = bench.jobs.submit("gate", gate.start)
    heard = Listener(job)
    with qtbot.waitSignal(job.finished, timeout=20_000):
        pass
    assert heard.ends == ["cancelled", "finished"]


def test_a_cancelled_job_cleans_up_at_its_next_yield(qtbot: QtBot, bench: Bench) -> None:
    gate = Gate()
    job = bench.jobs.submit("gate", gate.start)
    heard = Listener(job)
    assert gate.reached.wait(WAIT_S)
    job.cancel()
    job.cancel()
    assert not gate.cleaned.is_set()
    gate.opened.set()
    with qtbot.waitSignal(job.finished, timeout=20_000):
        pass
    assert heard.ends == ["cancelled", "finished"]
    assert gate.cleaned.is_set()


def test_cancelling_during_the_last_step_is_still_a_cancel(qtbot: QtBot, bench: Bench) -> None:
    reached, opened = threading.Event(), threading.Event()

    def start(_shelf: Shelf) -> Work[object]:
        yield Progress("last", 0, 1)
        reached.set()
        assert opened.wait(WAIT_S)
        return "too late"

    job = bench.jobs.submit("last", start)
    heard = Listener(job)
    assert reached.wait(WAIT_S)
    job.cancel()
    opened.set()
    with qtbot.waitSignal(job.finished, timeout=20_000):
        pass
    assert heard.ends == ["cancelled", "finished"]


def test_a_generator_that_will_not_close_is_a_failure(qtbot: QtBot, bench: Bench) -> None:
    reached, opened = threading.Event(), threading.Event()

    def start(_shelf: Shelf) -> Work[object]:
        while True:
            try:
                yield Progress("stubborn", 0, 1)
                reached.set()
                assert opened.wait(WAIT_S)
            except GeneratorExit:
                yield Progress("stubborn", 0, 1)
                return None

    job = bench.jobs.submit("stubborn", start)
    heard = Listener(job)
    assert reached.wait(WAIT_S)
    job.cancel()
    opened.set()
    with qtbot.waitSignal(job.finished, timeout=20_000):
        pass
    assert heard.ends[0][:2] == ("failed", "RuntimeError")
    assert heard.ends[1:] == ["finished"]


def test_stale_results_are_thrown_away(qtbot: QtBot, bench: Bench) -> None:
    gate, other = Gate(), Gate()
    job = bench.jobs.submit("preview", gate.start, revision=1)
    pyramid = bench.jobs.submit("pyramid", other.start)
    heard, heard_pyramid = Listener(job), Listener(pyramid)
    assert gate.reached.wait(WAIT_S)
    assert other.reached.wait(WAIT_S)
    bench.revision = 2
    with qtbot.waitSignals([job.finished, pyramid.finished], timeout=20_000):
        gate.opened.set()
        other.opened.set()
    assert heard.ends == ["cancelled", "finished"]
    assert heard_pyramid.ends == [("returned", "done"), "finished"]


def test_a_refusal_about_a_stale_plan_bothers_nobody_but_a_fault_does(qtbot: QtBot, bench: Bench) -> None:
    refusal, fault = Gate(PlanError("epochs", "odd")), Gate(ZeroDivisionError())
    jobs = [bench.jobs.submit(str(gate.then), gate.start, revision=1) for gate in (refusal, fault)]
    heard = [Listener(job) for job in jobs]
    bench.revision = 2
    with qtbot.waitSignals([job.finished for job in jobs], timeout=20_000):
        refusal.opened.set()
        fault.opened.set()
    assert heard[0].ends == ["cancelled", "finished"]
    assert heard[1].ends[0][:2] == ("failed", "ZeroDivisionError")


def test_the_newest_of_a_kind_replaces_the_others(qtbot: QtBot, bench: Bench) -> None:
    gates = [Gate(), Gate()]
    blocking = [bench.jobs.submit(f"block {n}", gate.start) for n, gate in enumerate(gates)]
    assert all(gate.reached.wait(WAIT_S) for gate in gates)
    started: list[int] = []

    def numbered(number: int) -> Start:
        def start(_shelf: Shelf) -> Work[object]:
            started.append(number)
            yield Progress("numbered", 0, 1)
            return number

        return start

    previews = [bench.jobs.submit("preview", numbered(number)) for number in range(5)]
    heard = [Listener(job) for job in previews]
    for gate in gates:
        gate.opened.set()
    with qtbot.waitSignals([job.finished for job in (*previews, *blocking)], timeout=20_000):
        pass
    assert started == [4]
    assert [one.ends for one in heard[:4]] == [["cancelled", "finished"]] * 4
    assert heard[4].ends == [("returned", 4), "finished"]


def test_an_urgent_job_goes_before_the_next_step_of_long_ones(qtbot: QtBot, bench: Bench) -> None:
    opened, shown = threading.Event(), threading.Event()
    reached = [threading.Event(), threading.Event()]

    def long(number: int) -> Start:
        def start(_shelf: Shelf) -> Work[object]:
            reached[number].set()
            assert opened.wait(WAIT_S)
            yield Progress("long", 0, 2)
            # Both workers wait here for ever unless one of them showed the preview first.
            return "after it" if shown.wait(WAIT_S) else "before it"

        return start

    def preview(_shelf: Shelf) -> Work[object]:
        yield Progress("preview", 0, 1)
        shown.set()
        return "shown"

    longs = [bench.jobs.submit(f"long {number}", long(number)) for number in range(2)]
    assert all(one.wait(WAIT_S) for one in reached)
    late = bench.jobs.submit("late", counting(1))
    urgent = bench.jobs.submit("preview", preview, urgent=True)
    heard = [Listener(job) for job in (*longs, urgent, late)]
    with qtbot.waitSignals([job.finished for job in (*longs, urgent, late)], timeout=60_000):
        opened.set()
    results = [one.ends[0][1] for one in heard]
    assert results == ["after it", "after it", "shown", "done"]


def test_a_flood_of_progress_wakes_the_window_seldom(qtbot: QtBot, bench: Bench) -> None:
    done = threading.Event()
    wakes: list[int] = []
    bench.jobs._woken.connect(lambda: wakes.append(1))

    def start(_shelf: Shelf) -> Work[object]:
        for number in range(20_000):
            yield Progress("flood", number, 20_000)
        done.set()
        return "through"

    job = bench.jobs.submit("flood", start)
    heard = Listener(job)
    # The window is busy all the while.
    assert done.wait(WAIT_S)
    with qtbot.waitSignal(job.finished, timeout=20_000):
        pass
    assert len(heard.said) <= 5
    assert len(wakes) <= 5
    assert heard.ends == [("returned", "through"), "finished"]


def test_each_worker_opens_its_recording_once(qtbot: QtBot, bench: Bench) -> None:
    path, meeting = Path("lt01.vhdr"), threading.Barrier(2, timeout=WAIT_S)

    def start(shelf: Shelf) -> Work[object]:
        recording = shelf.recording(path)
        assert shelf.recording(path) is recording
        yield Progress("reading", 0, 1)
        # Both workers are at it, neither can do the other's job.
        meeting.wait()
        return None

    for _ in range(3):
        pair = [bench.jobs.submit(f"read {number}", start) for number in range(2)]
        with qtbot.waitSignals([job.returned for job in pair], timeout=20_000):
            pass
    workers = ["pulsemend-worker-1", "pulsemend-worker-2"]
    assert sorted(bench.log) == [f"open lt01.vhdr in {worker}" for worker in workers]
    bench.jobs.forget_recordings()
    pair = [bench.jobs.submit(f"read {number}", start) for number in range(2)]
    with qtbot.waitSignals([job.returned for job in pair], timeout=20_000):
        pass
    assert len(bench.log) == 6
    assert bench.jobs.close(WAIT_S)
    for worker in workers:
        own = [line.split()[0] for line in bench.log if line.endswith(worker)]
        assert own == ["open", "close", "open", "close"]


def test_closing_ends_every_job_and_every_thread(qtbot: QtBot, bench: Bench) -> None:
    gates = [Gate() for _ in range(5)]
    jobs = [bench.jobs.submit(f"gate {number}", gate.start) for number, gate in enumerate(gates)]
    heard = [Listener(job) for job in jobs]
    assert gates[0].reached.wait(WAIT_S)
    assert gates[1].reached.wait(WAIT_S)
    for gate in gates:
        gate.opened.set()
    assert bench.jobs.close(WAIT_S)
    # Nothing is left to the event loop.
    assert all(len(one.ends) == 2 and one.ends[1] == "finished" for one in heard)
    assert [one.ends for one in heard[2:]] == [["cancelled", "finished"]] * 3
    with pytest.raises(RuntimeError):
        bench.jobs.submit("late", counting(1))


def test_closing_does_not_wait_for_ever(qtbot: QtBot, bench: Bench) -> None:
    gate = Gate()
    job = bench.jobs.submit("gate", gate.start)
    heard = Listener(job)
    assert gate.reached.wait(WAIT_S)
    assert not bench.jobs.close(0.01)
    assert heard.ends == ["cancelled", "finished"]
    gate.opened.set()
    assert bench.jobs.close(WAIT_S)
    assert heard.ends == ["cancelled", "finished"]


def test_a_finished_job_and_its_result_are_let_go(qtbot: QtBot, bench: Bench) -> None:
    class Large:
        pass

    refs: list[weakref.ref[Large]] = []

    def new() -> Large:
        large = Large()
        refs.append(weakref.ref(large))
        return large

    def starting(given: Large) -> Start:
        def start(_shelf: Shelf) -> Work[object]:
            yield Progress(str(given), 0, 1)
            return new()

        return start

    job = bench.jobs.submit("large", starting(new()))
    with qtbot.waitSignal(job.finished, timeout=20_000):
        pass
    del job
    gc.collect()
    qtbot.waitUntil(lambda: [ref() for ref in refs] == [None, None], timeout=20_000)


def test_a_slot_that_raises_keeps_no_end_from_being_told(qtbot: QtBot, bench: Bench) -> None:
    job = bench.jobs.submit("fit", counting(2))
    heard = Listener(job)
    job.returned.connect(lambda _result: 1 // 0)
    with qtbot.captureExceptions() as raised, qtbot.waitSignal(job.finished, timeout=20_000):
        pass
    assert [kind for kind, _, _ in raised] == [ZeroDivisionError]
    assert heard.ends == [("returned", "done"), "finished"]


def test_time_left_follows_the_pace_of_the_stage() -> None:
    now = [0.0]
    pace = Pace(lambda: now[0])
    assert pace.seconds_left(Progress("fit", 0, 10)) is None
    now[0] = 4.0
    assert pace.seconds_left(Progress("fit", 2, 10)) == 16.0
    assert pace.seconds_left(Progress("write", 5, 10)) is None
    now[0] = 5.0
    assert pace.seconds_left(Progress("write", 6, 10)) == 4.0
    assert pace.seconds_left(Progress("write", 6, 0)) is None


def test_many_requests_are_one_call(qtbot: QtBot) -> None:
    calls: list[int] = []
    debounce = Debounce(20, lambda: calls.append(1))
    for _ in range(5):
        debounce.request()
    assert debounce.is_waiting
    qtbot.waitUntil(lambda: bool(calls), timeout=20_000)
    assert calls == [1]
    assert not debounce.is_waiting


def test_a_debounced_call_can_be_made_at_once_or_dropped(qtbot: QtBot) -> None:
    calls: list[int] = []
    debounce = Debounce(600_000, lambda: calls.append(1))
    debounce.flush()
    assert calls == []
    debounce.request()
    debounce.flush()
    assert calls == [1]
    debounce.request()
    debounce.drop()
    debounce.flush()
    assert calls == [1]
