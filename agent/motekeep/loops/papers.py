"""What leaves the gateway beside readings: retained documents (the latest wins) and notices (all of them, in order).

Owns the slots of retained documents, the notices in flight, and how either is held when the broker refuses it.
"""

from threading import Lock

import structlog

from motekeep.edges.ports import JournalReader, NoticeRow
from motekeep.loops.lanes import STRIKES, Hold, size
from motekeep.loops.outbox import TOO_LARGE, Outbox
from motekeep.loops.window import Flight, Way

log = structlog.get_logger()

NOTICE_PAGE = 50
NOTICES_IN_FLIGHT = 4  # they are rare; more would only crowd out readings


class Papers:
    """Belongs to the publisher's thread, except `post`."""

    def __init__(self, outbox: Outbox, journal: JournalReader) -> None:
        self._outbox = outbox
        self._journal = journal
        self._holds: dict[str, Hold] = {}  # by topic; a gateway has a handful
        self._flying: set[int] = set()  # ids of notices, bounded by NOTICES_IN_FLIGHT
        self._strikes: tuple[int, int] = (0, 0)  # the notice that last ended a link, and how often in a row
        self._retained: dict[str, str] = {}  # one slot a topic
        self._unsent: set[str] = set()
        self._lock = Lock()

    def post(self, topic: str, body: str) -> None:
        """From any thread. Replaces a document of the same topic that has not left yet."""
        with self._lock:
            self._retained[topic] = body
            self._unsent.add(topic)

    def opened(self) -> None:
        """A new connection: the broker may have forgotten what it had retained, so everything goes again."""
        self._flying.clear()
        with self._lock:
            self._unsent = set(self._retained)

    def forgive(self) -> None:
        """The broker may have changed its mind: no topic is held."""
        self._holds.clear()

    def send_retained(self, now_s: float) -> None:
        outbox = self._outbox
        for topic in sorted(self._unsent):
            if outbox.full() or self._hold(topic).blocked(now_s) or outbox.flies(Way.RETAINED, topic):
                continue
            with self._lock:
                self._unsent.discard(topic)
                body = self._retained[topic]
            if size(body) > outbox.room(topic):
                outbox.ledger.refusing(topic, TOO_LARGE)
            else:
                outbox.send(Flight(Way.RETAINED, topic, now_s), body, retain=True)

    def send_notices(self, now_s: float) -> None:
        """In order; a refused topic does not keep back the others."""
        outbox, after_id = self._outbox, 0
        while page := self._journal.notices(after_id, NOTICE_PAGE):
            for notice in page:
                after_id, topic = notice.id, notice.topic
                if outbox.full() or len(self._flying) >= NOTICES_IN_FLIGHT:
                    return
                hold = self._hold(topic)
                probe_flies = hold.probing and outbox.flies(Way.NOTICE, topic)
                if notice.id in self._flying or hold.blocked(now_s) or probe_flies:
                    continue
                if size(notice.body) > outbox.room(topic):
                    self._set_aside(notice, TOO_LARGE)
                elif outbox.send(Flight(Way.NOTICE, topic, now_s, notice=notice), notice.body):
                    self._flying.add(notice.id)

    def passed(self, flight: Flight) -> None:
        self._hold(flight.topic).passed()
        if flight.notice is not None:
            self._flying.discard(flight.notice.id)
            self._journal.mark_notices([flight.notice])

    def refused(self, flight: Flight, now_s: float) -> None:
        self._hold(flight.topic).refused(flight.sent_s, now_s)
        if flight.notice is not None:
            self._flying.discard(flight.notice.id)
        else:
            with self._lock:
                self._unsent.add(flight.topic)

    def ended_link(self, flight: Flight, why: str) -> None:
        """The link broke with this notice as its oldest unanswered message; at the third time it is given up."""
        if flight.notice is None:
            return
        before = self._strikes[1] if self._strikes[0] == flight.notice.id else 0
        self._strikes = flight.notice.id, before + 1
        if before + 1 >= STRIKES:
            self._set_aside(flight.notice, why)

    def _set_aside(self, notice: NoticeRow, why: str) -> None:
        self._journal.mark_notices([notice])
        self._outbox.ledger.counted("set_aside")
        log.warning("notice.set_aside", topic=notice.topic, id=notice.id, bytes=size(notice.body), why=why)

    def _hold(self, topic: str) -> Hold:
        return self._holds.setdefault(topic, Hold())
