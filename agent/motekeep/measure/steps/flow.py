"""Flow: the firmware assumes its nominal flow; a fan that draws less counts as much less as it draws.

One factor for every channel, nominal flow over true flow; the factor comes from a flow measurement or from a twin. It
holds while inlet and settling losses are the same for all sizes, which a fan below about half of its flow does not
keep: large particles are lost first. Common practice, no source.
"""

from dataclasses import dataclass

from motekeep.measure.steps.step import Air, Need, Numbers, Outcome, Parameter, Step, StepKind

NEEDS: frozenset[Need] = frozenset()


@dataclass(frozen=True, slots=True)
class Flow:
    """Multiplies mass by `factor`, nominal over true flow."""

    factor: float

    @property
    def needs(self) -> frozenset[Need]:
        return NEEDS

    def apply(self, figure: float, air: Air) -> Outcome:  # noqa: ARG002 (every step is called alike)
        return Outcome(self.factor * figure, self.factor, (figure,))


def build(parameters: Numbers, _: Numbers) -> Step:
    return Flow(parameters["factor"][0])


KIND = StepKind(
    name="flow",
    # Beyond a factor of five it is a broken fan, not a correction.
    parameters=(Parameter("factor", "1", 0.2, 5.0, "nominal flow over true flow"),),
    settings=(),
    build=build,
)
