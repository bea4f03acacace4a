"""Active checks: when a sensor is put to sleep and woken on purpose, to see its spin-up.

Owns the schedule and the mark that such a check leaves. Must not know what a wake tells, nor how a sensor is put to
sleep.

What it costs: SLEEP_S and a warm-up of record each time. Four a day are 2.9 % of the record, which stays complete by
the 75 % rule in every hour (sleep is not due). What it buys: a fan at 70 % of its flow, which would otherwise read a
third too low for months, found within two weeks without a twin.

Ten minutes: what is to be seen is how much the cell has lost, which grows as 1 - exp(-t/tau), with tau of 5 to 7
minutes by settling and draught together (0.3 to 1 um, 1 cm, a draught of a hundredth of the flow; computed). What a
second of gap tells, (1 - exp(-t/tau))^2/(t + 30 s), has its broad top at 8 to 10 minutes. Half as long and twice as
often tells as much and starts the fan twice as often.
"""

from typing import ClassVar

from motekeep.health.check import Check, LineState
from motekeep.health.finding import Suspicion
from motekeep.instant import Instant

SLEEP_S = 600.0
TAKES_S = SLEEP_S + 120.0  # with the look after the wake
DAY_S = 86400.0
WHY = "active check"  # of the line's ASLEEP


class ActiveSchedule:
    """When the next active check of one sensor is due. `times_a_day` 0: never, whatever asks.

    Rule: every day/times_a_day; earlier when a check asks, but ASKED_S after the last one at the least. Not within
    SETTLED_S of the start, so that a gateway that keeps restarting does not keep its sensors asleep.
    """

    ASKED_S = 7200.0
    SETTLED_S = 3600.0

    def __init__(self, times_a_day: float, at: Instant) -> None:
        self._every_s = DAY_S / times_a_day if times_a_day > 0.0 else None
        self._from_s = at.boot_s + self.SETTLED_S
        self._next_s = at.boot_s + (self._every_s or 0.0)
        self._asked_from_s = self._from_s
        self.until_s = at.boot_s  # the end of the last one

    def due(self, at: Instant, *, asked: bool) -> bool:
        now = at.boot_s
        if self._every_s is None or now < self._from_s or now < self.until_s:
            return False
        return now >= self._next_s or (asked and now >= self._asked_from_s)

    def begin(self, at: Instant) -> None:
        """The check begins now."""
        self.until_s = at.boot_s + TAKES_S
        self._next_s = at.boot_s + (self._every_s or 0.0)
        self._asked_from_s = at.boot_s + self.ASKED_S


class ActiveCheck(Check):
    """active-check: the sensor sleeps for a check of its fan, and what it measures meanwhile is missing by intent.

    NAMUR NE 107 calls this state function check. The record's minutes have the reason `asleep`, as by duty.
    """

    code: ClassVar[str] = "active-check"
    clear_s: ClassVar[float] = 0.0
    again_s: ClassVar[float] = 0.0  # a new life of the daemon wakes the sensor

    def __init__(self) -> None:
        self._since: float | None = None

    def line(self, state: LineState, at: Instant, why: str) -> None:
        self._since = at.boot_s if state is LineState.ASLEEP and why == WHY else None

    def judge(self, at: Instant) -> Suspicion | None:
        if self._since is None:
            return None
        return Suspicion(self._since, 1.0, f"put to sleep for {SLEEP_S / 60.0:.0f} min, to see its fan start")
