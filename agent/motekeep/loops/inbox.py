"""What comes down from the broker: requests to send again, receipts of an archive.

Owns their reading and the queue of resend requests. What comes in is not trusted: a payload that makes no sense is
logged, counted and forgotten, and nothing raises. A new kind of message is one more entry in the table of topics.
"""

from collections import deque
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass

import structlog
from pydantic import ValidationError

from motekeep.edges.ports import Received
from motekeep.message.documents import ResendRequest, TakenReceipt
from motekeep.message.topics import Topics

log = structlog.get_logger()

# An archive that has lost a disk asks once for each sensor and hole; whoever asks more often waits and asks again.
RESENDS_MOST = 16


@dataclass(frozen=True, slots=True)
class Standing:
    """Reads a topic whose retained message stands until it is replaced: its age says nothing against it."""

    read: Callable[[bytes], None]


# What reads a topic that this inbox does not read itself; the plain kind is for news only.
Other = Callable[[bytes], None] | Standing

SEQ_MOST = 2**63 - 1  # what the journal can look up


@dataclass(slots=True)
class Resend:
    """A request on its way to being answered: sequence numbers that are still to be sent."""

    sensor: str
    next_seq: int
    to_seq: int


class Inbox:
    """`taken` is called with sensor and sequence number for every receipt; it says what is wrong with it, if so.

    `others` are further topics with what reads them; such a reader raises ValueError for a bad payload.
    """

    def __init__(
        self,
        topics: Topics,
        sensors: Sequence[str],
        taken: Callable[[str, int], str | None],
        others: Mapping[str, Other] | None = None,
    ) -> None:
        self.resends: deque[Resend] = deque()
        self.bad = 0
        self._sensors = frozenset(sensors)
        self._taken = taken
        self._readers: Mapping[str, Callable[[Received], str | None]] = {
            topics.resend: self._read_resend,
            **{topics.taken(sensor): self._reader_of_taken(sensor) for sensor in sensors},
            **{topic: self._reader_of_other(read) for topic, read in (others or {}).items()},
        }

    def receive(self, message: Received) -> bool:
        """Whether it made sense."""
        reader = self._readers.get(message.topic)
        if reader is None:
            return self._refuse(message, "no such topic or sensor here")
        if not message.payload:
            return True  # how a retained message is taken back
        try:
            why = reader(message)
        except ValidationError as error:
            fault = error.errors(include_url=False, include_input=False)[0]
            where = ".".join(str(part) for part in fault["loc"])
            why = f"{where}: {fault['msg']}" if where else fault["msg"]
        except ValueError as error:
            why = str(error)
        return self._refuse(message, why) if why else True

    def forget(self) -> None:
        """The connection is gone, and with it whoever asked; they ask again if they still want it."""
        self.resends.clear()

    @staticmethod
    def _reader_of_other(other: Other) -> Callable[[Received], str | None]:
        """What only counts while it is news is passed over when it was retained: it may be of any age."""
        standing, read = (True, other.read) if isinstance(other, Standing) else (False, other)

        def reader(message: Received) -> str | None:
            if standing or not message.retained:
                read(message.payload)
            return None

        return reader

    def _read_resend(self, message: Received) -> str | None:
        request = ResendRequest.model_validate_json(message.payload)
        to_seq = min(request.to_seq, SEQ_MOST)
        if message.retained:
            return "a resend request must not be retained: it would be answered anew at every connection"
        if request.sensor not in self._sensors:
            return f"no sensor {request.sensor[:100]!r} here"
        if to_seq < request.from_seq:
            return "to_seq is below from_seq"
        if any(
            r.sensor == request.sensor and r.next_seq <= request.from_seq and to_seq <= r.to_seq for r in self.resends
        ):
            return None  # on its way already
        if len(self.resends) >= RESENDS_MOST:
            return f"{RESENDS_MOST} requests wait already"
        log.info("resend.asked", sensor=request.sensor, from_seq=request.from_seq, to_seq=to_seq)
        self.resends.append(Resend(request.sensor, request.from_seq, to_seq))
        return None

    def _reader_of_taken(self, sensor: str) -> Callable[[Received], str | None]:
        def read(message: Received) -> str | None:
            return self._taken(sensor, TakenReceipt.model_validate_json(message.payload).through_seq)

        return read

    def _refuse(self, message: Received, why: str) -> bool:
        self.bad += 1
        # One line for the first of each power of two: a flood of nonsense must not fill the log.
        if self.bad & (self.bad - 1) == 0:
            log.warning("inbox.refused", topic=message.topic[:200], why=why, bytes=len(message.payload), count=self.bad)
        return False


def down_filters(topics: Topics) -> tuple[str, ...]:
    """What the broker edge subscribes to for this inbox."""
    return topics.resend, topics.taken("+"), topics.calibration_offer("+")
