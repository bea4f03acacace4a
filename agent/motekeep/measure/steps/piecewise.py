"""Piecewise: straight lines between points, for a sensor whose response bends.

`at` are figures as they come in, `to` what they become; between two points the correction is linear interpolation, so
the sensitivity to the figure is the slope of its segment and that to each `to` is its hat function. Both have to rise,
else two airs would share one reading. Valid between the first and the last point; beyond, the outer segment goes on and
the figure is suspect, reason `piecewise-beyond`. It is floored at 0 like `linear`.
"""

from bisect import bisect_right
from dataclasses import dataclass
from itertools import pairwise

from motekeep.measure.reading import PASS, SUSPECT
from motekeep.measure.steps.step import (
    Air,
    Need,
    Numbers,
    Outcome,
    Parameter,
    Setting,
    Step,
    StepKind,
    StepRefusedError,
)

NEEDS: frozenset[Need] = frozenset()

# More bends than this are noise that was fitted.
MOST_POINTS = 12


@dataclass(frozen=True, slots=True)
class Piecewise:
    """Interpolates linearly from `at` to `to`, both in ug/m3 and rising."""

    at: tuple[float, ...]
    to: tuple[float, ...]

    @property
    def needs(self) -> frozenset[Need]:
        return NEEDS

    def apply(self, figure: float, air: Air) -> Outcome:  # noqa: ARG002 (every step is called alike)
        at, to = self.at, self.to
        left = min(max(bisect_right(at, figure) - 1, 0), len(at) - 2)
        share = (figure - at[left]) / (at[left + 1] - at[left])
        value = (1.0 - share) * to[left] + share * to[left + 1]
        hats = [0.0] * len(at)
        hats[left], hats[left + 1] = 1.0 - share, share
        slope = (to[left + 1] - to[left]) / (at[left + 1] - at[left])
        flag, reason = PASS, None
        if not at[0] <= figure <= at[-1]:
            flag, reason = SUSPECT, "piecewise-beyond"
        if value < 0.0:
            value, flag, reason = 0.0, SUSPECT, "floored"
        return Outcome(value, slope, tuple(hats), flag=flag, reason=reason)


def build(parameters: Numbers, settings: Numbers) -> Step:
    at, to = settings["at"], parameters["to"]
    if not 2 <= len(at) <= MOST_POINTS:
        raise StepRefusedError("at", f"has {len(at)} points, 2 to {MOST_POINTS} are possible")
    if len(to) != len(at):
        raise StepRefusedError("to", f"has {len(to)} points where `at` has {len(at)}")
    for key, values in (("at", at), ("to", to)):
        if any(b <= a for a, b in pairwise(values)):
            raise StepRefusedError(key, "does not rise from point to point")
    return Piecewise(at, to)


KIND = StepKind(
    name="piecewise",
    parameters=(Parameter("to", "ug/m3", -100.0, 20000.0, "what the figures at `at` become", many=True),),
    settings=(Setting("at", "ug/m3", 0.0, 10000.0, "figures where the line bends", required=True, many=True),),
    build=build,
)
