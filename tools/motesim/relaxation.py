"""First-order relaxation towards a moving level, exact for levels and rates constant within a step, in blocks.

Owns the one recursion that the air, the fan and the sensing cell all follow.
"""

from collections.abc import Sequence

import numpy as np

from motesim.aerosol import Floats

# exp of the summed rates must stay far from 1e308; the chunk is cut so that the sum does not pass this
_LONGEST_SUM = 300.0
_LONGEST_CHUNK = 4096


def relax(start: Floats, steps: Floats, levels: Floats) -> Floats:
    """x[i] = x[i-1] exp(-steps[i]) + levels[i] (1 - exp(-steps[i])), from x[-1] = `start`; axis 0 is time.

    `steps` are rate times duration, above 0. Within a chunk the recursion is a sum of terms weighted with
    exp(+summed rate), so it runs as array arithmetic; between chunks the last value is carried.
    """
    steps = np.minimum(steps, _LONGEST_SUM)
    out = np.empty_like(levels)
    largest = float(steps.max()) if steps.size else 1.0
    chunk = max(1, min(_LONGEST_CHUNK, int(_LONGEST_SUM / max(largest, 1e-12))))
    gained = levels * -np.expm1(-steps)
    state = start
    for first in range(0, len(levels), chunk):
        part = slice(first, first + chunk)
        total = np.cumsum(steps[part], axis=0)
        out[part] = np.exp(-total) * (state + np.cumsum(np.exp(total) * gained[part], axis=0))
        state = out[part][-1]
    return out


class Course:
    """An Ornstein-Uhlenbeck course of unit variance with decorrelation time `tau_s`, sampled every `step_s`."""

    def __init__(self, rng: np.random.Generator, tau_s: float, step_s: float) -> None:
        self._rng = rng
        self._rate = step_s / tau_s
        self._kick = float(np.sqrt(-np.expm1(-2.0 * self._rate)) / -np.expm1(-self._rate))
        self._last = rng.standard_normal(1)

    def take(self, n: int) -> Floats:
        """The next `n` samples."""
        steps = np.full((n, 1), self._rate)
        course = relax(self._last, steps, self._kick * self._rng.standard_normal((n, 1)))
        if n:
            self._last = course[-1]
        return course[:, 0]


def smooth_step(times: Floats, at: float, rise_s: float) -> Floats:
    """0 before `at`, 1 - exp(-(t - at)/rise) after."""
    return np.asarray(-np.expm1(-np.clip((times - at) / max(rise_s, 1e-9), 0.0, 700.0)))


def generators(seed: int, names: Sequence[str]) -> dict[str, np.random.Generator]:
    """One independent generator a name, so that asking for more of one course never changes another."""
    return {name: np.random.default_rng([seed, *name.encode()]) for name in names}
