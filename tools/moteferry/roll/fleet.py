"""What the fleet says of itself: retained health and calibration state, and flags of readings.

Owns the reading of these payloads, leniently: a gateway of another version may say more than we know. Bounded by the
targets asked about: all else is dropped unread. Must not know a broker nor a clock.
"""

import json
from collections.abc import Collection, Iterable, Mapping
from dataclasses import dataclass, field
from typing import Any

from pydantic import AwareDatetime, BaseModel, ConfigDict, ValidationError

from moteferry.roll.offer import Target

# How late a health document may be before its gateway counts as not heard: the way through a broker and two clocks.
GRACE_S = 60.0


class Lenient(BaseModel):
    model_config = ConfigDict(extra="ignore", frozen=True)


class Seat(Lenient):
    """A document in force."""

    issue: int
    digest: str
    signer: str | None = None
    since: AwareDatetime | None = None


class Refusal(Lenient):
    """What was refused or withdrawn last. `issue` is unknown where the text was not even read."""

    at: AwareDatetime | None = None
    issue: int | None = None
    digest: str
    reason: str
    why: str = ""
    withdrawn: bool = False

    @property
    def words(self) -> str:
        return f"{self.reason}: {self.why}" if self.why else self.reason


class CalibrationState(Lenient):
    """What a device says about the calibration of one sensor."""

    at: AwareDatetime | None = None
    in_force: Seat | None = None
    highest_issue: int | None = None
    refused: Refusal | None = None
    soak_until: AwareDatetime | None = None

    def holds(self, digest: str) -> bool:
        return self.in_force is not None and self.in_force.digest == digest

    def refusal_of(self, digest: str) -> Refusal | None:
        return self.refused if self.refused is not None and self.refused.digest == digest else None


class Finding(Lenient):
    code: str
    category: str


class SensorHealth(Lenient):
    status: str
    findings: tuple[Finding, ...] = ()


class GatewayHealth(Lenient):
    """The health document. A will has neither `at` nor `next_by`."""

    status: str
    at: AwareDatetime | None = None
    next_by: AwareDatetime | None = None
    clock: str | None = None
    sensors: Mapping[str, SensorHealth] | None = None
    findings: tuple[Finding, ...] | None = None


class Reading(Lenient):
    class Provenance(Lenient):
        digest: str

    flag: int
    reasons: tuple[str, ...] = ()
    calibration: Provenance | None = None


@dataclass(frozen=True, slots=True)
class Report:
    """A health document and when it came, Unix seconds of this computer. `retained`: it may be older than that."""

    health: GatewayHealth
    came_at: float
    retained: bool

    def due_by(self) -> float:
        """When the next one is overdue. One that came live is judged by our clock alone: theirs may be wrong."""
        health = self.health
        if health.at is None or health.next_by is None:
            return 0.0
        if not self.retained:
            return self.came_at + (health.next_by - health.at).total_seconds() + GRACE_S
        if health.clock == "unsynced":  # its dates say nothing; the broker's will would have told of its end
            return self.came_at + GRACE_S
        return health.next_by.timestamp() + GRACE_S

    def heard(self, now: float) -> bool:
        return self.health.status != "offline" and now <= self.due_by()


@dataclass(slots=True)
class Failing:
    """Readings in a row that a document in force made with flag 4."""

    digest: str
    count: int
    reasons: tuple[str, ...]


@dataclass(slots=True)
class Fleet:
    """What was heard last of the targets. `hear` gives those that a message is about."""

    root: str
    targets: Collection[Target]
    states: dict[Target, CalibrationState] = field(default_factory=dict)
    reports: dict[tuple[str, str], Report] = field(default_factory=dict)
    failing: dict[Target, Failing] = field(default_factory=dict)
    not_understood: int = 0
    _of_gateway: dict[tuple[str, str], list[Target]] = field(default_factory=dict)

    def __post_init__(self) -> None:
        self.targets = frozenset(self.targets)
        for target in self.targets:
            self._of_gateway.setdefault(target[:2], []).append(target)

    def filters(self, *, with_readings: bool) -> tuple[str, ...]:
        """One set for the whole fleet: a filter a gateway would be thousands, which brokers limit."""
        each = f"{self.root}/+/+"
        return (f"{each}/health", f"{each}/calibration/+/state") + ((f"{each}/reading/+",) if with_readings else ())

    def hear(self, topic: str, payload: bytes, *, retained: bool, now: float) -> Iterable[Target]:
        prefix = self.root + "/"
        levels = topic.removeprefix(prefix).split("/")
        if not topic.startswith(prefix) or len(levels) < 3:
            return ()
        site, gateway, *rest = levels
        concerned = self._of_gateway.get((site, gateway))
        if concerned is None or not payload:  # an empty one is a retained message taken away
            return ()
        try:
            match rest:
                case ["health"]:
                    health = GatewayHealth.model_validate(_json(payload))
                    self.reports[site, gateway] = Report(health, now, retained)
                    return concerned
                case ["calibration", sensor, "state"] if (target := Target(site, gateway, sensor)) in self.targets:
                    self.states[target] = CalibrationState.model_validate(_json(payload))
                    return (target,)
                case ["reading", sensor] if (target := Target(site, gateway, sensor)) in self.targets and not retained:
                    self._read(target, Reading.model_validate(_json(payload)))
                    return (target,)
        except (ValueError, ValidationError, RecursionError):
            self.not_understood += 1
        return ()

    @property
    def complete(self) -> bool:
        """Whether everything that can be known of the targets has been heard."""
        return len(self.states) == len(self.targets) and len(self.reports) == len(self._of_gateway)

    def report(self, target: Target) -> Report | None:
        return self.reports.get(target[:2])

    def _read(self, target: Target, reading: Reading) -> None:
        if reading.flag != 4 or reading.calibration is None:
            self.failing.pop(target, None)
            return
        digest = reading.calibration.digest
        last = self.failing.get(target)
        count = last.count + 1 if last is not None and last.digest == digest else 1
        self.failing[target] = Failing(digest, count, reading.reasons)


def _json(payload: bytes) -> Any:  # Any: what JSON is, before it is checked
    return json.loads(payload)
