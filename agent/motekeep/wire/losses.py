"""What a decoder lost, told as `Damage`: one event for each frame that was hit or stretch of rubbish.

Owns the counting. Must not know a dialect: it hears of places in the stream only.

A stretch is what lies between two good units. In it
- a rejected unit of known extent (`checksum`, `tail`) is a hit: one event, and it covers the span that it claimed;
  false starts and lost bytes inside that span are the same hit;
- everything else (`length`, `escape`, bytes without a start) is told once, and only when nothing else was told yet;
- fewer than `FEW` bytes before a hit belong to it, and before the first unit after opening they are no damage.
A good unit ends the stretch and every claim: a claim that reached over it was false.
"""

from motekeep.wire.frame import Damage, Frame, Tally

# Common practice, no source: a line that is opened gives a glitch byte or two.
FEW = 4

HITS = frozenset({"checksum", "tail"})


class Losses:
    """The stretch at hand. Places are counted in bytes since the decoder was made.

    Number, order and reason of the events do not depend on how the stream was split; the size of rubbish does: it is
    told with the feed it came in, so that a live reader hears at once, and grows no more after that.
    """

    __slots__ = ("_covered", "_started", "_tally", "_told", "pending")

    def __init__(self, tally: Tally) -> None:
        self._tally = tally
        self.restart()

    def restart(self) -> None:
        """As after opening the line: nothing heard yet, nothing lost."""
        self._covered = 0
        self.pending = 0
        self._started = False
        self._told = False

    def good(self, events: list[Frame | Damage], end: int) -> None:
        """A good unit ended at `end`."""
        if self.pending:
            if self._started or self.pending >= FEW:
                self._tell(events, "rubbish", self.pending)
            self.pending = 0
        self._covered = end
        self._started = True
        self._told = False

    def lost(self, at: int, size: int) -> None:
        """`size` bytes from `at` on belong to no unit."""
        if not self._told:
            self.pending += max(at + size - max(at, self._covered), 0)

    def rejected(self, events: list[Frame | Damage], reason: str, at: int, size: int) -> None:
        """A unit that began at `at` and claims `size` bytes is none."""
        if at < self._covered:
            return
        self.settle(events)
        if reason in HITS or not self._told:
            self._tell(events, reason, size)
        self._covered = at + size

    def settle(self, events: list[Frame | Damage]) -> None:
        """Tell the rubbish that stands by itself by now; after every feed, and before a hit. Fewer than `FEW` bytes
        wait: they may be the torn first bytes of a unit whose hit follows, and then they are part of that."""
        if self.pending >= FEW:
            self._tell(events, "rubbish", self.pending)

    def _tell(self, events: list[Frame | Damage], reason: str, size: int) -> None:
        events.append(Damage(reason, size))
        self._tally.drop(reason)
        self._told = True
        self.pending = 0
