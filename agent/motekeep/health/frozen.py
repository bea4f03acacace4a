"""An output that repeats itself: output-frozen.

Owns the chance that honest air gives the same payload again and again. Must not know the line.
"""

from math import erf, log10, sqrt
from typing import ClassVar

from motekeep.health.check import Check, LineState
from motekeep.health.finding import Suspicion
from motekeep.instant import Instant
from motekeep.wire.frame import Frame, Observation


class OutputFrozen(Check):
    """output-frozen: identical payload for longer than chance allows.

    A printed count R rests on n real pulses, n = R/s with s no larger than 6/flow (firmware that prints "per 0.1 L"
    from one second of air: 60 at 0.1 L/min; any pooling makes s smaller and n larger). For given n the chance of
    one more identical frame is at most the largest Poisson probability, n^n e^-n / n! ~ 1/sqrt(2 pi n + 1), which is
    1 at n = 0: zeros in clean air prove nothing. Only the channel of the smallest particles is used; the others are
    not independent of it and repeat naturally. A frame without counts has its mass: neighbouring frames differ by at
    least some 0.1 sqrt(m) ug/m3 (two pulses a second per ug/m3, the coarsest of the published size distributions,
    averaged over ten frames), to be compared with the printed step.

    Firmware that holds or averages its output repeats more often than that. So the share of repeats that the unit
    shows by itself is learnt over some 300 frames and taken instead where it is larger, and a run must be three times
    as long as the longest natural one in memory. Nothing is learnt from a run that was reported, so that a frozen unit
    cannot teach that frozen is normal.

    Opens when the chance of the run is below 1e-10 (at 1 Hz a year has 3e7 frames to start a run with).
    """

    code: ClassVar[str] = "output-frozen"
    clear_s: ClassVar[float] = 60.0
    again_s: ClassVar[float] = 400.0
    settled: ClassVar[bool] = True

    CHANCE = 1e-10
    LEAST_FRAMES = 10
    LEAST_S = 30.0
    LEARN = 1.0 / 300.0
    LEARN_RUN = 60
    UNLEARNT = 0.5  # the share of repeats assumed at first: an output that is held for two frames
    REPEATS_TOP = 0.98
    FORGET = 0.9995  # a run of thrice the natural length is forgiven an hour or two later, at 1 Hz

    def __init__(self, flow_l_min: float, at: Instant) -> None:
        self._scale = 6.0 / flow_l_min
        self._first: Observation | None = None  # of the run
        self._payload = b""
        self._run = 0  # identical frames after the first
        self._last = at.boot_s
        self._reported = False
        self._repeats = self.UNLEARNT
        self._natural = 3.0  # longest run seen that chance allows, slowly forgotten
        self._ended = 0  # runs of a single frame that are not learnt from yet

    def observe(self, observation: Observation) -> None:
        payload = observation.frame.payload
        if payload == self._payload:
            self._run += 1
            self._last = observation.at.boot_s
            return
        self._ended += 1
        if self._run:
            self._learn()
            self._run = 0
        self._payload, self._first = payload, observation

    def _learn(self) -> None:
        """A run of several frames has ended: what it and the single frames before it say of the unit's natural
        repeats. Runs of zeros, and those that were reported, say nothing."""
        reported, self._reported = self._reported, False
        self._repeats *= (1.0 - self.LEARN) ** self._ended
        self._natural *= self.FORGET**self._ended
        self._ended = 0
        if reported or self._first is None or _chance_of_repeat(self._first.frame, self._scale) >= 1.0:
            return
        run = min(self._run, self.LEARN_RUN)
        self._repeats += (1.0 - self._repeats) * self.LEARN * run
        self._natural = max(self._natural, float(run))

    def line(self, state: LineState, at: Instant, why: str) -> None:
        self._first = None
        self._payload = b""
        self._run = 0
        self._reported = False

    def judge(self, at: Instant) -> Suspicion | None:
        if self._run < self.LEAST_FRAMES or self._first is None:
            return None
        natural = self._natural * self.FORGET**self._ended
        since = self._first.at.boot_s
        if self._run < 3.0 * natural or self._last - since < self.LEAST_S:
            return None
        frame = self._first.frame
        chance = _chance_of_repeat(frame, self._scale)
        if chance >= 1.0:
            return None
        usual = min(self._repeats * (1.0 - self.LEARN) ** self._ended, self.REPEATS_TOP)
        exponent = self._run * log10(max(chance, usual))
        if exponent > log10(self.CHANCE):
            return None
        self._reported = True
        evidence = (
            f"{self._run + 1} identical frames in {self._last - since:.0f} s at {_level(frame)}; "
            f"chance under 1e{max(int(exponent), -99)}"
        )
        return Suspicion(since, 0.99, evidence)


def _chance_of_repeat(frame: Frame, scale: float) -> float:
    """The largest chance that the next honest frame is the same; 1 where a repeat says nothing."""
    layout = frame.layout
    if frame.counts:
        count = frame.counts[0]
        if layout.count_top is not None and count >= layout.count_top:
            return 1.0  # a full counter repeats its top: that is counts-saturated
        return 1.0 / sqrt(6.2832 * count / scale + 1.0)
    mass = max(frame.mass)
    if mass <= 0.0 or mass >= layout.mass_top:
        return 1.0
    return erf(layout.mass_resolution / (0.1 * sqrt(2.0 * mass)))


def _level(frame: Frame) -> str:
    if frame.counts:
        return f"{frame.counts[0]:.0f} /dL above {frame.layout.sizes_um[0]:g} um"
    return f"{max(frame.mass):g} ug/m3"
