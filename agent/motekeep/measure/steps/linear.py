"""Linear: slope and offset, with optional terms in RH and temperature.

y = slope x + offset + rh_term RH + t_term T, RH in %, T in degC. The form of Barkjohn et al. 2021 (Atmos. Meas. Tech.
14:4617, doi 10.5194/amt-14-4617-2021), there with an RH term.

The form has no saturation: at little dust and high humidity it goes below zero. Then the figure is floored at 0 and
suspect, reason `floored`; its sensitivities stay those of the line, since the floor makes nobody surer. Valid in the
range that the document states, which is checked there.
"""

from dataclasses import dataclass

from motekeep.measure.reading import PASS, SUSPECT
from motekeep.measure.steps.step import Air, Need, Numbers, Outcome, Parameter, Step, StepKind


@dataclass(frozen=True, slots=True)
class Linear:
    """`slope` without unit, `offset` in ug/m3, `rh_term` in ug/m3 a %, `t_term` in ug/m3 a degC; None leaves it out."""

    slope: float
    offset: float
    rh_term: float | None = None
    t_term: float | None = None

    @property
    def needs(self) -> frozenset[Need]:
        humid = {Need.RH} if self.rh_term is not None else set()
        warm = {Need.TEMPERATURE} if self.t_term is not None else set()
        return frozenset(humid | warm)

    def apply(self, figure: float, air: Air) -> Outcome:
        value = self.slope * figure + self.offset
        d_parameters: tuple[float, ...] = (figure, 1.0)
        if self.rh_term is not None:
            if air.rh_pct is None:
                return Outcome(None, flag=SUSPECT, reason="climate-missing")
            value += self.rh_term * air.rh_pct
            d_parameters += (air.rh_pct,)
        if self.t_term is not None:
            if air.temperature_c is None:
                return Outcome(None, flag=SUSPECT, reason="climate-missing")
            value += self.t_term * air.temperature_c
            d_parameters += (air.temperature_c,)
        floored = value < 0.0
        return Outcome(
            value=0.0 if floored else value,
            d_input=self.slope,
            d_parameters=d_parameters,
            d_rh=self.rh_term or 0.0,
            d_t=self.t_term or 0.0,
            flag=SUSPECT if floored else PASS,
            reason="floored" if floored else None,
        )


def build(parameters: Numbers, _: Numbers) -> Step:
    return Linear(
        parameters["slope"][0],
        parameters["offset"][0],
        parameters["rh_term"][0] if "rh_term" in parameters else None,
        parameters["t_term"][0] if "t_term" in parameters else None,
    )


KIND = StepKind(
    name="linear",
    # Published slopes lie in 0.4 to 0.9, offsets in -4 to 8 ug/m3, RH terms in -0.2 to -0.02 (from memory); the limits
    # are ten times as wide, so that they refuse a slip of the pen and not an odd aerosol.
    parameters=(
        Parameter("slope", "1", 0.02, 20.0, "corrected over raw"),
        Parameter("offset", "ug/m3", -100.0, 100.0, "what is added"),
        Parameter("rh_term", "ug/m3/%", -3.0, 3.0, "what is added for each % of RH", required=False),
        Parameter("t_term", "ug/m3/Cel", -5.0, 5.0, "what is added for each degC", required=False),
    ),
    settings=(),
    build=build,
)
