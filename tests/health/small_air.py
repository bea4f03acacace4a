"""A small physical generator for the tests of health: air, a cell with a fan, pulses, firmware, frames.

Deliberately not `motesim`: a second, independent model, so that a check cannot be right only about its own emulator.
Cumulative counts per 0.1 L are those of published size distributions (Seinfeld and Pandis 2006 table 8.3, computed).
"""

from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from motekeep.health.check import Check
from motekeep.health.finding import Suspicion
from motekeep.instant import Instant
from motekeep.wire.bm import BM_20, BM_28
from motekeep.wire.frame import Frame, Layout, Observation

Floats = NDArray[np.float64]

SIZES_UM = (0.3, 0.5, 1.0, 2.5, 5.0, 10.0)
URBAN = np.array([40_650, 6_561, 504.2, 40.91, 7.028, 1.014])
RURAL = np.array([5_081, 964.6, 173.2, 20.49, 3.047, 0.3439])
MARINE = np.array([3_020, 853.3, 114.1, 17.68, 2.916, 0.2904])
DESERT = np.array([1_408, 850.5, 389.0, 121.3, 50.24, 23.37])
SMOKE = np.array([76_400, 12_100, 191.3, 0.0349, 0.0, 0.0])  # aged, Reid et al. 2005, from memory
DROPLETS = np.array([1.0, 1.0, 0.99, 0.70, 0.17, 0.008])  # fog: lognormal around 3.2 um; our own invention

# Fall speed in m/s at the channels' middle sizes (Stokes with slip), and the height of a cell.
FALL_M_S = np.array([6.8e-6, 1.9e-5, 9e-5, 4e-4, 1.6e-3, 6e-3])
CELL_M = 0.01
# Mass per count per 0.1 L between sizes: geometric mean diameters, 1.65 g/cm3, the open last channel left out.
GRAMS = 1.65 * np.pi / 6.0 * np.array([0.3873, 0.70711, 1.58114, 3.53553, 7.07107, 0.0]) ** 3 / 100.0


@dataclass(frozen=True)
class Unit:
    """`view`: share of the flow that is looked at; `averaging` in frames; `draught` and `drizzle` of a still fan.

    `drizzle` is the share of small particles (below 1 um) that warm convection keeps bringing in.
    """

    period_s: float = 1.0
    view: float = 1.0
    averaging: int = 3
    floor: float = 4.0
    drizzle: float = 0.02
    spin_down_s: float = 1.5
    layout: Layout = BM_28

    @property
    def scale(self) -> float:
        """Printed counts per pulse: 0.1 L over the air of one frame, 0.1 L/min."""
        return 60.0 / (self.period_s * self.view)


def printed(air: Floats, unit: Unit, rng: np.random.Generator, stopped_at: int | None = None) -> Floats:
    """Cumulative counts as printed, (frames, 6), for air of (frames, 6). From `stopped_at` on the fan stands still:
    flow dies away, what is in the cell falls out, a drizzle of small particles stays."""
    between = air.copy()
    between[:, :-1] -= air[:, 1:]
    if stopped_at is not None:
        t = (np.arange(len(air) - stopped_at) * unit.period_s)[:, None]
        spin = np.exp(-t / unit.spin_down_s)
        small = np.array([1.0, 1.0, 0.0, 0.0, 0.0, 0.0]) * unit.drizzle
        fallen = 0.03 * np.exp(-t * FALL_M_S / CELL_M)
        between[stopped_at:] *= np.minimum(spin + fallen + small, 1.0)
    rates = np.maximum(between, 0.0) / unit.scale
    rates[:, 0] += unit.floor / unit.scale
    pulses = rng.poisson(rates).astype(np.float64)
    above = np.cumsum(pulses[:, ::-1], axis=1)[:, ::-1]
    k = unit.averaging
    total = np.concatenate([np.zeros((1, 6)), np.cumsum(above, axis=0)])
    last = np.arange(1, len(above) + 1)
    first = np.maximum(last - k, 0)
    mean = (total[last] - total[first]) / (last - first)[:, None]
    return np.minimum(np.rint(mean * unit.scale), 65_535.0)


def frames(counts: Floats, layout: Layout = BM_28) -> list[Frame]:
    """Frames with these counts, or, in a layout without any, with their mass alone."""
    between = counts.copy()
    between[:, :-1] -= counts[:, 1:]
    weighed = between * GRAMS
    mass = np.stack([weighed[:, :2].sum(axis=1), weighed[:, :3].sum(axis=1), weighed.sum(axis=1)], axis=1)
    resolution = layout.mass_resolution
    mass = np.minimum(np.rint(mass / resolution) * resolution, layout.mass_top)
    with_counts = bool(layout.sizes_um)
    # what a frozen output would repeat: the words of a frame
    words = np.concatenate([mass / resolution, counts] if with_counts else [mass / resolution], axis=1).astype("<u2")
    payloads, size = words.tobytes(), 2 * words.shape[1]
    made = []
    for i, (row, masses) in enumerate(zip(counts.tolist(), mass.tolist(), strict=True)):
        shown = tuple(masses[-len(layout.mass) :])
        payload = payloads[i * size : i * size + size]
        made.append(Frame(layout, shown, tuple(row) if with_counts else (), payload))
    return made


def steady(level: float, shape: Floats, seconds: float, period_s: float) -> Floats:
    """Air that does not change, with `level` per 0.1 L above 0.3 um."""
    n = int(seconds / period_s)
    return np.tile(shape * (level / shape[0]), (n, 1))


def wandering(rng: np.random.Generator, n: int, step_s: float, tau_s: float) -> Floats:
    """An Ornstein-Uhlenbeck course of unit variance."""
    keep = np.exp(-step_s / tau_s)
    kicks = rng.standard_normal(n) * np.sqrt(1.0 - keep * keep)
    course = np.empty(n)
    x = rng.standard_normal()
    for i, kick in enumerate(kicks.tolist()):
        x = keep * x + kick
        course[i] = x
    return course


def ordinary(rng: np.random.Generator, level: float, shape: Floats, hours: float, period_s: float) -> Floats:
    """Air that wanders over hours (sd 0.6 of ln), in gusts (0.05), and in its coarse share (0.4)."""
    grid = np.arange(0.0, hours * 3600.0 + 20.0, 10.0)
    fine = 0.6 * wandering(rng, len(grid), 10.0, 4.2 * 3600.0) + 0.05 * wandering(rng, len(grid), 10.0, 60.0)
    coarse = 0.4 * wandering(rng, len(grid), 10.0, 3.0 * 3600.0)
    times = np.arange(0.0, hours * 3600.0, period_s)
    weight = np.array([0.0, 0.1, 0.5, 1.0, 1.0, 1.0])
    ln = np.interp(times, grid, fine)[:, None] + np.interp(times, grid, coarse)[:, None] * weight
    return falling_with_size(shape * (level / shape[0]) * np.exp(ln))


def falling_with_size(air: Floats) -> Floats:
    """Cumulative counts cannot rise with size."""
    return np.minimum.accumulate(air, axis=1)


def instant(boot_s: float, offset: float = 1.8e9, boot: str = "one") -> Instant:
    return Instant(boot_s + offset, boot_s, boot, trusted=True)


def observations(made: list[Frame], period_s: float, start_s: float = 1000.0) -> Iterator[Observation]:
    for i, frame in enumerate(made):
        yield Observation(frame, instant(start_s + (i + 1) * period_s))


@dataclass(frozen=True)
class Verdict:
    at: float
    suspicion: Suspicion | None


def feed(
    check: Check, made: list[Frame], period_s: float, *, start_s: float = 1000.0, every_s: float = 5.0
) -> list[Verdict]:
    """What the check said at each judgement where its answer changed between "holds" and "does not"."""
    changes: list[Verdict] = []
    holds = False
    due = start_s + every_s
    for observation in observations(made, period_s, start_s):
        check.observe(observation)
        if observation.at.boot_s >= due:
            due = observation.at.boot_s + every_s
            suspicion = check.judge(observation.at)
            if (suspicion is not None) != holds:
                holds = suspicion is not None
                changes.append(Verdict(observation.at.boot_s, suspicion))
    return changes


Course = Callable[[Floats], Floats]
BM_20_UNIT = replace(Unit(), layout=BM_20)
