"""Intervals and calibration documents for the tests of what is made of them."""

from textwrap import dedent

from motekeep.instant import Instant
from motekeep.measure import document_text
from motekeep.measure.correction import compile_document
from motekeep.measure.document_text import parse
from motekeep.measure.interval import Channel, Climate, FrameCount, Interval
from motekeep.measure.reading import Correction
from motekeep.wire.frame import Layout

SIZES = (0.3, 0.5, 1.0, 2.5, 5.0, 10.0)
LAYOUT = Layout("test", ("pm1", "pm2_5", "pm10"), 1.0, 1000.0, SIZES, 65535.0)
NO_COUNTS = Layout("test-bare", ("pm2_5", "pm10"), 0.1, 1000.0)

# 2027-03-01T00:00:00Z, within the dates of EXAMPLE.
MARCH = 1_803_859_200.0

# The example in the documentation of the form is the one that is tested.
EXAMPLE = dedent((document_text.__doc__ or "").split("when it has none:\n", 1)[1])

FULL = FrameCount(60, 0, 0)


def channel(mean: float, sd: float = 1.0, n: int = 60, *, lag1: float = 0.0, censored: int = 0) -> Channel:
    return Channel(n, mean, sd, mean - sd, mean + sd, sd * sd * (1.0 - lag1), lag1, censored)


def interval(
    mass: tuple[float, ...] = (6.0, 12.0, 15.0),
    counts: tuple[float, ...] = (1800.0, 500.0, 90.0, 9.0, 2.0, 1.0),
    *,
    climate: Climate | None = None,
    layout: Layout | None = LAYOUT,
    at: float = MARCH,
    trusted: bool = True,
    seconds: float = 60.0,
    frames: FrameCount = FULL,
    censored: int = 0,
    asleep_s: float = 0.0,
) -> Interval:
    return Interval(
        sensor="north",
        start=Instant(at, at - 1e9, "boot", trusted),
        seconds=seconds,
        frames=frames,
        layout=layout,
        mass=tuple([channel(m) for m in mass]) if layout else (),
        mass_ambient=(),
        counts=tuple([channel(c, 40.0, censored=censored if i == 0 else 0) for i, c in enumerate(counts)])
        if layout and layout.sizes_um
        else (),
        climate=climate,
        asleep_s=asleep_s,
    )


HEAD = """
issue = 3
site = "quarry"
gateway = "east-gate"
sensor = "north"
made_at = 2026-11-20T10:00:00Z
valid_from = 2026-11-20T12:00:00Z
valid_until = 2027-11-20T00:00:00Z
"""

RANGE = """
[range]
pm1 = [0.0, 500.0]
pm2_5 = [0.0, 500.0]
pm10 = [0.0, 500.0]
rh = [0.0, 100.0]
t = [-40.0, 60.0]
"""


def document(steps: str, *, residual: str = "pm2_5 = { u = 0.5 }", more: str = "") -> bytes:
    """A document for PM2.5 unless `residual` says otherwise, valid in 2027, with the given `[[step]]`s."""
    return f"{HEAD}\n{steps}\n{RANGE}\n[residual]\n{residual}\n{more}\n".encode()


def correction(
    steps: str, *, residual: str = "pm2_5 = { u = 0.5 }", more: str = "", scale: float | None = None
) -> Correction:
    return compile_document(parse(document(steps, residual=residual, more=more)), scale)


GROWTH = """
[[step]]
kind = "humidity-growth"
kappa = { value = 0.4, u = 0.05 }
"""
LINEAR = """
[[step]]
kind = "linear"
slope = { value = 0.9, u = 0.04 }
offset = { value = 0.5, u = 0.3 }
"""
COINCIDENCE = """
[[step]]
kind = "coincidence"
volume_mm3 = { value = 2.0, u = 0.4 }
"""
