"""A wake: what a sensor printed in the first minute and a half after it was woken, against where it settled.

Owns the record. Must not know how it is taken (`wake_watch`), what is usual for a unit, nor any fault.
"""

from dataclasses import dataclass

from motekeep.instant import Instant
from motekeep.wire.frame import Layout


@dataclass(frozen=True, slots=True)
class Shortfall:
    """How far one disjoint channel was below its plateau after the wake: a weighted mean of 1 - c/plateau, and its
    variance by counting and gusts. `size_um` is the channel's lower edge; 0 is the smallest mass, where there are no
    counts."""

    size_um: float
    share: float
    variance: float


@dataclass(frozen=True, slots=True)
class Wake:
    """One wake. `at` is its moment, `asleep_s` how long the sensor had slept.

    `levels` are plateau means as printed, counts where there are some, over `frames` frames in `seconds`; `shortfalls`
    may lack channels with too few pulses and is empty where the air did not stand still. `deficit_s` is the integral of
    1 - c/plateau of the smallest channel over the first 20 s and `first` its first frame over its plateau. `early` is
    that channel's mean over the `early_frames` frames of the first 15 s.
    """

    at: Instant
    asleep_s: float
    layout: Layout
    levels: tuple[float, ...]
    frames: int
    seconds: float
    shortfalls: tuple[Shortfall, ...]
    deficit_s: float
    first: float
    early: float
    early_frames: int
