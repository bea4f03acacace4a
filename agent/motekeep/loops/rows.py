"""Readings on their way out: live ones at once, the backlog behind them, and what was asked for again.

Owns which row goes by which way and when, and what an answer means for it in the journal. How a batch is chosen and
what happens to a row that does not get through stands in `lanes`.
"""

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass

import structlog

from motekeep.edges.ports import JournalReader, Row
from motekeep.instant import Instant
from motekeep.loops.inbox import Inbox, Other, Resend
from motekeep.loops.lanes import Lane, late_body, size
from motekeep.loops.outbox import TOO_LARGE, Outbox
from motekeep.loops.window import Allowance, Flight, Way
from motekeep.message.topics import Topics

log = structlog.get_logger()

LIVE_S = 30.0  # a reading that ended longer ago than this is no news but backlog; half an interval when that is less
LIVE_PAGE = 10
LOOK_BACK = 2  # rows of the present there can be at most, and one
ALL = 2**62


@dataclass(frozen=True, slots=True)
class RowSettings:
    """`receipt` is what counts as delivered: `puback` or `taken`. `late_rate` is late messages a second, 0 for no
    limit. That unsynced readings wait for the clock is the journal's doing."""

    interval_s: float
    receipt: str = "puback"
    late_rate: float = 5.0


class Rows:
    """Belongs to the publisher's thread."""

    def __init__(
        self,
        settings: RowSettings,
        topics: Topics,
        sensors: Sequence[str],
        outbox: Outbox,
        journal: JournalReader,
        others: Mapping[str, Other] | None = None,
    ) -> None:
        self.inbox = Inbox(topics, sensors, self._taken, others)
        self._settings = settings
        self._topics = topics
        self._outbox = outbox
        self._journal = journal
        self._mark_passed = journal.mark_sent if settings.receipt == "taken" else journal.mark_delivered
        self._lanes = {sensor: Lane(sensor) for sensor in sensors}
        self._turns = list(sensors)  # whose turn it is on late
        self._late_ways: tuple[Callable[[Instant], bool], ...] = (self._send_backlog, self._send_again)
        self._allowance = Allowance(settings.late_rate)

    def opened(self) -> None:
        """A new connection: nothing is on its way."""
        for lane in self._lanes.values():
            lane.restart()
            lane.newest = self._newest(lane)
            lane.live_from = lane.live_after = max(lane.newest - LOOK_BACK, 0)

    def forgive(self) -> None:
        """The broker may have changed its mind: no topic is held."""
        for lane in self._lanes.values():
            lane.forgive()

    def closed(self) -> None:
        self.inbox.forget()

    # -- sending ------------------------------------------------------------------------------------------------

    def send_live(self, now: Instant) -> None:
        """Look for new rows and send those of the present. Wakes the backlog as well."""
        for lane in self._lanes.values():
            lane.look_again()
            self._send_live_of(lane, now)

    def _send_live_of(self, lane: Lane, now: Instant) -> None:
        topic = self._topics.reading(lane.sensor)
        while page := self._journal.waiting(lane.sensor, lane.live_after, LIVE_PAGE):
            for row in page:
                lane.newest = max(lane.newest, row.seq)
                if self._is_live(row, now) and row.seq not in lane.flying:
                    if self._outbox.full() or lane.live.blocked(now.boot_s):
                        return
                    if size(row.body) > self._outbox.room(topic):
                        self._give_up(lane, row, TOO_LARGE)
                    elif self._outbox.send(Flight(Way.LIVE, topic, now.boot_s, lane.sensor, (row,)), row.body):
                        lane.sent((row,))
                    else:
                        return
                lane.live_after = row.seq

    def send_late(self, now: Instant) -> float | None:
        """The backlog and what was asked for again, in turn, until something says stop. Seconds until the rate allows
        more, None when it is not the rate that said stop."""
        while not self._outbox.backlog_full():
            if wait_s := self._allowance.wait_s(now.boot_s):
                return wait_s
            first, second = self._late_ways
            if first(now):
                self._late_ways = second, first
            elif not second(now):
                return None
            self._allowance.take()
        return None

    def _send_backlog(self, now: Instant) -> bool:
        """One late message of the next sensor that has one."""

        for sensor in self._turns:
            lane, topic = self._lanes[sensor], self._topics.late(sensor)
            most, live_from = self._outbox.pace.rows, lane.live_from

            def ready(row: Row, live_from: int = live_from) -> bool:
                return row.seq <= live_from or not self._is_live(row, now)

            while not lane.idle and not self._late_held(lane, topic, now.boot_s):
                after_seq = lane.late_after
                page = self._journal.waiting(sensor, after_seq, most)
                pick = lane.pick(page, most, self._outbox.room(topic), ready)
                lane.idle = not pick.batch and lane.late_after == after_seq
                for row in pick.too_large:
                    self._give_up(lane, row, TOO_LARGE)
                if pick.batch:
                    self._turns = [other for other in self._turns if other != sensor] + [sensor]
                    return self._send_rows(Way.LATE, lane, topic, pick.batch, now.boot_s)
        return False

    def _send_again(self, now: Instant) -> bool:
        """One late message of the oldest resend request."""
        while self.inbox.resends:
            request = self.inbox.resends[0]
            lane, topic = self._lanes[request.sensor], self._topics.late(request.sensor)
            if self._late_held(lane, topic, now.boot_s):
                return False
            page = self._journal.stored(request.sensor, request.next_seq, request.to_seq, self._outbox.pace.rows)
            batch, request.next_seq = lane.pick_again(page, self._outbox.room(topic))
            if not page or request.next_seq > request.to_seq:
                self.inbox.resends.popleft()
            if batch:
                return self._send_rows(Way.AGAIN, lane, topic, batch, now.boot_s)
        return False

    def _late_held(self, lane: Lane, topic: str, now_s: float) -> bool:
        """Refused a moment ago, or the one probe of a refused topic is on its way."""
        outbox = self._outbox
        return lane.late.blocked(now_s) or (
            lane.late.probing and (outbox.flies(Way.LATE, topic) or outbox.flies(Way.AGAIN, topic))
        )

    def _send_rows(self, way: Way, lane: Lane, topic: str, batch: Sequence[Row], now_s: float) -> bool:
        sent = self._outbox.send(Flight(way, topic, now_s, lane.sensor, batch), late_body(batch))
        if sent and way is Way.LATE:
            lane.sent(batch)
        return sent

    # -- answers ------------------------------------------------------------------------------------------------

    def passed(self, flight: Flight, now_s: float) -> None:
        if flight.way is not Way.AGAIN:  # a row that is sent again keeps the state that it has
            self._mark_passed(flight.rows)
        lane, window = self._lanes[flight.sensor], self._outbox.window
        lane.passed(flight.rows, lane.live if flight.way is Way.LIVE else lane.late)
        if flight.way is not Way.LIVE and window is not None:
            self._outbox.pace.answered(flight.sent_s, now_s, window.backlog_most)

    def refused(self, flight: Flight, why: str, now_s: float) -> None:
        lane = self._lanes[flight.sensor]
        if flight.way is Way.AGAIN:
            lane.late.refused(flight.sent_s, now_s)
            if len(flight.rows) > 1:  # next time one by one; a row that is refused alone is left out
                self.inbox.resends.appendleft(Resend(flight.sensor, flight.rows[0].seq, flight.rows[-1].seq))
            return
        hold = lane.live if flight.way is Way.LIVE else lane.late
        self._set_aside(lane.refused(flight.rows, hold, flight.sent_s, now_s), why)

    def ended_link(self, flight: Flight, why: str) -> None:
        """The link broke with these as its oldest unanswered message."""
        doomed = self._lanes[flight.sensor].ended_link(flight.rows)
        if flight.way is not Way.AGAIN:
            self._set_aside(doomed, why)

    def _taken(self, sensor: str, through_seq: int) -> str | None:
        """An archive has stored all up to there. A number that this journal never reached is of another life."""
        lane = self._lanes[sensor]
        if through_seq > lane.newest:
            lane.newest = self._newest(lane)
        if through_seq > lane.newest:
            return f"through_seq {through_seq} is beyond our newest, {lane.newest}"
        self._journal.mark_taken(sensor, through_seq)
        return None

    def _give_up(self, lane: Lane, row: Row, why: str) -> None:
        lane.give_up(row)
        self._set_aside((row,), why)

    def _set_aside(self, rows: Sequence[Row], why: str) -> None:
        if rows:
            self._journal.mark_aside(rows)
            self._outbox.ledger.counted("set_aside", len(rows))
        for row in rows:
            log.warning("row.set_aside", sensor=row.sensor, seq=row.seq, bytes=size(row.body), why=why)

    # -- small questions ----------------------------------------------------------------------------------------

    def _newest(self, lane: Lane) -> int:
        """The sensor's highest sequence number, by doubling and halving: some twenty look-ups at the first time."""
        low, step = lane.newest, 1
        while rows := self._journal.stored(lane.sensor, low + step, ALL, 1):
            low, step = rows[0].seq, step * 2
        high = low + step
        while high - low > 1:
            middle = (low + high) // 2
            if rows := self._journal.stored(lane.sensor, middle, high, 1):
                low = rows[0].seq
            else:
                high = middle
        return low

    def _is_live(self, row: Row, now: Instant) -> bool:
        """Made in this boot, and ended so lately that it is the present. By the boot clock: the wall clock steps."""
        age_s = now.boot_s - row.boot_s - row.seconds
        return row.boot_id == now.boot_id and age_s <= min(LIVE_S, self._settings.interval_s / 2.0)
