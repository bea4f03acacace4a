"""The findings that a twin tells by hours and days: fan-weak, optics-fouled, floor-raised, light-leak, twin-disagrees.

Owns their names, and that they are decided together: one sensor beside its twin has one thing wrong with it at a time.
Must not know how: that is `twin_verdict`.
"""

from collections.abc import Mapping
from typing import Any, ClassVar

from motekeep.health.check import Check
from motekeep.health.finding import Suspicion
from motekeep.health.hour import Hour
from motekeep.health.lessons.twin_ratio import TwinRatio, TwinRatioLesson
from motekeep.health.memory import Memory
from motekeep.health.twin_verdict import DISAGREES, FAN, FLOOR, LEAK, OPTICS, TwinVerdict
from motekeep.instant import Instant


class _BesideTwin(Check):
    """A check of one code of a verdict that is reached elsewhere."""

    clear_s: ClassVar[float] = 3600.0  # a verdict is reached every four hours and has a hysteresis of its own
    slow: ClassVar[bool] = True

    def __init__(self, verdict: TwinVerdict) -> None:
        self._verdict = verdict

    def judge(self, at: Instant) -> Suspicion | None:
        return self._verdict.suspicion(self.code, at)


class TwinDisagrees(_BesideTwin):
    """twin-disagrees: both differ by more than either can, and by nothing that is known to happen to a unit.

    Two days beyond the learnt ratio, or beyond what any two sound units can differ by before there is one. This check
    also hears for the others, and keeps what all of them remember.
    """

    code: ClassVar[str] = DISAGREES

    def hour(self, hour: Hour) -> None:
        self._verdict.hour(hour)

    def learnt(self, parts: Mapping[str, Any]) -> None:
        ratio = parts.get(TwinRatioLesson.name)
        self._verdict.learnt(ratio if isinstance(ratio, TwinRatio) else None)

    def memory(self) -> Memory | None:
        return self._verdict.memory()

    def recall(self, memory: Memory, at: Instant) -> None:
        self._verdict.recall(memory)


class FanWeakBesideTwin(_BesideTwin):
    """fan-weak: all channels have lost one factor beside the twin, large ones a little more, as they settle on the way
    in. Of the air that passes a slow fan less is counted; firmware goes on reckoning with the nominal flow."""

    code: ClassVar[str] = FAN


class OpticsFouledBesideTwin(_BesideTwin):
    """optics-fouled: sizes have shifted down beside the twin, each by what the loss of one share of light does to it:
    the steeper the size distribution and the flatter the scattering there, the more is lost (Mie theory)."""

    code: ClassVar[str] = OPTICS


class FloorRaisedBesideTwin(_BesideTwin):
    """floor-raised: the smallest channel has the same counts on top in clean air and in dirty air, day and night; the
    larger channels agree with the twin."""

    code: ClassVar[str] = FLOOR


class LightLeakBesideTwin(_BesideTwin):
    """light-leak: a floor that is there by day and not by night."""

    code: ClassVar[str] = LEAK


def twin_checks(flow_l_min: float, period_s: float) -> tuple[Check, ...]:
    """The checks of a sensor that has a twin; the first of them hears for all."""
    verdict = TwinVerdict(flow_l_min, period_s)
    return (
        TwinDisagrees(verdict),
        FanWeakBesideTwin(verdict),
        OpticsFouledBesideTwin(verdict),
        FloorRaisedBesideTwin(verdict),
        LightLeakBesideTwin(verdict),
    )
