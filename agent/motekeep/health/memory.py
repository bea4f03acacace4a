"""What a check remembers across a restart of the daemon.

Owns the shape of it, and the suspicion with which it is read back: it was written by another version, or by hand.
"""

from collections.abc import Mapping, Sequence
from math import isfinite
from typing import TypeGuard

# Plain numbers, fit for JSON.
Memory = Mapping[str, float | Sequence[float]]


def is_number(value: object) -> TypeGuard[float]:
    """Whether this can be reckoned with; JSON as Python reads it knows infinity and NaN."""
    return isinstance(value, float | int) and isfinite(value)
