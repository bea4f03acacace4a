"""The publisher: everything that leaves the gateway, in one thread, judged by what the broker answers.

Owns the loop, the order (retained documents, live readings, notices, then the backlog), the watch on progress and the
goodbye. Knows the journal and the broker by their ports. A row counts as delivered only by an answer with a success
code, or by an archive's receipt, never by what the client library believes of its connection.
"""

from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from threading import Event

import structlog

from motekeep.edges.ports import (
    Acknowledged,
    Broker,
    BrokerEvent,
    Clock,
    Connected,
    Disconnected,
    JournalReader,
    Received,
    SubscriptionRefused,
)
from motekeep.errors import BrokerError, StoreError
from motekeep.instant import Instant
from motekeep.loops.backoff import Backoff
from motekeep.loops.inbox import Other
from motekeep.loops.link import LinkFacts, LinkLedger
from motekeep.loops.outbox import Outbox
from motekeep.loops.papers import Papers
from motekeep.loops.rows import Rows, RowSettings
from motekeep.message.topics import Topics

log = structlog.get_logger()

LOOK_EVERY_S = 5.0  # what nobody announces (a reading grown old, a hold run out) is seen this often
TURN_S = 1.0  # longest wait for an event, so that a stop is noticed even if nobody wakes us
EVENTS_A_TURN = 200
LEAVE_ANSWERS_S, LEAVE_LINK_S = 0.3, 1.4  # together under the 2 s that a stop may take
NO_MATCHING_SUBSCRIBERS = 0x10  # MQTT 5 section 3.4.2.1: a success code


@dataclass(frozen=True, slots=True)
class PublisherSettings:
    """`window` is messages in flight, if the broker allows as many. A link that owes answers for `stall_s` is dropped:
    more than the two keepalives in which an idle one is noticed."""

    rows: RowSettings
    window: int = 20
    stall_s: float = 90.0


class Publisher:
    """`run` returns within 2 s of `stop` being set and `wake` called.

    Whoever commits to the journal calls `wake`; whoever has a new retained document calls `post`. `farewell` makes the
    last health document. `others` are further topics, with what takes their payloads.
    """

    def __init__(  # noqa: PLR0913 (the ports that it joins, each injected)
        self,
        settings: PublisherSettings,
        topics: Topics,
        sensors: Sequence[str],
        *,
        journal: JournalReader,
        broker: Broker,
        clock: Clock,
        stop: Event,
        farewell: Callable[[Instant], str],
        others: Mapping[str, Other] | None = None,
    ) -> None:
        now = clock.now()
        self._settings = settings
        self._topics = topics
        self._broker = broker
        self._clock = clock
        self._stop = stop
        self._farewell = farewell
        self._ledger = LinkLedger(now)
        self._outbox = Outbox(broker, self._ledger, settings.window)
        self._papers = Papers(self._outbox, journal)
        self._rows = Rows(settings.rows, topics, sensors, self._outbox, journal, others)
        self._dropped_by_us = False
        self._ended_by_refusal = False
        self._fresh = True
        self._looked_s = now.boot_s
        self._journal_due_s = now.boot_s
        self._link_trouble = Backoff(log, "link")
        self._journal_trouble = Backoff(log, "uplink_journal")
        self._refusal_trouble = Backoff(log, "uplink")
        self.ticked = now.boot_s

    # -- for other threads --------------------------------------------------------------------------------------

    def wake(self) -> None:
        """The journal has something new, or `stop` was set."""
        self._fresh = True
        self._broker.wake()

    def post(self, topic: str, body: str) -> None:
        """A retained document. It replaces one of the same topic that has not left yet, and is sent again at each
        connection."""
        self._papers.post(topic, body)
        self._broker.wake()

    def facts(self, now: Instant) -> LinkFacts:
        return self._ledger.facts(now)

    # -- the loop -----------------------------------------------------------------------------------------------

    def run(self) -> None:
        self._broker.start()
        wait_s = 0.0
        while not self._stop.is_set():
            self._hear(wait_s)
            now = self._clock.now()
            self.ticked = now.boot_s
            self._watch(now)
            wait_s = self._work(now)
        self._leave()

    def _hear(self, wait_s: float) -> None:
        event = self._broker.event(wait_s)
        for _ in range(EVENTS_A_TURN):
            if event is None:
                return
            self._take(event)
            event = self._broker.event(0.0)

    def _work(self, now: Instant) -> float:
        """Send whatever may go now. Seconds until there may be more without an event."""
        if self._outbox.window is None:
            return TURN_S
        self._papers.send_retained(now.boot_s)
        if now.boot_s < self._journal_due_s:
            return TURN_S
        wait_s = None
        with self._journal_may_fail():
            if self._fresh or now.boot_s - self._looked_s >= LOOK_EVERY_S:
                self._fresh = False
                self._looked_s = now.boot_s
                self._rows.send_live(now)
                self._papers.send_notices(now.boot_s)
            wait_s = self._rows.send_late(now)
            self._journal_trouble.recovered()
        return TURN_S if wait_s is None else min(wait_s, TURN_S)

    @contextmanager
    def _journal_may_fail(self) -> Iterator[None]:
        try:
            yield
        except StoreError as error:
            now_s = self._clock.now().boot_s
            self._journal_due_s = now_s + self._journal_trouble.failed(error, now_s)
            self._fresh = True

    def _watch(self, now: Instant) -> None:
        """Progress is what counts: a link that owes answers for too long is given up."""
        window = self._outbox.window
        if window is not None and not self._dropped_by_us and window.owed_s(now.boot_s) > self._settings.stall_s:
            self._dropped_by_us = True
            self._ledger.stalled()
            self._broker.drop(
                f"no answer for {window.owed_s(now.boot_s):.0f} s while {len(window)} messages wait for one"
            )

    def _leave(self) -> None:
        """Take in the answers that are on their way, say goodbye, disconnect."""
        deadline_s = self._clock.now().boot_s + LEAVE_ANSWERS_S
        while self._outbox.window and (left_s := deadline_s - self._clock.now().boot_s) > 0:
            if (event := self._broker.event(left_s)) is not None:
                self._take(event)
        said = self._broker.stop((self._topics.health, self._farewell(self._clock.now())), LEAVE_LINK_S)
        while (event := self._broker.event(0.0)) is not None:
            if isinstance(event, Acknowledged):
                self._take(event)
        log.info("link.closed", farewell=said)

    # -- what the broker says -----------------------------------------------------------------------------------

    def _take(self, event: BrokerEvent) -> None:
        now = self._clock.now()
        with self._journal_may_fail():
            match event:
                case Acknowledged():
                    self._answered(event, now)
                case Connected():
                    self._connected(event, now)
                case Disconnected():
                    self._disconnected(event, now)
                case Received():
                    self._ledger.counted("bad_requests", not self._rows.inbox.receive(event))
                case SubscriptionRefused():
                    self._ledger.refusing(event.topic_filter, event.why)
                    log.warning("link.subscription_refused", filter=event.topic_filter, why=event.why)

    def _connected(self, event: Connected, now: Instant) -> None:
        window = self._outbox.opened(event)
        self._dropped_by_us = False
        self._fresh = True
        self._ledger.connected(now)
        self._link_trouble.recovered()
        log.info("link.connected", window=window.most, maximum_packet_bytes=event.maximum_packet)
        self._papers.opened()
        self._rows.opened()
        if not self._ended_by_refusal:
            self._ledger.forgive()
            self._papers.forgive()
            self._rows.forgive()

    def _disconnected(self, event: Disconnected, now: Instant) -> None:
        window = self._outbox.closed()
        self._rows.closed()
        self._ledger.disconnected(now, event.why, refused=event.refused)
        self._link_trouble.failed(BrokerError("the link to the broker", event.why, ""), now.boot_s)
        if window is None:
            self._ended_by_refusal = False  # it has been away since
            return  # a connection that was never made says nothing about messages
        # mosquitto 2.0.11, Debian's, answers a publish that its access rules refuse, and then hangs up
        self._ended_by_refusal = window.last_was_refusal
        head = window.oldest()
        if head is None or self._ended_by_refusal or self._dropped_by_us or not window.answers:
            return  # for all we can tell it was the line; no message is to blame
        if head.rows:
            self._rows.ended_link(head, event.why)
        else:
            self._papers.ended_link(head, event.why)

    def _answered(self, event: Acknowledged, now: Instant) -> None:
        window = self._outbox.window
        flight = (
            window.answered(event.mid, now.boot_s, refused=event.refusal is not None) if window is not None else None
        )
        if window is None or flight is None:
            return
        unheard = event.code == NO_MATCHING_SUBSCRIBERS
        self._ledger.answered(now, flight.topic, event.refusal, unheard=unheard, in_flight=len(window))
        if not flight.rows:
            self._fresh = True  # a further notice, or a newer document of the same topic, may wait
        if event.refusal is None:
            self._refusal_trouble.recovered()
            if flight.rows:
                self._rows.passed(flight, now.boot_s)
            else:
                self._papers.passed(flight)
            return
        error = BrokerError(
            f"publishing on {flight.topic}",
            event.refusal,
            "look at the broker's access rules and quota for this gateway",
        )
        self._refusal_trouble.failed(error, now.boot_s)
        if flight.rows:
            self._rows.refused(flight, event.refusal, now.boot_s)
        else:
            self._papers.refused(flight, now.boot_s)
