"""A fleet of 1,000: signed documents rolled in waves over one mosquitto, with a kill half-way. Exit 1 below a bar.

    python tools/bench/fleet.py [--gateways 1000]

The gateways are emulated at message level by one process (tests/emulated_fleet.py): retained health and state, an issue
above the highest, an answer on the state topic. mosquitto runs with its own defaults, the queue limit of 1,000 messages
included. `moteferry roll` is the real command in a process of its own, `--waves 1,10%,rest --hold 0`. Three parts:

- one roll from start to end, timed from the start of the process to its exit (bar: two minutes);
- the next issue, killed (SIGKILL) once half of the fleet has been offered it, and the same command again: every gateway
  has the document, none was offered it under a second issue, and the register tells of each;
- fleets where one gateway in the second wave misbehaves: the third wave is offered nothing.
"""

import argparse
import json
import resource
import shutil
import signal
import subprocess
import sys
import tempfile
import time
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, field
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parents[2] / "tests"))

from emulated_fleet import EmulatedFleet, Gateway, document_text, make_key, write_signed
from mosquitto import Mosquitto, running
from moteferry.roll.offer import Target
from moteferry.roll.register import Register

BAR_S = 120.0
LIMIT_S = 300.0
WAVES = "1,10%,rest"
TROUBLES = (("refuses", "0", "refused"), ("fails", "20s", "worse"), ("silent", "0", "silent"))


@dataclass
class Bench:
    folder: Path
    port: int
    failures: list[str] = field(default_factory=list)

    def command(self, documents: Sequence[Path], *words: str) -> list[str]:
        where = ["--broker", f"127.0.0.1:{self.port}", "--register", str(self.folder / "register.db")]
        run = [sys.executable, "-c", "from moteferry.cli import main; main()", "roll", *map(str, documents)]
        return [*run, *where, "--waves", WAVES, "--yes", "--json", *words]

    def hold(self, what: str, held: bool) -> None:
        print(f"  {'held  ' if held else 'MISSED'}  {what}")
        if not held:
            self.failures.append(what)


def fleet_of(count: int, site: str) -> list[Gateway]:
    return [Gateway(Target(site, f"gate-{n:04d}", "north")) for n in range(count)]


def documents(bench: Bench, key: Path, gateways: Sequence[Gateway], issue: int) -> list[Path]:
    began = time.perf_counter()
    texts = {g.target: document_text(g.target, issue, slope=0.9 + issue / 100) for g in gateways}
    paths = write_signed(bench.folder / "documents", key, texts)
    print(f"signed {len(paths)} documents of issue {issue} in {time.perf_counter() - began:.1f} s")
    return paths


def whole(bench: Bench, gateways: Sequence[Gateway], paths: Sequence[Path]) -> None:
    began = time.perf_counter()
    before = resource.getrusage(resource.RUSAGE_CHILDREN)
    done = subprocess.run(bench.command(paths, "--hold", "0"), capture_output=True, timeout=LIMIT_S, check=False)
    seconds = time.perf_counter() - began
    after = resource.getrusage(resource.RUSAGE_CHILDREN)
    if done.returncode != 0:
        print(done.stderr.decode()[-2000:], done.stdout.decode()[-2000:])
    count = len(gateways)
    cpu_s = after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime
    print(f"rolled onto {count} gateways in {seconds:.1f} s ({cpu_s:.1f} s of CPU, ssh-keygen included)")
    print(f"  peak memory of the command {after.ru_maxrss / 1024:.0f} MB")
    told = json.loads(done.stdout) if done.returncode == 0 else {"passed": []}
    bench.hold(f"under {BAR_S:.0f} s", seconds < BAR_S)
    bench.hold(f"all {count} passed", len(told["passed"]) == count)
    bench.hold("each was offered its document exactly once", all(len(g.offers) == 1 for g in gateways))


def killed(bench: Bench, fleet: EmulatedFleet, paths: Sequence[Path]) -> None:
    gateways = list(fleet.gateways.values())
    # the roll is faster than a kill can aim: this gateway of the last wave keeps it from ending
    gateways[-1].behaviour = "silent"
    with subprocess.Popen(bench.command(paths, "--hold", "0"), stdout=subprocess.DEVNULL) as process:
        deadline = time.monotonic() + LIMIT_S
        while sum(len(g.offers) > 1 for g in gateways) < len(gateways) // 2:
            if time.monotonic() > deadline or process.poll() is not None:
                raise SystemExit("the roll did not get half-way")
            time.sleep(0.001)
        process.send_signal(signal.SIGKILL)
        process.wait(LIMIT_S)
    time.sleep(0.5)  # what the broker had taken arrives
    with fleet.lock:
        had = sum(g.in_force is not None and g.in_force[0] == 2 for g in gateways)
        gateways[-1].behaviour = "well"
    print(f"killed with {had} of {len(gateways)} in force; the same command again")
    began = time.perf_counter()
    done = subprocess.run(bench.command(paths, "--hold", "0"), capture_output=True, timeout=LIMIT_S, check=False)
    print(f"  {time.perf_counter() - began:.1f} s, exit {done.returncode}")
    with fleet.lock:
        later = [[offer for offer in g.offers if offer[0] > 1] for g in gateways]
        in_force = [g.in_force for g in gateways]
    twice = sum(len(offers) > 1 for offers in later)
    print(f"  {twice} gateways were offered the same bytes twice (no answer had come before the kill)")
    bench.hold("exit 0", done.returncode == 0)
    bench.hold("killed before its end", process.returncode == -signal.SIGKILL)
    bench.hold("every gateway has issue 2 in force", all(seat is not None and seat[0] == 2 for seat in in_force))
    bench.hold("none was offered it under another issue", all(len(set(offers)) == 1 for offers in later))
    bench.hold("the register tells of each", registered(bench, gateways))


def registered(bench: Bench, gateways: Sequence[Gateway]) -> bool:
    """Both issues accepted once each, offered before, the second in force."""
    with Register(bench.folder / "register.db", write=False) as register:
        counts = Counter((e.target, e.event, e.issue) for e in register.events())
        in_force = register.in_force()
    return all(
        counts[g.target, "accepted", issue] == 1
        and counts[g.target, "passed", issue] == 1
        and counts[g.target, "offered", issue] >= 1
        and in_force[g.target].issue == 2
        for g in gateways
        for issue in (1, 2)
    )


def troubled(bench: Bench, key: Path, behaviour: str, hold: str, step: str, count: int) -> None:
    gateways = fleet_of(count, f"site-{behaviour}")
    gateways[count // 20].behaviour = behaviour  # in the second wave
    with EmulatedFleet(bench.port, gateways).running():
        paths = documents(bench, key, gateways, 1)
        command = bench.command(paths, "--hold", hold, "--patience", "3")
        done = subprocess.run(command, capture_output=True, timeout=LIMIT_S, check=False)
        told = json.loads(done.stdout)
    offered = sum(bool(g.offers) for g in gateways)
    [failure] = told["failures"]
    print(f"{failure['gateway']} in the second wave: {failure['step']}: {failure['why']}; {offered} of {count} offered")
    bench.hold(f"stops when one {behaviour}", (done.returncode, failure["step"]) == (1, step))
    bench.hold("the third wave was offered nothing", offered <= 1 + -(-count // 10))


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--gateways", type=int, default=1000)
    arguments = parser.parse_args()
    count = arguments.gateways
    with tempfile.TemporaryDirectory() as work:
        folder = Path(work)
        mosquitto = Mosquitto(folder, defaults=True)
        bench = Bench(folder, mosquitto.port)
        key = make_key(folder)
        with running(mosquitto):
            gateways = fleet_of(count, "quarry")
            with EmulatedFleet(mosquitto.port, gateways).running() as fleet:
                whole(bench, gateways, documents(bench, key, gateways, 1))
                killed(bench, fleet, documents(bench, key, gateways, 2))
            for behaviour, hold, step in TROUBLES:
                troubled(bench, key, behaviour, hold, step, min(count, 200))
        shutil.rmtree(folder / "documents")
    print(f"{'all bars held' if not bench.failures else 'MISSED: ' + '; '.join(bench.failures)}")
    return 1 if bench.failures else 0


if __name__ == "__main__":
    sys.exit(main())
