"""What the readers of both records share: the refusal of a record, and times that leave no doubt.

Owns the rule that a time is RFC 3339 in UTC. An hour that is one hour off fits nearly as well as the right one, so a
time without a zone, or of another zone, is refused and not converted.
"""

from collections.abc import Iterable, Sequence
from datetime import datetime, timedelta
from difflib import get_close_matches
from math import isfinite

import numpy as np
from numpy.typing import NDArray

from motekeep.errors import MotekeepError

Floats = NDArray[np.float64]


class RecordError(MotekeepError):
    """A record cannot be fitted with. Exit code 2."""


def utc_of(text: str, where: str) -> float:
    """Unix seconds of an RFC 3339 time in UTC. Raises RecordError naming `where`, a file and its line."""
    mend = "write it like 2026-12-01T09:15:00Z"
    try:
        moment = datetime.fromisoformat(text.strip())
    except ValueError as error:
        raise RecordError(where, f"{_short(text)} is no time", mend) from error
    if moment.tzinfo is None:
        raise RecordError(where, f"{_short(text)} has no time zone", mend)
    if moment.utcoffset() != timedelta(0):
        raise RecordError(where, f"{_short(text)} is not in UTC", "convert the whole record to UTC, ending in Z")
    return moment.timestamp()


def number_of(text: str | None, where: str, what: str) -> float:
    """A finite number out of a cell. Raises RecordError."""
    try:
        number = float(text or "")
    except ValueError as error:
        raise RecordError(where, f"{what} {_short(text or '')} is no number", "mend or remove the line") from error
    if not isfinite(number):
        raise RecordError(where, f"{what} {_short(text or '')} is not finite", "leave the cell empty for a gap")
    return number


def check_columns(found: Sequence[str] | None, needed: Iterable[str], known: Iterable[str], where: str) -> None:
    """Refuse a header that lacks a needed column or has one that is not known: a misspelt one would be lost unseen."""
    possible = list(known)
    columns = list(found or ())
    if len(set(columns)) != len(columns):
        raise RecordError(where, "a column stands there twice", "leave one of them")
    for column in columns:
        if column not in possible:
            near = get_close_matches(column, possible, 1)
            hint = f"did you mean {near[0]!r}? " if near else ""
            listed = ", ".join(possible[:8]) + (", ..." if len(possible) > 8 else "")
            raise RecordError(where, f"unknown column {_short(column)}", f"{hint}known are {listed}")
    for column in needed:
        if column not in columns:
            raise RecordError(where, f"column {column!r} is missing", "add it to the first line")


def _short(text: str) -> str:
    shown = "".join(c if c.isprintable() else "?" for c in text[:60])
    return repr(shown)
