"""An emulated site through the health of its sensors, frame by frame, without a serial line between.

Owns the order of calls: the same as the pipeline's, held by `tests/test_campaign.py`. Encoding and decoding are left
out, and so are readings: a sensor-year then takes minutes. What happens on the line goes through the whole pipeline
instead (`through_pipeline`), as bytes.
"""

from collections.abc import Iterable
from dataclasses import dataclass, replace
from math import inf
from struct import Struct

from motekeep.health.active_check import SLEEP_S
from motekeep.health.check import LineState
from motekeep.health.finding import FindingEvent
from motekeep.health.sensor import SensorHealth
from motekeep.instant import Instant, from_rfc3339
from motekeep.measure.interval import Accumulator, frame_climate
from motekeep.message.compose import Place
from motekeep.pipeline import Pipeline, SensorSetup
from motekeep.wire.dialects import DIALECTS
from motekeep.wire.frame import Frame, Observation
from motesim.plan import Duty, SensorPlan, SitePlan
from motesim.site import Block, SensorCourse, Site, turns

INTERVAL_S, JUDGE_S = 60.0, 5.0
# Active checks of a sensor without twin and duty: four a day, and one every two hours while a check asks for wakes (see
# `health/active_check.py`).
CHECKS, MORE_CHECKS = (Duty(every_s, every_s - SLEEP_S) for every_s in (21_600.0, 7200.0))
Row = tuple[float, int, Frame | LineState]  # when, which sensor, what
_COUNTS = Struct("<6d")


@dataclass(slots=True)
class Found:
    """A finding that opened, and when it closed. Times are Unix seconds of the emulated site."""

    sensor: str
    code: str
    at: float
    since: float
    confidence: float
    evidence: str
    closed: float = inf


class _Watched:
    """One sensor with its health, and what the pipeline would keep beside it."""

    def __init__(self, plan: SensorPlan, start: Instant, *, twinned: bool) -> None:
        self.plan = plan
        self.health = SensorHealth(plan.name, DIALECTS[plan.dialect], plan.period_s, start, twinned=twinned)
        self.accumulator = Accumulator()
        self.twin: _Watched | None = None
        self.asleep_since: float | None = None
        self.asleep_s = 0.0

    def frame(self, frame: Frame, at: Instant) -> None:
        health, observation = self.health, Observation(frame, at)
        health.heard(frame.payload, at)
        health.observe(observation)
        if health.warming(at):
            self.accumulator.warming_frames += 1
        else:
            self.accumulator.add(frame)
            if self.twin is not None:
                self.twin.health.twin(observation)

    def turn(self, state: LineState, at: Instant, begun: float) -> None:
        self.health.line(state, at)
        if state is LineState.ASLEEP:
            self.asleep_since = at.boot_s
        elif self.asleep_since is not None:
            self.asleep_s += at.boot_s - max(self.asleep_since, begun)
            self.asleep_since = None

    def close(self, start: Instant, end: float) -> None:
        if self.asleep_since is not None:
            self.asleep_s += end - max(self.asleep_since, start.boot_s)
        climate = frame_climate(self.accumulator.frames)
        interval = self.accumulator.close(
            self.plan.name, start, end - start.boot_s, climate=climate, asleep_s=self.asleep_s
        )
        self.accumulator, self.asleep_s = Accumulator(), 0.0
        self.health.interval(interval)
        if self.twin is not None:
            self.twin.health.twin_interval(interval, sound=self.health.reliable)


def instant(t: float) -> Instant:
    return Instant(t, t, "emulated", trusted=True)


def through_health(plan: SitePlan) -> list[Found]:
    """All findings that open at the site; its first two sensors are twins when it has two."""
    start = instant(plan.start)
    watched = [_Watched(s, start, twinned=len(plan.sensors) > 1) for s in plan.sensors]
    if len(watched) > 1:
        watched[0].twin, watched[1].twin = watched[1], watched[0]
    found: list[Found] = []
    begun, end, judge_at = start, plan.start + INTERVAL_S, plan.start + JUDGE_S
    site = Site(plan)
    courses = site.courses()
    by_name = {course.plan.name: course for course in courses}
    for air in site.air():
        for w, course in zip(watched, courses, strict=True):
            _ask(w.health, course, instant(judge_at))
        blocks = [block for course in courses if (block := course.block(air)) is not None]
        for t, sensor, what in _merged(blocks, by_name, plan):
            while judge_at <= t or end <= t:
                if judge_at <= end:
                    moment, judge_at = instant(judge_at), judge_at + JUDGE_S
                    for w in watched:
                        _follow(found, w.health.judge(moment))
                else:
                    for w in watched:
                        w.close(begun, end)
                    begun, end = instant(end), end + INTERVAL_S
            if isinstance(what, LineState):
                watched[sensor].turn(what, instant(t), begun.boot_s)
            else:
                watched[sensor].frame(what, instant(t))
    return found


def _ask(health: SensorHealth, course: SensorCourse, at: Instant) -> None:
    """How often the fan is checked in the next stretch of air, which is six hours."""
    if course.plan.duty in (CHECKS, MORE_CHECKS):
        course.plan = replace(course.plan, duty=MORE_CHECKS if health.wants_wake(at) else CHECKS)


def _merged(blocks: list[Block], courses: dict[str, SensorCourse], plan: SitePlan) -> list[Row]:
    """Frames and turns of all sensors by time."""
    order = {s.name: i for i, s in enumerate(plan.sensors)}
    rows: list[Row] = []
    for block in blocks:
        index, line = order[block.sensor], courses[block.sensor].line
        payloads = map(_payload, line.frames(block.printed))
        rows += [(t, index, frame) for t, frame in zip(block.printed.times.tolist(), payloads, strict=True)]
        rows += [(t, index, state) for t, state in turns(block)]
    rows.sort(key=lambda row: row[0])
    return rows


def _payload(frame: Frame) -> Frame:
    """With a payload that repeats exactly when the printed numbers do."""
    counts = frame.counts
    payload = _COUNTS.pack(*counts) if len(counts) == 6 else repr((counts, frame.mass)).encode()
    return Frame(
        frame.layout,
        frame.mass,
        counts,
        payload,
        frame.mass_ambient,
        frame.rh_pct,
        frame.temperature_c,
        frame.revision,
        frame.error,
    )


def through_pipeline(plan: SitePlan) -> list[Found]:
    """The same as bytes through the whole pipeline: for what happens on the line."""
    setups = [
        SensorSetup(
            s.name,
            DIALECTS[s.dialect],
            s.period_s,
            frame_climate=any(x.climate for x in DIALECTS[s.dialect].layouts),
            twin=next((o.name for o in plan.sensors if o is not s), None),
        )
        for s in plan.sensors
    ]
    pipeline = Pipeline(Place("campaign", "gateway"), int(INTERVAL_S), setups, instant(plan.start))
    pipeline.resume(dict.fromkeys(pipeline.sensors, 1), {}, instant(plan.start))
    site = Site(plan)
    courses = site.courses()
    found: list[Found] = []
    for air in site.air():
        rows: list[tuple[float, str, bytes | LineState]] = []
        for course in courses:
            block = course.block(air)
            if block is not None:
                rows += [(t, block.sensor, data) for t, data in course.line.speak(block.printed)]
                rows += [(t, block.sensor, state) for t, state in turns(block)]
        rows.sort(key=lambda row: row[0])
        for t, sensor, what in rows:
            if isinstance(what, LineState):
                pipeline.line(sensor, what, instant(t))
            else:
                pipeline.receive(sensor, what, instant(t))
        pipeline.advance(instant(min(float(air.times[-1]), site.end)))
        for f in pipeline.harvest().findings:
            begun = Found(f.sensor or "", f.code, from_rfc3339(f.at), from_rfc3339(f.since), f.confidence, f.evidence)
            _enter(found, begun, opened=f.event == "opened")
    return found


def _follow(found: list[Found], events: Iterable[FindingEvent]) -> None:
    for e in events:
        f = e.finding
        _enter(found, Found(f.sensor or "", f.code, e.at, f.since, f.confidence, f.evidence), opened=e.opened)


def _enter(found: list[Found], event: Found, *, opened: bool) -> None:
    if opened:
        found.append(event)
        return
    for earlier in reversed(found):
        if (earlier.sensor, earlier.code) == (event.sensor, event.code):
            earlier.closed = event.at
            return
