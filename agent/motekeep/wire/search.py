"""The search that all decoders share: find a start, judge what follows, step over it or past the false start.

Owns the buffer and its limit. Must not know a dialect: `judge` does.
"""

from abc import ABC, abstractmethod

from motekeep.wire.frame import Damage, Frame, Tally
from motekeep.wire.losses import Losses

# What `judge` says of the bytes at a start, as (size, outcome):
#   (0, None)       not decided: more bytes are needed
#   (n, Frame)      a frame of n bytes
#   (n, None)       a good unit of n bytes that carries no data, such as the answer to a command
#   (n, "reason")   no unit, though it claimed n bytes; `rubbish` when it was not even a start
#   (1, "idle")     a byte that may stand between units
Verdict = tuple[int, Frame | str | None]

MORE: Verdict = (0, None)


class Search(ABC):
    """A decoder but for its `judge`. See `frame.Decoder` for what it promises.

    `longest` is the limit of the buffer: between calls it holds the bytes of one unfinished unit, fewer than that.
    """

    __slots__ = ("_held", "_losses", "_settled", "_start", "longest", "tally")

    def __init__(self, start: bytes, longest: int) -> None:
        self._start = start
        self.longest = longest
        self.tally = Tally()
        self._losses = Losses(self.tally)
        self._held = b""
        self._settled = 0  # how many of the bytes held already belong to a good unit

    @abstractmethod
    def judge(self, buffer: bytes, start: int) -> Verdict:
        """What stands at `start`, where the start bytes were found. Never undecided on `longest` bytes or more."""

    @property
    def held(self) -> int:
        """Bytes kept for the next call; always below `longest`."""
        return len(self._held)

    def reset(self) -> None:
        self._held, self._settled = b"", 0
        self._losses.restart()

    def feed(self, data: bytes) -> list[Frame | Damage]:  # noqa: C901 (one loop; its cases are those of Verdict)
        tally, losses = self.tally, self._losses
        tally.bytes += len(data)
        buffer = self._held + data if self._held else data
        base = tally.bytes - len(buffer)
        events: list[Frame | Damage] = []
        settled, look = self._settled, 0
        while True:
            start = buffer.find(self._start, look)
            found = start >= 0
            if not found:
                start = self._end_of_rubbish(buffer, look)
            if start > settled:
                losses.lost(base + settled, start - settled)
                settled = start
            size, outcome = self.judge(buffer, start) if found else MORE
            if not size:
                break
            if isinstance(outcome, str):
                look = start + 1  # not after the claimed size: a good unit may begin inside it
                if outcome == "idle":
                    settled = max(settled, look)
                elif outcome != "rubbish":
                    tally.headers += 1
                    losses.rejected(events, outcome, base + start, size)
                continue
            look = settled = start + size
            losses.good(events, base + settled)
            tally.headers += 1
            if outcome is not None:
                tally.frames += 1
                events.append(outcome)
            if buffer[settled - 1] == self._start[0]:
                # A unit that lost its last byte borrows the first one of the next unit when they happen to be equal.
                look -= 1
        self._held, self._settled = buffer[start:], settled - start
        if losses.pending:
            losses.settle(events)
        return events

    def _end_of_rubbish(self, buffer: bytes, look: int) -> int:
        """Where the buffer may break off inside the start bytes; its end when it does not."""
        for size in range(min(len(self._start) - 1, len(buffer) - look), 0, -1):
            if buffer.endswith(self._start[:size]):
                return len(buffer) - size
        return len(buffer)
