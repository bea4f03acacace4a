"""What health costs: microseconds a frame of all checks of one sensor, beside decoding and beside the whole pipeline.

    python tools/bench/health.py [--hours N] [--rounds N]

The same frames go (a) through the decoder, (b) through `SensorHealth` as the pipeline drives it (every frame, a
judgement each 5 s, an interval and a memory each minute), and (c) as bytes through the whole pipeline, health included,
up to the documents. All on processor time; each figure is the median of the rounds. The daemon adds ports, journal and
broker to (c), so health's share of it is the upper bound of its share of the daemon. Exits 1 when that is 20 % or more.
"""

import argparse
import sys
from collections.abc import Callable
from random import Random
from statistics import median
from time import process_time

from motekeep.health.sensor import SensorHealth
from motekeep.instant import Instant
from motekeep.measure.interval import Accumulator
from motekeep.message.compose import Place
from motekeep.pipeline import Pipeline, SensorSetup
from motekeep.wire.bm import BM_28
from motekeep.wire.dialects import DIALECTS
from motekeep.wire.frame import Frame, Observation

BAR = 0.20
BM = DIALECTS["bm"]
START_S = 86_400.0
JUDGE_S, INTERVAL_S, HARVEST_S = 5, 60, 60


def at(second: int) -> Instant:
    return Instant(1.8e9 + second, START_S + second, "bench", trusted=True)


def units(seconds: int, level: float, random: Random) -> list[bytes]:
    """Frames of steady air with noise, once a second."""
    shares = (1.0, 0.19, 0.034, 0.004, 0.0006, 0.00007)
    made = []
    for _ in range(seconds):
        counts = [max(random.gauss(level * s, (level * s) ** 0.5 * 4.0), 0.0) // 1 for s in shares]
        counts = sorted(counts, reverse=True)
        mass = (counts[0] // 300, counts[0] // 250 + counts[2] // 50, counts[0] // 240 + counts[2] // 20)
        made.append(BM.encode(Frame(BM_28, mass, tuple(counts), b"", mass)))
    return made


def decoded(data: list[bytes]) -> list[Frame]:
    decoder = BM.decoder()
    return [event for unit in data for event in decoder.feed(unit) if isinstance(event, Frame)]


def through_decoder(data: list[bytes]) -> None:
    feed = BM.decoder().feed
    for unit in data:
        feed(unit)


def through_health(data: list[bytes], observations: list[Observation]) -> float:
    """Processor seconds inside of health; the loop and the interval's own statistics are not counted."""
    health = SensorHealth("north", BM, 1.0, at(0))
    intervals = []
    for begin in range(0, len(observations) - INTERVAL_S, INTERVAL_S):
        accumulator = Accumulator()
        for observation in observations[begin : begin + INTERVAL_S]:
            accumulator.add(observation.frame)
        intervals.append(accumulator.close("north", at(begin), float(INTERVAL_S), climate=None))
    closing = iter(intervals)
    begin_s = process_time()
    for second, (unit, observation) in enumerate(zip(data, observations, strict=True), 1):
        health.heard(unit, observation.at)
        health.observe(observation)
        health.warming(observation.at)
        if second % JUDGE_S == 0:
            health.judge(observation.at)
        if second % INTERVAL_S == 0 and (interval := next(closing, None)) is not None:
            health.interval(interval)
            health.flags_between(interval.start.boot_s, interval.start.boot_s + INTERVAL_S)
            health.dump()
    return process_time() - begin_s


def empty_loop(data: list[bytes], observations: list[Observation]) -> float:
    begin_s = process_time()
    for _second, (_unit, _observation) in enumerate(zip(data, observations, strict=True), 1):
        pass
    return process_time() - begin_s


def through_pipeline(data: list[bytes]) -> None:
    pipeline = Pipeline(Place("bench", "gateway"), INTERVAL_S, [SensorSetup("north", BM)], at(0))
    pipeline.resume({"north": 1}, {}, at(0))
    for second, unit in enumerate(data, 1):
        pipeline.receive("north", unit, at(second))
        if second % HARVEST_S == 0:
            for reading in pipeline.harvest().readings:
                reading.json_text()


def took(run: Callable[[], None]) -> float:
    begin_s = process_time()
    run()
    return process_time() - begin_s


def main() -> int:
    parser = argparse.ArgumentParser(description="the cost of health a frame")
    parser.add_argument("--hours", type=float, default=4.0, help="of frames, one a second")
    parser.add_argument("--rounds", type=int, default=5)
    options = parser.parse_args()
    seconds = round(options.hours * 3600)
    worst = 0.0
    print(f"{'':24}{'decoder':>10}{'health':>10}{'pipeline':>10}{'x decoder':>11}{'share':>8}   us a frame")
    for name, level in (("ordinary air, 2000 /dL", 2000.0), ("very clean air, 4 /dL", 4.0)):
        data = units(seconds, level, Random(1))
        observations = [Observation(frame, at(second)) for second, frame in enumerate(decoded(data), 1)]
        rounds = [
            (
                took(lambda data=data: through_decoder(data)),  # type: ignore[misc] # a lambda that binds its loop variable
                through_health(data, observations) - empty_loop(data, observations),
                took(lambda data=data: through_pipeline(data)),  # type: ignore[misc]
            )
            for _ in range(options.rounds)
        ]
        decoder, health, pipeline = [median(column) / seconds * 1e6 for column in zip(*rounds, strict=True)]
        share = median([h / p for _, h, p in rounds])
        ratio = median([h / d for d, h, _ in rounds])
        worst = max(worst, share)
        print(f"{name:24}{decoder:10.2f}{health:10.2f}{pipeline:10.2f}{ratio:11.2f}{share:8.1%}")
    print(f"health is at most {worst:.1%} of the pipeline (bar {BAR:.0%}), medians of {options.rounds} rounds")
    return 0 if worst < BAR else 1


if __name__ == "__main__":
    sys.exit(main())
