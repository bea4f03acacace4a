"""The interfaces that loops know; each is met by one file of this folder and by a fake in the tests.

Owns the shapes, no behaviour.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from threading import Event
from typing import NamedTuple, Protocol

from motekeep.instant import Instant


class Clock(Protocol):
    """Both clocks of the gateway and the only way to wait."""

    def now(self) -> Instant: ...

    def wait(self, event: Event, seconds: float) -> bool:
        """Wait for `event`, at most `seconds` by the monotonic clock; whether it is set."""
        ...


class Line(Protocol):
    """An open serial line. Every method raises PortError once the line is lost."""

    def read(self, timeout_s: float) -> bytes:
        """All that came with the next burst of bytes; empty when none came in `timeout_s`."""
        ...

    def write(self, data: bytes) -> None: ...

    def close(self) -> None: ...


class LineOpener(Protocol):
    def __call__(self, port: str, baud: int) -> Line: ...


@dataclass(frozen=True, slots=True)
class NewReading:
    """A reading on its way into the journal. `seq` must be the sensor's next one; `start` is Unix seconds."""

    sensor: str
    seq: int
    boot_id: str
    boot_s: float
    start: float
    seconds: float
    clock: str
    flag: int
    body: str


@dataclass(frozen=True, slots=True)
class Notice:
    """A finding or amendment on its way out: durable, in order, not numbered. `topic` is complete."""

    topic: str
    body: str


@dataclass(frozen=True, slots=True)
class NewService:
    """A service record on its way into the journal; `at` is Unix seconds, `body` its document. One whose `id` is there
    already is the same one."""

    id: str
    sensor: str
    at: float
    kind: str
    body: str


@dataclass(frozen=True, slots=True)
class Batch:
    """All that one interval adds, for every sensor: one transaction."""

    readings: Sequence[NewReading] = ()
    notices: Sequence[Notice] = ()
    keep: Mapping[str, str] = field(default_factory=dict)
    services: Sequence[NewService] = ()


class Row(NamedTuple):
    """A stored reading as the publisher sees it; `from_seq` differs from `seq` only when merged.

    A tuple and no frozen dataclass: a backlog is made of ten thousands, and a tuple costs less to make.
    """

    sensor: str
    seq: int
    from_seq: int
    boot_id: str
    boot_s: float
    seconds: float
    clock: str
    body: str


@dataclass(frozen=True, slots=True)
class NoticeRow:
    id: int
    topic: str
    body: str


@dataclass(frozen=True, slots=True)
class StoreState:
    """The journal for the health document. `lost` counts each kind of lost detail since the journal began."""

    waiting: int
    oldest_waiting: float | None
    bytes: int
    disk_free: int | None
    lost: Mapping[str, int]
    degraded: str | None
    full: bool
    in_memory: int


class JournalWriter(Protocol):
    """The writing side; bound to the thread that opened it."""

    @property
    def life(self) -> int:
        """How many times a daemon has started with this journal."""
        ...

    def next_seq(self, sensor: str) -> int: ...

    def kept(self, name: str) -> str | None:
        """What was last committed under this name in `Batch.keep`."""
        ...

    def has_service(self, id_: str) -> bool:
        """Whether the service record with this id is durable."""
        ...

    def commit(self, batch: Batch, at: Instant) -> None:
        """One transaction, durable when this returns. On a store that cannot take it the batch is held in bounded
        memory, offered to the publisher all the same, and written when the store can again; never raises for that."""
        ...

    def flush(self, at: Instant) -> None:
        """Write what only memory knows: marks, and what a failing store has held back. Never raises for the store."""
        ...

    def pending_marks(self) -> int:
        """Marks that are not written yet; a crash repeats that many rows. Past a few thousand call `flush`."""
        ...

    def restamp(self, at: Instant) -> list[Notice]:
        """With a trusted clock: stamp this boot's unsynced readings `corrected` and earlier boots' `bounded`.

        At most a bounded number of them a call; every `commit` goes on with the rest. The amendments of those that had
        gone out already are stored in the same transaction: returned for the log, not to be committed again."""
        ...

    def prune(self, at: Instant) -> None: ...

    def state(self) -> StoreState: ...

    def close(self) -> None: ...


class JournalReader(Protocol):
    """The publisher's side; any thread, one object a thread. Marks are kept in memory and written with the next
    commit, so a crash sends a bounded number of rows twice and loses none."""

    def waiting(self, sensor: str, after_seq: int, limit: int) -> list[Row]:
        """Rows that wait for delivery, oldest first, past `after_seq`; rows marked since are left out."""
        ...

    def notices(self, after_id: int, limit: int) -> list[NoticeRow]: ...

    def stored(self, sensor: str, from_seq: int, to_seq: int, limit: int) -> list[Row]:
        """Rows in a range whatever their state, for `resend`."""
        ...

    def mark_delivered(self, rows: Sequence[Row]) -> None: ...

    def mark_sent(self, rows: Sequence[Row]) -> None:
        """The broker took them, an archive has not said so yet (`receipt = "taken"`)."""
        ...

    def mark_aside(self, rows: Sequence[Row]) -> None:
        """The broker keeps refusing them: no longer waiting, kept for `resend`, counted as lost detail."""
        ...

    def mark_taken(self, sensor: str, through_seq: int) -> None: ...

    def mark_notices(self, rows: Sequence[NoticeRow]) -> None: ...


class CaptureStore(Protocol):
    """Where what a failing sensor said is kept for whoever looks into it."""

    def keep(self, name: str, text: str) -> None:
        """Write a capture under this file name; the oldest go beyond a limit. Raises StoreError."""
        ...


@dataclass(frozen=True, slots=True)
class Connected:
    """The broker accepted us; its limits (`receive_maximum` messages in flight, `maximum_packet` bytes)."""

    receive_maximum: int
    maximum_packet: int | None


@dataclass(frozen=True, slots=True)
class Disconnected:
    """The link is gone, or was never made; `why` in words. `refused`: the broker answered and does not let us in."""

    why: str
    refused: bool = False


@dataclass(frozen=True, slots=True)
class Acknowledged:
    """The broker answered message `mid`. `refusal` is None for success, else the reason in words; `code` as sent."""

    mid: int
    refusal: str | None
    code: int


@dataclass(frozen=True, slots=True)
class Received:
    """A message came down. `retained` says that the broker had kept it, so it may be old."""

    topic: str
    payload: bytes
    retained: bool = False


@dataclass(frozen=True, slots=True)
class SubscriptionRefused:
    """The broker lets us hear nothing under `topic_filter`; `why` is its reason code in words."""

    topic_filter: str
    why: str


BrokerEvent = Connected | Disconnected | Acknowledged | Received | SubscriptionRefused


class Broker(Protocol):
    """The MQTT client. Nothing is queued in it: `publish` fails when there is no connection."""

    def start(self) -> None:
        """Begin to connect and keep connecting, with backoff and jitter. Raises BrokerError on unusable settings."""
        ...

    def event(self, timeout_s: float) -> BrokerEvent | None:
        """The next event, None when none came in time or `wake` was called."""
        ...

    def wake(self) -> None:
        """Make a waiting `event` return; from any thread."""
        ...

    def publish(self, topic: str, body: str, *, retain: bool = False) -> int | None:
        """Send with QoS 1; the message id to expect in Acknowledged, None when it could not be handed over."""
        ...

    def drop(self, why: str) -> None:
        """Give this connection up, whatever state it is in: Disconnected(why) follows, then a fresh attempt."""
        ...

    def stop(self, farewell: tuple[str, str] | None, seconds: float) -> bool:
        """Publish a last retained (topic, body), disconnect, be back within `seconds`; whether it was sent."""
        ...
