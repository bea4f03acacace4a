"""What `motekeep replay` costs: a month of one sensor at 1 Hz, with a calibration document.

    python tools/bench/replay.py [--days N]

Makes the capture once, below .work (some two minutes and 300 MB for a month), then runs `motekeep replay` as a process
over its first tenth and over all of it: memory is flat when both peak alike. The peer, in the same run, is the least
that any replay must do: read the file and take its lines apart. Processor time is that of the process, user and system;
it is what one core needs, however busy the machine is. Exits 1 when a month would take longer than three minutes of it,
or when memory grew.
"""

import argparse
import json
import os
import subprocess
import sys
import time
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from itertools import takewhile
from pathlib import Path

from motekeep.capture import parse_line

ROOT = Path(__file__).resolve().parents[2]
WORK = ROOT / ".work" / "bench-replay"
COMMANDS = Path(sys.executable).parent

MONTH_FRAMES = 30 * 86_400
BAR_S = 180.0
# The hours themselves: a line of 600 bytes each is kept to the end, as an amendment may still change it.
GROWTH_MB = 5.0
START = datetime(2027, 3, 1, tzinfo=UTC)

SCENARIO = """
site = "bench"
seed = 20270301
start = {start:%Y-%m-%dT%H:%M:%SZ}
duration = "{days}d"

[air]
aerosol = "urban"
pm2_5 = 12.0

[air.often]
rain = 8
smoke = 4
fog = 2
plume = 30

[[sensor]]
name = "north"
dialect = "bm"
length = 36
"""

CONFIG = """
site = "bench"
gateway = "bench"

[[sensor]]
name = "north"
port = "/dev/null"
dialect = "bm"
climate = {{ from = "frame" }}

[broker]
host = "localhost"

[store]
path = "{folder}/journal.db"
"""

DOCUMENT = """
issue = 1
site = "bench"
gateway = "bench"
sensor = "north"
made_at = 2027-02-20T10:00:00Z
valid_from = 2027-02-20T12:00:00Z
valid_until = 2028-02-20T00:00:00Z
[range]
pm2_5 = [0.0, 300.0]
pm10 = [0.0, 300.0]
rh = [10.0, 85.0]
[[step]]
kind = "humidity-growth"
kappa = { value = 0.30, u = 0.05 }
[[step]]
kind = "linear"
slope = { value = 1.1, u = 0.04 }
offset = { value = 0.2, u = 0.2 }
[[covariance]]
of = ["linear.slope", "linear.offset"]
value = -0.005
[residual]
pm2_5 = { u = 0.5, relative = 0.1 }
pm10 = { u = 1.5, relative = 0.2 }
"""


@dataclass(frozen=True, slots=True)
class Cost:
    """Processor and wall seconds of a process, and the most memory that it held, MB."""

    cpu_s: float
    wall_s: float
    peak_mb: float


def run(*command: str) -> Cost:
    """Run a command to its end."""
    began = time.perf_counter()
    process = subprocess.Popen(command, stdout=subprocess.DEVNULL)
    _, status, used = os.wait4(process.pid, 0)
    process.returncode = os.waitstatus_to_exitcode(status)
    if process.returncode:
        raise SystemExit(f"{' '.join(command)}: exit {process.returncode}")
    return Cost(used.ru_utime + used.ru_stime, time.perf_counter() - began, used.ru_maxrss / 1024.0)


def prepare(days: int) -> tuple[Path, Path]:
    """The capture and its first tenth; made anew when they are of another kind."""
    folder = WORK / f"{days}d"
    whole, tenth, scenario = folder / "whole.capture", folder / "tenth.capture", folder / "scenario.toml"
    text = SCENARIO.format(start=START, days=days)
    if tenth.exists() and scenario.exists() and scenario.read_text() == text:
        return whole, tenth
    folder.mkdir(parents=True, exist_ok=True)
    tenth.unlink(missing_ok=True)
    scenario.write_text(text)
    print(f"making a capture of {days} days ...", flush=True)
    made = run(str(COMMANDS / "motesim"), "capture", str(scenario), str(whole))
    print(f"  {made.cpu_s:.0f} s of processor, {whole.stat().st_size / 1e6:.0f} MB", flush=True)
    end = (START + timedelta(days=days / 10.0)).timestamp()
    # line by line: what this process holds at most is the least that a child's peak can be told as
    part = folder / "tenth.part"
    with whole.open(encoding="ascii") as lines, part.open("w", encoding="ascii") as out:
        out.writelines(takewhile(lambda line: line[0] == "#" or float(line.split(" ", 1)[0]) < end, lines))
    part.rename(tenth)
    return whole, tenth


def peer(capture: Path) -> None:
    """Read and take apart, and no more."""
    with capture.open(encoding="ascii") as lines:
        for line in lines:
            parse_line(line)


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--days", type=int, default=30)
    parser.add_argument("--peer", type=Path, metavar="CAPTURE", help=argparse.SUPPRESS)
    arguments = parser.parse_args()
    if arguments.peer:
        peer(arguments.peer)
        return 0
    whole, tenth = prepare(arguments.days)
    config, document, out = WORK / "config.toml", WORK / "north.toml", WORK / "out"
    config.write_text(CONFIG.format(folder=WORK))
    document.write_text(DOCUMENT)

    def replayed(capture: Path) -> tuple[Cost, int]:
        options = ("--config", str(config), "--calibration", str(document), "--out", str(out))
        cost = run(str(COMMANDS / "motekeep"), "replay", str(capture), *options)
        return cost, json.loads((out / "summary.json").read_text())["bursts"]["north"]

    part, early = replayed(tenth)
    bare = run(sys.executable, __file__, "--peer", str(whole))
    full, frames = replayed(whole)
    each_us, least_us = full.cpu_s / frames * 1e6, bare.cpu_s / frames * 1e6
    month_s = full.cpu_s / frames * MONTH_FRAMES
    in_time, flat = month_s < BAR_S, full.peak_mb - part.peak_mb < GROWTH_MB
    print(
        f"{frames:,} frames of {arguments.days} days, with a calibration document\n"
        f"  processor {full.cpu_s:.1f} s, {frames / full.cpu_s:,.0f} frames/s, {each_us:.1f} us/frame; "
        f"wall {full.wall_s:.1f} s\n"
        f"  peer, read and take apart: {bare.cpu_s:.1f} s, {least_us:.1f} us/frame; ratio {each_us / least_us:.1f}\n"
        f"  a month: {month_s:.0f} s of one core, limit {BAR_S:.0f}: {'held' if in_time else 'MISSED'}\n"
        f"  peak memory {part.peak_mb:.1f} MB over {early:,} frames, {full.peak_mb:.1f} MB over all, "
        f"limit +{GROWTH_MB:.0f}: {'held' if flat else 'MISSED'}"
    )
    return 0 if in_time and flat else 1


if __name__ == "__main__":
    sys.exit(main())
