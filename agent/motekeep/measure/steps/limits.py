"""Limits: the gross range test, as a step so that a document can say what its figures may be.

QARTOD gross range (Flags Manual 1.2, 2020): outside `low` to `high` the figure fails, outside the narrower
`suspect_low` to `suspect_high` it is suspect. It only judges and changes no number: a figure that was clipped is no
longer a measurement. Hence all sensitivities are those of leaving alone.
"""

from dataclasses import dataclass
from math import inf

from motekeep.measure.reading import FAIL, PASS, SUSPECT
from motekeep.measure.steps.step import Air, Need, Numbers, Outcome, Setting, Step, StepKind, StepRefusedError

NEEDS: frozenset[Need] = frozenset()


@dataclass(frozen=True, slots=True)
class Limits:
    """Bounds in ug/m3; the outer ones fail, the inner ones are suspect."""

    low: float
    high: float
    suspect_low: float = -inf
    suspect_high: float = inf

    @property
    def needs(self) -> frozenset[Need]:
        return NEEDS

    def apply(self, figure: float, air: Air) -> Outcome:  # noqa: ARG002 (every step is called alike)
        flag, reason = PASS, None
        if not self.low <= figure <= self.high:
            flag, reason = FAIL, "limits-fail"
        elif not self.suspect_low <= figure <= self.suspect_high:
            flag, reason = SUSPECT, "limits-suspect"
        return Outcome(figure, flag=flag, reason=reason)


def build(_: Numbers, settings: Numbers) -> Step:
    low, high = settings["low"][0], settings["high"][0]
    inner_low = settings.get("suspect_low", (low,))[0]
    inner_high = settings.get("suspect_high", (high,))[0]
    for key, below, above in (
        ("high", low, high),
        ("suspect_low", low, inner_low + 1e-9),
        ("suspect_high", inner_low, inner_high),
        ("suspect_high", inner_high, high + 1e-9),
    ):
        if not below < above:
            raise StepRefusedError(key, "the order has to be low, suspect_low, suspect_high, high")
    return Limits(low, high, inner_low, inner_high)


KIND = StepKind(
    name="limits",
    parameters=(),
    settings=(
        Setting("low", "ug/m3", -100.0, 20000.0, "fails below", required=True),
        Setting("high", "ug/m3", 0.0, 20000.0, "fails above", required=True),
        Setting("suspect_low", "ug/m3", -100.0, 20000.0, "suspect below"),
        Setting("suspect_high", "ug/m3", 0.0, 20000.0, "suspect above"),
    ),
    build=build,
)
