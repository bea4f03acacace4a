"""A TOML table that is asked key by key, checks what it gives and refuses what nobody asked for.

Owns the wording of refusals: one line that names file, key and mend. Must not know what the keys mean.
"""

import re
from collections.abc import Callable, Mapping
from datetime import datetime
from difflib import get_close_matches
from math import inf, isfinite
from typing import Any, NoReturn

from motekeep.errors import ConfigError

_DURATION = re.compile(r"(?:(\d+(?:\.\d+)?)d)?(?:(\d+(?:\.\d+)?)h)?(?:(\d+(?:\.\d+)?)m)?(?:(\d+(?:\.\d+)?)s)?")
_UNIT_S = (86_400.0, 3600.0, 60.0, 1.0)
_LONGEST_S = 20 * 366 * 86_400.0  # a typing error, not a scenario


class Table:
    """One TOML table of `source`, at `path` in it. Every method raises ConfigError on a value that cannot be."""

    # Any: a TOML value is what its writer made of it; every method checks the type of what it gives
    def __init__(self, values: Mapping[str, Any], source: str, path: str) -> None:
        self._values = dict(values)
        self._source = source
        self._path = path
        self._asked: set[str] = set()

    def refuse(self, key: str, why: str, mend: str) -> NoReturn:
        place = f"{self._path}.{key}" if self._path and key else self._path or key
        raise ConfigError(f"read scenario {self._source}", f"`{place}` {why}", mend)

    def __contains__(self, key: str) -> bool:
        return key in self._values

    def _take(self, key: str) -> Any:
        self._asked.add(key)
        return self._values.get(key)

    def finish(self) -> None:
        """Refuse the first key that nobody asked for."""
        for key in self._values:
            if key not in self._asked:
                near = get_close_matches(key, self._asked, n=1)
                known = f"did you mean `{near[0]}`?" if near else f"known here: {', '.join(sorted(self._asked))}"
                self.refuse(key, "is not a key of a scenario", known)

    def text(self, key: str, default: str | None = None) -> str:
        value = self._take(key)
        if value is None:
            if default is None:
                self.refuse(key, "is missing", "add it")
            return default
        if not isinstance(value, str):
            self.refuse(key, f"is {value!r}, not a text", "put it in quotes")
        return value

    def choice(self, key: str, known: Mapping[str, object] | tuple[str, ...], default: str | None = None) -> str:
        value = self.text(key, default)
        if value not in known:
            near = get_close_matches(value, list(known), n=1)
            mend = f"did you mean {near[0]!r}?" if near else f"known: {', '.join(known)}"
            self.refuse(key, f"is {value!r}, which is not known", mend)
        return value

    def number(self, key: str, default: float, low: float = -inf, high: float = inf) -> float:
        value = self._take(key)
        if value is None:
            return default
        if isinstance(value, bool) or not isinstance(value, (int, float)) or not isfinite(value):
            self.refuse(key, f"is {value!r}, not a finite number", "write a number without quotes")
        if not low <= value <= high:
            self.refuse(key, f"is {value}, outside {low:g} to {high:g}", "choose a value inside")
        return float(value)

    def whole(self, key: str, default: int, low: int, high: int) -> int:
        value = self._take(key)
        if value is None:
            return default
        if isinstance(value, bool) or not isinstance(value, int) or not low <= value <= high:
            self.refuse(key, f"is {value!r}, not a whole number from {low} to {high}", "choose one")
        return value

    def flag(self, key: str, default: bool) -> bool:
        value = self._take(key)
        if value is None:
            return default
        if not isinstance(value, bool):
            self.refuse(key, f"is {value!r}", "write true or false")
        return value

    def duration(self, key: str, default: float | None = None, low: float = 0.0, high: float = _LONGEST_S) -> float:
        """Seconds as a number, or a text such as "2d6h", "90m", "30s"."""
        value = self._take(key)
        if value is None:
            if default is None:
                self.refuse(key, "is missing", 'add it, for example "2d6h"')
            return default
        seconds = _seconds(value)
        if seconds is None:
            self.refuse(key, f"is {value!r}, not a duration", 'write seconds, or a text such as "2d6h" or "90m"')
        if not low <= seconds <= high:
            self.refuse(key, f"is {seconds:g} s, outside {low:g} to {high:g} s", "choose a duration inside")
        return seconds

    def instant(self, key: str) -> float:
        value = self._take(key)
        if not isinstance(value, datetime) or value.tzinfo is None:
            self.refuse(key, f"is {value!r}, not a time with its zone", "write it like 2026-12-01T00:00:00Z, no quotes")
        return value.timestamp()

    def table(self, key: str) -> "Table | None":
        value = self._take(key)
        if value is None:
            return None
        path = f"{self._path}.{key}" if self._path else key
        if not isinstance(value, dict):
            self.refuse(key, "is not a table", f"write it as {{ ... }} or as [{path}]")
        return Table(value, self._source, path)

    def tables(self, key: str) -> "list[Table]":
        value = self._take(key)
        path = f"{self._path}.{key}" if self._path else key
        if value is None:
            return []
        if not isinstance(value, list) or not all(isinstance(item, dict) for item in value):
            self.refuse(key, "is not a list of tables", f"write each as [[{path}]]")
        return [Table(item, self._source, f"{path}[{index}]") for index, item in enumerate(value)]

    def numbers(self, known: Mapping[str, object], bounds: Callable[[str], tuple[float, float]]) -> dict[str, float]:
        """All of this table, as numbers whose keys are known."""
        found = {key: self.number(key, 0.0, *bounds(key)) for key in known if key in self}
        self._asked.update(known)
        self.finish()
        return found


def _seconds(value: object) -> float | None:
    if isinstance(value, bool):
        return None
    if isinstance(value, (int, float)):
        return float(value) if isfinite(value) else None
    if not isinstance(value, str) or not value or not (found := _DURATION.fullmatch(value)):
        return None
    return sum(float(part) * unit for part, unit in zip(found.groups(), _UNIT_S, strict=True) if part)
