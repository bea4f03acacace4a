"""When something happened, on the two clocks of a gateway.

Owns the one type for a point in time. Knows nothing of how clocks are read: that is `edges/clock.py`.
"""

from dataclasses import dataclass
from datetime import UTC, datetime


@dataclass(frozen=True, slots=True)
class Instant:
    """A point in time on both clocks.

    `utc` is the wall clock in Unix seconds as it stood then, right or wrong; `boot_s` counts seconds since boot
    (also through suspend) and never steps; `boot_id` names the boot that it counts from; `trusted` says whether
    a time service vouched for the wall clock at that moment. Durations come from `boot_s`, `utc` only stamps.
    """

    utc: float
    boot_s: float
    boot_id: str
    trusted: bool

    @property
    def offset(self) -> float:
        """Seconds to add to `boot_s` for the wall clock; a jump of it is a clock step."""
        return self.utc - self.boot_s


def rfc3339(utc: float) -> str:
    """Unix seconds as RFC 3339 UTC, milliseconds only when there are any: `2026-12-01T09:15:00Z`."""
    milliseconds = round(utc * 1000)
    moment = datetime.fromtimestamp(milliseconds // 1000, UTC)
    text = moment.strftime("%Y-%m-%dT%H:%M:%S")
    rest = milliseconds % 1000
    return f"{text}.{rest:03d}Z" if rest else f"{text}Z"


def from_rfc3339(text: str) -> float:
    """RFC 3339 to Unix seconds. Raises ValueError on another form or when the zone is missing."""
    moment = datetime.fromisoformat(text)
    if moment.tzinfo is None:
        raise ValueError(f"{text!r} has no time zone; write it like 2026-12-01T09:15:00Z")
    return moment.timestamp()
