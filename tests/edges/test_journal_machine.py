"""The journal against a simple model, through any sequence of commits, marks, failures, crashes and merges.

What must hold: a committed reading waits until it is marked; no number is lost, given twice in one look, or ever used
again; what was delivered does not come back but for a crash that forgot unwritten marks.
"""

import sqlite3
from collections.abc import Callable, Iterator
from contextlib import ExitStack, contextmanager

import pytest
from hypothesis import settings
from hypothesis import strategies as st
from hypothesis.stateful import RuleBasedStateMachine, initialize, invariant, precondition, rule

from journal_site import MIB, Site, ram_folder
from motekeep.edges import journal as journal_module
from motekeep.edges.journal_schema import transaction
from motekeep.edges.ports import Row

SENSORS = ("north", "south")


class JournalMachine(RuleBasedStateMachine):
    """`durable` and `held` are the numbers in the file and in memory; `open` those not marked; `unwritten` those whose
    mark a crash would forget, `perhaps` those of them whose mark may have been written."""

    @initialize(pad=st.sampled_from(["", "filler " * 1800]))
    def begin(self, pad: str) -> None:
        self.stack = ExitStack()
        folder = self.stack.enter_context(ram_folder())
        self.failing = False
        self.original = journal_module.transaction
        journal_module.transaction = self.transaction  # type: ignore[assignment]
        self.site = Site(folder / "a", sensors=SENSORS, max_bytes=MIB, keep_days=1, step_s=600, pad=pad)
        self.durable: dict[str, set[int]] = {s: set() for s in SENSORS}
        self.held: dict[str, set[int]] = {s: set() for s in SENSORS}
        self.open: dict[str, set[int]] = {s: set() for s in SENSORS}
        self.unwritten: dict[str, set[int]] = {s: set() for s in SENSORS}
        self.perhaps: dict[str, set[int]] = {s: set() for s in SENSORS}
        self.used = dict.fromkeys(SENSORS, 0)
        self.in_flight: list[Row] = []

    def teardown(self) -> None:
        if hasattr(self, "stack"):
            journal_module.transaction = self.original  # type: ignore[assignment]
            self.site.reader.close()
            self.site._abandon()
            self.stack.close()

    @contextmanager
    def transaction(self, connection: sqlite3.Connection) -> Iterator[None]:
        if self.failing:
            error = sqlite3.OperationalError("laid on")
            error.sqlite_errorcode = 10
            raise error
        with transaction(connection):
            yield

    def saved(self) -> None:
        """A transaction went through: everything that memory had is in the file."""
        for sensor in SENSORS:
            self.durable[sensor] |= self.held[sensor]
            self.held[sensor] = set()
            self.unwritten[sensor] = self.perhaps[sensor] = set()

    @rule(count=st.integers(1, 12))
    def commit(self, count: int) -> None:
        for _ in range(count):
            for reading in self.site.minute():
                assert reading.seq == self.used[reading.sensor] + 1, "gapless and never reused"
                self.used[reading.sensor] = reading.seq
                (self.held if self.failing else self.durable)[reading.sensor].add(reading.seq)
                self.open[reading.sensor].add(reading.seq)
        if not self.failing:
            self.saved()

    @rule(sensor=st.sampled_from(SENSORS), skip=st.integers(0, 20), count=st.integers(1, 30))
    def look(self, sensor: str, skip: int, count: int) -> None:
        """The publisher takes rows into flight; what becomes of them is told later, perhaps after a merge."""
        self.in_flight += self.site.reader.waiting(sensor, skip, count)

    @precondition(lambda self: self.in_flight)
    @rule(how=st.sampled_from(["delivered", "sent", "aside"]), last_first=st.booleans(), count=st.integers(1, 20))
    def answer(self, how: str, last_first: bool, count: int) -> None:
        rows = self.in_flight[-count:] if last_first else self.in_flight[:count]
        self.in_flight = self.in_flight[:-count] if last_first else self.in_flight[count:]
        mark: dict[str, Callable[[list[Row]], None]] = {
            "delivered": self.site.reader.mark_delivered,
            "sent": self.site.reader.mark_sent,
            "aside": self.site.reader.mark_aside,
        }
        mark[how](rows)
        for row in rows:
            self.close_numbers(row.sensor, set(range(row.from_seq, row.seq + 1)))

    @rule(sensor=st.sampled_from(SENSORS), through=st.integers(0, 200))
    def receipt(self, sensor: str, through: int) -> None:
        self.site.reader.mark_taken(sensor, through)
        self.close_numbers(sensor, set(range(1, through + 1)))

    def close_numbers(self, sensor: str, numbers: set[int]) -> None:
        self.unwritten[sensor] |= self.open[sensor] & numbers
        self.open[sensor] -= numbers

    @rule()
    def flush(self) -> None:
        self.site.journal.flush(self.site.clock.now())
        if not self.failing:
            self.saved()

    @rule(days=st.floats(0, 1.2))
    def prune(self, days: float) -> None:
        self.site.clock.advance(days * 86400)
        self.site.journal.prune(self.site.clock.now())
        for sensor in SENSORS:
            # it writes the marks first, if the file is open
            self.perhaps[sensor] = set(self.unwritten[sensor])

    @rule()
    def fail(self) -> None:
        self.failing = True

    @rule()
    def recover(self) -> None:
        self.failing = False

    @precondition(lambda self: not self.failing)
    @rule()
    def restart(self) -> None:
        self.site.restart()
        self.saved()
        self.in_flight = []

    @precondition(lambda self: not self.failing)
    @rule()
    def crash(self) -> None:
        self.site.power_cut()
        self.in_flight = []
        for sensor in SENSORS:
            # marks that were not written are forgotten, and so are readings that only memory had
            waiting = {n for row in self.site.waiting(sensor) for n in range(row.from_seq, row.seq + 1)}
            forgotten = self.unwritten[sensor] - (self.perhaps[sensor] - waiting)
            self.open[sensor] = (self.open[sensor] | forgotten) & self.durable[sensor]
            self.unwritten[sensor] = self.held[sensor] = self.perhaps[sensor] = set()
            assert self.site.journal.next_seq(sensor) == self.used[sensor] + 1

    @invariant()
    def every_open_number_waits_once_and_in_order(self) -> None:
        if not hasattr(self, "stack"):
            return
        for sensor in SENSORS:
            rows = self.site.waiting(sensor)
            numbers = [n for row in rows for n in range(row.from_seq, row.seq + 1)]
            assert numbers == sorted(set(numbers))
            assert self.open[sensor] <= set(numbers)
            for row in rows:
                # a row may come again only for numbers of it that are still open
                assert self.open[sensor] & set(range(row.from_seq, row.seq + 1))
            assert len(self.site.journal._ledger.state_of(sensor).waiting) == len(self.open[sensor])


class TestJournal(JournalMachine.TestCase):  # type: ignore[misc]  # hypothesis makes that class at run time
    settings = settings(max_examples=10, stateful_step_count=20, deadline=None)


@pytest.mark.long
class TestJournalAtLength(JournalMachine.TestCase):  # type: ignore[misc]  # hypothesis makes that class at run time
    settings = settings(max_examples=300, stateful_step_count=50, deadline=None)
