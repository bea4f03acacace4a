"""What a sensor has been through and what its figures are made with, held against the limits that were set.

Owns the limits on dose, laser hours and calibration. Must not know how a dose is summed up or a figure corrected: it is
told after each reading.
"""

from collections import deque
from dataclasses import dataclass
from typing import ClassVar

from motekeep.health.check import Check
from motekeep.health.finding import Suspicion
from motekeep.health.memory import Memory, is_number
from motekeep.instant import Instant, rfc3339
from motekeep.measure.account import Account, Limits

# The account is told with each reading, and an interval may last an hour.
ACCOUNT_AGAIN_S = 7500.0


class _Due(Check):
    """A sum over its limit; it closes only well below, so that a dose estimated anew does not make it flap."""

    clear_s: ClassVar[float] = 0.0
    again_s: ClassVar[float] = ACCOUNT_AGAIN_S

    BACK = 0.95

    def __init__(self, limits: Limits) -> None:
        self._limits = limits
        self._since: float | None = None
        self._evidence = ""

    def account(self, account: Account) -> None:
        total, limit, self._evidence = self.sum(account)
        if total < limit * (self.BACK if self._since is not None else 1.0):
            self._since = None
        elif self._since is None:
            self._since = account.at.boot_s

    def sum(self, account: Account) -> tuple[float, float, str]:
        """The sum, its limit, and both in words."""
        raise NotImplementedError

    def judge(self, at: Instant) -> Suspicion | None:
        return None if self._since is None else Suspicion(self._since, 1.0, self._evidence)


class DoseDue(_Due):
    """dose-due: the dust drawn through since the last cleaning is over the limit of the configuration.

    The default of 700 ug is about two years of rural air at 0.1 L/min (common practice, no source). Where the optics
    look up, what settles falls on the detector: `app` then halves the limit.
    """

    code: ClassVar[str] = "dose-due"

    def sum(self, account: Account) -> tuple[float, float, str]:
        dose, limit = account.dose, self._limits.dose_ug
        halved = ", halved as its optics look up" if self._limits.halved else ""
        told = (
            f"{dose.dust_ug:.0f} ug of dust drawn through{_since(dose.dust_since)}; the limit is {limit:g} ug{halved}"
        )
        return dose.dust_ug, limit, told


class HoursDue(_Due):
    """hours-due: the laser has run for longer than the limit of the configuration.

    The default of 8000 h is what makers state for the diode, about eleven months without a duty cycle (common
    practice, no source).
    """

    code: ClassVar[str] = "hours-due"

    def sum(self, account: Account) -> tuple[float, float, str]:
        dose, limit = account.dose, self._limits.laser_hours
        told = f"the laser has run {dose.laser_hours:.0f} h{_since(dose.laser_since)}; the limit is {limit:g} h"
        return dose.laser_hours, limit, told


class CalibrationMissing(Check):
    """calibration-missing: the configuration requires a document and no reading is made with one."""

    code: ClassVar[str] = "calibration-missing"
    clear_s: ClassVar[float] = 0.0
    again_s: ClassVar[float] = ACCOUNT_AGAIN_S

    def __init__(self) -> None:
        self._since: float | None = None
        self._damaged = False

    def account(self, account: Account) -> None:
        self._damaged = "calibration-refused" in account.reading.reasons
        if account.document is not None:
            self._since = None
        elif self._since is None:
            self._since = account.reading.interval.start.boot_s

    def judge(self, at: Instant) -> Suspicion | None:
        if self._since is None:
            return None
        why = "the document that lies there must not be used" if self._damaged else "there is no document"
        return Suspicion(self._since, 1.0, f"{why}; readings go out raw, and the configuration requires one")


class CalibrationExpired(Check):
    """calibration-expired: the document in force is past its `valid_until`, by a clock that somebody vouches for."""

    code: ClassVar[str] = "calibration-expired"
    clear_s: ClassVar[float] = 0.0
    again_s: ClassVar[float] = ACCOUNT_AGAIN_S

    def __init__(self) -> None:
        self._ended: tuple[float, float, int] | None = None  # boot seconds, Unix seconds, issue

    def account(self, account: Account) -> None:
        document, at = account.document, account.at
        if document is None:
            self._ended = None
        elif at.trusted:  # on another clock dates decide nothing, neither for nor against
            over = at.utc >= document.valid_until
            self._ended = (document.valid_until - at.offset, document.valid_until, document.issue) if over else None

    def judge(self, at: Instant) -> Suspicion | None:
        if self._ended is None:
            return None
        ended_s, ended, issue = self._ended
        days = (at.boot_s - ended_s) / 86400.0
        return Suspicion(ended_s, 1.0, f"issue {issue} was valid until {rfc3339(ended)}, {days:.1f} days ago")


@dataclass(frozen=True, slots=True)
class _Block:
    """Readings of about five minutes: when they ended (boot seconds), how long they were, how much of it was out."""

    end_s: float
    seconds: float
    out_s: float


class CalibrationOutOfRange(Check):
    """calibration-out-of-range: for more than half of the last six hours, figures, humidity or temperature lay where
    the document was not fitted. Single readings say so by themselves; this is for whoever keeps the calibration.

    It closes when less than a quarter was outside, so that a daily swing about the edge is one finding a night at most.
    Only readings that a document was used for count, and three hours of them are needed.
    """

    code: ClassVar[str] = "calibration-out-of-range"
    clear_s: ClassVar[float] = 0.0
    again_s: ClassVar[float] = ACCOUNT_AGAIN_S

    WINDOW_S = 6.0 * 3600.0
    BLOCK_S = 300.0  # readings of ten seconds are put together: 72 blocks are remembered, not 2160 readings
    OPENS, CLOSES = 0.5, 0.25

    def __init__(self) -> None:
        self._blocks: deque[_Block] = deque(maxlen=int(self.WINDOW_S / self.BLOCK_S))
        self._holds = False
        self._issue = 0

    def account(self, account: Account) -> None:
        interval, reading = account.reading.interval, account.reading
        if account.document is not None and account.document.issue != self._issue:
            self._blocks.clear()  # what another document was not fitted for says nothing of this one
            self._issue = account.document.issue
            self._holds = False
        end_s = interval.start.boot_s + interval.seconds
        while self._blocks and self._blocks[0].end_s <= end_s - self.WINDOW_S:
            self._blocks.popleft()
        if reading.calibration is not None:
            out_s = interval.seconds if "calibration-out-of-range" in reading.reasons else 0.0
            last = self._blocks[-1] if self._blocks else None
            if last is not None and last.seconds + interval.seconds <= self.BLOCK_S:
                self._blocks[-1] = _Block(end_s, last.seconds + interval.seconds, last.out_s + out_s)
            else:
                self._blocks.append(_Block(end_s, interval.seconds, out_s))
        outside_s = sum([block.out_s for block in self._blocks])
        self._holds = outside_s > self.WINDOW_S * (self.CLOSES if self._holds else self.OPENS)

    def judge(self, at: Instant) -> Suspicion | None:
        if not self._holds:
            return None
        outside = [block for block in self._blocks if block.out_s]
        total_s, outside_s = sum([b.seconds for b in self._blocks]), sum([b.out_s for b in outside])
        evidence = (
            f"{outside_s / 3600:.1f} h of the last {total_s / 3600:.1f} h outside of the range of issue {self._issue}"
        )
        return Suspicion(outside[0].end_s - outside[0].seconds, 0.95, evidence)

    def memory(self) -> Memory | None:
        if not any(block.out_s for block in self._blocks):
            return None  # nothing that a restart would have to know
        end_s = self._blocks[-1].end_s
        rows = [value for b in self._blocks for value in (end_s - b.end_s, b.seconds, b.out_s)]
        return {"issue": float(self._issue), "holds": float(self._holds), "blocks": [round(v, 1) for v in rows]}

    def recall(self, memory: Memory, at: Instant) -> None:
        """As if no time had passed: how long the daemon was off is not what the air did."""
        rows, issue, holds = memory.get("blocks"), memory.get("issue"), memory.get("holds")
        if not isinstance(rows, list) or not is_number(issue) or not all(is_number(v) and v >= 0.0 for v in rows):
            return
        self._issue = int(issue)
        for i in range(0, len(rows) - 2, 3):
            self._blocks.append(_Block(at.boot_s - rows[i], rows[i + 1], min(rows[i + 2], rows[i + 1])))
        self._holds = holds == 1.0 and any(block.out_s for block in self._blocks)


def _since(moment: float | None) -> str:
    return "" if moment is None else f" since {rfc3339(int(moment))}"
