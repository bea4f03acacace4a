"""The verdict: open findings as one status word of NAMUR NE 107.

Owns the roll-up. Rule: the status of a sensor is the worst category of its open findings, that of the gateway the worst
over its own findings and those of all its sensors, so that one word at the top of a fleet's list hides nothing: a
gateway of which one sensor has failed needs the visit that a failure needs. Without findings it is `normal`.
Worst first: failure, function check, out of specification, maintenance required (see `finding.PRIORITY`). Confidence
and number of the findings do not weigh: a finding is opened only when it is worth a person's look.
"""

from collections.abc import Iterable
from typing import Literal

from motekeep.health.finding import PRIORITY, Category, Finding

Status = Literal["normal", "maintenance_required", "out_of_specification", "function_check", "failure"]

_WORDS: dict[Category, Status] = {
    Category.FAILURE: "failure",
    Category.FUNCTION_CHECK: "function_check",
    Category.OUT_OF_SPECIFICATION: "out_of_specification",
    Category.MAINTENANCE_REQUIRED: "maintenance_required",
}


def status_of(findings: Iterable[Finding]) -> Status:
    """The status word for these open findings."""
    categories = {finding.category for finding in findings}
    worst = next((category for category in PRIORITY if category in categories), None)
    return "normal" if worst is None else _WORDS[worst]
