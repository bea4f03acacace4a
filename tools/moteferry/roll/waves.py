"""The waves of a roll: `1,10%,rest` as numbers, and who is in which. Pure."""

import math
from collections.abc import Sequence
from typing import TypeVar

from moteferry.roll.offer import RollError

T = TypeVar("T")
MOST_WAVES = 50


def sizes(spec: str, count: int) -> list[int]:
    """How many of `count` each wave takes; waves that would be empty are left out.

    A part is a number, a share of all in percent (rounded up, so that it is never nobody), or `rest`, which comes last.
    Raises RollError.
    """
    parts = [part.strip() for part in spec.split(",")]
    if len(parts) > MOST_WAVES:
        raise _refused(spec, f"has {len(parts)} waves", f"{MOST_WAVES} are possible")
    left, found = count, []
    for i, part in enumerate(parts):
        if part == "rest":
            if i != len(parts) - 1:
                raise _refused(spec, "goes on after `rest`", "put `rest` last")
            size = left
        else:
            size = min(left, _size(spec, part, count))
        if size:
            found.append(size)
        left -= size
    if left:
        raise _refused(spec, f"leaves {left} of {count} in no wave", "end it with `rest`")
    return found


def split(items: Sequence[T], spec: str) -> list[list[T]]:
    """The items in waves, in their order."""
    waves, start = [], 0
    for size in sizes(spec, len(items)):
        waves.append(list(items[start : start + size]))
        start += size
    return waves


def _size(spec: str, part: str, count: int) -> int:
    number, percent = part.removesuffix("%"), part.endswith("%")
    if not number.isascii() or not number.isdigit() or int(number) == 0 or (percent and int(number) > 100):
        raise _refused(spec, f"{part!r} is no wave", "write numbers, shares and `rest`, like 1,10%,rest")
    return math.ceil(count * int(number) / 100) if percent else int(number)


def _refused(spec: str, why: str, mend: str) -> RollError:
    return RollError(f"reading the waves {spec!r}", why, mend)
