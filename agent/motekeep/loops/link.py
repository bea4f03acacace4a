"""What is known of the uplink: the facts for the health document, kept by the publisher, read by any thread.

Owns the account of connections, answers and refusals, in this process. Decides nothing and sends nothing.
"""

from collections import Counter
from dataclasses import dataclass
from threading import Lock

from motekeep.instant import Instant

REFUSING_MOST = 16  # topics named in the facts; a gateway has two a sensor, and the count goes on regardless


@dataclass(frozen=True, slots=True)
class LinkFacts:
    """The uplink at one moment.

    `since` is Unix seconds of the connection in force, None without one; `down_s` says how long there has been none,
    and `why` why the last one ended. `last_answer_s` is how long ago the broker last answered, None if it never did;
    `stalled` that the last link was given up because it owed answers, and none has come since. `refused` counts answers
    with a refusal code, `set_aside` rows and notices given up on, `unheard` messages that the broker took though nobody
    subscribes to them. `connection_refused` says with what words the broker, when it last answered, did not let this
    gateway in; `refusing` names the topics refused at the moment, with the broker's reason.
    """

    since: float | None
    down_s: float | None
    why: str | None
    reconnects: int
    last_answer_s: float | None
    stalled: bool
    in_flight: int
    refused: int
    set_aside: int
    unheard: int
    bad_requests: int
    connection_refused: str | None
    refusing: tuple[str, ...]


class LinkLedger:
    """The running account behind `LinkFacts`. One thread writes, any may ask for `facts`."""

    def __init__(self, at: Instant) -> None:
        self._lock = Lock()
        self._up_since: float | None = None
        self._down_since_s: float = at.boot_s
        self._why: str | None = None
        self._connections = 0
        self._answered_s: float | None = None
        self._stalled = False
        self._in_flight = 0
        self._counts: Counter[str] = Counter()
        self._connection_refused: str | None = None
        self._refusing: dict[str, str] = {}

    def connected(self, at: Instant) -> None:
        with self._lock:
            self._up_since = at.utc
            self._connections += 1
            self._connection_refused = None

    def disconnected(self, at: Instant, why: str, *, refused: bool) -> None:
        with self._lock:
            self._connection_refused = why if refused else None
            if self._up_since is not None:
                self._down_since_s = at.boot_s
            self._up_since = None
            self._why = why
            self._in_flight = 0

    def answered(self, at: Instant, topic: str, refusal: str | None, *, unheard: bool, in_flight: int) -> None:
        with self._lock:
            self._answered_s = at.boot_s
            self._stalled = False
            self._in_flight = in_flight
            self._counts["unheard"] += unheard
            if refusal is None:
                self._refusing.pop(topic, None)
                return
            self._counts["refused"] += 1
        self.refusing(topic, refusal)

    def refusing(self, topic: str, why: str) -> None:
        with self._lock:
            if topic in self._refusing or len(self._refusing) < REFUSING_MOST:
                self._refusing[topic] = why

    def forgive(self) -> None:
        """The broker may have changed its mind: nothing is known to be refused."""
        with self._lock:
            self._refusing.clear()

    def stalled(self) -> None:
        with self._lock:
            self._stalled = True

    def in_flight(self, count: int) -> None:
        self._in_flight = count

    def counted(self, what: str, number: int = 1) -> None:
        """`set_aside` or `bad_requests`."""
        with self._lock:
            self._counts[what] += number

    def facts(self, now: Instant) -> LinkFacts:
        with self._lock:
            return LinkFacts(
                since=self._up_since,
                down_s=None if self._up_since is not None else now.boot_s - self._down_since_s,
                why=self._why,
                reconnects=max(self._connections - 1, 0),
                last_answer_s=None if self._answered_s is None else now.boot_s - self._answered_s,
                stalled=self._stalled,
                in_flight=self._in_flight,
                refused=self._counts["refused"],
                set_aside=self._counts["set_aside"],
                unheard=self._counts["unheard"],
                bad_requests=self._counts["bad_requests"],
                connection_refused=self._connection_refused,
                refusing=tuple(f"{topic}: {why}" for topic, why in self._refusing.items()),
            )
