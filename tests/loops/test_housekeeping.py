"""Housekeeping survives steps of the wall clock: a year forward costs nothing, an hour back delays nothing."""

import datetime as dt
import threading
import tracemalloc
from collections.abc import Iterator

import apscheduler.schedulers.base
import pytest

from motekeep.instant import Instant
from motekeep.loops.housekeeping import Housekeeping, SteadyInterval

YEAR_S = 365 * 86400.0


class Steps:
    """The wall clock as APScheduler sees it, with a step that a test lays on."""

    def __init__(self) -> None:
        self.by_s = 0.0

    def instant(self) -> Instant:
        now = dt.datetime.now(dt.UTC).timestamp()
        return Instant(now + self.by_s, now, "boot", trusted=True)


@pytest.fixture
def steps(monkeypatch: pytest.MonkeyPatch) -> Steps:
    stepped = Steps()

    class Datetime(dt.datetime):
        @classmethod
        def now(cls, tz: dt.tzinfo | None = None) -> dt.datetime:  # type: ignore[override]
            return dt.datetime.now(tz) + dt.timedelta(seconds=stepped.by_s)

    monkeypatch.setattr(apscheduler.schedulers.base, "datetime", Datetime)
    return stepped


class Runs:
    """Counts the runs of a job; `next` waits for one more."""

    def __init__(self) -> None:
        self.count = 0
        self._condition = threading.Condition()

    def __call__(self) -> None:
        with self._condition:
            self.count += 1
            self._condition.notify_all()

    def next(self) -> bool:
        with self._condition:
            before = self.count
            return self._condition.wait_for(lambda: self.count > before, timeout=20.0)


@pytest.fixture
def running(steps: Steps) -> Iterator[tuple[Housekeeping, Runs]]:
    runs = Runs()
    housekeeping = Housekeeping({"count": (0.05, runs)})
    housekeeping.watch(steps.instant())
    housekeeping.start()
    assert runs.next()
    yield housekeeping, runs
    housekeeping.stop()


def test_a_year_forward_costs_no_memory_and_the_job_goes_on(steps: Steps, running: tuple[Housekeeping, Runs]) -> None:
    housekeeping, runs = running
    tracemalloc.start()
    steps.by_s = YEAR_S
    housekeeping.watch(steps.instant())
    before = runs.count
    assert runs.next()
    _, peak = tracemalloc.get_traced_memory()
    tracemalloc.stop()
    # every missed run of 0.05 s listed would be 631 million datetimes of 48 bytes and more
    assert peak < 5_000_000
    assert runs.count < before + 1000
    assert housekeeping.failures == 0


def test_an_hour_back_delays_nothing(steps: Steps, running: tuple[Housekeeping, Runs]) -> None:
    housekeeping, runs = running
    steps.by_s = -3600.0
    housekeeping.watch(steps.instant())
    assert runs.next()
    assert runs.next()


def test_without_the_watch_an_hour_back_does_stop_the_job(steps: Steps, running: tuple[Housekeeping, Runs]) -> None:
    """The fault that the watch mends is real: this guards the test above against passing for nothing."""
    _, runs = running
    steps.by_s = -3600.0
    before = -1
    for _ in range(20):  # one may be on its way; a job that went on would change the count each time
        if before == runs.count:
            break
        before = runs.count
        threading.Event().wait(0.5)
    assert runs.count == before


def test_a_job_that_fails_is_counted_and_runs_again(steps: Steps) -> None:
    tried = threading.Semaphore(0)

    def job() -> None:
        tried.release()
        raise RuntimeError("no")

    housekeeping = Housekeeping({"fails": (0.05, job)})
    housekeeping.start()
    assert tried.acquire(timeout=20)
    assert tried.acquire(timeout=20)
    housekeeping.stop()
    assert housekeeping.failures >= 1


def test_the_trigger_goes_on_from_now_when_far_behind_and_keeps_step_otherwise() -> None:
    trigger = SteadyInterval(seconds=10, start_date=dt.datetime(2026, 1, 1, tzinfo=dt.UTC), timezone=dt.UTC)
    start = dt.datetime(2026, 1, 1, tzinfo=dt.UTC)
    late = start + dt.timedelta(days=365)
    assert trigger.get_next_fire_time(start, late) == late + dt.timedelta(seconds=10)
    soon = start + dt.timedelta(seconds=15)
    assert trigger.get_next_fire_time(start, soon) == start + dt.timedelta(seconds=10)
