"""One sensor's line: open, read bursts, hand them on, poll and put to sleep where the sensor wants it.

Owns the reopening, the duty cycle and the sleep of an active check. Knows no frame: bytes go to the intake as they
came.
"""

from dataclasses import dataclass
from threading import Event

import structlog

from motekeep.edges.ports import Clock, Line, LineOpener
from motekeep.errors import PortError
from motekeep.health.active_check import SLEEP_S, WHY
from motekeep.health.check import LineState
from motekeep.loops.backoff import Backoff
from motekeep.loops.intake import Intake
from motekeep.wire.frame import Dialect

log = structlog.get_logger()

STATUS_EVERY_S = 10.0  # a fan or laser bit is due within minutes; ten seconds cost one short exchange
READ_TIMEOUT_S = 2.0  # how often an idle reader wakes: half a wake-up a second, and SIGTERM is met in time


@dataclass(frozen=True, slots=True)
class ReaderSettings:
    """One sensor. `duty` is (every_s, awake_s) or None; a polled dialect is read each `period_s`."""

    sensor: str
    port: str
    dialect: Dialect
    period_s: float
    duty: tuple[float, float] | None = None


class Reader:
    """The reader loop of one sensor; `run` returns when `stop` is set."""

    def __init__(self, settings: ReaderSettings, intake: Intake, opener: LineOpener, clock: Clock, stop: Event) -> None:
        self._settings = settings
        self._intake = intake
        self._open = opener
        self._clock = clock
        self._stop = stop
        self.ticked = clock.now().boot_s

    def run(self) -> None:
        backoff = Backoff(log, "line", sensor=self._settings.sensor, port=self._settings.port)
        while not self._stop.is_set():
            try:
                line = self._open(self._settings.port, self._settings.dialect.baud)
            except PortError as error:
                self._lost(error, backoff)
                continue
            try:
                self._start(line)
                backoff.recovered()
                self._read(line)
            except PortError as error:
                self._lost(error, backoff)
            finally:
                line.close()

    def _lost(self, error: PortError, backoff: Backoff) -> None:
        now = self._clock.now()
        self.ticked = now.boot_s
        self._intake.line(self._settings.sensor, LineState.GONE, now, str(error))
        self._clock.wait(self._stop, backoff.failed(error, now.boot_s))

    def _start(self, line: Line) -> None:
        self._intake.line(self._settings.sensor, LineState.OPENED, self._clock.now())
        if self._settings.dialect.start:
            line.write(self._settings.dialect.start)

    def _read(self, line: Line) -> None:
        settings = self._settings
        rhythm = Rhythm(settings.dialect, settings.period_s, settings.duty, self._clock.now().boot_s)
        while not self._stop.is_set():
            now = self._clock.now()
            self.ticked = now.boot_s
            if rhythm.may_check(now.boot_s) and self._intake.active_check(settings.sensor, now):
                log.info("active_check.began", sensor=settings.sensor, sleep_s=SLEEP_S)
                rhythm.check(now.boot_s)
            match rhythm.next(now.boot_s):
                case "sleep":
                    line.write(settings.dialect.commands.sleep or b"")
                    self._intake.line(settings.sensor, LineState.ASLEEP, now, WHY if rhythm.checking else "")
                case "wake":
                    line.write(settings.dialect.commands.wake or b"")
                    self._intake.line(settings.sensor, LineState.AWAKE, now)
                case "wake again":
                    log.warning("sensor.slept_on", sensor=settings.sensor)
                    line.write(settings.dialect.commands.wake or b"")
                case "poll":
                    line.write(settings.dialect.commands.read or b"")
                case "status":
                    line.write(settings.dialect.commands.status or b"")
            data = line.read(rhythm.patience(now.boot_s))
            if data:
                now = self._clock.now()
                if rhythm.heard(now.boot_s):
                    log.warning(
                        "active_check.ignored", sensor=settings.sensor, mend="check the wire to the sensor's RX"
                    )
                self._intake.receive(settings.sensor, data, now)


class Rhythm:
    """When to sleep, wake and poll.

    Rule, first line that holds:
      asleep by duty or check, and should be ------------> nothing
      should be asleep ----------------------------------> sleep
      should be awake, and asleep -----------------------> wake
      nothing heard since WAKE_AGAIN_S after the wake ---> wake again, and so on until something is
      polled, and a poll or the status word is due ------> poll, status

    With a duty it should be asleep but for the first `awake` seconds of every `every`; in an active check for SLEEP_S
    from `check` on. A sensor that talks on DEAF_S after it was told to sleep does not hear: its check ends, and is its
    last.

    `duty` is (every_s, awake_s) or None; a polled dialect is read each `period_s`, and asked for its status word, where
    it has one, every STATUS_EVERY_S.
    """

    WAKE_AGAIN_S = 15.0  # the slowest start known to us takes some 5 s (common practice, no source)
    DEAF_S = 10.0  # an answer to the command and a frame under way may still come
    ASK_EVERY_S = 5.0

    def __init__(self, dialect: Dialect, period_s: float, duty: tuple[float, float] | None, start_s: float) -> None:
        self._duty = duty
        self._start = start_s
        self._asleep = False
        self._turned = start_s  # when it was last told to sleep or to wake
        self._check_until: float | None = None
        self._deaf = False
        self._ask_from = start_s
        self._again_at = float("inf")
        self._again_s = max(self.WAKE_AGAIN_S, 3.0 * period_s)
        self._can_sleep = dialect.commands.sleep is not None
        self._period = period_s if dialect.polled else None
        self._next_poll = start_s
        self._next_status = start_s if dialect.commands.status else float("inf")

    @property
    def checking(self) -> bool:
        """Whether an active check is why it sleeps."""
        return self._check_until is not None

    def may_check(self, boot_s: float) -> bool:
        """Whether it makes sense to ask for an active check now; true once every ASK_EVERY_S at the most."""
        if self._duty is not None or not self._can_sleep or self._deaf or self._asleep or boot_s < self._ask_from:
            return False
        self._ask_from = boot_s + self.ASK_EVERY_S
        return True

    def check(self, boot_s: float) -> None:
        """An active check begins."""
        self._check_until = boot_s + SLEEP_S

    def heard(self, boot_s: float) -> bool:
        """Something came. Whether this proves that the sensor did not hear that it was to sleep for a check."""
        if not self._asleep:
            self._again_at = float("inf")
        elif self._check_until is not None and boot_s - self._turned > self.DEAF_S:
            self._deaf, self._check_until = True, None
            return True
        return False

    def _should_sleep(self, boot_s: float) -> bool:
        if self._duty is not None:
            every, awake = self._duty
            return (boot_s - self._start) % every >= awake
        if self._check_until is not None and boot_s >= self._check_until:
            self._check_until = None
        return self._check_until is not None

    def next(self, boot_s: float) -> str | None:
        should_sleep = self._should_sleep(boot_s)
        if should_sleep != self._asleep:
            self._asleep, self._turned = should_sleep, boot_s
            self._again_at = float("inf") if should_sleep else boot_s + self._again_s
            return "sleep" if should_sleep else "wake"
        if boot_s >= self._again_at:
            self._again_at = boot_s + self._again_s
            return "wake again"
        if self._period is not None and not self._asleep and boot_s >= self._next_poll:
            self._next_poll = max(self._next_poll + self._period, boot_s)
            return "poll"
        if boot_s >= self._next_status and not self._asleep:
            self._next_status = boot_s + STATUS_EVERY_S
            return "status"
        return None

    def patience(self, boot_s: float) -> float:
        """How long the next read may wait without missing the next turn."""
        if self._period is None or self._asleep:
            return READ_TIMEOUT_S
        return min(max(self._next_poll - boot_s, 0.02), READ_TIMEOUT_S)
