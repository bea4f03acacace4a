"""What the firmware of a counter makes of pulses: printed counts, masses, their averaging, quantisation and tops.

Owns the step from pulses to printed numbers. Must not know air, flow or bytes.
"""

from dataclasses import dataclass
from itertools import pairwise
from math import log, pi

import numpy as np
from numpy.typing import NDArray

from motesim.aerosol import Floats
from motesim.flow import NOMINAL_CM3_S
from motesim.unit import Unit

CUT_UM = {"pm1": 1.0, "pm2_5": 2.5, "pm4": 4.0, "pm10": 10.0}
_FACTORY_DENSITY = 1.65
# What no channel sees (most of the mass below the first threshold) is put into the smallest channel as a factor;
# large channels are trusted less and less. Both are ours: they give a fine slope above 1 and a slope against dust
# below 0.1, as published field work found (Kaur and Kelly 2023).
_UNSEEN_FACTOR = 3.4
_TRUSTED_UM = 1.0
BEND_UG_M3 = 30.0
_BENT_SLOPE = 0.65  # of the ambient triple above the bend; ours


@dataclass(frozen=True, slots=True)
class Columns:
    """What is printed: `counts` are cumulative per 0.1 L, (frames, channels); masses in ug/m3, (frames, masses)."""

    counts: Floats
    mass: Floats
    ambient: Floats


def volume_mean_um(low: float, high: float) -> float:
    """Diameter of mean volume for a number that is even in ln D: ((b^3 - a^3)/(3 ln(b/a)))^(1/3)."""
    return float(((high**3 - low**3) / (3.0 * log(high / low))) ** (1.0 / 3.0))


def mass_weights(edges_um: tuple[float, ...], masses: tuple[str, ...]) -> Floats:
    """ug/m3 for each count per 0.1 L in each channel, (channels, masses). The open top channel weighs nothing."""
    weights = np.zeros((len(edges_um), len(masses)))
    for channel, (low, high) in enumerate(pairwise(edges_um)):
        diameter = volume_mean_um(low, high)
        each = pi / 6.0 * _FACTORY_DENSITY * diameter**3 / 100.0
        each *= (_UNSEEN_FACTOR if channel == 0 else 1.0) / (1.0 + (diameter / _TRUSTED_UM) ** 2)
        for column, name in enumerate(masses):
            if high <= CUT_UM[name]:
                weights[channel, column] = each
    return weights


class Firmware:
    """The counting and printing of one unit; keeps what it averages over."""

    def __init__(
        self, unit: Unit, period_s: float, edges_um: tuple[float, ...], masses: tuple[str, ...], count_top: float | None
    ) -> None:
        self._unit = unit
        self._weights = mass_weights(edges_um, masses)
        self._top = count_top
        self._recent = np.zeros((0, len(edges_um)))
        # counts per 0.1 L that one pulse of one frame stands for: 100 cm3 over the volume that was looked at
        self.scale = 100.0 / (NOMINAL_CM3_S * period_s * unit.view)

    @property
    def printed_scale(self) -> float:
        """Variance over mean of the printed counts in steady air: one pulse is spread over `averaging` frames."""
        return self.scale / self._unit.averaging

    def pool(self, pulses: NDArray[np.int64], ages: NDArray[np.int64]) -> Floats:
        """Cumulative counts per 0.1 L, not yet rounded, averaged over the last frames since the sensor woke.

        `pulses` are those between thresholds; `ages` is the number of frames since the wake, 1 for the first.
        """
        above = np.cumsum(pulses[:, ::-1], axis=1)[:, ::-1].astype(np.float64)
        rows = np.concatenate([self._recent, above])
        lead = len(self._recent)
        total = np.concatenate([np.zeros((1, rows.shape[1])), np.cumsum(rows, axis=0)])
        last = lead + np.arange(1, len(above) + 1)
        window = np.minimum(np.minimum(ages, self._unit.averaging), last)
        self._recent = rows[max(len(rows) - self._unit.averaging + 1, 0) :] if self._unit.averaging > 1 else rows[:0]
        return np.asarray((total[last] - total[last - window]) * (self.scale / window)[:, None])

    def columns(self, pooled: Floats, *, resolution: float, mass_top: float, floats: bool = False) -> Columns:
        """The printed numbers: counts whole and cut at their top, masses in steps of `resolution` cut at theirs.

        `floats` prints counts as they are (a dialect of floating-point numbers).
        """
        between = pooled.copy()
        between[:, :-1] -= pooled[:, 1:]
        raw = between @ self._weights * self._unit.mass_gain
        bent = np.where(raw <= BEND_UG_M3, raw, BEND_UG_M3 + _BENT_SLOPE * (raw - BEND_UG_M3))
        counts = pooled if floats else np.rint(pooled)
        if self._top is not None:
            counts = np.minimum(counts, self._top)
        mass, ambient = (
            np.minimum(np.rint(m / resolution) * resolution if resolution else m, mass_top) for m in (raw, bent)
        )
        return Columns(counts, mass, ambient)
