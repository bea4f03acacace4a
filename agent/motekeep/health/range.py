"""Numbers outside what the field, the declared range or plain physics allows, judged on whole intervals.

Owns the limits that a frame's own layout states. Must not know corrections: raw numbers only, but for the loss by
coincidence. No layout states a sensing volume, so that loss is known only where a calibration document does.
"""

from math import pi
from typing import ClassVar

from motekeep.health.check import Check
from motekeep.health.finding import Suspicion
from motekeep.instant import Instant
from motekeep.measure.account import Account
from motekeep.measure.interval import Interval
from motekeep.wire.frame import Layout


class _IntervalCheck(Check):
    """A check of one interval at a time: what the last one showed holds until the next one is there."""

    def __init__(self) -> None:
        self._held: Suspicion | None = None

    def interval(self, interval: Interval) -> None:
        self._held = self.examine(interval, interval.layout) if interval.layout is not None else None

    def examine(self, interval: Interval, layout: Layout) -> Suspicion | None:
        raise NotImplementedError

    def judge(self, at: Instant) -> Suspicion | None:
        return self._held


def _end(interval: Interval) -> float:
    return interval.start.boot_s + interval.seconds


class CountsSaturated(_IntervalCheck):
    """counts-saturated: a count at the top of its field, where it is censored. One frame is enough: its interval has
    no mean. Ten minutes without one close it: a plume that swells around the top is one event.

    Or more than a tenth of the particles lost by coincidence (ISO 21501-4:2007, 3.6, maximum concentration), as the
    step `coincidence` of the calibration document finds it; without such a step nobody knows, and nothing is found.
    """

    code: ClassVar[str] = "counts-saturated"
    clear_s: ClassVar[float] = 600.0

    def examine(self, interval: Interval, layout: Layout) -> Suspicion | None:
        full = [
            f"{c.censored} of {c.censored + c.n} frames above {size:g} um"
            for size, c in zip(layout.sizes_um, interval.counts, strict=True)
            if c.censored
        ]
        if not full:
            return None
        evidence = f"count at its top of {layout.count_top:g} /dL in {', '.join(full)}"
        return Suspicion(interval.start.boot_s, 1.0, evidence, until=_end(interval))

    def account(self, account: Account) -> None:
        interval = account.reading.interval
        lossy = [reason for reason in ("coincidence-high", "coincidence-censored") if reason in account.reading.reasons]
        if self._held is None and lossy and interval.counts:
            count = f"{interval.counts[0].mean:.0f} /dL in the smallest channel"
            evidence = f"{count}: over 10 % lost by coincidence, by the sensing volume of the calibration document"
            self._held = Suspicion(interval.start.boot_s, 0.9, evidence, until=_end(interval))


class MassClipped(_IntervalCheck):
    """mass-clipped: a mass at or above the end of its declared range, or below zero. (Decoders let no NaN pass.)"""

    code: ClassVar[str] = "mass-clipped"
    clear_s: ClassVar[float] = 600.0

    def examine(self, interval: Interval, layout: Layout) -> Suspicion | None:
        outside = [
            f"{name} {c.low:g} to {c.high:g}"
            for name, c in zip(layout.mass, interval.mass, strict=True)
            if c.n and (c.low < 0.0 or c.high >= layout.mass_top)
        ]
        if not outside:
            return None
        evidence = f"{', '.join(outside)} ug/m3; declared range is 0 to {layout.mass_top:g}"
        return Suspicion(interval.start.boot_s, 1.0, evidence, until=_end(interval))


class ChannelsInconsistent(_IntervalCheck):
    """channels-inconsistent: numbers of one frame that cannot belong together, for three minutes or more.

    - Counts above a size cannot rise with size, nor PM1 exceed PM2.5 or PM2.5 exceed PM10; allowed is one step of
      rounding, and 2 % of the larger for firmware that smooths its channels apart.
    - Mass must close with counts within bounds that no aerosol leaves: from a tenth of all particles at the lower edges
      of their classes at density 1 g/cm3, to ten times all at the upper edges at 3 g/cm3. Only particles up to 2.5 um
      against PM2.5, since counters barely see coarse mass (Kaur and Kelly 2023, doi 10.5194/amt-16-2455-2023), and only
      where the disagreement is above 20 ug/m3. With another dialect's words in a place these are what breaks first.
    """

    code: ClassVar[str] = "channels-inconsistent"
    clear_s: ClassVar[float] = 300.0

    PERSIST_S = 180.0
    ROUNDING = 0.02
    LOOSE = 10.0
    LEAST_UG_M3 = 20.0

    def __init__(self) -> None:
        super().__init__()
        self._since: float | None = None

    def examine(self, interval: Interval, layout: Layout) -> Suspicion | None:
        fault = _count_order(interval, layout, self.ROUNDING) or _mass_order(interval, layout, self.ROUNDING)
        fault = fault or self._closure(interval, layout)
        if fault is None:
            self._since = None
            return None
        if self._since is None:
            self._since = interval.start.boot_s
        end = _end(interval)
        if end - self._since < self.PERSIST_S - 1.0:  # the first interval after a start is cut short by the wall clock
            return None
        return Suspicion(self._since, 0.95, f"{fault} for {end - self._since:.0f} s", until=end)

    def _closure(self, interval: Interval, layout: Layout) -> str | None:
        if not interval.counts or "pm2_5" not in layout.mass or any(c.censored or not c.n for c in interval.counts):
            return None
        mass = interval.mass[layout.mass.index("pm2_5")]
        if not mass.n or mass.high >= layout.mass_top:
            return None
        least, most = _mass_bounds(layout.sizes_um, [c.mean for c in interval.counts])
        told = f"PM2.5 {mass.mean:.1f} ug/m3 against {least:.1f} to {most:.1f} from the counts"
        light = mass.mean < least / self.LOOSE and mass.mean < least - self.LEAST_UG_M3
        heavy = mass.mean > most * self.LOOSE and mass.mean > most + self.LEAST_UG_M3
        return told if light or heavy else None


def _count_order(interval: Interval, layout: Layout, share: float) -> str | None:
    pairs = zip(layout.sizes_um, interval.counts, layout.sizes_um[1:], interval.counts[1:], strict=False)
    for small, below, large, above in pairs:
        if below.n and above.n and not below.censored and above.mean > below.mean + max(1.0, share * above.mean):
            return f"{above.mean:.1f} /dL above {large:g} um but {below.mean:.1f} above {small:g} um"
    return None


def _mass_order(interval: Interval, layout: Layout, share: float) -> str | None:
    pairs = zip(layout.mass, interval.mass, layout.mass[1:], interval.mass[1:], strict=False)
    for small, fine, large, coarse in pairs:
        slack = max(layout.mass_resolution, share * fine.mean)
        if fine.n and coarse.n and fine.mean > coarse.mean + slack:
            return f"{small} {fine.mean:.1f} above {large} {coarse.mean:.1f} ug/m3"
    return None


def _mass_bounds(sizes_um: tuple[float, ...], counts: list[float]) -> tuple[float, float]:
    """Mass up to 2.5 um in ug/m3 that counts per 0.1 L can stand for: all at the lower edges at 1 g/cm3, all at the
    upper edges at 3 g/cm3. um3/cm3 times g/cm3 is ug/m3."""
    least = most = 0.0
    for edge, next_edge, above, next_above in zip(sizes_um, sizes_um[1:], counts, counts[1:], strict=False):
        if edge < 2.5:
            number = max(above - next_above, 0.0) / 100.0
            least += pi / 6.0 * edge**3 * number
            most += 3.0 * pi / 6.0 * next_edge**3 * number
    return least, most
