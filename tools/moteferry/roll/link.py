"""The broker, from the operator's side: offers go out in a bounded window, answers come in.

Owns the window, what is unanswered when a link breaks, and the words of the command line for what the broker refuses.
The connection itself is the agent's (`motekeep.edges.broker`), without a will. Must not know what a message means.
"""

import secrets
import time
from collections import deque
from collections.abc import Callable, Iterable
from dataclasses import dataclass, replace

from moteferry.roll.offer import RollError
from motekeep.edges.broker import MqttBroker
from motekeep.edges.login import BrokerSettings
from motekeep.edges.ports import Acknowledged, Connected, Disconnected, Received, SubscriptionRefused
from motekeep.errors import BrokerError
from motekeep.instant import Instant

# Beyond this loopback gets no faster, and at 100 ms round trip it is 400 offers a second.
WINDOW = 50
# Health and state of ten thousand gateways at once, some 4 kB each; what did not fit would come again on reconnection.
INLET_BYTES = 64 * 1024 * 1024
# A laptop that slept this long has lost its connection, whatever the library believes.
SLEPT_S = 30.0
# Events taken before the caller gets a turn: it writes them to disk in one transaction.
BATCH = 500

WORDS = {
    "look at [broker] username, password_file and tls.cert": "look at --username, --password-file and --tls-cert",
    "look at [broker] tls.ca and at this gateway's clock": "look at --tls-ca and at this computer's clock",
    "look at [broker] tls.cert and tls.key": "look at --tls-cert and --tls-key",
    "look at [broker] host and at the network": "look at --broker and at the network",
    "mend [broker] host and port": "mend --broker",
    "mend [broker] host": "mend --broker",
    "see [broker] password_file": "see --password-file",
    "see [broker] tls": "see --tls-ca, --tls-cert and --tls-key",
}


@dataclass(frozen=True, slots=True)
class Came:
    """A message from the fleet."""

    topic: str
    payload: bytes
    retained: bool


@dataclass(frozen=True, slots=True)
class Taken:
    """The broker has the message that was sent on `topic`; with `refusal` (in words) it has not."""

    topic: str
    refusal: str | None


@dataclass(frozen=True, slots=True)
class Up:
    """Connected, for the `number`th time."""

    number: int


@dataclass(frozen=True, slots=True)
class Down:
    why: str


LinkEvent = Came | Taken | Up | Down


class WorkstationClock:
    """The one clock that a connection asks for: seconds for durations. Of no operating system in particular."""

    def now(self) -> Instant:
        return Instant(time.time(), time.monotonic(), "0" * 32, trusted=True)

    def wait(self, event: object, seconds: float) -> bool:
        raise NotImplementedError  # a link waits for events only


class Link:
    """One broker for the time of a roll. All methods belong to one thread."""

    def __init__(self, settings: BrokerSettings, clock: Callable[[], float] = time.time) -> None:
        own = replace(
            settings,
            client_id=settings.client_id or f"moteferry-{secrets.token_hex(6)}",
            filter_qos=0,
            inlet_bytes=INLET_BYTES,
            backoff_s=(0.5, 15.0),
        )
        self._where = f"{own.host}:{own.port}"
        self._broker = MqttBroker(own, WorkstationClock())
        self._wall = clock
        self._waiting: deque[tuple[str, str]] = deque()
        self._in_flight: dict[int, tuple[str, str]] = {}
        self._window = WINDOW
        self._largest: int | None = None
        self._count = 0
        self._ever = False
        self._turned = (self._wall(), time.monotonic())
        self.up_since: float | None = None  # monotonic seconds

    def start(self) -> None:
        try:
            self._broker.start()
        except BrokerError as error:
            raise _said(error) from error

    def stop(self) -> None:
        self._broker.stop(None, 3.0)

    @property
    def idle(self) -> bool:
        """Whether all that was sent has been answered by the broker."""
        return not self._waiting and not self._in_flight

    @property
    def listening_s(self) -> float:
        """Seconds since the link came up; 0 without one."""
        return time.monotonic() - self.up_since if self.up_since is not None else 0.0

    def send(self, messages: Iterable[tuple[str, str]]) -> None:
        """Retained, QoS 1, in order, as the window lets them."""
        self._waiting.extend(messages)
        self._fill()

    def drop_waiting(self) -> list[str]:
        """Topics of what has not been handed to the broker yet, and will not be."""
        topics = [topic for topic, _ in self._waiting]
        self._waiting.clear()
        return topics

    def events(self, timeout_s: float) -> list[LinkEvent]:
        """What happened, waiting at most `timeout_s` for the first. Raises BrokerError when the broker does not want
        us, or could not be reached even once."""
        self._notice_sleep()
        found: list[LinkEvent] = []
        while len(found) < BATCH:
            event = self._broker.event(0.0 if found else timeout_s)
            if event is None:
                break
            match event:
                case Received(topic, payload, retained):
                    found.append(Came(topic, payload, retained))
                case Acknowledged(mid, refusal, _):
                    sent = self._in_flight.pop(mid, None)
                    if sent is not None:
                        found.append(Taken(sent[0], refusal))
                case Connected(receive_maximum, maximum_packet):
                    found.append(self._up(receive_maximum, maximum_packet))
                case Disconnected(why, refused):
                    found.append(self._down(why, refused=refused))
                case SubscriptionRefused(topic_filter, why):
                    raise BrokerError(f"listening to {topic_filter}", why, "let this login read it at the broker")
        self._fill()
        return found

    def _up(self, receive_maximum: int, maximum_packet: int | None) -> Up:
        self._window = min(WINDOW, receive_maximum)
        self._largest = maximum_packet
        self._count += 1
        self._ever = True
        self.up_since = time.monotonic()
        return Up(self._count)

    def _down(self, why: str, *, refused: bool) -> Down:
        if refused or not self._ever:
            raise BrokerError(
                f"connecting to the broker {self._where}", _words(why), "look at --broker HOST:PORT and at TLS"
            )
        self.up_since = None
        # unanswered: sent again, before the rest; the same bytes on the same topic do no harm twice
        self._waiting.extendleft(reversed(self._in_flight.values()))
        self._in_flight.clear()
        return Down(_words(why))

    def _fill(self) -> None:
        while self._waiting and self.up_since is not None and len(self._in_flight) < self._window:
            topic, body = self._waiting[0]
            size = len(topic) + len(body.encode()) + 32
            if self._largest is not None and size > self._largest:
                raise RollError(f"sending on {topic}", f"the broker takes {self._largest} bytes", "raise its limit")
            mid = self._broker.publish(topic, body, retain=True)
            if mid is None:
                return
            self._in_flight[mid] = self._waiting.popleft()

    def _notice_sleep(self) -> None:
        wall, steady = self._wall(), time.monotonic()
        slept = (wall - self._turned[0]) - (steady - self._turned[1])
        self._turned = (wall, steady)
        if slept > SLEPT_S and self.up_since is not None:
            self._broker.drop(f"this computer slept for {slept / 60:.0f} min")


def _words(text: str) -> str:
    for of_agent, of_command in WORDS.items():
        text = text.replace(of_agent, of_command)
    return text


def _said(error: BrokerError) -> BrokerError:
    return BrokerError(error.attempted, error.why, _words(error.mend))
