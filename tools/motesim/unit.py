"""The personality of one unit: what differs between two sensors from the same tray.

Owns the parameters and how they are drawn from a seed. Must not know what happens to the unit later (`faults`).
"""

from dataclasses import dataclass, fields, replace

import numpy as np


@dataclass(frozen=True, slots=True)
class Unit:
    """One unit as it left the factory. Lengths of time in s, volumes in cm3, temperatures in degC.

    `gain` is its optical signal over nominal and `edge_spread` multiplies each threshold; `resolution` is a factor of
    size. `flow` is over nominal, `draught` the flow that warmth drives without the fan. `view` is the share of the
    flow that crosses the beam: it makes the firmware multiply every pulse (see `Firmware.scale`). `averaging` is the
    number of frames that the firmware averages over. `floor` is false counts per 0.1 L in the smallest channel.
    `warmth` is the sensing cell above the air; `warm_gain` and `warm_s` shape the laser's start, `burst` is the
    resuspended dust of a fan start in pulses per second and channel. `clock_ppm` bends its cadence.
    """

    gain: float = 1.0
    edge_spread: tuple[float, ...] = (1.0, 1.0, 1.0, 1.0, 1.0, 1.0)
    resolution: float = 1.15
    flow: float = 1.0
    draught: float = 0.008
    cell_volume: float = 9.0
    fan_up: float = 1.0
    fan_down: float = 1.2
    view: float = 0.75
    averaging: int = 3
    sensing_volume: float = 1.0e-4
    floor: float = 6.0
    mass_gain: float = 1.0
    warmth: float = 2.0
    rh_error: float = 0.0
    temperature_error: float = 0.0
    warm_gain: float = 0.05
    warm_s: float = 8.0
    burst: float = 3.0
    revision: int = 0x97
    clock_ppm: float = 0.0


# Spreads between units are common practice, no source, except: flow error within 5 % (ISO 21501-4, clause 3.7) and
# threshold error within 10 % (clause 3.2) as the bounds that a good unit keeps and a consumer unit about reaches.
def draw(seed: int) -> Unit:
    """The unit with this seed."""
    rng = np.random.default_rng([seed, 0x756E6974])

    def spread(relative: float) -> float:
        return float(np.exp(relative * np.clip(rng.standard_normal(), -2.5, 2.5)))

    return Unit(
        gain=spread(0.07),
        edge_spread=tuple(spread(0.03) for _ in range(6)),
        resolution=1.12 + 0.08 * float(rng.random()),
        flow=spread(0.05),
        draught=0.008 * spread(0.35),
        cell_volume=9.0 * spread(0.2),
        fan_up=1.0 * spread(0.25),
        fan_down=1.2 * spread(0.25),
        view=float(rng.uniform(0.5, 1.0)),
        averaging=int(rng.choice([1, 2, 3, 5, 10], p=[0.15, 0.15, 0.35, 0.2, 0.15])),
        sensing_volume=1.0e-4 * spread(0.3),
        floor=6.0 * spread(0.7),
        mass_gain=spread(0.10),
        warmth=2.0 * spread(0.25),
        rh_error=float(rng.normal(0.0, 1.5)),
        temperature_error=float(rng.normal(0.0, 0.3)),
        warm_gain=float(rng.normal(0.0, 0.08)),
        warm_s=8.0 * spread(0.3),
        burst=3.0 * spread(0.5),
        revision=int(rng.integers(0x90, 0xA0)),
        clock_ppm=float(rng.normal(0.0, 30.0)),
    )


OVERRIDABLE = {field.name: field.type for field in fields(Unit) if field.name != "edge_spread"}


def drawn_with(seed: int, overrides: dict[str, float]) -> Unit:
    """The unit with this seed, some of its parameters set by hand. Keys must be of `OVERRIDABLE`."""
    unit = draw(seed)
    whole = {"averaging", "revision"}
    values = {key: int(value) if key in whole else float(value) for key, value in overrides.items()}
    return replace(unit, **values) if values else unit  # type: ignore[arg-type] # names and kinds checked above
