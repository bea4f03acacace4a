"""The correction steps, one file each, and the table that names them. A new step is one file and one line here."""

from motekeep.measure.steps import coincidence, flow, humidity_growth, limits, linear, piecewise
from motekeep.measure.steps.step import StepKind

STEPS: dict[str, StepKind] = {
    kind.name: kind
    for kind in (
        coincidence.KIND,
        flow.KIND,
        humidity_growth.KIND,
        linear.KIND,
        piecewise.KIND,
        limits.KIND,
    )
}
