"""Calibration documents on the device: from the folder, the broker and the person at the gateway into force.

Owns the pace, what is told of it (the state of each sensor), and whether documents have to be signed here. Has no
thread: the supervisor turns it, after the recorder. Examining is the examiner's work, changing the switch's.

Two ways, by whether there is a file of allowed signers:
- Without one, what stands at `<folder>/<sensor>.toml` is in force, signed or not: whoever may write there decides. One
  that must not be used changes nothing but the flag: readings go out raw, and say so. Offers are refused.
- With one, only what was accepted is in force. A file put there by hand is examined like an offer, with its signature
  beside it (`<sensor>.toml.sig`); refused, it changes nothing, and where nothing else is in force readings say so.
"""

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from typing import Protocol

import structlog
from pydantic import ValidationError

from motekeep.errors import DocumentError, MotekeepError, OfferRefusedError
from motekeep.instant import Instant, rfc3339
from motekeep.loops.examination import Signers
from motekeep.loops.examiner import Examiner, Given, Recheck, Verdict
from motekeep.loops.intake import Intake
from motekeep.loops.switch import Ledger, Shelf, Switch
from motekeep.measure.document import CalibrationDocument, digest
from motekeep.message.calibration_record import CalibrationAnswer, CalibrationAsk
from motekeep.message.compose import Place
from motekeep.message.documents import (
    CalibrationInForce,
    CalibrationRefused,
    CalibrationStateDocument,
    ReadingDocument,
)
from motekeep.message.topics import Topics

log = structlog.get_logger()

LOOK_EVERY_S = 30.0  # somebody who puts a file there by hand waits at most this and the rest of an interval
SAME_REFUSAL_S = 30.0  # one that comes again and again is logged this often


class Spool(Protocol):
    """What people ask at the gateway, as `edges/calibration_spool.py` keeps it."""

    def requests(self) -> Iterator[tuple[str, bytes]]: ...

    def answer(self, ticket: str, body: bytes) -> None: ...


@dataclass(frozen=True, slots=True)
class Desk:
    """All that signed documents need; `post` takes a retained document for a topic."""

    place: Place
    topics: Topics
    signers: Signers
    switch: Switch
    ledger: Ledger
    examiner: Examiner
    spool: Spool
    post: Callable[[str, str], None]


class CalibrationFeed:
    """Without a desk every document is unsigned."""

    def __init__(self, shelf: Shelf, sensors: Sequence[str], intake: Intake, desk: Desk | None = None) -> None:
        self._shelf = shelf
        self._sensors = sensors
        self._intake = intake
        self._desk = desk
        self._due = float("-inf")
        self._signed: bool | None = None
        self._stamp: tuple[object, ...] = ()
        self._unsigned: dict[str, tuple[CalibrationDocument, str]] = {}
        self._refused: dict[str, CalibrationRefused] = {}
        self._logged: dict[str, tuple[str, float]] = {}
        self._again: set[str] = set()  # sensors whose file could not be judged: looked at anew

    def turn(self, at: Instant, made: Sequence[ReadingDocument] = ()) -> None:
        """`made` are the readings since the last turn."""
        desk = self._desk
        if desk is not None and desk.ledger.opened:
            self._take_up(desk, made, at)
        if at.boot_s < self._due:
            return
        signed = desk is not None and desk.signers.exist
        if signed and desk is not None and not desk.ledger.opened:
            return  # the journal knows what is in force; without one no reading is made either
        self._due = at.boot_s + LOOK_EVERY_S
        begun, self._signed = self._signed != signed, signed
        for sensor in self._sensors:
            changed = self._shelf.changed(sensor) or begun
            if desk is not None and signed:
                self._look_signed(desk, sensor, at, begun=begun, changed=changed)
            elif changed:
                self._use_unsigned(sensor, at)
        if desk is not None and signed and (stamp := desk.signers.stamp) != self._stamp:
            self._stamp = stamp
            for sensor in self._sensors:
                self._audit(desk, sensor)

    # -- without signers ------------------------------------------------------------------------------------------

    def _use_unsigned(self, sensor: str, at: Instant) -> None:
        self._unsigned.pop(sensor, None)
        try:
            document = self._shelf.in_force(sensor)
        except DocumentError as error:
            log.error("calibration.refused", sensor=sensor, error=str(error))
            self._intake.calibrate(sensor, None, damaged=True)
            self._refused[sensor] = CalibrationRefused(
                at=rfc3339(at.utc), issue=None, digest="", reason="bad-document", why=str(error), withdrawn=False
            )
            self._tell(sensor, at)
            return
        self._refused.pop(sensor, None)
        self._intake.calibrate(sensor, document)
        if document is not None:
            self._unsigned[sensor] = document, rfc3339(at.utc)
            log.info("calibration.in_force", sensor=sensor, issue=document.issue, digest=document.digest)
        self._tell(sensor, at)

    # -- with signers ---------------------------------------------------------------------------------------------

    def _look_signed(self, desk: Desk, sensor: str, at: Instant, *, begun: bool, changed: bool) -> None:
        if begun or sensor in self._again:
            self._again.discard(sensor)
            self._begin(desk, sensor, at)
        elif changed:
            self._look(desk, sensor, at)

    def _begin(self, desk: Desk, sensor: str, at: Instant) -> None:
        """The first look at a sensor: what the journal says, or, where that is lost, whatever is still there."""
        self._unsigned.pop(sensor, None)
        shown = self._shelf.shown(sensor)
        if not desk.switch.load(sensor, at):
            self._intake.calibrate(sensor, None)
            pairs = ((shown,) if shown is not None else ()) + tuple(self._shelf.all_kept(sensor))
            if pairs:
                desk.examiner.ask(Given(sensor, pairs, "by-hand"))
        else:
            self._remember_withdrawal(desk, sensor)
            self._look(desk, sensor, at, first=True)
        self._tell(sensor, at)

    def _look(self, desk: Desk, sensor: str, at: Instant, *, first: bool = False) -> None:
        """What stands in front: ours, left over by a cut or lost by one, or put there or removed by a person."""
        record = desk.switch.record(sensor)
        shown = self._shelf.shown(sensor)
        own = None if shown is None else digest(shown[0])
        if shown is None and record.in_force is not None and not first:
            log.warning("calibration.taken_out", sensor=sensor)
            desk.switch.take_out(sensor, at)
            self._tell(sensor, at)
        elif shown is None or own == record.in_force or own in record.digests:
            desk.switch.front(sensor)
        else:
            desk.examiner.ask(Given(sensor, (shown,), "by-hand"))

    def _audit(self, desk: Desk, sensor: str) -> None:
        """Ask again whether the signer of what is in force is trusted."""
        current = desk.switch.record(sensor).current
        pair = None if current is None else desk.switch.pair(sensor, current.digest)
        if pair is not None:
            desk.examiner.ask(Recheck(sensor, *pair, "audit"))

    def _take_up(self, desk: Desk, made: Sequence[ReadingDocument], at: Instant) -> None:
        """What readings, verdicts and people bring. The first look comes before: it knows what is in force."""
        if self._signed is None:
            return
        for sensor in desk.switch.soak(made, at):
            self._withdrawn(desk, sensor, at)
        for verdict in desk.examiner.verdicts():
            self._act(desk, verdict, at)
        for ticket, body in desk.spool.requests():
            self._ask(desk, ticket, body)

    def _act(self, desk: Desk, verdict: Verdict, at: Instant) -> None:
        request = verdict.request
        sensor, ticket = request.sensor, getattr(request, "ticket", None)
        if isinstance(request, Recheck):
            self._act_on_recheck(desk, request, verdict, at)
            return
        if verdict.candidate is not None:
            if not self._signed or desk.switch.record(sensor) is not verdict.record:
                # signers are new, or something else came into force: judged by that, the number may be another matter
                self._due = self._due if self._signed else float("-inf")
                pair = verdict.candidate.text, verdict.candidate.signature
                desk.examiner.ask(Given(sensor, (pair,), verdict.by, ticket))
                return
            try:
                desk.switch.accept(sensor, verdict.candidate, verdict.by, at)
            except OfferRefusedError as error:
                self._refuse(desk, verdict, error, at)
                return
            self._refused.pop(sensor, None)
            self._tell(sensor, at)
            candidate = verdict.candidate
            said = f"issue {candidate.document.issue} is in force, signed by {candidate.signer.principal}"
            self._answer(ticket, f"{said}; rehearsed on {candidate.rehearsed} readings", done=True)
        elif verdict.refusal is not None:
            self._refuse(desk, verdict, verdict.refusal, at)
        else:
            self._answer(ticket, "it is in force already", done=True)

    def _withdrawn(self, desk: Desk, sensor: str, at: Instant) -> None:
        """Something else is in force now: whether its signer is still trusted is another question."""
        self._remember_withdrawal(desk, sensor)
        self._audit(desk, sensor)
        self._tell(sensor, at)

    def _act_on_recheck(self, desk: Desk, request: Recheck, verdict: Verdict, at: Instant) -> None:
        sensor = request.sensor
        if request.purpose == "restore":
            if verdict.refusal is not None:
                self._answer(request.ticket, str(verdict.refusal), done=False)
                return
            desk.switch.restore(sensor, verdict.digest, at)
            self._refused.pop(sensor, None)
            self._tell(sensor, at)
            current = desk.switch.record(sensor).current
            issue = current.issue if current is not None else None
            log.warning("calibration.restored", sensor=sensor, issue=issue)
            self._answer(request.ticket, f"issue {issue} is in force again", done=True)
            return
        refusal, in_force = verdict.refusal, desk.switch.record(sensor).in_force
        if isinstance(refusal, OfferRefusedError) and refusal.reason != "no-signers" and in_force == verdict.digest:
            desk.switch.withdraw(sensor, f"{refusal.reason}: {refusal.why}", at)
            self._withdrawn(desk, sensor, at)

    def _refuse(self, desk: Desk, verdict: Verdict, error: MotekeepError, at: Instant) -> None:
        sensor = verdict.request.sensor
        reason = error.reason if isinstance(error, OfferRefusedError) else "cannot-verify"
        self._refused[sensor] = CalibrationRefused(
            at=rfc3339(at.utc),
            issue=_issue_of(desk, verdict),
            digest=verdict.digest,
            reason=reason,
            why=f"{error.why}; {error.mend}",
            withdrawn=False,
        )
        logged = self._logged.get(sensor)
        if logged is None or logged[0] != reason or at.boot_s - logged[1] >= SAME_REFUSAL_S:
            self._logged[sensor] = reason, at.boot_s
            log.error("calibration.refused", sensor=sensor, reason=reason, error=str(error), digest=verdict.digest)
        if verdict.by == "by-hand" and reason == "cannot-verify":
            self._again.add(sensor)
        elif verdict.by == "by-hand" and self._signed and desk.switch.record(sensor).in_force is not None:
            self._shelf.set_aside(sensor)
            desk.switch.front(sensor)
        elif verdict.by == "by-hand" and self._signed:
            self._intake.calibrate(sensor, None, damaged=True)
        self._tell(sensor, at)
        self._answer(getattr(verdict.request, "ticket", None), str(error), done=False)

    # -- people ---------------------------------------------------------------------------------------------------

    def _ask(self, desk: Desk, ticket: str, body: bytes) -> None:
        try:
            ask = CalibrationAsk.model_validate_json(body)
        except ValidationError:
            self._answer(ticket, "what was asked cannot be read", done=False)
            return
        if ask.sensor not in self._sensors:
            self._answer(ticket, f"there is no sensor {ask.sensor[:64]!r} here", done=False)
        elif ask.kind == "install":
            given = Given(ask.sensor, ((ask.document.encode(), ask.signature.encode()),), "install", ticket)
            if not desk.examiner.ask(given):
                self._answer(ticket, "too much waits to be examined; ask again in a minute", done=False)
        else:
            self._restore(desk, ask, ticket)

    def _restore(self, desk: Desk, ask: CalibrationAsk, ticket: str) -> None:
        record = desk.switch.record(ask.sensor)
        if not self._signed:
            self._answer(ticket, "there are no signers here: put the file itself in its place", done=False)
            return
        if ask.issue is None:
            entries = record.before(record.in_force or "")
        else:
            entries = tuple(a for a in reversed(record.accepted) if a.issue == ask.issue)
        if not entries:
            known = ", ".join(str(a.issue) for a in record.accepted) or "none"
            self._answer(ticket, f"no such earlier document; kept are issues {known}", done=False)
        elif entries[0].digest == record.in_force:
            self._answer(ticket, f"issue {entries[0].issue} is in force already", done=True)
        elif (pair := desk.switch.pair(ask.sensor, entries[0].digest)) is None:
            self._answer(ticket, f"the file of issue {entries[0].issue} is gone or damaged", done=False)
        elif not desk.examiner.ask(Recheck(ask.sensor, *pair, "restore", ticket)):
            self._answer(ticket, "too much waits to be examined; ask again in a minute", done=False)

    def _answer(self, ticket: str | None, said: str, *, done: bool) -> None:
        if ticket is not None and self._desk is not None:
            self._desk.spool.answer(ticket, CalibrationAnswer(done=done, said=said).json_text().encode())

    # -- what is told ---------------------------------------------------------------------------------------------

    def _remember_withdrawal(self, desk: Desk, sensor: str) -> None:
        record = desk.switch.record(sensor)
        gone = next((a for a in reversed(record.accepted) if a.withdrawn is not None), None)
        if gone is not None and gone.withdrawn is not None and record.since is not None and record.by == "withdrawal":
            reason, _, why = gone.withdrawn.partition(": ")
            self._refused[sensor] = CalibrationRefused(
                at=record.since, issue=gone.issue, digest=gone.digest, reason=reason, why=why, withdrawn=True
            )

    def _tell(self, sensor: str, at: Instant) -> None:
        desk = self._desk
        if desk is None:
            return
        record, left_s = desk.switch.record(sensor), desk.switch.soak_left_s(sensor)
        state = CalibrationStateDocument(
            schema="motekeep/calibration/1",
            site=desk.place.site,
            gateway=desk.place.gateway,
            sensor=sensor,
            at=rfc3339(at.utc),
            in_force=self._in_force(desk, sensor),
            highest_issue=max((g.issue for g in record.guards), default=None),
            soak_until=None if left_s is None or not self._signed else rfc3339(at.utc + left_s),
            refused=self._refused.get(sensor),
        )
        desk.post(desk.topics.calibration_state(sensor), state.json_text())

    def _in_force(self, desk: Desk, sensor: str) -> CalibrationInForce | None:
        if not self._signed:
            if sensor not in self._unsigned:
                return None
            document, since = self._unsigned[sensor]
            return CalibrationInForce(
                issue=document.issue,
                digest=document.digest,
                signer=None,
                key=None,
                valid_until=rfc3339(document.valid_until),
                since=since,
                by="by-hand",
            )
        record = desk.switch.record(sensor)
        if (current := record.current) is None or record.since is None:
            return None
        return CalibrationInForce(
            issue=current.issue,
            digest=current.digest,
            signer=current.signer,
            key=current.key,
            valid_until=current.valid_until,
            since=record.since,
            by=record.by,
        )


def _issue_of(desk: Desk, verdict: Verdict) -> int | None:
    """Of a document whose bytes were accepted once; what was not accepted is not read."""
    entry = desk.switch.record(verdict.request.sensor).find(verdict.digest)
    return None if entry is None else entry.issue
