"""Slow jobs on APScheduler: they only set a flag that the recorder looks at.

APScheduler 3 lives on the wall clock. A step back delays every job by the step; a step forward makes a list of all
missed runs (a year for a 2-s job: 12 s of CPU and 869 MB, measured). Two guards mend it: `SteadyInterval` never looks
further back than three periods, and `watch` re-plans every job when the wall clock has stepped. Nothing that measures
or keeps data depends on this file.
"""

from collections.abc import Callable
from datetime import UTC, datetime, timedelta

import structlog
from apscheduler.events import EVENT_JOB_ERROR, EVENT_JOB_MISSED, JobExecutionEvent
from apscheduler.executors.pool import ThreadPoolExecutor
from apscheduler.schedulers.background import BackgroundScheduler
from apscheduler.triggers.interval import IntervalTrigger

from motekeep.instant import Instant

log = structlog.get_logger()

STEP_S = 1.0
BEHIND = 3


class SteadyInterval(IntervalTrigger):  # type: ignore[misc]  # apscheduler 3 ships no type information
    """An interval trigger that, more than three periods behind, goes on from now instead of listing what it missed."""

    def get_next_fire_time(self, previous_fire_time: datetime | None, now: datetime) -> datetime | None:
        period: timedelta = self.interval
        if previous_fire_time is not None and now - previous_fire_time > BEHIND * period:
            return now + period
        following: datetime | None = super().get_next_fire_time(previous_fire_time, now)
        return following


class Housekeeping:
    """Runs each job every so many seconds. Jobs must be quick; one that raises is logged and counted, and goes on."""

    def __init__(self, jobs: dict[str, tuple[float, Callable[[], None]]]) -> None:
        self.failures = 0
        self._offset: float | None = None
        self._scheduler = BackgroundScheduler(timezone=UTC, executors={"default": ThreadPoolExecutor(max_workers=1)})
        self._scheduler.add_listener(self._went_wrong, EVENT_JOB_ERROR | EVENT_JOB_MISSED)
        for name, (seconds, job) in jobs.items():
            self._scheduler.add_job(
                job, SteadyInterval(seconds=seconds), id=name, coalesce=True, misfire_grace_time=None, max_instances=1
            )

    def start(self) -> None:
        self._scheduler.start()

    def watch(self, at: Instant) -> None:
        """Call it every few seconds: re-plans all jobs after a step of the wall clock."""
        if self._offset is not None and abs(at.offset - self._offset) > STEP_S:
            log.info("clock.stepped", seconds=round(at.offset - self._offset, 1))
            now = datetime.fromtimestamp(at.utc, UTC)
            for job in self._scheduler.get_jobs():
                job.modify(next_run_time=now + min(job.trigger.interval, timedelta(minutes=1)))
        self._offset = at.offset

    def stop(self) -> None:
        self._scheduler.shutdown(wait=False)

    def _went_wrong(self, event: JobExecutionEvent) -> None:
        self.failures += 1
        log.warning("housekeeping.failed", job=event.job_id, error=repr(event.exception), failures=self.failures)
