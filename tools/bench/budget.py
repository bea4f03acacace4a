"""What the daemon costs: four sensors at 1 Hz, one reading a minute, a real broker.

    python tools/bench/budget.py [--minutes N] [--command PATH]

Runs `motekeep run` for a minute, then measures for whole minutes: processor time of all threads, peak memory,
wake-ups, bytes written, transactions of the journal (the commit frames of its write-ahead log, so none is missed).
Beside it and at the same time runs the peer, which no reader in this language can undercut by much: one loop that polls
four ports of its own with the same frames, reads and decodes them, and does nothing else.

Without `--command` the daemon runs from an environment of its own with the base install only, as on a device; the one
that runs the tests holds libraries that cost memory. Exit 1 when a bar is missed.
"""

import argparse
import os
import select
import subprocess
import sys
import tempfile
import time
from contextlib import ExitStack
from dataclasses import dataclass
from pathlib import Path
from typing import Any

ROOT = Path(__file__).resolve().parents[2]
sys.path.insert(0, str(ROOT / "tests"))

CPU_BAR = 0.3  # % of one core
MEMORY_BAR = 50.0  # MB, peak
COMMITS_BAR = 1.0  # a minute
WARM_UP_S = 60.0
LOOK_S = 5.0
NAMES = ("north", "east", "south", "west")


def peer(ports: list[str]) -> None:
    """The bare loop: poll, read, decode."""
    from motekeep.wire.dialects import DIALECTS  # noqa: PLC0415 (this process imports no more than it needs)

    decoders = {os.open(port, os.O_RDONLY | os.O_NOCTTY | os.O_NONBLOCK): DIALECTS["bm"].decoder() for port in ports}
    poll = select.poll()
    for descriptor in decoders:
        poll.register(descriptor, select.POLLIN)
    while True:
        for descriptor, _ in poll.poll():
            decoders[descriptor].feed(os.read(descriptor, 4096))


@dataclass(frozen=True, slots=True)
class Use:
    """What a process has used so far."""

    at_s: float
    cpu_s: float
    wakes: int
    handed: int  # bytes in write calls
    written: int  # bytes of the pages that they touched, as they go to the card

    @classmethod
    def of(cls, pid: int) -> "Use":
        fields = Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()
        wakes = 0
        for task in Path(f"/proc/{pid}/task").iterdir():
            wakes += _field(task / "status", "voluntary_ctxt_switches")
        # with the scheduler's own account the sum of both times is exact, only its split is sampled (proc(5))
        cpu_s = (int(fields[11]) + int(fields[12])) / os.sysconf("SC_CLK_TCK")
        io = Path(f"/proc/{pid}/io")
        return cls(time.monotonic(), cpu_s, wakes, _field(io, "wchar"), _field(io, "write_bytes"))


def _field(file: Path, name: str) -> int:
    line = next(line for line in file.read_text().splitlines() if line.startswith(f"{name}:"))
    return int(line.split()[1])


class Commits:
    """Counts the transactions in a write-ahead log, by its file format (sqlite.org/fileformat2.html, section 4)."""

    def __init__(self, log: Path) -> None:
        self.count = 0
        self._log = log
        self._salts = b""
        self._seen = 0

    def look(self) -> None:
        """Look again before the log has begun anew twice: with a few pages a minute that takes hours."""
        data = self._log.read_bytes()
        page_bytes, salts = int.from_bytes(data[8:12], "big"), data[16:24]
        found = 0
        for at in range(32, len(data) - 23, 24 + page_bytes):
            if data[at + 8 : at + 16] != salts:
                break  # a frame of an earlier round
            found += data[at + 4 : at + 8] != bytes(4)  # only the last frame of a transaction says how large it left it
        self.count += found - (self._seen if salts == self._salts else 0)
        self._salts, self._seen = salts, found


def device_command(folder: Path) -> Path:
    """`motekeep` as a device has it: the base install and nothing else."""
    venv = folder / "device"
    print("installing the base install into an environment of its own ...", flush=True)
    subprocess.run([sys.executable, "-m", "venv", str(venv)], check=True)
    pins = ["--constraint", str(ROOT / "tools" / "constraints.txt")]
    install = [str(venv / "bin" / "python"), "-m", "pip", "install", "-q", "--disable-pip-version-check", *pins]
    done = subprocess.run([*install, str(ROOT)], capture_output=True, text=True, check=False)
    if done.returncode:
        raise SystemExit(f"the base install failed; name another one with --command\n{done.stderr}")
    return venv / "bin" / "motekeep"


def measure(command: Path, minutes: int, folder: Path) -> dict[str, float]:
    import whole_site  # noqa: PLC0415 (numpy and the emulator are not for the peer, which is this file too)

    with ExitStack() as stack:
        site = stack.enter_context(whole_site.gateway(folder, NAMES))
        site.write_config(interval=60, health_every=60.0)
        same = whole_site.Sensors(folder / "peer", NAMES)
        stack.callback(same.stop)
        for name in NAMES:
            same.plug(name)
        same.start()
        python = command.parent / "python"
        ports = [str(port.link) for port in same.ports.values()]
        bare = subprocess.Popen([str(python), __file__, "--peer", *ports])
        stack.callback(bare.kill)
        subscriber = site.subscribe()
        daemon = site.start_daemon(command=command)
        pid = daemon.process.pid
        assert subscriber.wait(lambda heard: any("/reading/" in h.topic for h in heard), 90.0), daemon.log.read_text()
        ready_s = time.monotonic()
        # whole minutes, away from their borders, so that each has exactly one end of an interval in it
        time.sleep(WARM_UP_S - (time.time() + WARM_UP_S - 20.0) % 60.0 + 60.0)
        print(f"measuring after {time.monotonic() - ready_s:.0f} s, for {minutes} min ...", flush=True)
        commits = Commits(site.store.with_name(site.store.name + "-wal"))
        commits.look()
        before, first, peer_first = commits.count, Use.of(pid), Use.of(bare.pid)
        while time.monotonic() - first.at_s < 60.0 * minutes:
            time.sleep(min(LOOK_S, max(first.at_s + 60.0 * minutes - time.monotonic(), 0.0)))
            commits.look()
        last, peer_last = Use.of(pid), Use.of(bare.pid)
        peak = _field(Path(f"/proc/{pid}/status"), "VmHWM") / 1024
        took_s = last.at_s - first.at_s
        code, stop_s = daemon.terminate()
        assert code == 0, daemon.log.read_text()
        return {
            "cpu": 100.0 * (last.cpu_s - first.cpu_s) / took_s,
            "peer": 100.0 * (peer_last.cpu_s - peer_first.cpu_s) / took_s,
            "memory": peak,
            "commits": (commits.count - before) / minutes,
            "wakes": (last.wakes - first.wakes) / took_s,
            "peer_wakes": (peer_last.wakes - peer_first.wakes) / took_s,
            "handed": (last.handed - first.handed) / took_s * 86400.0 / 1e6,
            "written": (last.written - first.written) / took_s * 86400.0 / 1e6,
            "good": _share_of_good(subscriber, whole_site),
            "stop_s": stop_s,
        }


def _share_of_good(subscriber: Any, whole_site: Any) -> float:  # Any: the module is imported late
    """Of whole minutes, how many of the frames due were counted good: a daemon that loses them costs little."""
    frames = [document["frames"] for _, document in whole_site.readings(subscriber.heard) if document["seconds"] == 60]
    kept = [frame["good"] for frame in frames[len(NAMES) :]]  # the first minute holds the warming up
    return 100.0 * sum(kept) / (60 * len(kept)) if kept else 0.0


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--minutes", type=int, default=5)
    parser.add_argument("--command", type=Path, help="the motekeep to measure, instead of one installed for this")
    parser.add_argument("--peer", nargs="+", metavar="PORT", help=argparse.SUPPRESS)
    arguments = parser.parse_args()
    if arguments.peer:
        peer(arguments.peer)
    with tempfile.TemporaryDirectory(prefix="motekeep-budget-") as name:
        folder = Path(name)
        (folder / "site").mkdir()
        command = arguments.command or device_command(folder)
        found = measure(command, arguments.minutes, folder / "site")
    ratio = found["cpu"] / found["peer"] if found["peer"] else float("inf")
    rows = [
        ("processor, % of one core", f"{found['cpu']:.3f}", f"<= {CPU_BAR}", found["cpu"] <= CPU_BAR),
        ("  bare loop that reads and decodes the same", f"{found['peer']:.3f}", f"ratio {ratio:.1f}", True),
        ("peak memory, MB", f"{found['memory']:.1f}", f"<= {MEMORY_BAR:.0f}", found["memory"] <= MEMORY_BAR),
        ("journal transactions a minute", f"{found['commits']:.2f}", "<= 1", found["commits"] <= COMMITS_BAR),
        ("wake-ups a second", f"{found['wakes']:.1f}", f"bare loop {found['peer_wakes']:.1f}", True),
        ("written, MB a day", f"{found['handed']:.1f}", f"whole pages {found['written']:.1f}", True),
        ("frames counted good, %", f"{found['good']:.1f}", ">= 99", found["good"] >= 99.0),
        ("SIGTERM to exit, s", f"{found['stop_s']:.1f}", "<= 5", found["stop_s"] <= 5.0),
    ]
    print(f"\nfour sensors at 1 Hz, interval 60 s, over {arguments.minutes} min:")
    for what, figure, bar, well in rows:
        print(f"  {'ok  ' if well else 'FAIL'}  {what:<46} {figure:>8}   {bar}")
    return 0 if all(well for *_, well in rows) else 1


if __name__ == "__main__":
    sys.exit(main())
