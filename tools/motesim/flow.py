"""How air moves through a counter: the fan, the draught that is left without it, and the sensing cell.

Owns flow and what is in the cell. Must not know optics or firmware.
"""

from dataclasses import dataclass
from itertools import pairwise
from math import sqrt

import numpy as np

from motesim.aerosol import Floats
from motesim.relaxation import relax
from motesim.settling import diffusion_loss_per_s, settling_m_s

NOMINAL_CM3_S = 100.0 / 60.0  # 0.1 L/min
BEAM_SPEED_M_S = 0.17  # of that flow in a duct of 10 mm2
CELL_HEIGHT_M = 0.01
CELL_GAP_M = 0.004
_OPEN_TOP_FACTOR = 1.5  # representative size of the channel above the last threshold, over that threshold
_FINE_DENSITY, _COARSE_DENSITY = 1.6, 2.0


def middle_sizes_um(edges_um: tuple[float, ...]) -> tuple[float, ...]:
    """Geometric mean of each channel between thresholds; the last one is open."""
    inner = [sqrt(a * b) for a, b in pairwise(edges_um)]
    return (*inner, edges_um[-1] * _OPEN_TOP_FACTOR)


@dataclass(slots=True)
class Fan:
    """Flow as a factor of nominal. Follows its drive with the lag `up_s`, coasts to rest with `down_s`."""

    speed: float
    up_s: float
    down_s: float

    def run(self, target: Floats, step_s: float) -> Floats:
        """The flow at each step while the fan is driven towards `target` (0 when it is off or stuck)."""
        lag = np.where(target > 0.0, self.up_s, self.down_s)
        flow = relax(np.array([self.speed]), (step_s / lag)[:, None], target[:, None])[:, 0]
        if len(flow):
            self.speed = float(flow[-1])
        return flow


class Cell:
    """What floats in the sensing cell, per channel between thresholds.

    dc/dt = (Q q/V)(outside - c) - k c: flushed by the flow, lost by settling (stirred, v/h) and diffusion to the walls.
    While the fan runs the cell follows the air within V/Q and loses some of the large particles on the way in; in a
    still cell the large ones are gone in seconds, the small ones stay for the better part of an hour.
    """

    def __init__(self, edges_um: tuple[float, ...], volume_cm3: float) -> None:
        sizes = middle_sizes_um(edges_um)
        densities = [_FINE_DENSITY if size < 1.0 else _COARSE_DENSITY for size in sizes]
        falls = [settling_m_s(size, density) for size, density in zip(sizes, densities, strict=True)]
        self.fall_speed = np.array(falls) / BEAM_SPEED_M_S
        self.loss_per_s = np.array(falls) / CELL_HEIGHT_M + np.array(
            [diffusion_loss_per_s(size, CELL_GAP_M) for size in sizes]
        )
        self._flush_per_s = NOMINAL_CM3_S / volume_cm3
        self._inside: Floats | None = None

    def follow(self, outside: Floats, flow: Floats, step_s: float) -> Floats:
        """Concentration in the cell at each step, (steps, channels), from that outside and the flow factor.

        The first call finds the cell in balance with the air of its first step.
        """
        flush = (self._flush_per_s * flow)[:, None]
        rate = flush + self.loss_per_s
        level = outside * flush / rate
        start = level[0] if self._inside is None else self._inside
        inside = relax(start, rate * step_s, level)
        if len(inside):
            self._inside = inside[-1]
        return inside

    def passing(self, inside: Floats, flow: Floats) -> Floats:
        """Volume that passes the beam as a factor of nominal, (steps, channels): drawn by the flow, or falling."""
        return np.asarray(inside * np.hypot(flow[:, None], self.fall_speed))
