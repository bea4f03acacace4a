"""What was found out later about earlier readings: from when to when, the flag they have from now on, and why.

Owns the list of one sensor and how it changes a flag. Readings in the journal stay as they were published; whoever
reads them again (hours after a restart, `export`) applies this list, as a subscriber applies `amend`.
"""

import json
from collections import deque
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Self

from motekeep.measure.reading import worst

# Each is a fault that began before it was proven; a sensor with more of them in the days that matter is beyond hours.
MOST = 100


@dataclass(frozen=True, slots=True)
class Amendment:
    """Readings that start in [from_utc, to_utc), Unix seconds, have at best `flag`, for `reasons` as well."""

    from_utc: float
    to_utc: float
    flag: int
    reasons: tuple[str, ...]


class Amendments:
    """The last hundred of one sensor, oldest first."""

    __slots__ = ("_items",)

    def __init__(self) -> None:
        self._items: deque[Amendment] = deque(maxlen=MOST)

    def add(self, amendment: Amendment) -> None:
        self._items.append(amendment)

    def __iter__(self) -> Iterator[Amendment]:
        return iter(self._items)

    def amended(self, start: float, flag: int, reasons: tuple[str, ...]) -> tuple[int, tuple[str, ...]]:
        """Flag and reasons of a reading that starts at `start`, as they are by now."""
        for item in self._items:
            if item.from_utc <= start < item.to_utc:
                flag = worst([flag, item.flag])
                reasons = tuple(dict.fromkeys((*reasons, *item.reasons)))
        return flag, reasons

    def state(self) -> str:
        """As JSON text, some 60 bytes each."""
        return json.dumps([[i.from_utc, i.to_utc, i.flag, *i.reasons] for i in self._items])

    @classmethod
    def restored(cls, state: str) -> Self:
        """The list whose `state` this is. Raises ValueError on any other text."""
        amendments = cls()
        try:
            for from_utc, to_utc, flag, *reasons in json.loads(state):
                amendments.add(Amendment(float(from_utc), float(to_utc), int(flag), tuple(map(str, reasons))))
        except (TypeError, RecursionError) as error:
            raise ValueError(f"no list of amendments: {error!r}") from error
        return amendments
