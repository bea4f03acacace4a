"""Nothing is lost: the broker is gone for an hour, the daemon is killed (SIGKILL) at fifty random moments.

    python tools/bench/outage.py [--gone MINUTES] [--kills N] [--seed N] [--speed N] [--keep FOLDER]

The real daemon (`app.Daemon`: pipeline, journal, publisher, broker edge) in processes of its own, on a clock that runs
`speed` times faster (`tests/fast_daemon.py`), with four emulated sensors on pseudo-terminals, a real mosquitto and a
mosquitto_sub whose session outlives its connections. Half of the kills come at any moment, half in the first 50 ms
after the end of an interval, where a commit, a message or an answer is under way. Some come before the broker goes,
most while it is gone, some while the backlog drains. Late messages are held to one in 50 s, so that the drain lasts and
live readings have something to be delayed by.

Exit 1 when a committed reading did not arrive, when something arrived that is not in the journal, when two readings
carry one number or a number is left out, when `late` is not oldest first, when live readings had to wait, or when a
daemon died by itself. Doubles are allowed, since a kill loses what the broker has answered last, and counted.
"""

import argparse
import random
import sqlite3
import subprocess
import sys
import tempfile
import time
from collections import Counter
from collections.abc import Callable, Iterator, Sequence
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from statistics import median

sys.path.insert(0, str(Path(__file__).resolve().parents[2] / "tests"))

from fast_daemon import EPOCH
from whole_site import FAST_DAEMON, Gateway, Subscriber, boot_s, gateway, readings

NAMES = ("north", "east", "south", "west")
INTERVAL_S = 10
LATE_RATE = 0.02
BEFORE_MINUTES = 3.0
DRAIN_KILLS_MINUTES = 1.5
CLOSE_S = 0.05  # real seconds after a border in which the aimed kills fall
LIVE_BAR = 0.9  # of the readings that end while the backlog drains; a first-in, first-out queue has none of them live
PATIENCE_S = 180.0

Key = tuple[str, int]


class Nursery:
    """Where daemons are born and die; see `fast_daemon`."""

    def __init__(self, config: Path, speed: float, log: Path) -> None:
        command = [sys.executable, str(FAST_DAEMON), "--config", str(config), "--speed", str(speed), "--nursery"]
        self._log = log
        self._process = subprocess.Popen(command, stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True)
        self.ends: list[int] = []

    def start(self) -> None:
        self._order(f"start {self._log}")

    def kill(self) -> None:
        self.ends.append(int(self._order("kill")))

    def stop(self) -> int:
        return int(self._order("stop"))

    def close(self) -> None:
        self._process.kill()
        self._process.wait(10.0)

    def _order(self, line: str) -> str:
        assert self._process.stdin is not None
        assert self._process.stdout is not None
        self._process.stdin.write(line + "\n")
        self._process.stdin.flush()
        return self._process.stdout.readline()


@dataclass
class Story:
    """What happened, and when, in seconds of the emulated wall clock."""

    back_s: float = 0.0
    last_kill_s: float = 0.0
    committed: dict[Key, float] = field(default_factory=dict)  # to the end of its interval
    journal: dict[Key, float] = field(default_factory=dict)  # after the end
    ends: list[int] = field(default_factory=list)
    last_end: int = -1


def kill_times(rng: random.Random, count: int, begin_s: float, end_s: float, speed: float) -> list[float]:
    """Real boot seconds: half anywhere, half close after the end of an interval."""
    times = []
    for index in range(count):
        at = rng.uniform(begin_s, end_s)
        if index % 2:
            border = INTERVAL_S / speed
            at = round(at / border) * border + rng.uniform(0.0, CLOSE_S)
        times.append(at)
    return sorted(times)


class Outage:
    def __init__(
        self, site: Gateway, subscriber: Subscriber, nursery: Nursery, speed: float, rng: random.Random
    ) -> None:
        self._site = site
        self._subscriber = subscriber
        self._nursery = nursery
        self._speed = speed
        self._rng = rng
        self._began_s = boot_s()
        self.story = Story(ends=nursery.ends)

    def say(self, text: str) -> None:
        print(f"{(boot_s() - self._began_s) * self._speed / 60.0:6.1f} min  {text}", flush=True)

    def play(self, gone_minutes: float, kills: int) -> Story:
        before, late = max(kills // 10, 1), max(kills // 8, 1)
        self._nursery.start()
        self.say("the daemon runs, the broker is there")
        self._live_through(BEFORE_MINUTES, before)
        self._site.mosquitto.stop()
        self.say("the broker is gone")
        self._live_through(gone_minutes, kills - before - late)
        self._site.mosquitto.start()
        self.story.back_s = self._now_s()
        self.say(f"the broker is back; {len(committed(self._site.store))} readings are in the journal")
        self._live_through(DRAIN_KILLS_MINUTES, late)
        self.story.last_kill_s = self._now_s()
        self.say("no more kills; the backlog drains")
        self._drain()
        self.story.last_end = self._nursery.stop()
        self.story.journal = committed(self._site.store)
        return self.story

    def _now_s(self) -> float:
        return EPOCH + self._speed * boot_s()

    def _live_through(self, minutes: float, kills: int) -> None:
        begin_s = boot_s()
        end_s = begin_s + 60.0 * minutes / self._speed
        for at in kill_times(self._rng, kills, begin_s, end_s, self._speed):
            time.sleep(max(at - boot_s(), 0.0))
            self._nursery.kill()
            self._nursery.start()
        time.sleep(max(end_s - boot_s(), 0.0))

    def _drain(self) -> None:
        """Until the backlog has arrived, and then everything else that is committed by then."""
        old = {key: end for key, end in committed(self._site.store).items() if end <= self.story.last_kill_s}
        self._until_arrived(old)
        self.say("the backlog has arrived")
        self.story.committed = committed(self._site.store)
        self._until_arrived(self.story.committed)

    def _until_arrived(self, wanted: dict[Key, float]) -> None:
        deadline = time.monotonic() + PATIENCE_S
        while set(wanted) - {key for key, *_ in arrivals(self._subscriber)}:
            if time.monotonic() > deadline:
                self.say(f"waited {PATIENCE_S:.0f} s of real time in vain")
                return
            time.sleep(0.2)


def committed(store: Path) -> dict[Key, float]:
    """Every reading in the journal, to the end of its interval; by a connection that cannot write."""
    connection = sqlite3.connect(f"file:{store}?mode=ro", uri=True)
    try:
        rows = connection.execute("SELECT sensor, from_seq, seq, start + seconds FROM readings").fetchall()
    finally:
        connection.close()
    return {(sensor, number): end for sensor, first, last, end in rows for number in range(first, last + 1)}


def arrivals(subscriber: Subscriber) -> Iterator[tuple[Key, bool, float, str]]:
    """(sensor, seq), whether it came late, boot seconds of its coming, start of its interval; in order."""
    for heard, document in readings(list(subscriber.heard)):
        yield (document["sensor"], document["seq"]), "/late/" in heard.topic, heard.boot_s, document["start"]


@dataclass(frozen=True, slots=True)
class Row:
    well: bool
    what: str
    figure: str


def judge(story: Story, arrived: Sequence[tuple[Key, bool, float, str]], speed: float, kills: int) -> list[Row]:
    first: dict[Key, tuple[bool, float, str]] = {}
    order: dict[str, list[int]] = {}
    differing = 0
    for key, late, at, start in arrived:
        if key in first:
            differing += start != first[key][2]
            continue
        first[key] = late, at, start
        if late:
            order.setdefault(key[0], []).append(key[1])
    missing = set(story.committed) - set(first)
    strangers = set(first) - set(story.journal)
    highest = Counter({sensor: max(n for s, n in story.journal if s == sensor) for sensor, _ in story.journal})
    left_out = highest.total() - len(story.journal)
    disordered = [sensor for sensor, numbers in order.items() if numbers != sorted(numbers)]
    return [
        Row(bool(story.committed), "committed", str(len(story.committed))),
        Row(True, "arrived", str(len(set(story.committed) & set(first)))),
        Row(not missing, "committed and missing", f"{len(missing)} {sorted(missing)[:5] if missing else ''}"),
        Row(not strangers, "arrived, but not in the journal", str(len(strangers))),
        Row(not left_out, "numbers left out in the journal", str(left_out)),
        Row(not differing, "numbers used for two readings", str(differing)),
        Row(True, "doubles", str(len(arrived) - len(first))),
        Row(bool(order) and not disordered, "came late, oldest first", f"{sum(map(len, order.values()))}"),
        *_live(story, first, speed),
        Row(len(story.ends) == kills, "kills", str(len(story.ends))),
        Row(
            all(end == -9 for end in story.ends),
            "daemons that died by themselves",
            str(sum(e != -9 for e in story.ends)),
        ),
        Row(story.last_end == 0, "exit code at the end, by SIGTERM", str(story.last_end)),
    ]


def _live(story: Story, first: dict[Key, tuple[bool, float, str]], speed: float) -> list[Row]:
    """How readings fared that ended while the backlog drained and nobody killed."""

    def came_s(key: Key) -> float:
        return EPOCH + speed * first[key][1]

    # from the first live reading after the last kill on: the link is up
    begin = min(
        (came_s(key) for key, (late, *_) in first.items() if not late and came_s(key) > story.last_kill_s), default=0.0
    )
    backlog = [key for key, end in story.committed.items() if end < story.back_s and key in first]
    end = max((came_s(key) for key in backlog), default=0.0)
    during = [key for key, ended in story.committed.items() if begin <= ended <= end and key in first]
    live = [key for key in during if not first[key][0]]
    delays = [came_s(key) - story.committed[key] for key in live]
    share = len(live) / len(during) if during else 0.0
    spread = f"median {median(delays):.1f} s, worst {max(delays):.1f} s" if delays else "none"
    drained = f"{len(live)} of {len(during)}, in {max(end - begin, 0.0) / 60.0:.1f} min"
    return [
        Row(share >= LIVE_BAR, "readings that ended meanwhile and came live", drained),
        Row(bool(delays), "their delay after the end of the interval", f"{spread} (emulated)"),
    ]


def outage(gone_minutes: float, kills: int, seed: int, speed: float, folder: Path) -> list[Row]:
    with ExitStack() as stack:
        site = stack.enter_context(gateway(folder, NAMES, speed=speed))
        site.write_config(interval=INTERVAL_S, late_rate=LATE_RATE, health_every=60.0)
        subscriber = site.subscribe()
        nursery = Nursery(site.config, speed, folder / "motekeep.log")
        stack.callback(nursery.close)
        story = Outage(site, subscriber, nursery, speed, random.Random(seed)).play(gone_minutes, kills)
        return judge(story, list(arrivals(subscriber)), speed, kills)


@contextmanager
def working_folder(kept: Path | None) -> Iterator[Path]:
    if kept is not None:
        kept.mkdir(parents=True)
        yield kept
        return
    with tempfile.TemporaryDirectory(prefix="motekeep-outage-") as name:
        yield Path(name)


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    positive: Callable[[str], float] = float
    parser.add_argument("--gone", type=positive, default=60.0, metavar="MINUTES", help="emulated; default 60")
    parser.add_argument("--kills", type=int, default=50)
    parser.add_argument("--seed", type=int, default=None, help="of the moments; printed, and at random without it")
    parser.add_argument("--speed", type=positive, default=30.0, help="emulated seconds in a real one; default 30")
    parser.add_argument("--keep", type=Path, metavar="FOLDER", help="leave journal and logs there")
    arguments = parser.parse_args()
    seed = random.SystemRandom().randrange(1 << 31) if arguments.seed is None else arguments.seed
    print(
        f"broker gone for {arguments.gone:g} min, {arguments.kills} kills, seed {seed}, "
        f"{arguments.speed:g} times as fast"
    )
    with working_folder(arguments.keep) as folder:
        rows = outage(arguments.gone, arguments.kills, seed, arguments.speed, folder)
    print()
    for row in rows:
        print(f"  {'ok  ' if row.well else 'FAIL'}  {row.what:<46} {row.figure}")
    return 0 if all(row.well for row in rows) else 1


if __name__ == "__main__":
    sys.exit(main())
