"""The forms that a correction may have, each as the device will apply it.

Owns, of each form, what it predicts for a span of readings, its derivatives, and the steps of the document that it
becomes. Must not know how it is fitted, judged or written. They are listed from simple to rich: that order decides
between forms that do equally well.

`linear`: Barkjohn et al. 2021, Atmos. Meas. Tech. 14:4617 for the RH term. `humidity-growth`: Crilley et al. 2018,
Atmos. Meas. Tech. 11:709. The physics stands in measure/steps.
"""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from moteferry.fit.pairs import RH_HIGH, RH_LOW, Pairs
from moteferry.fit.record import Floats
from motekeep.measure.steps import STEPS
from motekeep.measure.steps.humidity_growth import DENSITY

Rows = NDArray[np.bool_] | NDArray[np.int64]

# RH or temperature that stands still tells nothing of its own influence, in % and degC.
STILL_RH, STILL_T = 2.0, 1.0

# Readings of a span are gathered into this many groups of like humidity before growth is fitted. Within a group the
# growth of its mean is taken for the mean of its growth: under 0.2 % even where RH runs from 30 to 85 % in one hour.
GROUPS = 6

# Where the bent line bends: quantiles of the spans' means. The lowest point is 0, the highest the highest mean.
BENDS = (0.5, 0.9)


@dataclass(frozen=True, slots=True)
class StepForm:
    """One `[[step]]`: its kind and settings, and for each parameter of it the place among the fitted ones, a tuple of
    places for a list, or a number that is exact."""

    kind: str
    settings: Mapping[str, float | tuple[float, ...]]
    parameters: Mapping[str, int | tuple[int, ...] | float]


@dataclass(frozen=True, slots=True)
class Features:
    """What a form needs of the spans, arrays that have spans along their first axis."""

    arrays: tuple[Floats, ...]

    def of(self, rows: Rows) -> "Features":
        return Features(tuple([a[rows] for a in self.arrays]))

    def __len__(self) -> int:
        return len(self.arrays[0])


class Candidate(Protocol):
    """A form. `names` are its parameters as a document's covariance calls them; `low` and `high` what the device takes
    of each; `begin` is where a search may start; `linear` says that the prediction is linear in the parameters."""

    @property
    def name(self) -> str: ...
    @property
    def words(self) -> str: ...
    @property
    def names(self) -> tuple[str, ...]: ...
    @property
    def low(self) -> tuple[float, ...]: ...
    @property
    def high(self) -> tuple[float, ...]: ...
    @property
    def begin(self) -> tuple[float, ...]: ...
    @property
    def linear(self) -> bool: ...
    @property
    def steps(self) -> tuple[StepForm, ...]: ...

    def features(self, pairs: Pairs) -> Features: ...

    def predict(self, parameters: Floats, features: Features) -> Floats:
        """The mean of the corrected readings of each span, before the floor at zero, ug/m3."""
        ...

    def jacobian(self, parameters: Floats, features: Features) -> Floats: ...


def _bounds(kind: str, *names: str) -> tuple[tuple[float, ...], tuple[float, ...]]:
    known = {p.name: p for p in STEPS[kind].parameters}
    return tuple(known[n].low for n in names), tuple(known[n].high for n in names)


@dataclass(frozen=True, slots=True)
class Line:
    """slope x raw, and what `terms` adds: `offset`, `rh_term`, `t_term`."""

    name: str
    words: str
    terms: tuple[str, ...] = ()
    linear: bool = True

    @property
    def names(self) -> tuple[str, ...]:
        return tuple(f"linear.{term}" for term in ("slope", *self.terms))

    @property
    def low(self) -> tuple[float, ...]:
        return _bounds("linear", "slope", *self.terms)[0]

    @property
    def high(self) -> tuple[float, ...]:
        return _bounds("linear", "slope", *self.terms)[1]

    @property
    def begin(self) -> tuple[float, ...]:
        return (1.0, *(0.0 for _ in self.terms))

    @property
    def steps(self) -> tuple[StepForm, ...]:
        parameters: dict[str, int | tuple[int, ...] | float] = {"slope": 0, "offset": 0.0}
        parameters |= {term: place for place, term in enumerate(self.terms, 1)}
        return (StepForm("linear", {}, parameters),)

    def features(self, pairs: Pairs) -> Features:
        columns = {"offset": np.ones(len(pairs)), "rh_term": pairs.rh_mean, "t_term": pairs.t_mean}
        return Features((np.stack([pairs.raw_mean, *(columns[term] for term in self.terms)], axis=1),))

    def predict(self, parameters: Floats, features: Features) -> Floats:
        return np.asarray(features.arrays[0] @ parameters)

    def jacobian(self, parameters: Floats, features: Features) -> Floats:  # noqa: ARG002 (every form is asked alike)
        return features.arrays[0]


@dataclass(frozen=True, slots=True)
class Growth:
    """slope x raw over the growth of mass by water, plus offset. Parameters: kappa, slope, offset."""

    name: str = "growth"
    words: str = "slope and offset after humidity growth is taken out (kappa)"
    linear: bool = False
    names: tuple[str, ...] = ("humidity-growth.kappa", "linear.slope", "linear.offset")
    begin: tuple[float, ...] = (0.3, 1.0, 0.0)

    @property
    def low(self) -> tuple[float, ...]:
        return (*_bounds("humidity-growth", "kappa")[0], *_bounds("linear", "slope", "offset")[0])

    @property
    def high(self) -> tuple[float, ...]:
        return (*_bounds("humidity-growth", "kappa")[1], *_bounds("linear", "slope", "offset")[1])

    @property
    def steps(self) -> tuple[StepForm, ...]:
        return (
            StepForm("humidity-growth", {"rh_low": RH_LOW, "rh_high": RH_HIGH}, {"kappa": 0}),
            StepForm("linear", {}, {"slope": 1, "offset": 2}),
        )

    def features(self, pairs: Pairs) -> Features:
        held = np.clip(pairs.rh, RH_LOW, RH_HIGH)
        return Features(_grouped(pairs.weight * pairs.raw, held / (100.0 - held) / DENSITY))

    def predict(self, parameters: Floats, features: Features) -> Floats:
        mass, water = features.arrays
        kappa, slope, offset = parameters
        return np.asarray(slope * (mass / (1.0 + kappa * water)).sum(axis=1) + offset)

    def jacobian(self, parameters: Floats, features: Features) -> Floats:
        mass, water = features.arrays
        kappa, slope, _ = parameters
        factor = 1.0 + kappa * water
        dry = mass / factor
        by_kappa = -slope * (dry * water / factor).sum(axis=1)
        return np.stack([by_kappa, dry.sum(axis=1), np.ones(len(mass))], axis=1)


@dataclass(frozen=True, slots=True)
class Bent:
    """Straight lines between points: for a sensor whose response bends. Parameters: what the figures `at` become."""

    at: tuple[float, ...]
    name: str = "piecewise"
    words: str = "straight lines that bend"
    linear: bool = True

    @property
    def names(self) -> tuple[str, ...]:
        return tuple(f"piecewise.to[{i}]" for i in range(len(self.at)))

    @property
    def low(self) -> tuple[float, ...]:
        return _bounds("piecewise", *["to"] * len(self.at))[0]

    @property
    def high(self) -> tuple[float, ...]:
        return _bounds("piecewise", *["to"] * len(self.at))[1]

    @property
    def begin(self) -> tuple[float, ...]:
        return self.at

    @property
    def steps(self) -> tuple[StepForm, ...]:
        return (StepForm("piecewise", {"at": self.at}, {"to": tuple(range(len(self.at)))}),)

    def features(self, pairs: Pairs) -> Features:
        at = np.array(self.at)
        left = np.clip(np.searchsorted(at, pairs.raw, side="right") - 1, 0, len(at) - 2)
        share = (pairs.raw - at[left]) / (at[left + 1] - at[left])
        hats = [
            pairs.mean(np.where(left == i, 1.0 - share, 0.0) + np.where(left == i - 1, share, 0.0))
            for i in range(len(at))
        ]
        return Features((np.stack(hats, axis=1),))

    def predict(self, parameters: Floats, features: Features) -> Floats:
        return np.asarray(features.arrays[0] @ parameters)

    def jacobian(self, parameters: Floats, features: Features) -> Floats:  # noqa: ARG002 (every form is asked alike)
        return features.arrays[0]


def _grouped(mass: Floats, water: Floats) -> tuple[Floats, Floats]:
    """(n, m) readings as (n, GROUPS) groups of like `water`: the mass of each and its mean water by mass."""
    if mass.shape[1] <= GROUPS:
        return mass, water
    order = np.argsort(water, axis=1)
    mass, water = (np.take_along_axis(values, order, axis=1) for values in (mass, water))
    begins = np.linspace(0, mass.shape[1], GROUPS, endpoint=False).astype(np.int64)
    total = np.add.reduceat(mass, begins, axis=1)
    wet = np.add.reduceat(mass * water, begins, axis=1)
    return total, np.divide(wet, total, out=np.zeros_like(total), where=total > 0.0)


def candidates(pairs: Pairs) -> tuple[Candidate, ...]:
    """The forms that these spans can tell anything about, from simple to rich."""
    forms: list[Candidate] = [
        Line("scale", "one factor"),
        Line("linear", "slope and offset", ("offset",)),
    ]
    humid = pairs.humid and np.ptp(pairs.rh_mean) > STILL_RH
    if humid:
        forms.append(Line("linear-rh", "slope, offset and a term in RH", ("offset", "rh_term")))
        forms.append(Growth())
    if humid and pairs.warm and np.ptp(pairs.t_mean) > STILL_T:
        forms.append(
            Line("linear-rh-t", "slope, offset and terms in RH and temperature", ("offset", "rh_term", "t_term"))
        )
    if (at := _bends(pairs)) is not None:
        forms.append(Bent(at))
    return tuple(forms)


def _bends(pairs: Pairs) -> tuple[float, ...] | None:
    means = pairs.raw_mean
    at = [0.0, *(float(np.quantile(means, q)) for q in BENDS), float(means.max())]
    rounded = [round(a, 3) for a in at]
    # Points closer than the print of the sensor would fit its rounding.
    return tuple(rounded) if min(np.diff(rounded)) >= 0.5 else None
