"""A table of a text file, read strictly: every key once, by its type, within its bounds, nothing left over.

Owns the refusals that are the same for every key, each with the path of the key. Must not know what the keys mean.
"""

from collections.abc import Iterable
from datetime import datetime
from difflib import get_close_matches
from math import isfinite

from motekeep.errors import DocumentError

LONGEST_TEXT = 200


class Table:
    """One table; `path` is "" at the top. Reading a key takes it out; `finish` refuses what was never read."""

    __slots__ = ("_items", "_known", "path")

    def __init__(self, items: dict[str, object], path: str = "") -> None:
        self.path = path
        self._items = dict(items)
        self._known: list[str] = []

    def at(self, key: str) -> str:
        """The path of a key of this table."""
        return f"{self.path}.{key}" if self.path else key

    def refuse(self, key: str, why: str, mend: str) -> DocumentError:
        return DocumentError(self.at(key), why, mend)

    def has(self, key: str) -> bool:
        return key in self._items

    def _take(self, key: str, wanted: str) -> object:
        self._known.append(key)
        if key not in self._items:
            raise self.refuse(key, "is missing", f"state {wanted}")
        return self._items.pop(key)

    def anything(self, key: str, wanted: str) -> object:
        """A value that the caller judges; `wanted` is said when it is missing."""
        return self._take(key, wanted)

    def text(self, key: str) -> str:
        wanted = f"a text of 1 to {LONGEST_TEXT} characters in one line"
        value = self._take(key, wanted)
        if not isinstance(value, str) or not 1 <= len(value) <= LONGEST_TEXT or not value.isprintable():
            raise self.refuse(key, f"is {_shown(value)}", f"state {wanted}")
        return value

    def number(self, key: str, low: float, high: float, unit: str = "1") -> float:
        return checked_number(self._take(key, f"a number in {unit}"), self.at(key), low, high, unit)

    def numbers(self, key: str, low: float, high: float, unit: str, most: int) -> tuple[float, ...]:
        """A list of 1 to `most` numbers."""
        elements = self.elements(key, most)
        return tuple([checked_number(e, f"{self.at(key)}[{i}]", low, high, unit) for i, e in enumerate(elements)])

    def whole(self, key: str, low: int, high: int) -> int:
        wanted = f"a whole number from {low} to {high}"
        value = self._take(key, wanted)
        if not isinstance(value, int) or isinstance(value, bool) or not low <= value <= high:
            raise self.refuse(key, f"is {_shown(value)}", f"state {wanted}")
        return value

    def moment(self, key: str) -> float:
        """A date and time with zone, as Unix seconds."""
        wanted = "a date and time with zone like 2026-12-01T09:15:00Z, without quotes"
        value = self._take(key, wanted)
        if not isinstance(value, datetime) or value.tzinfo is None:
            raise self.refuse(key, f"is {_shown(value)}", f"state {wanted}")
        return value.timestamp()

    def table(self, key: str) -> "Table":
        value = self._take(key, f"a table [{self.at(key)}]")
        if not isinstance(value, dict):
            raise self.refuse(key, f"is {_shown(value)}", f"state a table [{self.at(key)}]")
        return Table(value, self.at(key))

    def tables(self, key: str, most: int) -> list["Table"]:
        """A list of 1 to `most` tables."""
        tables = []
        for i, element in enumerate(self.elements(key, most)):
            if not isinstance(element, dict):
                raise self.refuse(f"{key}[{i}]", f"is {_shown(element)}", f"state tables [[{self.at(key)}]]")
            tables.append(Table(element, f"{self.at(key)}[{i}]"))
        return tables

    def elements(self, key: str, most: int) -> list[object]:
        """A list of 1 to `most` elements, each yet to be judged."""
        wanted = f"a list of 1 to {most} elements"
        value = self._take(key, wanted)
        if not isinstance(value, list) or not value:
            raise self.refuse(key, f"is {_shown(value)}", f"state {wanted}")
        if len(value) > most:
            raise self.refuse(key, f"has {len(value)} elements", f"state {wanted}")
        return list(value)

    def keys(self) -> list[str]:
        """Keys not read yet, for tables whose keys are names."""
        return list(self._items)

    def finish(self, also_known: Iterable[str] = ()) -> None:
        """Refuse what is left, naming the nearest key that would have been known."""
        for key in self._items:
            known = [*self._known, *also_known]
            near = get_close_matches(key, known, 1)
            mend = f"did you mean {near[0]}?" if near else f"known here: {', '.join(sorted(set(known)))}"
            raise self.refuse(_cut(key), "is not known", mend)


def checked_number(value: object, path: str, low: float, high: float, unit: str) -> float:
    """A finite number within bounds; DocumentError names `path` otherwise."""
    wanted = f"state a number from {low:g} to {high:g}" + ("" if unit == "1" else f" {unit}")
    if isinstance(value, bool) or not isinstance(value, int | float):
        raise DocumentError(path, f"is {_shown(value)}", wanted)
    # Compared before it is converted: a whole number of TOML can be larger than any float.
    if not (isinstance(value, int) or isfinite(value)):
        raise DocumentError(path, f"is {value}, not finite", wanted)
    if not low <= value <= high:
        raise DocumentError(path, f"is {_shown(value)}, outside of what is physically possible", wanted)
    return float(value)


def _shown(value: object) -> str:
    if isinstance(value, dict):
        return "a table"
    if isinstance(value, list):
        return f"a list of {len(value)}"
    if isinstance(value, int) and value.bit_length() > 64:
        return f"a number of {value.bit_length()} bits"  # Python refuses to write a very long one
    return _cut(repr(value) if isinstance(value, str) else str(value))


def _cut(text: str) -> str:
    """Short and printable: it goes into one line of a log and onto a topic."""
    plain = "".join(c if c.isprintable() else "?" for c in text[:60])
    return plain + ("..." if len(text) > 60 else "")
