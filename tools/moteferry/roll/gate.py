"""The gate of a wave: whether a target may be counted as done, is still on its way, or stops the roll. Pure.

Each target is judged against its own state before: what was wrong then is not held against the document. Findings that
weather and time bring are not either (`NOT_OURS`). A gateway that goes quiet while it soaks is waited for, since a link
comes and goes; only one that does not come back stops the roll.
"""

from dataclasses import dataclass
from datetime import datetime
from enum import StrEnum

from pydantic import BaseModel, ConfigDict

from moteferry.duration import told
from moteferry.roll.fleet import CalibrationState, Failing, Report, Seat
from moteferry.roll.offer import Offer

RANK = {
    status: rank
    for rank, status in enumerate(
        ("normal", "maintenance_required", "out_of_specification", "function_check", "failure")
    )
}
# Judged on raw figures, before any calibration, and brought by weather, by waking up, by a visitor, or by the calendar.
NOT_OURS = frozenset(
    {"humidity-high", "counts-saturated", "warming-up", "active-check", "service-visit", "dose-due", "hours-due"}
)
# One reading of flag 4 may be a sensor's own bad minute.
READINGS_FAILED = 2


class Step(StrEnum):
    OFFERED = "offered"
    SOAKING = "accepted"
    PASSED = "passed"
    REFUSED = "refused"
    WITHDRAWN = "withdrawn"
    WORSE = "worse"
    SILENT = "silent"

    @property
    def failed(self) -> bool:
        return self in (Step.REFUSED, Step.WITHDRAWN, Step.WORSE, Step.SILENT)


class Before(BaseModel):
    """A target as it was when the document was offered to it; kept in the register. `refused_at` is of this very
    document; `findings` are those of the sensor, by code with their category, `gateway` the failures of its gateway."""

    model_config = ConfigDict(frozen=True)
    refused_at: datetime | None = None
    in_force: Seat | None = None
    findings: dict[str, str] = {}
    gateway: frozenset[str] = frozenset()


def before(offer: Offer, state: CalibrationState | None, report: Report | None) -> Before:
    findings, gateway = _findings(offer, report)
    if state is None:
        return Before(findings=findings, gateway=gateway)
    refusal = state.refusal_of(offer.digest)
    refused_at = refusal.at if refusal is not None else None
    return Before(refused_at=refused_at, in_force=state.in_force, findings=findings, gateway=gateway)


@dataclass(frozen=True, slots=True)
class Case:
    """A target in its wave. Times are Unix seconds; `accepted_at` is when the device switched."""

    offer: Offer
    before: Before
    offered_at: float
    accepted_at: float | None = None
    passed: bool = False


@dataclass(frozen=True, slots=True)
class Rule:
    """`hold_s` before a target passes, and the soak that its device states where that is longer; with 0 acceptance is
    enough. `patience_s` for an answer, and for one that went quiet."""

    hold_s: float
    patience_s: float


@dataclass(frozen=True, slots=True)
class Sight:
    """What is known of a target at `now`; `listening_s` is how long we have heard this broker without a break."""

    state: CalibrationState | None
    report: Report | None
    failing: Failing | None
    now: float
    listening_s: float


@dataclass(frozen=True, slots=True)
class Judgement:
    step: Step
    why: str = ""


def judge(case: Case, sight: Sight, rule: Rule) -> Judgement:
    state, digest = sight.state, case.offer.digest
    if case.accepted_at is None:
        if state is not None and state.holds(digest):
            return Judgement(Step.SOAKING)
        return _unanswered(case, sight, rule)
    if state is not None and not state.holds(digest):
        return Judgement(Step.WITHDRAWN, _gone(state, digest))
    if case.passed:
        return Judgement(Step.PASSED)
    trouble = _trouble(case, sight)
    if trouble is not None:
        return Judgement(Step.WORSE, trouble)
    return _soaked(case, sight, rule)


def _unanswered(case: Case, sight: Sight, rule: Rule) -> Judgement:
    state, digest = sight.state, case.offer.digest
    refusal = state.refusal_of(digest) if state is not None else None
    # what the device said before we offered is no answer to it
    if state is not None and refusal is not None and (refusal.at is None or refusal.at != case.before.refused_at):
        if refusal.withdrawn:
            return Judgement(Step.WITHDRAWN, _gone(state, digest))
        return Judgement(Step.REFUSED, refusal.words)
    if min(sight.now - case.offered_at, sight.listening_s) > rule.patience_s:
        return Judgement(Step.SILENT, f"no answer in {told(rule.patience_s)}")
    return Judgement(Step.OFFERED)


def _gone(state: CalibrationState, digest: str) -> str:
    seat = state.in_force
    now = f"issue {seat.issue} is in force again" if seat is not None else "no document is in force any more"
    refusal = state.refusal_of(digest)
    return f"{refusal.words}; {now}" if refusal is not None else now


def _trouble(case: Case, sight: Sight) -> str | None:
    failing = sight.failing
    if failing is not None and failing.digest == case.offer.digest and failing.count >= READINGS_FAILED:
        return f"{failing.count} readings in a row with flag 4: {', '.join(failing.reasons) or 'no reason given'}"
    if not _since(case, sight):
        return None
    findings, gateway = _findings(case.offer, sight.report)
    for code, category in findings.items():
        if code not in NOT_OURS and _rank(category) > _rank(case.before.findings.get(code, "normal")):
            return f"{code} ({category.replace('_', ' ')}) since it was accepted"
    new = sorted(gateway - case.before.gateway)
    return f"gateway: {new[0]} since it was accepted" if new else None


def _soaked(case: Case, sight: Sight, rule: Rule) -> Judgement:
    assert case.accepted_at is not None  # noqa: S101 (judge asks only then)
    soaked_at = case.accepted_at + rule.hold_s
    if rule.hold_s > 0 and sight.state is not None and sight.state.soak_until is not None:
        soaked_at = max(soaked_at, sight.state.soak_until.timestamp())
    if sight.now < soaked_at:
        return Judgement(Step.SOAKING)
    if rule.hold_s == 0 or _since(case, sight):
        return Judgement(Step.PASSED)
    if min(sight.now - soaked_at, sight.listening_s) > rule.patience_s:
        return Judgement(Step.SILENT, "accepted it, and has not been heard since")
    return Judgement(Step.SOAKING)


def _since(case: Case, sight: Sight) -> bool:
    """Whether the health document that we have is a current one, made after the switch."""
    report = sight.report
    if report is None or case.accepted_at is None or not report.heard(sight.now):
        return False
    at = report.health.at
    made_at = at.timestamp() if report.retained and at is not None else report.came_at
    return made_at >= case.accepted_at


def _findings(offer: Offer, report: Report | None) -> tuple[dict[str, str], frozenset[str]]:
    if report is None:
        return {}, frozenset()
    health = report.health
    sensor = (health.sensors or {}).get(offer.target.sensor)
    own = {finding.code: finding.category for finding in sensor.findings} if sensor is not None else {}
    gateway = frozenset(finding.code for finding in health.findings or () if finding.category == "failure")
    return own, gateway


def _rank(status: str) -> int:
    return RANK.get(status, len(RANK))
