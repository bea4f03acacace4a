"""How good the agreement is, by published rules, for people and for `metrics.json`.

Owns the figures and the targets. x is the reference, y the sensor.

- US EPA base testing of PM2.5 sensors (EPA/600/R-20/280, 2021; targets quoted from memory): slope 1.0 +- 0.35,
  intercept within 5 ug/m3, R2 at least 0.70, RMSE at most 7 ug/m3 or NRMSE at most 30 %, by ordinary least squares on
  means of 24 h. Its precision target needs three units side by side and is not judged here.
- Expanded uncertainty at a limit value after the Guide to the Demonstration of Equivalence (EC Working Group, 2010;
  formulas from memory): orthogonal line, u^2 = RSS / (n - 2) - u_ref^2 + (a + (b - 1) L)^2, W = 2 u / L. A random term
  below zero is set to zero, and said.
- The class that W would fall in: CEN/TS 17660-2:2024 wants consistency with indicative measurement (50 %) for class 1,
  objective estimation (100 %) for class 2, and 200 % for class 3 (the last from memory). It tests in more ways than
  this one: the class is where the figure would fall, no certificate.
"""

from dataclasses import dataclass

import numpy as np

from moteferry.fit.agreement import AgreementLine, ordinary, orthogonal
from moteferry.fit.record import Floats

EPA_SOURCE = "EPA/600/R-20/280 (2021), base testing, quoted from memory"
EU_SOURCE = "Guide to the Demonstration of Equivalence (EC Working Group, 2010), formulas from memory"
CLASS_SOURCE = "by consistency with 50/100/200 % as in CEN/TS 17660-2:2024; not a certificate"
CLASSES = ((50.0, "class 1"), (100.0, "class 2"), (200.0, "class 3"))


@dataclass(frozen=True, slots=True)
class Comparison:
    """Ordinary least squares of the sensor on the reference. ug/m3 but for slope, `r2` and `nrmse` (%)."""

    n: int
    slope: float
    intercept: float
    r2: float
    rmse: float
    nrmse: float
    bias: float


@dataclass(frozen=True, slots=True)
class Target:
    """One EPA target: what is asked, in words, the figure, and whether it is met."""

    name: str
    asked: str
    figure: float
    met: bool


@dataclass(frozen=True, slots=True)
class Equivalence:
    """Expanded uncertainty at `limit_value`. `u_reference` went in; `random_negative` says that the random term was
    below zero and is set to zero. `expanded` is W in %, `falls_in` the class or None."""

    limit_value: float
    line: AgreementLine
    u_reference: float
    rss: float
    u: float
    expanded: float
    random_negative: bool
    falls_in: str | None


def compare(reference: Floats, sensor: Floats) -> Comparison:
    """Raises ValueError on fewer than three pairs or where one side stands still."""
    line = ordinary(reference, sensor)
    error = sensor - reference
    rmse = float(np.sqrt(np.mean(error**2)))
    mean = float(reference.mean())
    return Comparison(
        n=len(reference),
        slope=line.slope,
        intercept=line.intercept,
        r2=float(np.corrcoef(reference, sensor)[0, 1] ** 2),
        rmse=rmse,
        nrmse=100.0 * rmse / mean if mean > 0.0 else float("inf"),
        bias=float(error.mean()),
    )


def epa_targets(found: Comparison) -> tuple[Target, ...]:
    """The base-testing targets that one unit can be held against."""
    return (
        Target("slope", "1.0 +- 0.35", found.slope, abs(found.slope - 1.0) <= 0.35),
        Target("intercept", "-5 to 5 ug/m3", found.intercept, abs(found.intercept) <= 5.0),
        Target("r2", "at least 0.70", found.r2, found.r2 >= 0.70),
        # one target with two ways to meet it
        Target("rmse", "at most 7 ug/m3, or NRMSE at most 30 %", found.rmse, found.rmse <= 7.0 or found.nrmse <= 30.0),
    )


def equivalence(reference: Floats, sensor: Floats, limit_value: float, u_reference: float = 0.0) -> Equivalence:
    """By the EU guide; see the module. `u_reference` is the random standard uncertainty of the reference, ug/m3."""
    line = orthogonal(reference, sensor)
    rss = float(np.sum((sensor - line.intercept - line.slope * reference) ** 2))
    random = rss / (len(reference) - 2) - u_reference**2
    bias = line.intercept + (line.slope - 1.0) * limit_value
    u = float(np.sqrt(max(random, 0.0) + bias**2))
    expanded = 200.0 * u / limit_value
    falls_in = next((name for most, name in CLASSES if expanded <= most), None)
    return Equivalence(limit_value, line, u_reference, rss, u, expanded, random < 0.0, falls_in)
