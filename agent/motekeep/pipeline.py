"""The pure composition: bytes and instants in, documents out. The very same object live and in replay.

Owns the spans: wall-aligned, one for all sensors, measured by the boot clock. A step of the wall clock ends the span
at once, so that no interval has two offsets; the next one is aligned with the new clock. Time comes in with every
call and must not run backwards by the boot clock.
"""

import json
from collections.abc import Iterable, Mapping
from contextlib import suppress
from dataclasses import dataclass, field
from typing import Any

from motekeep.health.active_check import ActiveSchedule
from motekeep.health.check import LineState
from motekeep.health.finding import Category, Finding, FindingEvent
from motekeep.health.gateway import GatewayFacts, GatewayHealth
from motekeep.health.sensor import DEFAULT_LIMITS, SensorHealth
from motekeep.instant import Instant, from_rfc3339, rfc3339
from motekeep.measure.account import Account, Limits
from motekeep.measure.amendment import Amendment, Amendments
from motekeep.measure.climate import FIXED
from motekeep.measure.correction import compile_document
from motekeep.measure.document import CalibrationDocument
from motekeep.measure.dose import Dose, ServiceKind
from motekeep.measure.hourly import Hourly, sample_of
from motekeep.measure.interval import Accumulator, Cadence, Climate, frame_climate
from motekeep.measure.reading import Correction, make_reading, refused, uncorrected
from motekeep.message.compose import Place, amend_document, finding_document, reading_document
from motekeep.message.documents import (
    AmendDocument,
    FindingDocument,
    HourlyDocument,
    ReadingDocument,
    ServiceDocument,
)
from motekeep.message.health import SensorAccount
from motekeep.message.hourly import hourly_document, sample_of_document
from motekeep.ring import Ring
from motekeep.wire.frame import Damage, Decoder, Dialect, Observation

STEP_S = 1.0  # a jump of the wall clock beyond this is a step; time services slew smaller ones
JUDGE_EVERY_S = 5.0  # fine enough for findings due within three minutes, coarse enough to cost nothing
NO_CHECK_DURING = frozenset({"warming-up", "frames-missing", "service-visit"})
SKIP_SPANS = 10  # of a longer hole (suspend, a gap in a capture) only so many intervals are empty, the rest is absent


@dataclass(frozen=True, slots=True)
class SensorSetup:
    """What the pipeline must know of a sensor. `twin` names the sensor beside it, in the same enclosure and air.
    `climate_max_age_s`: older climate counts as absent. `active_a_day`: how often its fan is checked by putting it to
    sleep, see `active_check`."""

    name: str
    dialect: Dialect
    period_s: float = 1.0
    twin: str | None = None
    flow_l_min: float = 0.1
    frame_climate: bool = False
    climate_max_age_s: float = 900.0
    limits: Limits = DEFAULT_LIMITS
    active_a_day: float = 0.0


@dataclass(frozen=True, slots=True)
class Capture:
    """What a sensor said in the two minutes before a failure was found: the name of its file, and its lines."""

    name: str
    text: str


@dataclass(frozen=True, slots=True)
class Harvest:
    """Everything finished since the last harvest, in order, and what changed of the state to keep: `keep` changes all
    the time and may be left out now and then, `notes` are given once an hour and must not be."""

    readings: tuple[ReadingDocument, ...] = ()
    hours: tuple[HourlyDocument, ...] = ()
    findings: tuple[FindingDocument, ...] = ()
    amendments: tuple[AmendDocument, ...] = ()
    services: tuple[ServiceDocument, ...] = ()
    captures: tuple[Capture, ...] = ()
    keep: Mapping[str, str] = field(default_factory=dict)
    notes: Mapping[str, str] = field(default_factory=dict)

    def __bool__(self) -> bool:
        return bool(self.readings or self.findings or self.amendments or self.services)


GATEWAY_KEPT = "health"


def kept_name(sensor: str) -> str:
    """The name under which a sensor's health memory is kept between lives."""
    return f"health/{sensor}"


def notes_name(sensor: str) -> str:
    """The name under which what was learnt of a sensor is kept."""
    return f"learnt/{sensor}"


def amendments_name(sensor: str) -> str:
    """The name under which a sensor's amendments are kept."""
    return f"amendments/{sensor}"


def dose_name(sensor: str) -> str:
    """The name under which a sensor's dose and laser hours are kept."""
    return f"dose/{sensor}"


def _recalled(text: str | None) -> Any:  # Any: JSON
    """What `json.dumps` made this text of; None when it made none."""
    try:
        return json.loads(text or "null")
    except (ValueError, RecursionError):
        return None


@dataclass(slots=True)
class _Sensor:
    """The running state of one sensor."""

    setup: SensorSetup
    health: SensorHealth
    cadence: Cadence
    decoder: Decoder
    active: ActiveSchedule
    ring: Ring = field(default_factory=Ring)
    twin_health: SensorHealth | None = None
    seq: int | None = None
    accumulator: Accumulator = field(default_factory=Accumulator)
    climate: tuple[Climate, float] | None = None
    calibration: CalibrationDocument | None = None
    scale: float | None = None  # the noise scale that the correction was made with
    correction: Correction = uncorrected
    dose: Dose = field(default_factory=Dose)
    hourly: Hourly = field(default_factory=Hourly)
    amendments: Amendments = field(default_factory=Amendments)
    asleep_since: float | None = None
    asleep_s: float = 0.0


class Pipeline:
    """All sensors of one gateway.

    Until `resume` has said where the numbering goes on, health is judged but no reading is made: a figure without a
    number of its own could never be told from another.
    """

    def __init__(self, place: Place, interval_s: int, sensors: list[SensorSetup], at: Instant) -> None:
        self._place = place
        self._interval = interval_s
        self._sensors = {s.name: self._sensor(s, at) for s in sensors}
        for setup in sensors:
            if setup.twin is not None:
                self._sensors[setup.twin].twin_health = self._sensors[setup.name].health
        self._gateway = GatewayHealth()
        self._begin(at)
        self._next_judge = at.boot_s + JUDGE_EVERY_S
        self._empty_spans = 0  # closed since the clock was last told of in time
        self._readings: list[ReadingDocument] = []
        self._events: list[FindingEvent] = []
        self._amendments: list[AmendDocument] = []
        self._services: list[ServiceDocument] = []
        self._captures: dict[FindingEvent, Capture] = {}

    @staticmethod
    def _sensor(setup: SensorSetup, at: Instant) -> _Sensor:
        health = SensorHealth(
            setup.name,
            setup.dialect,
            setup.period_s,
            at,
            flow_l_min=setup.flow_l_min,
            twinned=setup.twin is not None,
            limits=setup.limits,
        )
        active = ActiveSchedule(setup.active_a_day if setup.dialect.commands.sleep else 0.0, at)
        return _Sensor(setup, health, Cadence(setup.period_s, at.boot_s), setup.dialect.decoder(), active)

    def resume(self, seqs: Mapping[str, int], kept: Mapping[str, str], at: Instant) -> None:
        """Go on from an earlier life: each sensor's next sequence number, and what `Harvest.keep` held last.

        What was kept and cannot be read begins anew: a journal that had to be rescued must not stop the measuring.
        """
        for name, sensor in self._sensors.items():
            sensor.seq = seqs[name]
            if isinstance(memory := _recalled(kept.get(kept_name(name))), dict):
                sensor.health.restore(memory, at)
            if isinstance(notes := _recalled(kept.get(notes_name(name))), dict):
                sensor.health.restore_notes(notes, at)
            if dose := kept.get(dose_name(name)):
                with suppress(ValueError):
                    sensor.dose = Dose.restored(dose)
            if amendments := kept.get(amendments_name(name)):
                with suppress(ValueError):
                    sensor.amendments = Amendments.restored(amendments)
        if isinstance(memory := _recalled(kept.get(GATEWAY_KEPT)), list):
            self._gateway.restore([item for item in memory if isinstance(item, dict)], at)

    @property
    def kept_names(self) -> list[str]:
        """Every name that `Harvest.keep` may use."""
        kinds = (kept_name, notes_name, dose_name, amendments_name)
        names = [name(sensor) for name in kinds for sensor in self._sensors]
        return [GATEWAY_KEPT, *names]

    @property
    def sensors(self) -> list[str]:
        return list(self._sensors)

    # -- what comes in ------------------------------------------------------------------------------------------

    def receive(self, name: str, data: bytes, at: Instant) -> None:
        """Bytes of a sensor's line, in any split."""
        self.advance(at)
        sensor = self._sensors[name]
        health = sensor.health
        sensor.ring.add(data, at)
        health.heard(data, at)
        events = sensor.decoder.feed(data)
        if not events:
            return
        # a torn frame is often proven only by the next one: both come at once, and fill two slots
        sensor.accumulator.missing += max(sensor.cadence.arrived(at.boot_s) + 1 - len(events), 0)
        for event in events:
            if isinstance(event, Damage):
                sensor.accumulator.bad += 1
                health.damaged(event, at)
                continue
            observation = Observation(event, at)
            health.observe(observation)
            if health.warming(at):
                sensor.accumulator.warming_frames += 1
            else:
                sensor.accumulator.add(event)
                if sensor.twin_health is not None:
                    sensor.twin_health.twin(observation)

    def line(self, name: str, state: LineState, at: Instant, why: str = "") -> None:
        """The line was opened or lost, the sensor put to sleep or woken."""
        self.advance(at)
        sensor = self._sensors[name]
        sensor.health.line(state, at, why)
        sensor.ring.line(state, at)
        if state is LineState.OPENED:
            sensor.decoder.reset()
            if sensor.asleep_since is not None:  # it was lost asleep, and is woken by what is said to an open line
                self._woke(sensor, at.boot_s)
        elif state is LineState.ASLEEP:
            sensor.accumulator.missing += sensor.cadence.due(at.boot_s)
            sensor.asleep_since = at.boot_s
        elif state is LineState.AWAKE:
            self._woke(sensor, at.boot_s)

    def _woke(self, sensor: _Sensor, boot_s: float) -> None:
        if sensor.asleep_since is not None:
            sensor.asleep_s += boot_s - max(sensor.asleep_since, self._span.boot_s)
            sensor.asleep_since = None
        sensor.cadence.restart(boot_s)

    def active_check(self, name: str, at: Instant) -> bool:
        """Whether this sensor is to be put to sleep now, to be woken after `active_check.SLEEP_S`. True counts as its
        beginning. Never while it starts, is gone or visited, and never beside its twin's own."""
        sensor = self._sensors[name]
        if not sensor.active.due(at, asked=sensor.health.wants_wake(at)):
            return False
        twin = None if sensor.setup.twin is None else self._sensors.get(sensor.setup.twin)
        if twin is not None and (twin.asleep_since is not None or at.boot_s < twin.active.until_s):
            return False
        if any(finding.code in NO_CHECK_DURING for finding in sensor.health.open()):
            return False
        sensor.active.begin(at)
        return True

    def climate(self, name: str, climate: Climate, at: Instant) -> None:
        """Air at the sensor from another source than its frames; from then on frames are not asked for it."""
        self.advance(at)
        self._sensors[name].climate = (climate, at.boot_s)

    def calibrate(self, name: str, document: CalibrationDocument | None, *, damaged: bool = False) -> None:
        """The document in force from the span under way on; None for none, or for one that is `damaged`.

        A document acts on whole intervals, so no reading mixes two of them.
        """
        sensor = self._sensors[name]
        sensor.calibration = document
        if document is not None:
            self._compile(sensor, document)
        else:
            sensor.correction = refused if damaged else uncorrected

    @staticmethod
    def _compile(sensor: _Sensor, document: CalibrationDocument) -> None:
        sensor.scale = sensor.health.noise_scale
        sensor.correction = compile_document(document, sensor.scale)

    def service(self, name: str, kind: ServiceKind, done_utc: float, at: Instant) -> None:
        """A person did something at the sensor at `done_utc`, and it is told now."""
        self.advance(at)
        sensor = self._sensors[name]
        sensor.dose = sensor.dose.serviced(kind, done_utc, at.utc)
        sensor.health.service(kind, done_utc, at)
        if sensor.twin_health is not None:
            sensor.twin_health.twin_service(kind, done_utc, at)

    def record_service(self, record: ServiceDocument, at: Instant) -> None:
        """A service record to be kept and published: it leaves with the next harvest, together with what it changed."""
        self.service(record.sensor, ServiceKind(record.kind), from_rfc3339(record.at), at)
        self._services.append(record)

    def remember(self, name: str, stored: Iterable[ReadingDocument]) -> None:
        """Earlier readings of the journal as they were published, for the hours that they are part of."""
        sensor = self._sensors[name]
        for document in stored:
            if (sample := sample_of_document(document)) is not None:
                sensor.hourly.add(sample)
        for amendment in sensor.amendments:
            sensor.hourly.amend(amendment.from_utc, amendment.to_utc, amendment.flag, amendment.reasons)

    def gateway(self, facts: GatewayFacts, at: Instant) -> None:
        """What is known of the gateway itself."""
        self._events += self._gateway.judge(facts, at)

    # -- time ---------------------------------------------------------------------------------------------------

    def advance(self, at: Instant) -> None:
        """Judge and close whatever is due by `at`."""
        # an instant from before the span was taken before a step that somebody else has told already
        if abs(at.offset - self._span.offset) > STEP_S and at.boot_s >= self._span.boot_s:
            self._close(at.boot_s)
            self._begin(at)
        if at.boot_s < self._end:
            self._empty_spans = 0
        while min(self._next_judge, self._end) <= at.boot_s:
            if self._next_judge <= self._end:
                moment = self._moment(self._next_judge, at)
                self._next_judge += JUDGE_EVERY_S
                self._judge(moment)
            else:
                self._close(self._end)
                self._empty_spans += 1
                skipped = self._empty_spans >= SKIP_SPANS and at.boot_s - self._end > self._interval
                self._begin(at if skipped else self._moment(self._end, at))
                if skipped:
                    self._skip(at)

    def _moment(self, boot_s: float, at: Instant) -> Instant:
        return Instant(boot_s + at.offset, boot_s, at.boot_id, at.trusted)

    def _begin(self, at: Instant) -> None:
        """A new span from `at` to the next wall-aligned border."""
        self._span = at
        self._end = at.boot_s + self._interval - at.utc % self._interval
        if self._end - at.boot_s < 1e-3:  # `at` is a border but for rounding
            self._end += self._interval

    def _skip(self, at: Instant) -> None:
        self._next_judge = at.boot_s
        for sensor in self._sensors.values():
            sensor.cadence.restart(at.boot_s)

    def _close(self, end_s: float) -> None:
        span, seconds = self._span, end_s - self._span.boot_s
        for sensor in self._sensors.values():
            if sensor.asleep_since is None:
                sensor.accumulator.missing += sensor.cadence.due(end_s)
            else:
                sensor.asleep_s += end_s - max(sensor.asleep_since, span.boot_s)
            interval = sensor.accumulator.close(
                sensor.setup.name, span, seconds, climate=self._climate_of(sensor, end_s), asleep_s=sensor.asleep_s
            )
            sensor.accumulator = Accumulator()
            sensor.asleep_s = 0.0
            sensor.health.interval(interval)
            if sensor.twin_health is not None:
                sensor.twin_health.twin_interval(interval, sound=sensor.health.reliable)
            if seconds < 1.0 or sensor.seq is None:
                continue  # a sliver before a clock step holds no figure
            flags = sensor.health.flags_between(span.boot_s, end_s)
            if sensor.calibration is not None and sensor.scale != sensor.health.noise_scale:
                self._compile(sensor, sensor.calibration)
            reading = make_reading(interval, sensor.correction, flags)
            self._readings.append(reading_document(reading, self._place, sensor.seq))
            sensor.seq += 1
            sensor.dose = sensor.dose.after(reading, sensor.setup.flow_l_min)
            ended = Instant(end_s + span.offset, end_s, span.boot_id, span.trusted)
            sensor.health.account(Account(ended, sensor.dose, sensor.calibration, reading))
            if span.trusted:
                sensor.hourly.add(sample_of(reading))

    def _climate_of(self, sensor: _Sensor, end_s: float) -> Climate | None:
        if sensor.climate is not None:
            climate, since_s = sensor.climate
            if climate.source == FIXED:
                return climate
            age_s = end_s - since_s
            if age_s > sensor.setup.climate_max_age_s:
                return None
            return Climate(climate.rh_pct, climate.temperature_c, climate.source, climate.age_s + age_s)
        return frame_climate(sensor.accumulator.frames) if sensor.setup.frame_climate else None

    def _judge(self, at: Instant) -> None:
        for sensor in self._sensors.values():
            events = sensor.health.judge(at)
            self._events += events
            for event in events:
                if event.opened and event.finding.flag is not None:
                    self._backdate(sensor, event, event.finding.flag)
                if event.opened and event.finding.category is Category.FAILURE:
                    self._capture(sensor, event, at)

    def _capture(self, sensor: _Sensor, event: FindingEvent, at: Instant) -> None:
        """Keep what the line said in the two minutes before a failure was found."""
        name, finding = sensor.setup.name, event.finding
        text = sensor.ring.text(name, f"{finding.code} of {name} found at {rfc3339(event.at)}: {finding.evidence}", at)
        if text is not None:
            stamp = rfc3339(int(event.at)).replace("-", "").replace(":", "")
            self._captures[event] = Capture(f"{stamp}-{name}-{finding.code}.txt.gz", text)

    def _backdate(self, sensor: _Sensor, event: FindingEvent, flag: int) -> None:
        """Readings of earlier spans in which a finding that has just opened held already get its flag."""
        code, since = event.finding.code, event.finding.since
        begun = since - since % self._interval  # the reading that it began in is not sound either
        ended = self._span.utc
        if event.until is not None:
            ended = min(ended, event.until + -event.until % self._interval)
        if begun >= ended:
            return
        sensor.amendments.add(Amendment(begun, ended, flag, (code,)))
        sensor.hourly.amend(begun, ended, flag, (code,))
        self._amendments.append(amend_document(sensor.setup.name, begun, ended, {code: flag}))

    # -- what goes out ------------------------------------------------------------------------------------------

    def harvest(self) -> Harvest:
        """Everything finished since the last harvest."""
        readings, captures = tuple(self._readings), self._captures
        findings = tuple([finding_document(e, captures[e].name if e in captures else None) for e in self._events])
        services = tuple(self._services)
        keep = self._memories() if readings or findings or services else {}
        notes = self._notes() if readings or services else {}
        hours = self._hours() if readings or self._amendments else ()
        harvest = Harvest(
            readings, hours, findings, tuple(self._amendments), services, tuple(captures.values()), keep, notes
        )
        self._readings, self._events, self._amendments, self._services, self._captures = [], [], [], [], {}
        return harvest

    def _hours(self) -> tuple[HourlyDocument, ...]:
        """Hours that are full by the last border and new or changed, oldest first for each sensor."""
        if not self._span.trusted:
            return ()
        return tuple(
            [
                hourly_document(hour, self._place, name)
                for name, sensor in self._sensors.items()
                for hour in sensor.hourly.due(self._span.utc)
            ]
        )

    def _memories(self) -> dict[str, str]:
        sensors = {kept_name(name): json.dumps(sensor.health.dump()) for name, sensor in self._sensors.items()}
        doses = {dose_name(name): sensor.dose.state() for name, sensor in self._sensors.items()}
        amendments = {amendments_name(name): sensor.amendments.state() for name, sensor in self._sensors.items()}
        return {**sensors, **doses, **amendments, GATEWAY_KEPT: json.dumps(self._gateway.dump())}

    def _notes(self) -> dict[str, str]:
        return {
            notes_name(name): json.dumps(notes)
            for name, sensor in self._sensors.items()
            if (notes := sensor.health.notes()) is not None
        }

    def finish(self, at: Instant) -> None:
        """Close the span that is under way, short as it is: the end of a capture or of the daemon."""
        self.advance(at)
        if at.boot_s - self._span.boot_s >= 1.0:
            self._close(at.boot_s)
            self._begin(at)

    def findings(self) -> Mapping[str | None, list[Finding]]:
        """Open findings by sensor; None holds those of the gateway."""
        by_sensor: dict[str | None, list[Finding]] = {name: s.health.open() for name, s in self._sensors.items()}
        by_sensor[None] = self._gateway.open()
        return by_sensor

    def accounts(self) -> Mapping[str, SensorAccount]:
        """What each sensor has been through and is read with."""
        return {
            name: SensorAccount(
                s.dose.laser_hours,
                s.dose.dust_ug,
                None if s.calibration is None else (s.calibration.issue, s.calibration.valid_until),
            )
            for name, s in self._sensors.items()
        }
