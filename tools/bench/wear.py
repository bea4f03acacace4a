"""Wear: what the journal writes to the card for a commit, and in a day of one commit a minute with four sensors.

Counted twice: by /proc/self/io (what the program made the kernel write) and by the statistics of a loop device under
ext4 (what reached the block device, the file system's own journal included). Bytes inside the card are some multiple
of that, which no host can see. The publisher delivers every minute's readings; each commit carries a kept value.
Needs root and loop devices for the second count.

    tools/bench/wear.py --commits 1440
"""

import argparse
import os
import sys
import tempfile
import time
from pathlib import Path

ROOT = Path(__file__).resolve().parents[2]
sys.path[:0] = [str(ROOT / "tests"), str(ROOT / "agent")]

import structlog  # noqa: E402  (the paths above come first)

from journal_site import MIB, Site  # noqa: E402
from loop_disk import LoopDisk, new_disk, why_not  # noqa: E402

SENSORS = ("north", "south", "east", "west")
A_DAY = 1440
BUDGET_MB = 25.0


def written_by_us() -> int:
    lines = Path("/proc/self/io").read_text().splitlines()
    return int(next(line for line in lines if line.startswith("write_bytes")).split()[1])


def measure(
    folder: Path, disk: LoopDisk | None, commits: int, pause_s: float, kept_bytes: int
) -> tuple[float, float, int]:
    """Bytes a commit by the process and by the device (0 without one), and the size of a body."""
    site = Site(folder, sensors=SENSORS, max_bytes=64 * MIB)
    site.minutes(200)  # past the first growth of the log
    site.deliver_all()
    os.sync()
    before, device_before = written_by_us(), disk.bytes_written() if disk else 0
    body = 0
    for number in range(commits):
        [reading, *_] = site.minute(keep={"pipeline": (f"{number} " * kept_bytes)[:kept_bytes]} if kept_bytes else None)
        body = len(reading.body)
        site.deliver_all()
        time.sleep(pause_s)
    site.reader.close()
    site.journal.close()
    os.sync()
    by_us = (written_by_us() - before) / commits
    by_device = (disk.bytes_written() - device_before) / commits if disk else 0.0
    return by_us, by_device, body


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--commits", type=int, default=A_DAY)
    parser.add_argument(
        "--pause", type=float, default=0.0, help="seconds between commits; the counts hardly depend on it"
    )
    parser.add_argument("--kept-bytes", type=int, default=300, help="size of the kept value of each commit, 0 for none")
    arguments = parser.parse_args()
    structlog.configure(logger_factory=structlog.ReturnLoggerFactory())
    with tempfile.TemporaryDirectory(prefix="wear-") as name:
        folder = Path(name)
        if reason := why_not():
            print(f"device bytes not counted: {reason}")
            by_us, by_device, body = measure(
                folder / "a", None, arguments.commits, arguments.pause, arguments.kept_bytes
            )
        else:
            with new_disk(folder, 128) as disk:
                by_us, by_device, body = measure(
                    disk.mount / "a", disk, arguments.commits, arguments.pause, arguments.kept_bytes
                )
    print(
        f"{len(SENSORS)} readings of {body} bytes a commit, {arguments.commits} commits,"
        f" kept value {arguments.kept_bytes} bytes"
    )
    for what, bytes_ in (("/proc/self/io", by_us), ("block device", by_device)):
        if bytes_:
            print(
                f"{what:14}: {bytes_:8.0f} bytes a commit, {bytes_ * A_DAY / 1e6:5.1f} MB a day at one commit a minute"
            )
    day = (by_device or by_us) * A_DAY / 1e6
    print(f"budget {BUDGET_MB} MB a day: {'kept' if day <= BUDGET_MB else 'NOT kept'}")
    return 0 if day <= BUDGET_MB else 1


if __name__ == "__main__":
    raise SystemExit(main())
