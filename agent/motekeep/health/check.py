"""What a sensor check is: the events it may listen to, and the one question it answers.

Owns the shape of a check and the words for the state of a line. Must not know any single check, nor how findings
open and close: that is the ledger's.
"""

from abc import ABC, abstractmethod
from collections.abc import Mapping
from enum import StrEnum
from typing import Any, ClassVar

from motekeep.health.finding import Suspicion
from motekeep.health.hour import Hour
from motekeep.health.memory import Memory
from motekeep.health.wake import Wake
from motekeep.instant import Instant
from motekeep.measure.account import Account
from motekeep.measure.dose import ServiceKind
from motekeep.measure.interval import Interval
from motekeep.wire.frame import Damage, Observation


class LineState(StrEnum):
    """What became of a sensor's line: port opened, port gone (with a reason), put to sleep, woken."""

    OPENED = "opened"
    GONE = "gone"
    ASLEEP = "asleep"
    AWAKE = "awake"


class Check(ABC):
    """One condition of one sensor. A check overrides the hooks it needs; the others cost nothing, see `listens`.

    `code` names its finding; where two checks of a sensor name the same, the surer one is heard. `clear_s`: how long
    the condition must be absent before the finding closes. `again_s`: how long the check may need, after a restart of
    the daemon, to raise a condition that still holds. A check with `settled` set sees no frame that came in warm-up.

    A `slow` check judges by days: what it remembers is kept always, not only while its condition holds, and is written
    once an hour; its times must be Unix seconds, as it outlives boots.

    All other times are boot seconds of one boot and do not run backwards.
    """

    code: ClassVar[str]
    clear_s: ClassVar[float]
    again_s: ClassVar[float] = 300.0
    settled: ClassVar[bool] = False
    slow: ClassVar[bool] = False

    # The empty hooks are meant to be empty: a check says by overriding which ones it needs.
    def observe(self, observation: Observation) -> None:  # noqa: B027
        """A good frame came."""

    def twin(self, observation: Observation) -> None:  # noqa: B027
        """A good, settled frame of the twin came: a second sensor in the same enclosure."""

    def damaged(self, damage: Damage, at: Instant) -> None:  # noqa: B027
        """Bytes came that were not a frame."""

    def heard(self, data: bytes, at: Instant) -> None:  # noqa: B027
        """Bytes came, whatever they turn out to be; told before what they turn out to be."""

    def line(self, state: LineState, at: Instant, why: str) -> None:  # noqa: B027
        """The line changed its state; `why` says the reason in words when it is GONE."""

    def interval(self, interval: Interval) -> None:  # noqa: B027
        """An interval was closed."""

    def hour(self, hour: Hour) -> None:  # noqa: B027
        """An hour is over: told with the first interval of the next one, trusted clock or not."""

    def wake(self, wake: Wake) -> None:  # noqa: B027
        """The sensor was woken and has been looked at for a minute and a half, or for as long as it was awake."""

    def learnt(self, parts: Mapping[str, Any]) -> None:  # noqa: B027
        """What is known of this unit, by lesson, has changed (see `baseline`). Any: each lesson has its own part."""

    def account(self, account: Account) -> None:  # noqa: B027
        """A reading was made: what the sensor has been through, and what it was corrected with."""

    def service(self, kind: ServiceKind, done_utc: float, at: Instant) -> None:  # noqa: B027
        """A person did something at the sensor at `done_utc` (Unix seconds), and it is told now."""

    @abstractmethod
    def judge(self, at: Instant) -> Suspicion | None:
        """Whether the condition holds now. Asked every few seconds and at each interval's end."""

    def wants_wake(self, at: Instant) -> bool:
        """Whether a wake would tell this check what it cannot see: it may then be brought about, by an active check."""
        return False

    def memory(self) -> Memory | None:
        """What must survive a restart (of a quick check: while the condition holds); None for nothing."""
        return None

    def recall(self, memory: Memory, at: Instant) -> None:  # noqa: B027
        """Take up what `memory` gave before the restart. Must ignore what it cannot use."""


def listens(check: Check, hook: str) -> bool:
    """Whether `check` overrides this hook; found once, so that an unused hook is never called."""
    return getattr(type(check), hook) is not getattr(Check, hook)
