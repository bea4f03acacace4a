"""The plan: who would get what, who has it already, who is not well, who was not heard. Pure.

Owns that judgement and its words. Must not know waves.
"""

from collections import Counter
from collections.abc import Collection, Iterable, Sequence
from dataclasses import dataclass
from enum import StrEnum

from moteferry.roll.fleet import CalibrationState, Fleet, Report
from moteferry.roll.offer import Offer, Target
from motekeep.instant import rfc3339

# Findings that a new document mends, or that say nothing of what it would do.
CURABLE = "calibration-"
# Nobody can judge a document on a sensor that fails or is being worked on.
UNWELL = ("failure", "function_check")
# A sensor that wakes from its sleep is in function check for half a minute.
PASSING = ("warming-up",)


class Standing(StrEnum):
    OFFER = "to offer"
    HAS_IT = "in force already"
    NOT_WELL = "not well"
    NOT_HEARD = "not heard"
    WOULD_REFUSE = "would refuse it"


@dataclass(frozen=True, slots=True)
class Entry:
    """One line of the plan; `in_force` is the issue that the device has now."""

    offer: Offer
    standing: Standing
    why: str
    in_force: int | None

    @property
    def target(self) -> Target:
        return self.offer.target


@dataclass(frozen=True, slots=True)
class Plan:
    entries: Sequence[Entry]

    def of(self, standing: Standing) -> list[Entry]:
        return [entry for entry in self.entries if entry.standing is standing]

    def counts(self) -> dict[Standing, int]:
        found = Counter(entry.standing for entry in self.entries)
        return {standing: found[standing] for standing in Standing}

    def left_out(self, rolled: Collection[Target] | None = None) -> list[Entry]:
        """Who neither has it nor would be offered it; once it is known who is `rolled`, who is not among them."""
        fine = (Standing.OFFER, Standing.HAS_IT) if rolled is None else (Standing.HAS_IT,)
        return [entry for entry in self.entries if entry.standing not in fine and entry.target not in (rolled or ())]


def make_plan(offers: Iterable[Offer], fleet: Fleet, now: float, *, unwell_too: bool = False) -> Plan:
    """In the order of the offers, those of gateways that are wholly normal first: they make the better canaries.

    `unwell_too`: the way back is also for those that the way there has made ill.
    """
    entries = [
        _entry(offer, fleet.states.get(offer.target), fleet.report(offer.target), now, unwell_too=unwell_too)
        for offer in offers
    ]
    return Plan(sorted(entries, key=lambda e: not _normal(fleet.report(e.target))))


def _normal(report: Report | None) -> bool:
    return report is not None and report.health.status == "normal"


def _entry(
    offer: Offer, state: CalibrationState | None, report: Report | None, now: float, *, unwell_too: bool
) -> Entry:
    in_force = state.in_force if state is not None else None
    standing, why = _standing(offer, state, report, now)
    if standing is Standing.NOT_WELL and unwell_too:
        standing = Standing.OFFER
    return Entry(offer, standing, why, in_force.issue if in_force is not None else None)


def _standing(offer: Offer, state: CalibrationState | None, report: Report | None, now: float) -> tuple[Standing, str]:
    if state is not None and state.holds(offer.digest):
        return Standing.HAS_IT, f"issue {offer.issue}"
    for standing, why in (
        (Standing.WOULD_REFUSE, would_refuse(offer, state, now)),
        (Standing.NOT_HEARD, not_heard(report, now)),
        (Standing.NOT_WELL, not_well(offer.target, report)),
    ):
        if why is not None:
            return standing, why
    refusal = state.refusal_of(offer.digest) if state is not None else None
    return Standing.OFFER, f"refused before: {refusal.words}" if refusal is not None else ""


def would_refuse(offer: Offer, state: CalibrationState | None, now: float) -> str | None:
    """What a device is certain to hold against this document, None for nothing that can be seen from here."""
    seat = state.in_force if state is not None else None
    if offer.valid_until <= now:
        return f"it was valid until {rfc3339(offer.valid_until)}"
    if offer.valid_from > now:
        return f"it is valid from {rfc3339(offer.valid_from)} only"
    if seat is not None and seat.issue == offer.issue:
        return f"issue {seat.issue} is in force there with other content"
    highest = max(seat.issue if seat is not None else 0, (state.highest_issue if state is not None else None) or 0)
    return f"issue {highest} has been in force there" if highest >= offer.issue else None


def not_heard(report: Report | None, now: float) -> str | None:
    """Why a gateway cannot be counted on to listen, None when it can."""
    if report is None:
        return "no health document at this broker"
    if report.health.status == "offline":
        return "offline, says the broker"
    if not report.heard(now):
        due = report.health.next_by
        return "overdue since " + (rfc3339(due.timestamp()) if due is not None else "ever")
    return None


def not_well(target: Target, report: Report | None) -> str | None:
    """Why this sensor cannot be judged now, None when it can. Findings of its neighbours do not matter."""
    if report is None:
        return None
    health = report.health
    sensors = health.sensors or {}
    if target.sensor not in sensors:
        return f"its gateway has no sensor {target.sensor!r}"
    for where, findings in (("", sensors[target.sensor].findings), ("gateway: ", health.findings or ())):
        for finding in findings:
            if finding.category in UNWELL and not finding.code.startswith((CURABLE, *PASSING)):
                return f"{where}{finding.code}"
    return None
