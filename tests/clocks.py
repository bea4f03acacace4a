"""A simulated clock for tests: time passes only when somebody waits or the test says so.

It keeps the contract of the real one (`tests/edges/test_clock.py` runs the same tests over both) and can do what the
real one cannot on demand: step the wall clock, sync late, suspend, reboot.
"""

import heapq
import itertools
from collections.abc import Callable
from datetime import UTC, datetime
from threading import Event, RLock

from motekeep.instant import Instant

# The start of most stories: a Tuesday, on a full hour.
MORNING = datetime(2026, 12, 1, 9, 0, tzinfo=UTC).timestamp()

# A test that forgot to advance a driven clock fails instead of hanging.
PATIENCE_S = 20.0
POLL_S = 0.001


class FakeClock:
    """Meets the `Clock` port.

    Alone (`driven=False`) a wait moves the time by itself, so a loop that runs in the test's own thread lives through
    a day in milliseconds; things that happen meanwhile are laid on with `after`. With `driven=True` waits in other
    threads last until the test has advanced the clock past their end; several loops then share one time: `settle(2)`
    until both wait, `advance`, and so on.
    """

    def __init__(
        self,
        utc: float = MORNING,
        *,
        boot_s: float = 100.0,
        trusted: bool = True,
        boot_id: str | None = None,
        driven: bool = False,
    ) -> None:
        self._lock = RLock()
        self._utc = utc
        self._boot_s = boot_s
        self._boots = itertools.count(1)
        self._boot_id = boot_id or f"{next(self._boots):032x}"
        self._trusted = trusted
        self._driven = driven
        self._waiting = 0
        self._order = itertools.count()
        self._plans: list[tuple[float, int, Callable[[], object]]] = []

    def now(self) -> Instant:
        with self._lock:
            return Instant(utc=self._utc, boot_s=self._boot_s, boot_id=self._boot_id, trusted=self._trusted)

    def wait(self, event: Event, seconds: float) -> bool:
        if event.is_set():
            return True
        if self._driven:
            return self._wait_driven(event, seconds)
        with self._lock:
            self._pass(max(seconds, 0.0), until=event)
        return event.is_set()

    def advance(self, seconds: float) -> None:
        """Let time pass; what was planned for it happens at its moment, in order."""
        if seconds < 0:
            raise ValueError("boot time never runs backwards; use step() for the wall clock")
        with self._lock:
            self._pass(seconds)

    def settle(self, waiting: int) -> None:
        """Return once `waiting` threads wait on a driven clock: all have done their work up to now."""
        self._be_patient(lambda: self._waiting >= waiting, f"{waiting} threads to wait, {self._waiting} do")

    def step(self, seconds: float) -> None:
        """Somebody sets the wall clock; durations know nothing of it."""
        with self._lock:
            self._utc += seconds

    def trust(self, trusted: bool = True) -> None:
        with self._lock:
            self._trusted = trusted

    def sync(self, utc: float) -> None:
        """A time service sets the wall clock and vouches for it."""
        with self._lock:
            self._utc = utc
            self._trusted = True

    def reboot(self, *, off_s: float = 0.0, wakes_at: float | None = None, trusted: bool = False) -> None:
        """A new boot after `off_s` without power. The wall clock went on meanwhile (battery) or, with `wakes_at`,
        woke up in some plausible past. Plans of the old boot are gone with it."""
        with self._lock:
            self._plans.clear()
            self._utc = self._utc + off_s if wakes_at is None else wakes_at
            self._boot_s = 0.0
            self._boot_id = f"{next(self._boots):032x}"
            self._trusted = trusted

    def after(self, seconds: float, action: Callable[[], object]) -> None:
        """Plan `action` for `seconds` from now of boot time: an event to set, a clock to step, a sensor to pull."""
        with self._lock:
            heapq.heappush(self._plans, (self._boot_s + seconds, next(self._order), action))

    def _pass(self, seconds: float, until: Event | None = None) -> None:
        end = self._boot_s + seconds
        boot = self._boot_id
        while self._plans and self._plans[0][0] <= end:
            at, _, action = heapq.heappop(self._plans)
            self._move(at)
            action()
            if self._boot_id != boot or (until is not None and until.is_set()):
                return
        self._move(end)

    def _move(self, boot_s: float) -> None:
        passed = max(boot_s - self._boot_s, 0.0)
        self._boot_s += passed
        self._utc += passed

    def _wait_driven(self, event: Event, seconds: float) -> bool:
        start = self.now()

        def over() -> bool:
            now = self.now()
            return event.is_set() or now.boot_id != start.boot_id or now.boot_s - start.boot_s >= seconds

        with self._lock:
            self._waiting += 1
        try:
            self._be_patient(over, f"somebody to advance the clock past a wait of {seconds} s")
        finally:
            with self._lock:
                self._waiting -= 1
        return event.is_set()

    def _be_patient(self, over: Callable[[], bool], what: str) -> None:
        pause = Event()
        for _ in range(round(PATIENCE_S / POLL_S)):
            if over():
                return
            pause.wait(POLL_S)
        raise AssertionError(f"waited in vain for {what}")
