"""A set of sequence numbers kept as ranges: what waits for delivery of one sensor is one short range nearly always.

Owns the arithmetic and the text form. Knows no database. Kept so, the state of any number of readings is a few bytes in
one row, and marking a reading delivered never touches the page that the reading is on (`tools/bench/wear.py`).
"""

from bisect import bisect_left, bisect_right
from collections.abc import Iterable, Iterator


class Spans:
    """Sorted, disjoint, non-adjacent ranges `low..high`, both ends included, of numbers from 1 up."""

    __slots__ = ("_high", "_low")

    def __init__(self, ranges: Iterable[tuple[int, int]] = ()) -> None:
        self._low: list[int] = []
        self._high: list[int] = []
        for low, high in ranges:
            self.add(low, high)

    @classmethod
    def from_text(cls, text: str) -> "Spans":
        """The set that `str` wrote: `1-8,12`. Raises ValueError on another form."""
        spans = cls()
        for part in filter(None, text.split(",")):
            low, _, high = part.partition("-")
            spans.add(int(low), int(high or low))
        return spans

    def __str__(self) -> str:
        return ",".join(str(a) if a == b else f"{a}-{b}" for a, b in self)

    def __iter__(self) -> Iterator[tuple[int, int]]:
        return iter(list(zip(self._low, self._high, strict=True)))

    def __len__(self) -> int:
        """How many numbers."""
        return sum(self._high) - sum(self._low) + len(self._low)

    def __eq__(self, other: object) -> bool:
        return isinstance(other, Spans) and self._low == other._low and self._high == other._high

    __hash__ = None  # type: ignore[assignment]  # a set that changes has no hash

    def __contains__(self, number: int) -> bool:
        return self.overlaps(number, number)

    @property
    def ranges(self) -> int:
        return len(self._low)

    @property
    def first(self) -> int | None:
        return self._low[0] if self._low else None

    def overlaps(self, low: int, high: int) -> bool:
        """Whether any number of low..high is in the set."""
        at = bisect_left(self._high, low)
        return at < len(self._low) and self._low[at] <= high

    def add(self, low: int, high: int) -> None:
        if low > high:
            raise ValueError(f"no range: {low}..{high}")
        left, right = bisect_left(self._high, low - 1), bisect_right(self._low, high + 1)
        if left < right:
            low, high = min(low, self._low[left]), max(high, self._high[right - 1])
        self._low[left:right] = [low]
        self._high[left:right] = [high]

    def remove(self, low: int, high: int) -> int:
        """Take low..high out; how many numbers of it were in."""
        if low > high:
            return 0
        left, right = bisect_left(self._high, low), bisect_right(self._low, high)
        if left >= right:
            return 0
        gone = sum(self._high[left:right]) - sum(self._low[left:right]) + right - left
        rest = []
        if self._low[left] < low:
            rest.append((self._low[left], low - 1))
        if self._high[right - 1] > high:
            rest.append((high + 1, self._high[right - 1]))
        self._low[left:right] = [a for a, _ in rest]
        self._high[left:right] = [b for _, b in rest]
        return gone - sum(b - a + 1 for a, b in rest)

    def copy(self) -> "Spans":
        twin = Spans()
        twin._low, twin._high = self._low[:], self._high[:]
        return twin

    def within(self, low: int, high: int) -> "Spans":
        """The numbers of low..high that are in the set."""
        part = Spans()
        if low > high:
            return part
        for at in range(bisect_left(self._high, low), bisect_right(self._low, high)):
            part._low.append(max(self._low[at], low))
            part._high.append(min(self._high[at], high))
        return part

    def without(self, other: "Spans") -> "Spans":
        rest = self.copy()
        for low, high in other:
            rest.remove(low, high)
        return rest

    def union(self, other: "Spans") -> "Spans":
        both = self.copy()
        for low, high in other:
            both.add(low, high)
        return both

    def gaps(self, low: int, high: int) -> "Spans":
        """The numbers of low..high that are not in the set."""
        return Spans([(low, high)] if low <= high else []).without(self)

    def coarsen(self, most: int) -> None:
        """Close the smallest gaps until at most `most` ranges are left; numbers are only ever added."""
        while len(self._low) > most:
            gap, at = min((self._low[i + 1] - self._high[i], i) for i in range(len(self._low) - 1))
            self.add(self._high[at], self._high[at] + gap)
