"""The health of one sensor: its checks, fed and judged together.

Owns which checks a sensor has, what is learnt of it, and what each of them hears. Must not know any check's physics.
"""

from collections.abc import Callable, Mapping
from typing import Any

from motekeep.health.account import (
    CalibrationExpired,
    CalibrationMissing,
    CalibrationOutOfRange,
    DoseDue,
    HoursDue,
)
from motekeep.health.active_check import ActiveCheck
from motekeep.health.baseline import Baseline, hears
from motekeep.health.behaviour import BehaviourSwapped
from motekeep.health.check import Check, LineState, listens
from motekeep.health.fan import FanStopped
from motekeep.health.fan_surging import FanSurging
from motekeep.health.fan_twin import FanStoppedBesideTwin
from motekeep.health.fan_wake import FanStoppedByWakes
from motekeep.health.fan_weak import FanWeakByWakes
from motekeep.health.finding import Finding, FindingEvent, Suspicion, casts_doubt
from motekeep.health.floor_alone import FloorRaisedAlone
from motekeep.health.fog import HumidityHigh
from motekeep.health.frozen import OutputFrozen
from motekeep.health.hour import Hour, HourBuilder
from motekeep.health.ledger import Ledger, Terms
from motekeep.health.lessons.noise import Noise, NoiseLesson
from motekeep.health.lessons.shape import ShapeLesson
from motekeep.health.lessons.spin_up import SpinUpLesson
from motekeep.health.lessons.twin_ratio import TwinRatioLesson
from motekeep.health.light_leak import LightLeakAlone
from motekeep.health.line import FramesCorrupt, FramesMissing
from motekeep.health.optics_alone import OpticsFouledAlone
from motekeep.health.range import ChannelsInconsistent, CountsSaturated, MassClipped
from motekeep.health.twin_checks import twin_checks
from motekeep.health.twin_verdict import CODES, DISAGREES
from motekeep.health.unit import SensorError, WarmingUp
from motekeep.health.visit import ServiceVisit, UnitSwapped
from motekeep.health.wake import Wake
from motekeep.health.wake_watch import WakeWatch
from motekeep.instant import Instant
from motekeep.measure.account import Account, Limits
from motekeep.measure.dose import ServiceKind
from motekeep.measure.interval import Interval
from motekeep.wire.frame import Damage, Dialect, Observation

DEFAULT_LIMITS = Limits()

Observe = Callable[[Observation], None]

# While these are open a sensor may still stand beside its twin: what the twin itself tells, which could not be seen to
# end otherwise, and fog, which both breathe.
_COMPARABLE_IN = frozenset({*CODES, "humidity-high"})
_RELIABLE_IN = frozenset({DISAGREES, "humidity-high"})
# What is heard between two intervals. A check that hears none of it can change its mind at an interval's end only, and
# is asked then.
_BETWEEN_INTERVALS = ("observe", "twin", "damaged", "heard", "line", "wake", "service")


class SensorHealth:
    """Hears everything that one sensor does; says what is wrong with it.

    `at` is when the watch begins: from then on frames are due each `period_s`. `flow_l_min` is the nominal flow, which
    says how many real pulses a printed count can rest on. `twinned`: a twin breathes the same air, and `twin` will be
    called with its frames.
    """

    def __init__(  # noqa: PLR0913 (what is known of a sensor, by name)
        self,
        sensor: str,
        dialect: Dialect,
        period_s: float,
        at: Instant,
        *,
        flow_l_min: float = 0.1,
        twinned: bool = False,
        limits: Limits = DEFAULT_LIMITS,
    ) -> None:
        self._warm_up = WarmingUp(dialect.warm_up_s, period_s, at)
        self._visit = ServiceVisit()
        sleeps = dialect.commands.sleep is not None
        self._watch = WakeWatch(flow_l_min, period_s) if sleeps else None
        self._checks: tuple[Check, ...] = (
            self._warm_up,
            FramesMissing(dialect, period_s, at),
            FramesCorrupt(period_s, at),
            OutputFrozen(flow_l_min, at),
            CountsSaturated(),
            MassClipped(),
            ChannelsInconsistent(),
            SensorError(dialect.error_bits),
            FanStopped(flow_l_min, period_s),
            *([FanStoppedBesideTwin(flow_l_min, period_s), *twin_checks(flow_l_min, period_s)] if twinned else []),
            *([FanStoppedByWakes(flow_l_min, period_s), ActiveCheck()] if sleeps else []),
            *([FanWeakByWakes()] if sleeps and not twinned else []),  # a twin tells it in a day
            FanSurging(period_s),
            # Beside a twin its word is better, in days and in any air; two judgements of one code would only differ.
            *([] if twinned else [OpticsFouledAlone(), FloorRaisedAlone(), LightLeakAlone()]),
            HumidityHigh(),
            self._visit,
            UnitSwapped(),
            BehaviourSwapped(),
            DoseDue(limits),
            HoursDue(limits),
            *([CalibrationMissing()] if limits.calibration_required else []),
            CalibrationExpired(),
            CalibrationOutOfRange(),
        )
        self.baseline = Baseline(
            (
                NoiseLesson(flow_l_min, period_s),
                *([TwinRatioLesson(flow_l_min, period_s)] if twinned else []),
                *([SpinUpLesson()] if sleeps and not twinned else []),
                *([] if twinned else [ShapeLesson()]),
            )
        )
        self._hours = HourBuilder()
        self._notes_due = False
        terms = {check.code: Terms(check.clear_s, check.again_s) for check in self._checks}
        self._ledger = Ledger(sensor, terms)
        self._events: list[FindingEvent] = []  # those of an interval's end, until the next judge; a few
        checks = self._checks
        self._observe_all: tuple[Observe, ...] = tuple(
            [c.observe for c in checks if listens(c, "observe") and not c.settled] + ([self._look] if sleeps else [])
        )
        self._observe_settled: tuple[Observe, ...] = tuple(
            [c.observe for c in checks if listens(c, "observe") and c.settled]
        )
        self._twin = tuple([c.twin for c in checks if listens(c, "twin")])
        self._damaged = tuple([c.damaged for c in checks if listens(c, "damaged")])
        self._heard = tuple([c.heard for c in checks if listens(c, "heard")])
        self._line = tuple([c.line for c in checks if listens(c, "line")])
        self._wake = tuple([c.wake for c in checks if listens(c, "wake")])
        self._wants_wake = tuple([c.wants_wake for c in checks if listens(c, "wants_wake")])
        self._interval = tuple([c.interval for c in checks if listens(c, "interval")])
        self._hour = tuple([c.hour for c in checks if listens(c, "hour")])
        self._learnt = tuple([c.learnt for c in checks if listens(c, "learnt")])
        self._account = tuple([c.account for c in checks if listens(c, "account")])
        self._service = tuple([c.service for c in checks if listens(c, "service")])
        quick = [c for c in checks if not c.slow and any(listens(c, hook) for hook in _BETWEEN_INTERVALS)]
        self._judge_quick = tuple([(c.code, c.judge) for c in quick])
        self._judge_paced = tuple([(c.code, c.judge) for c in checks if c not in quick])
        self._paced: list[tuple[str, Suspicion]] = []  # what these held at the last interval's end
        lessons = self.baseline.lessons
        self._lesson_observe: tuple[Observe, ...] = tuple([x.observe for x in lessons if hears(x, "observe")])
        self._lesson_line = tuple([x.line for x in lessons if hears(x, "line")])
        self._lesson_wake = tuple([x.wake for x in lessons if hears(x, "wake")])
        self._lesson_interval = tuple([x.interval for x in lessons if hears(x, "interval")])
        self._lesson_hour = tuple([x.hour for x in lessons if hears(x, "hour")])

    # -- what comes in ------------------------------------------------------------------------------------------

    def observe(self, observation: Observation) -> None:
        """A good frame came."""
        for hook in self._observe_all:
            hook(observation)
        for hook in self._lesson_observe:
            hook(observation)
        if observation.at.boot_s >= self._warm_up.until:
            for hook in self._observe_settled:
                hook(observation)

    def twin(self, observation: Observation) -> None:
        """A good, settled frame of the twin came."""
        for hook in self._twin:
            hook(observation)

    def damaged(self, damage: Damage, at: Instant) -> None:
        """Bytes came that were not a frame."""
        for hook in self._damaged:
            hook(damage, at)

    def heard(self, data: bytes, at: Instant) -> None:
        """Bytes came, whatever they turn out to be; to be told before the frames or the damage they make."""
        for hook in self._heard:
            hook(data, at)

    def line(self, state: LineState, at: Instant, why: str = "") -> None:
        """The line was opened or lost (`why` in words), the sensor put to sleep or woken."""
        for hook in self._line:
            hook(state, at, why)
        for told in self._lesson_line:
            told(state, at)
        if self._watch is not None:
            self._hear_wake(self._watch.line(state, at))

    def _look(self, observation: Observation) -> None:
        if self._watch is not None and self._watch.looking:
            self._hear_wake(self._watch.observe(observation))

    def _hear_wake(self, wake: Wake | None) -> None:
        if wake is None:
            return
        if self.sound:
            for lesson in self._lesson_wake:
                lesson(wake)
        for hook in self._wake:
            hook(wake)

    def interval(self, interval: Interval) -> None:
        """An interval was closed. Judged at once, so that `flags_between` of its span is complete; the events come out
        of the next `judge`."""
        for hook in self._interval:
            hook(interval)
        start, seconds = interval.start, interval.seconds
        end = Instant(start.utc + seconds, start.boot_s + seconds, start.boot_id, start.trusted)
        self._paced = [(code, held) for code, judge in self._judge_paced if (held := judge(end)) is not None]
        self._events += self._update(end)
        sound = self.sound
        if sound:
            for lesson in self._lesson_interval:
                lesson(interval)
        hour = self._hours.add(interval, sound=sound, comparable=sound or self._sound_but_for(_COMPARABLE_IN))
        if hour is not None:
            self._hear(hour, end)

    def twin_interval(self, interval: Interval, *, sound: bool) -> None:
        """An interval of the twin was closed; `sound` says that it can be relied on, see `reliable`."""
        self._hours.add_twin(interval, sound=sound)

    def _hear(self, hour: Hour, at: Instant) -> None:
        """An hour is over: lessons first, as what they teach is what the checks compare it with."""
        for lesson in self._lesson_hour:
            lesson(hour)
        if self.baseline.review(at):
            self._teach()
        for hook in self._hour:
            hook(hour)
        self._notes_due = True

    def _teach(self) -> None:
        for hook in self._learnt:
            hook(self.baseline.parts)

    def account(self, account: Account) -> None:
        """A reading was made of the interval that was closed last."""
        for hook in self._account:
            hook(account)

    def service(self, kind: ServiceKind, done_utc: float, at: Instant) -> None:
        """A person did something at the sensor: what it changed is learnt anew."""
        if self.baseline.service(kind, at):
            self._teach()
        for hook in self._service:
            hook(kind, done_utc, at)
        self._notes_due = True

    def twin_service(self, kind: ServiceKind, done_utc: float, at: Instant) -> None:
        """A person did something at the twin, in the same enclosure."""
        if self.baseline.twin_service(kind, at):
            self._teach()
        self._visit.beside(kind, done_utc, at)
        self._notes_due = True

    # -- what comes out -----------------------------------------------------------------------------------------

    def warming(self, at: Instant) -> bool:
        """Whether frames that come now are still those of warm-up, to be left out of the statistics."""
        return at.boot_s < self._warm_up.until

    def wants_wake(self, at: Instant) -> bool:
        """Whether a check would learn from a wake what it cannot see without one."""
        return any(wants(at) for wants in self._wants_wake)

    def judge(self, at: Instant) -> list[FindingEvent]:
        """Findings that opened and closed since the last call. To be asked every few seconds."""
        events = self._events + self._update(at)
        self._events = []
        return events

    def _update(self, at: Instant) -> list[FindingEvent]:
        raised: dict[str, Suspicion] = {}
        for code, judge in self._judge_quick:
            suspicion = judge(at)
            if suspicion is not None:
                _raise(raised, code, suspicion)
        for code, suspicion in self._paced:
            _raise(raised, code, suspicion)
        return self._ledger.update(raised, at)

    @property
    def sound(self) -> bool:
        """Whether nothing that is open casts doubt on the sensor's numbers."""
        return self._sound_but_for(frozenset())

    @property
    def reliable(self) -> bool:
        """Whether a twin may be measured against this sensor. That both disagree does not say which is wrong."""
        return self._sound_but_for(_RELIABLE_IN)

    def _sound_but_for(self, codes: frozenset[str]) -> bool:
        return not any(casts_doubt(finding.code) and finding.code not in codes for finding in self._ledger.open())

    @property
    def noise_scale(self) -> float | None:
        """The unit's noise scale as in `counting`; None while it is not learnt."""
        noise = self.baseline.parts.get(NoiseLesson.name)
        return noise.scale if isinstance(noise, Noise) else None

    def open(self) -> list[Finding]:
        """All open findings."""
        return self._ledger.open()

    def flags_between(self, start_s: float, end_s: float) -> dict[str, int]:
        """Code to flag of each finding that holds in a part of the span (boot seconds)."""
        return self._ledger.flags_between(start_s, end_s)

    # -- across a restart ---------------------------------------------------------------------------------------

    def dump(self) -> dict[str, Any]:
        """What `restore` needs in the daemon's next life, as plain values fit for JSON. Any: JSON."""
        memories = {type(check).__name__: check.memory() for check in self._checks if not check.slow}
        return {"findings": self._ledger.dump(), "checks": {k: dict(m) for k, m in memories.items() if m is not None}}

    def restore(self, kept: Mapping[str, Any], at: Instant) -> None:
        """Take up what `dump` gave, before anything else is heard. What cannot be used is left out.

        A finding so remembered stays open, with its `since`, when its check raises it again within the check's
        `again_s`; else it closes.
        """
        findings = kept.get("findings")
        if isinstance(findings, list):
            self._ledger.restore([f for f in findings if isinstance(f, dict)], at)
        self._recall(kept.get("checks"), at, slow=False)

    def notes(self) -> dict[str, Any] | None:
        """What `restore_notes` needs: the baseline and what slow checks remember. None when nothing of it has changed
        since this was last asked: it is written once an hour, to spare the card."""
        if not self._notes_due:
            return None
        self._notes_due = False
        memories = {type(check).__name__: check.memory() for check in self._checks if check.slow}
        checks = {name: dict(memory) for name, memory in memories.items() if memory is not None}
        return {"baseline": self.baseline.dump(), "checks": checks}

    def restore_notes(self, kept: Mapping[str, Any], at: Instant) -> None:
        """Take up what `notes` gave, before anything else is heard. What cannot be used is learnt anew."""
        baseline = kept.get("baseline")
        if isinstance(baseline, dict):
            self.baseline.restore(baseline, at)
            self._teach()
        self._recall(kept.get("checks"), at, slow=True)

    def _recall(self, memories: object, at: Instant, *, slow: bool) -> None:
        for check in self._checks:
            memory = memories.get(type(check).__name__) if isinstance(memories, dict) else None
            if isinstance(memory, dict) and check.slow is slow:
                check.recall(memory, at)


def _raise(raised: dict[str, Suspicion], code: str, suspicion: Suspicion) -> None:
    """Where two checks name the same code, the surer one is heard."""
    known = raised.get(code)
    if known is None or suspicion.confidence > known.confidence:
        raised[code] = suspicion
