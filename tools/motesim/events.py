"""What happens in the air: smoke, dust, fog, rain, a room's air cleaner, fireworks, spray, a passing plume, a front.

Owns the table of events and their time courses. Must not know instruments.
"""

from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np

from motesim.aerosol import DUST, FIREWORK, FOG, PLUME, SALT, SMOKE, Floats, Mode, mass_below
from motesim.relaxation import Course, generators, smooth_step
from motesim.weather import DAY_S, STEP_S

HOUR_S = 3600.0


@dataclass(frozen=True, slots=True)
class Event:
    """One thing that happens. `at` is Unix seconds, `strength` in the unit that `KINDS` states for the kind."""

    kind: str
    at: float
    lasts_s: float
    strength: float
    seed: int = 0


@dataclass(slots=True)
class Effect:
    """What the events of one stretch do: factors on the site's own air, populations added, humidity pulled."""

    fine: Floats
    coarse: Floats
    rh_target: Floats
    rh_weight: Floats
    cooling: Floats
    added: dict[Mode, Floats]

    @classmethod
    def none(cls, n: int) -> "Effect":
        return cls(np.ones(n), np.ones(n), np.full(n, 100.0), np.zeros(n), np.zeros(n), {})

    def add(self, modes: tuple[Mode, ...], factor: Floats) -> None:
        for mode in modes:
            self.added[mode] = self.added.get(mode, np.zeros_like(factor)) + factor

    def moisten(self, target: float, weight: Floats) -> None:
        stronger = weight > self.rh_weight
        self.rh_target = np.where(stronger, target, self.rh_target)
        self.rh_weight = np.where(stronger, weight, self.rh_weight)


def _pulse(event: Event, times: Floats, rise_s: float, fall_s: float) -> Floats:
    """0..1: relaxes up with `rise_s` while the event lasts, down with `fall_s` after it."""
    end = event.at + event.lasts_s
    top = 1.0 - np.exp(-event.lasts_s / rise_s)
    after = top * np.exp(-np.clip((times - end) / fall_s, 0.0, 700.0))
    return np.where(times < end, smooth_step(times, event.at, rise_s), after) * (times >= event.at)


def _ripple(event: Event, times: Floats, tau_s: float, spread: float) -> Floats:
    """A lognormal flicker around 1 that depends on the event's seed and on the time since it began only."""
    first = round((times[0] - event.at) / STEP_S)
    skip = max(first, 0)
    lead = max(-first, 0)
    count = max(len(times) - lead, 0)
    course = Course(generators(event.seed, ["ripple"])["ripple"], tau_s, STEP_S).take(skip + count)[skip:]
    return np.concatenate([np.ones(lead)[: len(times)], np.exp(spread * course - spread * spread / 2.0)])


def _smoke(event: Event, times: Floats, effect: Effect) -> None:
    shape = _pulse(event, times, 0.8 * HOUR_S, 1.5 * HOUR_S) * _ripple(event, times, 900.0, 0.25)
    effect.add(SMOKE, event.strength / mass_below(SMOKE, 2.5) * shape)


def _dust(event: Event, times: Floats, effect: Effect) -> None:
    shape = _pulse(event, times, 0.5 * HOUR_S, 1.0 * HOUR_S) * _ripple(event, times, 300.0, 0.4)
    effect.add(DUST, event.strength / mass_below(DUST, 10.0) * shape)


def _fog(event: Event, times: Floats, effect: Effect) -> None:
    shape = _pulse(event, times, 0.5 * HOUR_S, 0.4 * HOUR_S)
    effect.add(FOG, event.strength * shape**2 * _ripple(event, times, 240.0, 0.3))
    effect.moisten(99.8, np.minimum(1.3 * shape, 1.0))
    effect.fine *= 1.0 - 0.05 * shape  # part of the haze becomes droplet nuclei


def _rain(event: Event, times: Floats, effect: Effect) -> None:
    """Below-cloud scavenging: coarse near 2 per hour at strength 1, the accumulation mode ten times slower."""
    fallen_h = np.clip(times - event.at, 0.0, event.lasts_s) / HOUR_S
    back = smooth_step(times, event.at + event.lasts_s, 4.0 * HOUR_S)
    fine = np.exp(-0.25 * event.strength * fallen_h)
    coarse = np.exp(-2.0 * event.strength * fallen_h)
    effect.fine *= fine + (1.0 - fine) * back
    effect.coarse *= coarse + (1.0 - coarse) * back
    shape = _pulse(event, times, 0.3 * HOUR_S, 1.5 * HOUR_S)
    effect.moisten(94.0, 0.9 * shape)
    effect.cooling += 2.0 * shape


def _air_cleaner(event: Event, times: Floats, effect: Effect) -> None:
    """`strength` is clean air delivered in room volumes per hour against an infiltration of 0.5 per hour."""
    infiltration = 0.5 / HOUR_S
    cleaning = event.strength / HOUR_S
    level = infiltration / (infiltration + cleaning)
    shape = _pulse(event, times, 1.0 / (infiltration + cleaning), 1.0 / infiltration)
    effect.fine *= 1.0 - (1.0 - level) * shape
    effect.coarse *= 1.0 - (1.0 - level) * shape


def _fireworks(event: Event, times: Floats, effect: Effect) -> None:
    shape = _pulse(event, times, 120.0, 1500.0) * _ripple(event, times, 60.0, 0.8)
    effect.add(FIREWORK, event.strength / mass_below(FIREWORK, 2.5) * shape)


def _sea_salt(event: Event, times: Floats, effect: Effect) -> None:
    shape = _pulse(event, times, 1.0 * HOUR_S, 2.0 * HOUR_S) * _ripple(event, times, 600.0, 0.2)
    effect.add(SALT, event.strength / mass_below(SALT, 10.0) * shape)
    effect.moisten(82.0, 0.5 * shape)


def _plume(event: Event, times: Floats, effect: Effect) -> None:
    shape = _pulse(event, times, 15.0, 40.0) * _ripple(event, times, 20.0, 0.6)
    effect.add(PLUME, event.strength / mass_below(PLUME, 2.5) * shape)


def _clean_front(event: Event, times: Floats, effect: Effect) -> None:
    """`strength` is the share of the haze that the new air mass lacks; it arrives within about a quarter of an hour."""
    shape = _pulse(event, times, 400.0, 5.0 * HOUR_S)
    effect.fine *= 1.0 - event.strength * shape
    effect.coarse *= 1.0 - 0.7 * event.strength * shape


@dataclass(frozen=True, slots=True)
class Kind:
    """A kind of event: what `strength` means, its usual value and length, and its course."""

    unit: str
    strength: float
    lasts_s: float
    apply: Callable[[Event, Floats, Effect], None]
    tail_s: float = 12.0 * HOUR_S  # after this long past its end it is over for good


KINDS: dict[str, Kind] = {
    "smoke": Kind("dry PM2.5 at the top, ug/m3", 60.0, 5 * HOUR_S, _smoke),
    "dust": Kind("PM10 at the top, ug/m3", 250.0, 4 * HOUR_S, _dust),
    "fog": Kind("droplets per cm3", 14.0, 4 * HOUR_S, _fog),
    "rain": Kind("wash-out, 1 is steady rain", 1.0, 3 * HOUR_S, _rain, tail_s=24.0 * HOUR_S),
    "air-cleaner": Kind("room volumes of clean air per hour", 6.0, 4 * HOUR_S, _air_cleaner),
    "fireworks": Kind("dry PM2.5 at the top, ug/m3", 150.0, 0.7 * HOUR_S, _fireworks),
    "sea-salt": Kind("PM10 at the top, ug/m3", 40.0, 8 * HOUR_S, _sea_salt),
    "plume": Kind("dry PM2.5 at the top, ug/m3", 30.0, 90.0, _plume, tail_s=HOUR_S),
    "clean-front": Kind("share of the haze that goes", 0.8, 6 * HOUR_S, _clean_front, tail_s=DAY_S),
}


def effect_of(events: tuple[Event, ...], times: Floats) -> Effect:
    """What all `events` together do over `times`, which are `STEP_S` apart."""
    effect = Effect.none(len(times))
    for event in events:
        kind = KINDS[event.kind]
        if event.at <= times[-1] and times[0] <= event.at + event.lasts_s + kind.tail_s:
            kind.apply(event, times, effect)
    return effect


def drawn(per_30_days: Mapping[str, float], seed: int, start: float, seconds: float) -> tuple[Event, ...]:
    """Random events: Poisson in number, uniform in time, lognormal in length and strength around their usual values."""
    events: list[Event] = []
    streams = generators(seed, [f"event {kind}" for kind in per_30_days])
    for kind, rate in per_30_days.items():
        rng = streams[f"event {kind}"]
        usual = KINDS[kind]
        for _ in range(int(rng.poisson(rate * seconds / (30.0 * DAY_S)))):
            at = start + float(rng.uniform(0.0, seconds))
            lasts = usual.lasts_s * float(np.exp(0.4 * rng.standard_normal()))
            strength = usual.strength * float(np.exp(0.4 * rng.standard_normal()))
            if kind == "clean-front":
                strength = float(rng.uniform(0.5, 0.9))
            events.append(Event(kind, at, lasts, strength, int(rng.integers(2**31))))
    return tuple(sorted(events, key=lambda event: event.at))
