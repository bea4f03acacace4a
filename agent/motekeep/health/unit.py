"""What the unit says of itself: its error bits, and that it has just started.

Owns the warm-up span, which the pipeline asks for too. Must not know what an error bit means: dialects differ.
"""

from typing import ClassVar

from motekeep.health.check import Check, LineState
from motekeep.health.finding import Suspicion
from motekeep.instant import Instant
from motekeep.wire.frame import Damage, Observation


class WarmingUp(Check):
    """warming-up: from the first frame after power, wake or silence for as long as the dialect says.

    Power is not seen. So a line that comes back counts as power, and so do a silence of 5 s or 3 periods (a unit cannot
    restart faster) and the first frame within two minutes of the gateway's own boot, since both hang on one supply. A
    daemon that starts later finds a sensor that has been running: its restart must not cost half a minute of record.
    In a network study most isolated outliers were first records after a reset (2018
    conference material); 30 s is the usual advice of makers (common practice, no source).
    """

    code: ClassVar[str] = "warming-up"
    clear_s: ClassVar[float] = 0.0
    again_s: ClassVar[float] = 0.0  # a new life of the daemon opens the line itself

    SILENT_S = 5.0
    SILENT_PERIODS = 3.0
    BOOT_S = 120.0

    def __init__(self, warm_up_s: float, period_s: float, at: Instant) -> None:
        self._warm_up = warm_up_s
        self._silent = max(self.SILENT_S, self.SILENT_PERIODS * period_s)
        booted = at.boot_s < self.BOOT_S
        self._why: str | None = "the gateway booted" if booted else None  # what the next frame is the first one after
        self._gone = False
        self._started_by = ""
        self._last = self._since = at.boot_s
        self.until = at.boot_s

    def observe(self, observation: Observation) -> None:
        now = observation.at.boot_s
        if self._why is not None or now - self._last > self._silent:
            self._begin(now, self._why or f"{now - self._last:.0f} s of silence")
            self._why = None
        self._last = now

    def _begin(self, now: float, why: str) -> None:
        self._since, self._started_by = now, why
        self.until = now + self._warm_up

    def damaged(self, damage: Damage, at: Instant) -> None:
        if damage.reason == "checksum":  # the unit did speak; rubbish may come from a line with nothing on it
            self._last = max(self._last, at.boot_s)

    def line(self, state: LineState, at: Instant, why: str) -> None:
        if state is LineState.GONE:
            self._gone = True
        elif state is LineState.OPENED and self._gone:
            self._gone = False
            self._why = "the line came back"
        elif state is LineState.AWAKE:
            self._why = None
            self._last = at.boot_s + self._warm_up  # frames are late after a wake, and that is no second start
            self._begin(at.boot_s, "it was woken")

    def judge(self, at: Instant) -> Suspicion | None:
        if at.boot_s >= self.until:
            return None
        evidence = f"{self._warm_up:.0f} s from {at.boot_s - self._since:.0f} s ago: {self._started_by}"
        return Suspicion(self._since, 1.0, evidence)


class SensorError(Check):
    """sensor-error: the unit reports a fault of its own.

    A frame with error bits counts one, a frame without takes a quarter back; three open it, so that three in a row do
    and so does every other one, but not a single misread frame. The bits are shown as sent, with their
    names where the dialect knows them.
    """

    code: ClassVar[str] = "sensor-error"
    clear_s: ClassVar[float] = 60.0
    settled: ClassVar[bool] = True

    OPENS = 3.0
    TOP = 6.0
    BACK = 0.25

    def __init__(self, names: tuple[tuple[int, str], ...] = ()) -> None:
        self._names = names
        self._weight = 0.0
        self._bits = 0
        self._since = 0.0
        self._holds = False

    def observe(self, observation: Observation) -> None:
        error = observation.frame.error
        if error:
            if self._weight <= 0.0:
                self._since, self._bits = observation.at.boot_s, 0
            self._bits |= error
            self._weight = min(self._weight + 1.0, self.TOP)
            self._holds = self._holds or self._weight >= self.OPENS
        elif self._weight > 0.0:
            self._weight -= self.BACK
            if self._weight <= 0.0:
                self._holds = False

    def judge(self, at: Instant) -> Suspicion | None:
        if not self._holds:
            return None
        named = ", ".join([name for bit, name in self._names if bit & self._bits])
        told = f"0x{self._bits:02x}" + (f" ({named})" if named else "")
        return Suspicion(self._since, 0.95, f"the sensor's own error bits: {told}")
