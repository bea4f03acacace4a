"""What each sensor has on its way to the broker, and what to do with a row that does not get through.

Owns the choice of the next late batch, the order, and the rules below. Pure but for its own state: time, rows and
answers come in with the calls.

A refused topic is held: one probe at a time, after 1 s, then twice as long each time, up to 300 s. A pass ends it, and
so does a new connection, unless the last one ended by a refusal: some brokers hang up after each.
A refused or fatal batch is taken apart: its rows go alone until each has passed or was struck.
A row is struck when the broker refuses it alone, or when it was the oldest unanswered message of a connection that had
worked and that the broker's side ended. It is set aside at three strikes, if others of its topic have passed since the
first; a row that ends connections is set aside at three without that. Until then the others go first.
When four rows are struck and none has passed, it is the topic and no row: the strikes are forgotten, the hold stays.
"""

from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, field

from motekeep.edges.ports import Row

LATE_MOST = 100  # readings in one late message, as the schema of `late` says
HOLD_FIRST_S, HOLD_CAP_S = 1.0, 300.0
STRIKES = 3
SUSPECTS = 4
CONDEMNED = 1000  # more than that is no row's fault
HEAD, TAIL = '{"readings":[', "]}"
EMPTY = len(HEAD) + len(TAIL)


@dataclass(slots=True)
class Hold:
    """A topic that the broker refuses. `step_s` is 0 while it does not."""

    step_s: float = 0.0
    since_s: float = 0.0

    def refused(self, sent_s: float, now_s: float) -> None:
        """Answers to what was sent before the hold began are the same refusal, not a further one."""
        if self.step_s and sent_s < self.since_s:
            return
        self.step_s = min(self.step_s * 2, HOLD_CAP_S) if self.step_s else HOLD_FIRST_S
        self.since_s = now_s

    def passed(self) -> None:
        self.step_s = 0.0

    @property
    def probing(self) -> bool:
        return self.step_s > 0

    def blocked(self, now_s: float) -> bool:
        return self.step_s > 0 and now_s < self.since_s + self.step_s


@dataclass(slots=True)
class Strike:
    """How often a row did not get through, and how many batches of its topic had passed at its first and last time."""

    count: int
    first: int
    last: int


@dataclass(frozen=True, slots=True)
class Pick:
    """The next late batch (may be empty) and rows that can never fit."""

    batch: Sequence[Row]
    too_large: Sequence[Row]


def late_body(rows: Iterable[Row]) -> str:
    """The late document of stored bodies, as they are."""
    return HEAD + ",".join([row.body for row in rows]) + TAIL


def size(text: str) -> int:
    """Bytes of `text` in UTF-8."""
    return len(text) if text.isascii() else len(text.encode())


@dataclass(slots=True)
class Lane:
    """One sensor. Rows up to `live_after` and `late_after` have been looked at by the live and the late way; those up
    to `live_from` are the late way's, however young."""

    sensor: str
    newest: int = 0
    live_from: int = 0
    live_after: int = 0
    late_after: int = 0
    live: Hold = field(default_factory=Hold)
    late: Hold = field(default_factory=Hold)
    flying: set[int] = field(default_factory=set)  # bounded by the window times LATE_MOST
    alone: set[int] = field(default_factory=set)  # bounded by LATE_MOST: one batch is taken apart at a time
    strikes: dict[int, Strike] = field(default_factory=dict)  # bounded by SUSPECTS
    condemned: set[int] = field(default_factory=set)  # bounded by CONDEMNED: rows that ended links, not sent again
    passes: int = 0
    idle: bool = False  # nothing more to pick until something happens

    def pick(self, page: Sequence[Row], most: int, room: int, ready: Callable[[Row], bool]) -> Pick:
        """The next late batch out of `page` (rows past `late_after`, oldest first): at most `most` rows and `room`
        bytes of document, none that is not `ready`, nor any after such a one. Moves `late_after` past what it saw."""
        if whole := self._whole(page, most, room, ready):
            return whole
        batch: list[Row] = []
        too_large: list[Row] = []
        struck: Row | None = None
        taken = EMPTY
        most = 1 if self.late.probing else most
        for row in page:
            seq = row.seq
            if seq not in self.flying:
                if len(batch) >= most or not ready(row):
                    break
                needs = size(row.body) + 1
                strike = self.strikes.get(seq)
                if EMPTY + needs - 1 > room:
                    too_large.append(row)
                elif strike is not None and self.passes == strike.last:
                    struck = struck or row
                else:
                    lonely = strike is not None or seq in self.alone
                    if batch and (lonely or taken + needs > room):
                        break
                    batch.append(row)
                    taken += needs
                    most = 1 if lonely else most
            self.late_after = seq
        if not batch and struck is not None and not self.flying:
            batch.append(struck)  # nothing else is there to try the topic with
        return Pick(batch, too_large)

    def _whole(self, page: Sequence[Row], most: int, room: int, ready: Callable[[Row], bool]) -> Pick | None:
        """All of `page`, as nearly always: nothing of it is suspect, on its way or too young, and it fits. None
        otherwise. The same pick as by looking at each row, for a third of the time."""
        if self.strikes or self.alone or self.late.probing or not 0 < len(page) <= most:
            return None
        if not self.flying.isdisjoint([row.seq for row in page]) or not all(map(ready, page)):
            return None
        if EMPTY + len(page) - 1 + sum([size(row.body) for row in page]) > room:
            return None
        self.late_after = page[-1].seq
        return Pick(list(page), [])

    def pick_again(self, page: Sequence[Row], room: int) -> tuple[Sequence[Row], int]:
        """The next message of a resend request out of `page`, and the sequence number to go on from. Rows that cannot
        fit or that ended links are left out."""
        batch: list[Row] = []
        taken, next_seq = EMPTY, 0
        most = 1 if self.late.probing else LATE_MOST
        for row in page:
            needs = size(row.body) + 1
            if row.seq not in self.condemned and EMPTY + needs - 1 <= room:
                lonely = row.seq in self.alone or row.seq in self.strikes
                if batch and (lonely or taken + needs > room or len(batch) >= most):
                    break
                batch.append(row)
                taken += needs
                most = 1 if lonely else most
            next_seq = row.seq + 1
        return batch, next_seq

    def sent(self, rows: Iterable[Row]) -> None:
        self.flying.update([row.seq for row in rows])

    def passed(self, rows: Iterable[Row], hold: Hold) -> None:
        """The broker took them."""
        seqs = [row.seq for row in rows]
        self.flying.difference_update(seqs)
        self.alone.difference_update(seqs)
        hold.passed()
        if hold is self.late:
            self.passes += 1
        for seq in seqs if self.strikes else ():
            self.strikes.pop(seq, None)
        if self.strikes:
            self._rewind(min(self.strikes))

    def refused(self, rows: Sequence[Row], hold: Hold, sent_s: float, now_s: float) -> Sequence[Row]:
        """The broker refused them. Gives the rows to set aside.

        A refused live row is not tried again as a live one, so that it does not keep back the next; it goes late.
        """
        self.flying.difference_update([row.seq for row in rows])
        hold.refused(sent_s, now_s)
        self._rewind(rows[0].seq)
        if hold is not self.late:
            return ()
        if len(rows) > 1:
            self.alone = {row.seq for row in rows}
            return ()
        row = rows[0]
        strike = self._strike(row)
        if strike.count >= STRIKES and self.passes > strike.first:
            self.give_up(row)
            return rows
        if len(self.strikes) >= SUSPECTS and all(self.passes == s.first for s in self.strikes.values()):
            self._rewind(min(self.strikes))
            self.strikes.clear()
        return ()

    def ended_link(self, rows: Sequence[Row]) -> Sequence[Row]:
        """The link broke with them as its oldest unanswered message. Gives the rows to set aside."""
        if len(rows) > 1:
            self.alone = {row.seq for row in rows}
            return ()
        if self._strike(rows[0]).count >= STRIKES:
            self.give_up(rows[0])
            if len(self.condemned) < CONDEMNED:
                self.condemned.add(rows[0].seq)
            return rows
        return ()

    def give_up(self, row: Row) -> None:
        """It is set aside: nothing more to remember."""
        self.strikes.pop(row.seq, None)
        self.alone.discard(row.seq)

    def look_again(self) -> None:
        """There may be new rows, and struck ones that were passed over get their turn. With nothing on its way it costs
        nothing to look from the beginning, so no row depends on the cursor being right."""
        self._rewind(min(self.strikes, default=self.late_after + 1) if self.flying else 1)

    def restart(self) -> None:
        """A new connection: nothing is on its way, everything that waits is looked at again."""
        self.flying.clear()
        self._rewind(1)

    def forgive(self) -> None:
        self.live = Hold()
        self.late = Hold()

    def _strike(self, row: Row) -> Strike:
        strike = self.strikes.get(row.seq)
        if strike is None:
            if len(self.strikes) >= SUSPECTS:
                self._rewind(min(self.strikes))
                del self.strikes[min(self.strikes)]
            strike = self.strikes[row.seq] = Strike(0, self.passes, self.passes)
        strike.count += 1
        strike.last = self.passes
        return strike

    def _rewind(self, seq: int) -> None:
        self.late_after = min(self.late_after, seq - 1)
        self.idle = False
