"""Power cuts: does a commit that was acknowledged survive one, and is the journal sound afterwards?

A writer process commits to a journal on a loop-mounted ext4 and acknowledges each commit on a pipe. At a random
moment it is stopped and the file behind the block device is copied: the copy holds what had reached the device, and
nothing else, as a card does after the power went. The copy is mounted, opened as at a start, and compared with the
last acknowledgement. No storage is modelled that lies about flushing or writes blocks out of order. Needs root and
loop devices.

    tools/bench/powercut.py --cuts 40
"""

import argparse
import os
import random
import select
import shutil
import signal
import subprocess
import sys
import tempfile
import time
from pathlib import Path

ROOT = Path(__file__).resolve().parents[2]
sys.path[:0] = [str(ROOT / "tests"), str(ROOT / "agent")]

import structlog  # noqa: E402  (the paths above come first)

from journal_site import MIB, Site  # noqa: E402
from loop_disk import mounted, new_disk, why_not  # noqa: E402

SENSORS = ("north", "south", "east", "west")
DISK_MB = 48


def quiet() -> None:
    structlog.configure(logger_factory=structlog.ReturnLoggerFactory())


def write(folder: Path, max_bytes: int, pause_s: float) -> None:
    """The writer: commits for ever, delivers most, acknowledges each commit with its number."""
    quiet()
    site = Site(folder, sensors=SENSORS, max_bytes=max_bytes)
    while True:
        readings = site.minute(keep={"pipeline": "x" * 300})
        os.write(1, f"{readings[0].seq}\n".encode())
        if readings[0].seq % 3:
            site.deliver_all()
        time.sleep(pause_s)


def one_cut(folder: Path, source: random.Random, *, small: bool) -> tuple[int, int, list[str]]:
    """One cut: commits acknowledged, commits lost, and what else was wrong."""
    max_bytes = MIB if small else 64 * MIB
    copy = folder / "after.img"
    with new_disk(folder, DISK_MB) as disk:
        command = [sys.executable, __file__, "--writer", str(disk.mount / "a"), "--max-bytes", str(max_bytes)]
        command += ["--pause", str(source.choice((0.0, 0.002, 0.02)))]
        writer = subprocess.Popen(command, stdout=subprocess.PIPE)
        assert writer.stdout is not None
        pipe = writer.stdout.fileno()
        text = os.read(pipe, 65536).decode()  # it is under way
        time.sleep(source.uniform(0.0, 2.0))
        writer.send_signal(signal.SIGSTOP)
        # what it has acknowledged is in the pipe; what is acknowledged later would not count
        while select.select([pipe], [], [], 0.05)[0]:
            text += os.read(pipe, 65536).decode()
        shutil.copyfile(disk.image, copy)
        writer.kill()
        writer.wait()
    acknowledged = int(text[: text.rindex("\n")].split("\n")[-1])
    with mounted(copy, folder / "again") as disk:
        lost, wrong = inspect(disk.mount / "a", max_bytes, acknowledged)
    copy.unlink()
    return acknowledged, lost, wrong


def inspect(folder: Path, max_bytes: int, acknowledged: int) -> tuple[int, list[str]]:
    """Start on what is left: commits lost, and faults in words."""
    wrong = []
    site = Site(folder, sensors=SENSORS, max_bytes=max_bytes)
    state = site.journal.state()
    if state.degraded:
        wrong.append(state.degraded)
    sound = site.journal._file.connection.execute("PRAGMA integrity_check").fetchone()[0]  # noqa: SLF001 (a bench)
    if sound != "ok":
        wrong.append(f"integrity: {sound}")
    last = min(site.journal.next_seq(sensor) - 1 for sensor in SENSORS)
    for sensor in SENSORS:
        numbers = [n for r in site.reader.stored(sensor, 1, 10**9, 10**6) for n in range(r.from_seq, r.seq + 1)]
        if numbers != list(range(numbers[0], numbers[0] + len(numbers))):
            wrong.append(f"{sensor}: holes or doubles")
        if numbers[-1] != site.journal.next_seq(sensor) - 1:
            wrong.append(
                f"{sensor}: the last reading is {numbers[-1]}, the last number {site.journal.next_seq(sensor) - 1}"
            )
        if state.waiting != sum(len(site.numbers(s)) for s in SENSORS):
            wrong.append(f"{sensor}: a number waits that has no reading")
    site.reader.close()
    site.journal.close()
    return max(acknowledged - last, 0), wrong


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--cuts", type=int, default=40)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--writer", type=Path, help=argparse.SUPPRESS)
    parser.add_argument("--max-bytes", type=int, default=64 * MIB, help=argparse.SUPPRESS)
    parser.add_argument("--pause", type=float, default=0.0, help=argparse.SUPPRESS)
    arguments = parser.parse_args()
    if arguments.writer is not None:
        write(arguments.writer, arguments.max_bytes, arguments.pause)
    if reason := why_not():
        print(f"cannot cut any power here: {reason}")
        return 2
    quiet()
    source = random.Random(arguments.seed)
    commits = lost = faults = 0
    for cut in range(1, arguments.cuts + 1):
        with tempfile.TemporaryDirectory(prefix="powercut-") as folder:
            acknowledged, gone, wrong = one_cut(Path(folder), source, small=cut % 4 == 0)
        commits += acknowledged
        lost += gone
        faults += bool(wrong)
        print(
            f"cut {cut:4}: {acknowledged:6} commits acknowledged, {gone} lost{''.join(f'; {w}' for w in wrong)}",
            flush=True,
        )
    print(f"{arguments.cuts} cuts, {commits} commits acknowledged, {lost} lost, {faults} journals with a fault")
    return 1 if lost or faults else 0


if __name__ == "__main__":
    raise SystemExit(main())
