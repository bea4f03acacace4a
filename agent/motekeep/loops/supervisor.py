"""The main thread: turns the recorder, watches that every loop makes progress, and only then feeds the watchdog.

Owns starting and stopping. A loop that died with an error without a name ends the process with exit code 1; systemd
starts it again. A loop that hangs starves the watchdog, with the same end.
"""

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from threading import Event, Thread
from typing import Protocol

import structlog

from motekeep.edges.ports import Clock
from motekeep.instant import Instant

log = structlog.get_logger()

TURN_S = 1.0
STALLED_S = 90.0  # longer than any wait of a loop: reading 2 s, backing off 30 s, connecting with TLS 60 s
JOIN_S = 2.5  # the farewell takes up to 2 s; SIGTERM is to be answered within five, the last commits included


class Loop(Protocol):
    """`ticked` is when it last made progress, in boot seconds; `run` returns soon after the stop event is set."""

    ticked: float

    def run(self) -> None: ...


@dataclass(frozen=True, slots=True)
class Hand:
    """A loop under a name, in its own thread."""

    name: str
    loop: Loop


class Supervisor:
    """`run` until the stop event, then joins the loops and returns the exit code: 0, or 1 after a crash."""

    def __init__(
        self,
        hands: Sequence[Hand],
        turn: Callable[[Instant], None],
        alive: Callable[[], None],
        clock: Clock,
        stop: Event,
    ) -> None:
        self._hands = hands
        self._turn = turn
        self._alive = alive
        self._clock = clock
        self._stop = stop
        self._crashed = False
        self._stalled: set[str] = set()

    def run(self, stopping: Callable[[], None]) -> int:
        """`stopping` stores what is under way: it runs as soon as the stop is seen, before the loops are waited for."""
        threads = [Thread(target=self._guard, args=(hand,), name=hand.name, daemon=True) for hand in self._hands]
        self._turn(self._clock.now())  # the journal is open, where there is one, before anybody asks for it
        for thread in threads:
            thread.start()
        while not self._stop.is_set():
            now = self._clock.now()
            self._turn(now)
            if self._progressing(now):
                self._alive()
            self._clock.wait(self._stop, TURN_S)
        stopping()
        deadline = self._clock.now().boot_s + JOIN_S
        for thread in threads:
            thread.join(max(deadline - self._clock.now().boot_s, 0.05))
            if thread.is_alive():
                log.warning("loop.not_stopped", loop=thread.name)
        return 1 if self._crashed else 0

    def _guard(self, hand: Hand) -> None:
        try:
            hand.loop.run()
        except Exception:
            self._crashed = True
            log.exception("loop.crashed", loop=hand.name)
            self._stop.set()

    def _progressing(self, now: Instant) -> bool:
        stalled = {hand.name for hand in self._hands if now.boot_s - hand.loop.ticked > STALLED_S}
        for name in stalled - self._stalled:
            log.error("loop.stalled", loop=name, seconds=STALLED_S)
        self._stalled = stalled
        return not stalled
