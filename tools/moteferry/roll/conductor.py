"""The roll itself: offers wave after wave, watches, stops.

Owns the order of things: write down, then send; judge what changed, and all of it once a second; stop at the first
target that fails, tell the others nothing more. Where a roll stands is read from the register, so that a roll that was
killed or slept goes on from there. Must not know files nor the screen.
"""

import time
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, replace
from typing import Protocol

from moteferry.roll.fleet import Fleet
from moteferry.roll.gate import Before, Case, Judgement, Rule, Sight, Step, before, judge
from moteferry.roll.link import Came, Down, LinkEvent, Taken, Up
from moteferry.roll.offer import Offer, RollError, Target
from moteferry.roll.register import STANDS, Event, Register
from motekeep.message.topics import Topics

TURN_S = 0.25
SWEEP_S = 1.0
# How long the last messages of a roll that stops may take.
FAREWELL_S = 10.0


class Wire(Protocol):
    """What the conductor needs of a `Link`."""

    @property
    def idle(self) -> bool: ...

    @property
    def listening_s(self) -> float: ...

    def send(self, messages: Iterable[tuple[str, str]]) -> None: ...

    def drop_waiting(self) -> list[str]: ...

    def events(self, timeout_s: float) -> list[LinkEvent]: ...


@dataclass(frozen=True, slots=True)
class Failure:
    """Who stopped the roll, how and why."""

    target: Target
    step: Step
    why: str


@dataclass(frozen=True, slots=True)
class Progress:
    """A wave as it stands, for whoever shows it. `soaked` is the share of the hold that is over."""

    wave: int
    waves: int
    size: int
    accepted: int
    passed: int
    soaked: float
    link: str | None


@dataclass(frozen=True, slots=True)
class Outcome:
    """Where each target of the waves stands: `passed`; `holding`, which have it and were not held to the end; those
    that stopped the roll; and `open`, which were not offered it, or had it taken back before they answered."""

    passed: Sequence[Target]
    holding: Sequence[Target]
    failures: Sequence[Failure]
    open: Sequence[Target]

    @property
    def done(self) -> bool:
        return not (self.failures or self.holding or self.open)


@dataclass(frozen=True, slots=True)
class Course:
    """A roll as it was decided: its number in the register, and who is in which wave. Every `sweep_s` all are judged,
    heard or not."""

    roll: int
    root: str
    waves: Sequence[Sequence[Offer]]
    rule: Rule
    sweep_s: float = SWEEP_S


class Conductor:
    def __init__(
        self,
        course: Course,
        fleet: Fleet,
        register: Register,
        link: Wire,
        *,
        wall: Callable[[], float] = time.time,
        show: Callable[[Progress], None] = lambda _: None,
    ) -> None:
        self._course = course
        self._fleet = fleet
        self._register = register
        self._link = link
        self._wall = wall
        self._show = show
        self._cases: dict[Target, Case] = {}
        self._failures: dict[Target, Failure] = {}
        self._link_trouble: str | None = None
        self._swept_at = 0.0
        self._recall()

    def run(self) -> Outcome:
        """Go through the waves from where the register stands. Raises BrokerError, RollError."""
        for number, wave in enumerate(self._course.waves):
            if self._failures:
                break
            self._offer(wave)
            while not self._failures and not all(self._passed(offer.target) for offer in wave):
                self._turn()
                self._show(self._progress(number, wave))
        if self._failures:
            self._take_back()
        return self._outcome()

    def _outcome(self) -> Outcome:
        passed: list[Target] = []
        holding: list[Target] = []
        opened: list[Target] = []
        for target in [offer.target for wave in self._course.waves for offer in wave]:
            case = self._cases.get(target)
            if target in self._failures:
                continue
            if case is None or case.accepted_at is None:
                opened.append(target)
            else:
                (passed if case.passed else holding).append(target)
        return Outcome(passed, holding, list(self._failures.values()), opened)

    # -- where it stands ----------------------------------------------------------------------------------------

    def _recall(self) -> None:
        """Cases and failures as the register has them. Who was only silent, or refused, is offered it once more:
        whoever starts the roll again has looked at the cause."""
        offers = {offer.target: offer for wave in self._course.waves for offer in wave}
        last: dict[Target, Event] = {}
        for event in self._register.events(roll=self._course.roll):
            offer = offers.get(event.target)
            if offer is None or event.digest != offer.digest or event.event not in STANDS:
                continue
            last[event.target] = event
            case = self._cases.get(event.target)
            if event.event == "offered":
                self._cases[event.target] = Case(offer, Before.model_validate_json(event.before or "{}"), event.at)
            elif event.event == "accepted" and case is not None:
                self._cases[event.target] = replace(case, accepted_at=event.at)
            elif event.event == "passed" and case is not None:
                self._cases[event.target] = replace(case, passed=True)
        for target, event in last.items():
            if event.event == "withdrawn":
                self._failures[target] = Failure(target, Step.WITHDRAWN, event.why)
            elif event.event in ("taken-back", "refused") or (
                event.event == "silent" and self._cases[target].accepted_at is None
            ):
                del self._cases[target]

    def _passed(self, target: Target) -> bool:
        case = self._cases.get(target)
        return case is not None and case.passed

    # -- acting -------------------------------------------------------------------------------------------------

    def _offer(self, wave: Sequence[Offer]) -> None:
        """To those of the wave that have not accepted it yet; a second time the very same bytes."""
        now, new = self._wall(), []
        for offer in wave:
            if offer.target not in self._cases:
                was = before(offer, self._fleet.states.get(offer.target), self._fleet.report(offer.target))
                self._cases[offer.target] = Case(offer, was, now)
                new.append(self._event(offer, "offered", now, before=was.model_dump_json()))
        with self._register.transaction():
            self._register.add(new)
        # an answer that came while nobody was looking is in the retained state already
        self._judge(offer.target for offer in wave)
        self._link.send(self._message(o) for o in wave if self._cases[o.target].accepted_at is None)

    def _message(self, offer: Offer) -> tuple[str, str]:
        return self._topic(offer), offer.body

    def _topic(self, offer: Offer) -> str:
        target = offer.target
        return Topics(self._course.root, target.site, target.gateway).calibration_offer(target.sensor)

    def _turn(self) -> None:
        touched = self._pump(TURN_S)
        now = time.monotonic()
        if now - self._swept_at >= self._course.sweep_s:
            self._swept_at = now
            touched = set(self._cases)
        if self._link.listening_s > 0:
            self._judge(touched)

    def _pump(self, timeout_s: float) -> set[Target]:
        touched: set[Target] = set()
        for event in self._link.events(timeout_s):
            match event:
                case Came(topic, payload, retained):
                    touched.update(self._fleet.hear(topic, payload, retained=retained, now=self._wall()))
                case Taken(topic, refusal) if refusal is not None:
                    raise RollError(
                        f"offering on {topic}", f"the broker refuses: {refusal}", "let this login write it, then repeat"
                    )
                case Down(why):
                    self._link_trouble = why
                case Up():
                    self._link_trouble = None
        return touched

    def _judge(self, targets: Iterable[Target]) -> None:
        events: list[Event] = []
        now, listening_s = self._wall(), self._link.listening_s
        for target in targets:
            case = self._cases.get(target)
            if case is None or target in self._failures:
                continue
            sight = Sight(
                self._fleet.states.get(target),
                self._fleet.report(target),
                self._fleet.failing.get(target),
                now,
                listening_s,
            )
            judgement = judge(case, sight, self._course.rule)
            if judgement.step is Step.SOAKING and case.accepted_at is None:
                case, event = self._accepted(case, sight)
                events.append(event)
                judgement = judge(case, sight, self._course.rule)
            self._cases[target] = case
            events += self._concluded(case, judgement, now)
        if events:
            with self._register.transaction():
                self._register.add(events)

    def _accepted(self, case: Case, sight: Sight) -> tuple[Case, Event]:
        """The device's own time of the switch, as far as its clock agrees with ours."""
        state = sight.state
        assert state is not None  # noqa: S101 (it holds the document)
        assert state.in_force is not None  # noqa: S101
        since = state.in_force.since
        at = min(max(since.timestamp(), case.offered_at), sight.now) if since is not None else sight.now
        event = self._event(case.offer, "accepted", at, signer=state.in_force.signer)
        return replace(case, accepted_at=at), event

    def _concluded(self, case: Case, judgement: Judgement, now: float) -> list[Event]:
        offer = case.offer
        if judgement.step is Step.PASSED and not case.passed:
            self._cases[offer.target] = replace(case, passed=True)
            return [self._event(offer, "passed", now)]
        if not judgement.step.failed:
            return []
        self._failures[offer.target] = Failure(offer.target, judgement.step, judgement.why)
        events = [self._event(offer, judgement.step.value, now, why=judgement.why)]
        state = self._fleet.states.get(offer.target)
        if judgement.step is Step.WITHDRAWN and state is not None:
            seat = state.in_force
            known = {"issue": seat.issue, "digest": seat.digest, "signer": seat.signer} if seat is not None else {}
            events.append(Event(offer.target, "found", now, roll=self._course.roll, **known))  # type: ignore[arg-type] # keys of ours
        return events

    def _take_back(self) -> None:
        """Offers that nobody answered are taken off the broker: with nobody watching they must not be accepted."""
        self._link.drop_waiting()
        unanswered = [case.offer for case in self._cases.values() if case.accepted_at is None]
        now = self._wall()
        with self._register.transaction():
            self._register.add(
                [self._event(o, "taken-back", now) for o in unanswered if o.target not in self._failures]
            )
        self._link.send((self._topic(offer), "") for offer in unanswered)
        deadline = time.monotonic() + FAREWELL_S
        while not self._link.idle and time.monotonic() < deadline:
            self._pump(TURN_S)

    def _event(
        self,
        offer: Offer,
        event: str,
        at: float,
        *,
        signer: str | None = None,
        why: str = "",
        before: str | None = None,
    ) -> Event:
        return Event(offer.target, event, at, offer.issue, offer.digest, signer, why, before, self._course.roll)

    # -- telling ------------------------------------------------------------------------------------------------

    def _progress(self, number: int, wave: Sequence[Offer]) -> Progress:
        cases = [self._cases[offer.target] for offer in wave]
        soaking = [case.accepted_at for case in cases if case.accepted_at is not None]
        hold_s = self._course.rule.hold_s
        youngest = max(soaking, default=None)
        whole = len(soaking) == len(cases)
        soaked = min(1.0, (self._wall() - youngest) / hold_s) if whole and youngest is not None and hold_s > 0 else 0.0
        return Progress(
            number + 1,
            len(self._course.waves),
            len(cases),
            len(soaking),
            sum(case.passed for case in cases),
            soaked,
            self._link_trouble,
        )
