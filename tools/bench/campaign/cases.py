"""The graded set: each fault at several strengths, and what must be found within how long.

Owns the cases. A case is made from its kind, number and seed alone, so that it can be run in any process and again.
Times are Unix seconds; a fault begins at `onset`: for one that grows, when it passes its limit.
"""

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from driving import CHECKS
from weathers import WEATHERS, at_level, sensors, site

from motesim.events import Event
from motesim.faults import Fault
from motesim.plan import Duty, SensorPlan, SitePlan
from motesim.weather import DAY_S

MINUTE_S, HOUR_S = 60.0, 3600.0
START = 1_804_032_000.0  # 2027-03-03T00:00:00Z


@dataclass(frozen=True, slots=True)
class Case:
    """One emulated site with one fault. `code` must open on the first sensor within `bar_s` of `onset`."""

    kind: str
    label: str
    plan: SitePlan
    code: str
    onset: float
    bar_s: float
    by_bytes: bool = False


@dataclass(frozen=True, slots=True)
class Kind:
    """How many cases of a kind are run at 6 s and at 1 s, and how one of them is made."""

    slow: int
    quick: int
    make: Callable[["Draw"], Case]


class Draw:
    """What a case is drawn from: its kind, number, cadence and the seed of the whole campaign."""

    def __init__(self, kind: str, number: int, period_s: float, seed: int) -> None:
        self.kind, self.number, self.period_s = kind, number, period_s
        self.seed = seed * 100_000 + number + (50_000 if period_s == 1.0 else 0)
        self.rng = np.random.default_rng([self.seed, sum(map(ord, kind))])

    def weather(self, names: tuple[str, ...] = tuple(WEATHERS)) -> str:
        return names[self.number % len(names)]

    def level(self, low: float, high: float) -> float:
        return float(np.exp(self.rng.uniform(np.log(low), np.log(high))))

    def units(self, *, twinned: bool, duty: Duty | None = None, length: int = 36) -> tuple[SensorPlan, ...]:
        return sensors(self.seed, self.period_s, twinned=twinned, duty=duty, length=length)

    def site(self, weather: str, days: float, units: tuple[SensorPlan, ...], level: float | None = None) -> SitePlan:
        air = None if level is None else at_level(WEATHERS[weather].air, level)
        return site(weather, self.seed, START, days, units, air)


def _faulty(plan: SitePlan, fault: Fault) -> SitePlan:
    """The plan with this fault of its first sensor."""
    first, *rest = plan.sensors
    return replace(plan, sensors=(replace(first, faults=(*first.faults, fault)), *rest))


def _fan_stopped(draw: Draw, *, twinned: bool) -> Case:
    level = draw.level(100.0, 20_000.0)
    weather = draw.weather()
    days = 0.2
    onset = START + float(draw.rng.uniform(1.5, 4.0)) * HOUR_S
    plan = draw.site(weather, days, draw.units(twinned=twinned), level)
    label = f"N {'100-500' if level < 500 else '500-3000' if level < 3000 else '3000-20000'}"
    return Case(draw.kind, label, _faulty(plan, Fault("fan-stopped", onset)), "fan-stopped", onset, 4 * MINUTE_S)


def _fan_weak(draw: Draw, *, twinned: bool) -> Case:
    flow = (0.7, 0.6, 0.8)[draw.number % 3]
    learn = 6.0 if twinned else 10.0
    watch = 2.0 if twinned else 15.0
    onset = START + learn * DAY_S
    units = draw.units(twinned=twinned, duty=None if twinned else CHECKS)
    plan = draw.site(draw.weather(), learn + watch, units)
    fault = Fault("fan-weak", onset, strength=1.0 - flow, ramp_s=0.0)
    bar = DAY_S if twinned else 14.0 * DAY_S
    return Case(draw.kind, f"flow {flow:g}", _faulty(plan, fault), "fan-weak", onset, bar)


def _fan_surging(draw: Draw, *, twinned: bool) -> Case:
    spread = (0.25, 0.35, 0.18)[draw.number % 3]
    onset = START + 3.0 * DAY_S + float(draw.rng.uniform(0.0, DAY_S))
    plan = draw.site(draw.weather(), 4.2, draw.units(twinned=twinned))
    fault = Fault("fan-surging", onset, strength=spread)
    return Case(draw.kind, f"sd {spread:.0%}", _faulty(plan, fault), "fan-surging", onset, HOUR_S)


def _optics(draw: Draw, *, twinned: bool) -> Case:
    """Gain falls for five weeks to 60 %; it has passed 75 % after 5/8 of them."""
    learn, ramp, lost, limit = (6.0 if twinned else 16.0), 35.0, 0.4, 0.25
    onset = START + (learn + ramp * limit / lost) * DAY_S
    bar = 7.0 if twinned else 30.0
    plan = draw.site(draw.weather(), (onset - START) / DAY_S + bar + 0.5, draw.units(twinned=twinned))
    fault = Fault("optics-fouled", START + learn * DAY_S, ramp_s=ramp * DAY_S, strength=lost)
    return Case(draw.kind, f"{draw.weather()}", _faulty(plan, fault), "optics-fouled", onset, bar * DAY_S)


def _floor(draw: Draw, *, twinned: bool) -> Case:
    strength = (900.0, 2000.0, 500.0)[draw.number % 3]
    learn = 8.0 if twinned else 14.0
    onset = START + learn * DAY_S
    plan = draw.site(draw.weather(), learn + 4.2, draw.units(twinned=twinned))
    fault = Fault("floor-raised", onset, strength=strength)
    return Case(draw.kind, f"+{strength:.0f} /dL", _faulty(plan, fault), "floor-raised", onset, 4 * DAY_S)


def _leak(draw: Draw, *, twinned: bool) -> Case:
    learn = 8.0 if twinned else 14.0
    onset = START + learn * DAY_S
    plan = draw.site(draw.weather(), learn + 8.2, draw.units(twinned=twinned))
    return Case(
        draw.kind,
        draw.weather(),
        _faulty(plan, Fault("light-leak", onset, strength=1500.0)),
        "light-leak",
        onset,
        8 * DAY_S,
    )


def _line(draw: Draw, fault: str, code: str, bar_s: float, strength: float = 1.0) -> Case:
    """What shows on the line: as bytes through the whole pipeline."""
    onset = START + float(draw.rng.uniform(1.0, 2.0)) * HOUR_S
    weather = draw.weather()
    plan = draw.site(weather, 0.15, draw.units(twinned=draw.number % 2 == 1, length=(28, 36)[draw.number % 2]))
    faulty = _faulty(plan, Fault(fault, onset, strength=strength))
    return Case(draw.kind, weather, faulty, code, onset, bar_s, by_bytes=True)


def _swapped(draw: Draw) -> Case:
    """After two days of learning, as a unit with the same revision byte shows by its behaviour only."""
    days = 2.0 if draw.number % 2 else 0.15
    onset = START + days * DAY_S
    plan = draw.site(draw.weather(), days + 0.05, draw.units(twinned=False))
    fault = Fault("unit-swapped", onset, strength=float(draw.rng.integers(1, 2**31)))
    return Case(draw.kind, "", _faulty(plan, fault), "unit-swapped", onset, 3 * MINUTE_S)


def _saturation(draw: Draw) -> Case:
    """Smoke beyond the counter's top; due by the end of the interval in which the first count was censored."""
    onset = START + 2.0 * HOUR_S
    plan = draw.site("smoke", 0.25, draw.units(twinned=False, length=28))
    thick = Event("smoke", onset, 3.0 * HOUR_S, 400.0, int(draw.rng.integers(2**31)))
    return Case(
        draw.kind, "", replace(plan, events=(*plan.events, thick)), "counts-saturated", onset, 0.0, by_bytes=True
    )


def _fog(draw: Draw) -> Case:
    """A fog that rises; its onset is where the droplets are at half of their number, 37 min after the first of them."""
    begins = START + 1.3 * DAY_S
    plan = draw.site(("fog", "rural", "very-clean", "sea-salt")[draw.number % 4], 1.6, draw.units(twinned=False))
    thick = Event("fog", begins, 5.0 * HOUR_S, float(draw.rng.uniform(8.0, 30.0)), int(draw.rng.integers(2**31)))
    quiet = tuple(e for e in plan.events if e.kind != "fog")
    onset = begins + 0.5 * HOUR_S * float(-np.log(1.0 - np.sqrt(0.5)))
    return Case(draw.kind, plan.name, replace(plan, events=(*quiet, thick)), "humidity-high", onset, 15 * MINUTE_S)


KINDS: dict[str, Kind] = {
    "fan stopped, solo": Kind(150, 150, lambda d: _fan_stopped(d, twinned=False)),
    "fan stopped, twin": Kind(150, 100, lambda d: _fan_stopped(d, twinned=True)),
    "fan weak, twin": Kind(15, 6, lambda d: _fan_weak(d, twinned=True)),
    "fan weak, solo": Kind(12, 3, lambda d: _fan_weak(d, twinned=False)),
    "fan surging, solo": Kind(21, 12, lambda d: _fan_surging(d, twinned=False)),
    "fan surging, twin": Kind(9, 3, lambda d: _fan_surging(d, twinned=True)),
    "optics, twin": Kind(10, 2, lambda d: _optics(d, twinned=True)),
    "optics, solo": Kind(10, 2, lambda d: _optics(d, twinned=False)),
    "floor, twin": Kind(12, 3, lambda d: _floor(d, twinned=True)),
    "floor, solo": Kind(12, 3, lambda d: _floor(d, twinned=False)),
    "light leak, twin": Kind(10, 2, lambda d: _leak(d, twinned=True)),
    "light leak, solo": Kind(10, 2, lambda d: _leak(d, twinned=False)),
    "output frozen": Kind(40, 20, lambda d: _line(d, "output-frozen", "output-frozen", 5 * MINUTE_S)),
    "silent": Kind(40, 20, lambda d: _line(d, "silent", "frames-missing", 3 * MINUTE_S)),
    "unit swapped": Kind(40, 12, _swapped),
    "bad checksums 5 %": Kind(40, 20, lambda d: _line(d, "bad-checksums", "frames-corrupt", 15 * MINUTE_S, 0.05)),
    "saturation": Kind(20, 10, _saturation),
    "fog": Kind(24, 6, _fog),
}


def ordinary(number: int, period_s: float, seed: int, days: float, *, twinned: bool) -> SitePlan:
    """One stretch of ordinary weather, solo or twinned; the stretches of a year follow its seasons."""
    draw = Draw("ordinary", number, period_s, seed)
    name = draw.weather()
    season = 365.25 * DAY_S / 4.0 * (number // len(WEATHERS))
    units = draw.units(twinned=twinned, duty=None if twinned else CHECKS)
    return site(name, draw.seed, START + season - season % DAY_S, days, units)
