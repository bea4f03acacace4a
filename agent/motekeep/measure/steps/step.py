"""What a correction step is: a pure function of one figure and the air, with its sensitivities and its flag.

Owns the types that every step shares. Must not know any step, nor documents, nor how uncertainty is combined.

A step acts on one mass figure at a time. What it needs beside that figure it reads from `Air`, so the same air, and
the same error of it, reaches every step of a chain and every channel.
"""

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from enum import StrEnum
from typing import NamedTuple, Protocol

from motekeep.measure.reading import PASS


class Need(StrEnum):
    """What a step cannot do without, beside the figure that it corrects."""

    RH = "rh"
    TEMPERATURE = "t"
    COUNT = "count"


@dataclass(frozen=True, slots=True)
class Air:
    """The air of one interval. What is None could not be used: missing, stale or implausible.

    `count_per_dl` is the mean of the smallest count channel, all particles that the sensor sees. `count_censored`
    says that it ran into its top at least once, so that its mean is only a lower bound.
    """

    rh_pct: float | None = None
    temperature_c: float | None = None
    count_per_dl: float | None = None
    count_censored: bool = False


class Outcome(NamedTuple):
    """What a step makes of one figure.

    `value` is in ug/m3, None when the step can state no number. The `d_` fields are partial derivatives of `value`:
    by the figure that came in, by each parameter in the order of the step's table, by RH in %, by temperature in degC,
    by the smallest count in 1/dL. `reason` says why `flag` is not PASS.
    """

    value: float | None
    d_input: float = 1.0
    d_parameters: tuple[float, ...] = ()
    d_rh: float = 0.0
    d_t: float = 0.0
    d_count: float = 0.0
    flag: int = PASS
    reason: str | None = None


class Step(Protocol):
    """One step with its parameters. `needs` names what has to be in `Air` before `apply` may be called."""

    @property
    def needs(self) -> frozenset[Need]: ...

    def apply(self, figure: float, air: Air) -> Outcome: ...


@dataclass(frozen=True, slots=True)
class Parameter:
    """A fitted number with a standard uncertainty. `low` and `high` are physical limits, not a fitting range.

    `many` makes it a list, each element a parameter of its own.
    """

    name: str
    unit: str
    low: float
    high: float
    meaning: str
    required: bool = True
    many: bool = False


@dataclass(frozen=True, slots=True)
class Setting:
    """A chosen number, without uncertainty. `default` is None where it must be stated or may be left out."""

    name: str
    unit: str
    low: float
    high: float
    meaning: str
    default: float | None = None
    required: bool = False
    many: bool = False


Numbers = Mapping[str, tuple[float, ...]]


class StepRefusedError(ValueError):
    """Parameters that are each within their limits but impossible together; `key` is the one to look at."""

    def __init__(self, key: str, why: str) -> None:
        self.key = key
        self.why = why
        super().__init__(f"{key}: {why}")


@dataclass(frozen=True, slots=True)
class StepKind:
    """One line of the table of steps: name, what a document states for it, and how it is made from that.

    `build` gets parameters and settings by name, each as a tuple, absent ones left out; it raises StepRefusedError.
    """

    name: str
    parameters: tuple[Parameter, ...]
    settings: tuple[Setting, ...]
    build: Callable[[Numbers, Numbers], Step]
