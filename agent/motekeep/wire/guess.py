"""Which dialect captured bytes are, how sure, and why, in words.

Owns the weighing of validity and plausibility over many frames. Must not know ports: it is handed bytes.

Rule: every dialect decodes the bytes. A handful of frames with right sums settles the framing. `bm` and `bm-climate`
share theirs, so the two last count words are weighed both ways, as natural log-odds that add up:
- as counts above 5.0 and 10 um they must fall with size; as climate they must be air that exists;
- printed counts are noisy (scaled Poisson), temperature and humidity in tenths are smooth from second to second.
The weights are judgement, not fitted; they are set so that one clear sign decides and two opposite ones leave doubt.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise
from math import exp, log
from typing import Final

from motekeep.wire.bm import BM_28
from motekeep.wire.dialects import DIALECTS
from motekeep.wire.frame import Dialect, Frame

# Enough for some 500 frames; more would only cost time.
LOOKED_AT: Final = 16384

# Log-odds that one more frame with right sums adds, and how many frames add it.
PER_FRAME, FRAMES_COUNTED = 2.2, 3

# Log-odds of `bm-climate` over `bm`.
COUNTS_RISE, COUNTS_FALL = 4.5, -2.3
AIR_EXISTS, NO_SUCH_AIR = 3.0, -4.5
SMOOTH, ROUGH = 4.0, -5.0

# Half the mean square of first differences over the mean. Counts pooled over k seconds have 60 / k**2 by the scaling of
# the firmware: 0.6 at ten seconds. Climate that moves by two tenths a second at 20 degC has 0.01.
ROUGH_FROM, SMOOTH_TO = 0.2, 0.02
ENOUGH_FOR_NOISE = 8
ENOUGH_TO_BE_NOISY = 30.0


@dataclass(frozen=True, slots=True)
class Guess:
    """A dialect that the bytes may be, `confidence` 0..1, and the reason for a person."""

    dialect: str
    confidence: float
    reason: str


def guess(data: bytes) -> list[Guess]:
    """All dialects that found a frame in the last 16 KiB, the likeliest first; none when nobody did."""
    heard = {name: decoded(dialect, data[-LOOKED_AT:]) for name, dialect in DIALECTS.items()}
    climate_odds, climate_reason = weigh_climate(heard["bm"][0], heard["bm-climate"][0])
    guesses = []
    for name, (frames, damaged) in heard.items():
        if not frames:
            continue
        ordered = sum(masses_rise(frame) for frame in frames) / len(frames)
        odds = PER_FRAME * min(len(frames), FRAMES_COUNTED) - 3.0 * (1.0 - ordered)
        confidence, reason = probability(odds), f"{len(frames)} frames with right sums, {damaged} damaged"
        if name in ("bm", "bm-climate") and climate_reason:
            confidence *= probability(climate_odds if name == "bm-climate" else -climate_odds)
            reason += "; " + climate_reason
        if ordered < 1.0:
            reason += f"; masses rise with size in only {ordered:.0%} of them"
        guesses.append(Guess(name, confidence, reason))
    return sorted(guesses, key=lambda g: -g.confidence)


def decoded(dialect: Dialect, data: bytes) -> tuple[list[Frame], int]:
    """The frames, and the number of damage events."""
    events = dialect.decoder().feed(data)
    frames = [event for event in events if isinstance(event, Frame)]
    return frames, len(events) - len(frames)


def probability(log_odds: float) -> float:
    return 1.0 / (1.0 + exp(-log_odds))


def masses_rise(frame: Frame) -> bool:
    """PM1 is part of PM2.5 is part of PM10."""
    return all(a <= b for a, b in pairwise(frame.mass))


def weigh_climate(as_counts: Sequence[Frame], as_climate: Sequence[Frame]) -> tuple[float, str]:
    """Log-odds of `bm-climate` over `bm` from the same bytes read both ways, and why; no words when it is no question.

    Frames of the other lengths are `bm` beyond doubt: `bm-climate` does not see them.
    """
    as_counts = [frame for frame in as_counts if frame.layout is BM_28]
    total = min(len(as_counts), len(as_climate))
    if not total:
        return 0.0, ""
    rising = sum(counts_rise(frame) for frame in as_counts) / len(as_counts)
    airy = sum(air_exists(frame) for frame in as_climate) / len(as_climate)
    odds = rising * COUNTS_RISE + (1 - rising) * COUNTS_FALL
    odds += airy * AIR_EXISTS + (1 - airy) * NO_SUCH_AIR
    # The same words come again in every frame, so many frames are little more evidence than a few; one is less.
    odds *= 0.6 + 0.4 * (min(total, 4) - 1) / 3
    last = as_climate[-1]
    reason = (
        f"as counts the last two words fail to fall with size in {rising:.0%} of frames, as climate they are air that "
        f"exists in {airy:.0%} (last {last.temperature_c:.1f} degC, {last.rh_pct:.1f} %)"
    )
    roughness = roughest(as_counts)
    if roughness is not None:
        odds += noise_odds(roughness)
        reason += f"; their scatter over mean is {roughness:.3g} (counts are above 0.1, climate near 0.01)"
    return odds, reason


def counts_rise(frame: Frame) -> bool:
    """Cumulative counts that do not fall with size contradict themselves."""
    return any(a < b for a, b in pairwise(frame.counts))


def air_exists(frame: Frame) -> bool:
    """Air from -40 to 85 degC with 3 to 100 % RH: drier is not met outside a laboratory, and zero words are not air."""
    temperature, humidity = frame.temperature_c, frame.rh_pct
    return temperature is not None and humidity is not None and -40 <= temperature <= 85 and 3 <= humidity <= 100


def roughest(frames: Sequence[Frame]) -> float | None:
    """The larger roughness of the two last words; None when it tells nothing: too few frames, words so small that
    counts would show no noise either, or an output that stands still altogether."""
    if len(frames) < ENOUGH_FOR_NOISE or len({frame.counts[0] for frame in frames}) == 1:
        return None
    found = []
    for index in (-2, -1):
        values = [v - 65536 if v > 32767 else v for v in (frame.counts[index] for frame in frames)]
        mean = sum(values) / len(values)
        if abs(mean) >= ENOUGH_TO_BE_NOISY:
            squares = sum([(b - a) ** 2 for a, b in pairwise(values)])
            found.append(squares / (2 * (len(values) - 1)) / abs(mean))
    return max(found, default=None)


def noise_odds(roughness: float) -> float:
    """SMOOTH below the one limit, ROUGH above the other, on a logarithmic scale between them."""
    share = (log(max(roughness, 1e-9)) - log(SMOOTH_TO)) / (log(ROUGH_FROM) - log(SMOOTH_TO))
    return SMOOTH + min(max(share, 0.0), 1.0) * (ROUGH - SMOOTH)
