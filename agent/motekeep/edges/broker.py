"""The MQTT 5 broker: keeps one connection after the other, with backoff and jitter.

Owns when to connect and when to give a connection up. Must not know what a message means, nor decide what is delivered.
Nothing is queued here: the journal is the only queue. All methods belong to one thread, the publisher's, except `wake`.
"""

import hashlib

import structlog

from motekeep.edges.connection import Connection, Inlet
from motekeep.edges.login import BrokerSettings
from motekeep.edges.ports import BrokerEvent, Clock, Disconnected
from motekeep.errors import BrokerError

log = structlog.get_logger()

# Name look-up is not bounded by paho; the rest of connecting is, at 5 s a step and one keepalive for the answer.
CONNECT_LIMIT_S = 90.0
# Threads of given-up connections that may still hang in a name look-up before no further one is begun.
STRAYS = 3
TEND_S = 1.0  # how often a connection is looked at when it says nothing: its thread may have died


def reconnect_delay(client_id: str, failures: int, first_s: float, cap_s: float) -> float:
    """Seconds to wait after that many failed links in a row: doubling, between half and all of each step.

    Where in the step is a hash of the client's name and the count: a fleet that lost its broker at one moment comes
    back spread out, and one device always behaves the same.
    """
    step_s = min(cap_s, first_s * 2.0 ** min(failures + 1, 20))
    digest = hashlib.sha256(f"{client_id}/{failures}".encode()).digest()
    return step_s * (0.5 + int.from_bytes(digest[:4]) / 2**33)


class MqttBroker:
    """The `Broker` port on paho-mqtt."""

    def __init__(self, settings: BrokerSettings, clock: Clock) -> None:
        self._settings = settings
        self._clock = clock
        self._inlet = Inlet(settings.inlet_bytes)
        self._connection: Connection | None = None
        self._strays: list[Connection] = []
        self._number = 0
        self._failures = 0
        self._due_s = 0.0
        self._running = False
        self._lost_down = 0

    def start(self) -> None:
        """Begin to connect. Only settings that can never work are refused here; files are looked at each time."""
        settings = self._settings
        try:
            settings.host.encode("idna")
        except UnicodeError as error:
            raise BrokerError(f"using the broker host {settings.host!r}", str(error), "mend [broker] host") from error
        if not settings.host or not 0 < settings.port < 65536:
            raise BrokerError(
                f"using the broker {settings.host!r}:{settings.port}", "no such address", "mend [broker] host and port"
            )
        if settings.username and settings.tls is None and settings.host not in ("localhost", "127.0.0.1", "::1"):
            log.warning("link.password_in_clear", host=settings.host, mend="add [broker] tls")
        self._running = True
        self._due_s = self._clock.now().boot_s

    def event(self, timeout_s: float) -> BrokerEvent | None:
        if self._running:
            timeout_s = min(timeout_s, self._tend())
        event = self._inlet.take(timeout_s)
        if self._inlet.lost > 2 * self._lost_down:  # the flood must not fill the log as well
            self._lost_down = self._inlet.lost
            log.warning("link.flooded", dropped=self._lost_down, limit_bytes=self._settings.inlet_bytes)
        return event

    def wake(self) -> None:
        self._inlet.wake()

    def publish(self, topic: str, body: str, *, retain: bool = False) -> int | None:
        return self._connection.publish(topic, body, retain) if self._connection is not None else None

    def drop(self, why: str) -> None:
        if self._connection is not None:
            self._connection.cut(why)

    def stop(self, farewell: tuple[str, str] | None, seconds: float) -> bool:
        self._running = False
        connection, self._connection = self._connection, None
        if connection is None:
            return False
        sent = farewell is not None and connection.say(*farewell, within_s=seconds * 0.6)
        connection.leave(seconds * 0.3)
        return sent

    def _tend(self) -> float:
        """See to the connection: notice its end, begin the next one. Seconds until there is something to see to."""
        now_s = self._clock.now().boot_s
        connection = self._connection
        if connection is not None:
            if connection.up_since is None and now_s - connection.began_s > CONNECT_LIMIT_S:
                connection.cut(f"no answer in {CONNECT_LIMIT_S:.0f} s, not even a refusal")
            if not connection.over.is_set() and connection.alive:
                return TEND_S
            self._ended(connection, now_s)
        if now_s >= self._due_s:
            ended = [stray for stray in self._strays if not stray.alive]
            for stray in ended:
                stray.release()
            self._strays = [stray for stray in self._strays if stray not in ended]
            if len(self._strays) < STRAYS:
                self._begin(now_s)
                return TEND_S
            self._due_s = now_s + self._settings.backoff_s[1]
        return self._due_s - now_s

    def _begin(self, now_s: float) -> None:
        self._number += 1
        try:
            self._connection = Connection(self._settings, self._number, self._inlet, self._clock)
        except BrokerError as error:
            self._inlet.put(Disconnected(str(error)))
            self._postpone(now_s)

    def _ended(self, connection: Connection, now_s: float) -> None:
        # Told by no callback, paho's thread has died of an exception in its own code.
        connection.tell("the network thread of the MQTT library died")
        self._strays.append(connection)
        self._connection = None
        if connection.up_since is not None and now_s - connection.up_since >= self._settings.steady_s:
            self._failures = 0
        self._postpone(now_s)

    def _postpone(self, now_s: float) -> None:
        self._due_s = now_s + reconnect_delay(self._settings.client_id, self._failures, *self._settings.backoff_s)
        self._failures += 1
