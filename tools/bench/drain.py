"""How fast a backlog leaves: 10,000 waiting readings, real journal, real publisher, real mosquitto on loopback.

Beside it, in the same run and alternated with it: `mosquitto_pub -l -q 1`, which publishes the same readings one a
line. Both have the same subscriber; a run counts only when it has heard every (sensor, seq). Exit 1 under the bar.

    python tools/bench/drain.py [--readings 10000] [--runs 9]

What is timed: from the start of the publisher's thread, connecting included, to the last row marked delivered; and the
life of the mosquitto_pub process, connecting included. The rate limit is off.
"""

import argparse
import json
import logging
import shutil
import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from threading import Event, Thread

import structlog

sys.path.insert(0, str(Path(__file__).resolve().parents[2] / "tests"))

from mosquitto import Mosquitto, running
from motekeep.edges.broker import MqttBroker
from motekeep.edges.clock import SystemClock
from motekeep.edges.journal import Journal, JournalSettings
from motekeep.edges.login import BrokerSettings
from motekeep.edges.ports import Batch, NewReading
from motekeep.instant import rfc3339
from motekeep.loops.inbox import down_filters
from motekeep.loops.publisher import Publisher, PublisherSettings
from motekeep.loops.rows import RowSettings
from motekeep.message.topics import Topics

BAR = 3.0
SENSORS = ("north", "south", "east", "west")
TOPICS = Topics("motekeep", "quarry", "east-gate")
PATIENCE_S = 60.0


@dataclass(frozen=True, slots=True)
class Run:
    seconds: float
    readings: int
    rate: float


def body_of(sensor: str, seq: int, start: float, boot_id: str) -> str:
    """A reading document of ordinary size; the shape is that of the schema, the numbers are made up."""
    document = {
        "schema": "motekeep/reading/1",
        "site": "quarry",
        "gateway": "east-gate",
        "sensor": sensor,
        "seq": seq,
        "start": rfc3339(start),
        "seconds": 60,
        "clock": "synced",
        "boot": boot_id,
        "boot_s": seq * 60.0,
        "pm1": {"raw": 5.1 + seq % 7, "value": 4.0, "u": 0.9},
        "pm2_5": {"raw": 7.9 + seq % 7, "value": 6.2, "u": 1.4},
        "pm10": {"raw": 9.4 + seq % 7, "value": 7.7, "u": 2.1},
        "unit": "ug/m3",
        "k": 1,
        "counts_per_dL": {"0.3": 1421, "0.5": 392, "1.0": 61, "2.5": 4.4, "5.0": 0.6, "10": 0.1},
        "climate": {"rh": 71.2, "t": 11.4},
        "frames": {"good": 60, "bad": 0, "missing": 0},
        "flag": 2,
        "reasons": ["uncalibrated"],
    }
    return json.dumps(document, separators=(",", ":"))


def fill(folder: Path, count: int) -> list[str]:
    """A journal with so many readings waiting, of a past boot, one transaction a minute; gives their bodies."""
    boot_id = "0" * 31 + "1"
    clock = SystemClock(trust_rtc=True, boot_id=boot_id)
    journal = Journal(JournalSettings(folder / "journal.db", TOPICS), clock)
    began = clock.now().utc - 60.0 * count
    bodies: list[str] = []
    for minute in range(count // len(SENSORS)):
        start, boot_s = began + 60.0 * minute, 60.0 * minute
        rows = []
        for sensor in SENSORS:
            body = body_of(sensor, minute + 1, start, boot_id)
            rows.append(NewReading(sensor, minute + 1, boot_id, boot_s, start, 60.0, "synced", 2, body))
            bodies.append(body)
        journal.commit(Batch(rows), clock.now())
    journal.close()
    return bodies


@contextmanager
def counting(mosquitto: Mosquitto, expected: int) -> Iterator[None]:
    """A subscriber for the time of a run; afterwards waits until it has heard every (sensor, seq), else fails."""
    with mosquitto.subscriber("motekeep/#") as heard:
        yield
        deadline = time.monotonic() + PATIENCE_S
        distinct: set[tuple[str, int]] = set()
        while len(distinct) < expected:
            if time.monotonic() > deadline:
                raise SystemExit(f"the subscriber heard only {len(distinct)} of {expected} readings")
            time.sleep(0.2)
            distinct = {
                (reading["sensor"], reading["seq"])
                for topic, _, payload in heard.raw()
                if "/late/" in topic
                for document in [json.loads(payload)]
                for reading in document.get("readings", [document])
            }


def drain(mosquitto: Mosquitto, filled: Path, count: int, clock: SystemClock) -> Run:
    with tempfile.TemporaryDirectory(dir=filled.parent) as folder:
        shutil.copytree(filled, folder, dirs_exist_ok=True)
        journal = Journal(JournalSettings(Path(folder) / "journal.db", TOPICS), clock)
        stop = Event()
        settings = BrokerSettings(
            "127.0.0.1", mosquitto.port, "motekeep-quarry-east-gate", (TOPICS.health, "{}"), down_filters(TOPICS)
        )
        publisher = Publisher(
            PublisherSettings(RowSettings(60.0, late_rate=0.0)),
            TOPICS,
            SENSORS,
            journal=journal.reader(),
            broker=MqttBroker(settings, clock),
            clock=clock,
            stop=stop,
            farewell=lambda _: "{}",
        )
        thread = Thread(target=publisher.run)
        with counting(mosquitto, count):
            began = time.perf_counter()
            thread.start()
            while journal.pending_marks() < count:
                if time.perf_counter() - began > PATIENCE_S:
                    raise SystemExit(f"only {journal.pending_marks()} of {count} readings were delivered")
                time.sleep(0.005)
            seconds = time.perf_counter() - began
            stop.set()
            publisher.wake()
            thread.join()
        journal.close()
    return Run(seconds, count, count / seconds)


def one_a_line(mosquitto: Mosquitto, lines: Path, count: int) -> Run:
    command = mosquitto.client("mosquitto_pub", "-l", "-q", "1", "-t", TOPICS.late("line"))
    with counting(mosquitto, count), lines.open("rb") as source:
        began = time.perf_counter()
        subprocess.run(command, stdin=source, check=True)
        seconds = time.perf_counter() - began
    return Run(seconds, count, count / seconds)


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--readings", type=int, default=10_000)
    parser.add_argument("--runs", type=int, default=9)
    arguments = parser.parse_args()
    structlog.configure(wrapper_class=structlog.make_filtering_bound_logger(logging.ERROR))
    count = arguments.readings // len(SENSORS) * len(SENSORS)
    clock = SystemClock(trust_rtc=True)
    ours, theirs = [], []
    with tempfile.TemporaryDirectory() as work:
        filled, lines = Path(work) / "filled", Path(work) / "lines"
        filled.mkdir()
        bodies = fill(filled, count)
        lines.write_text("\n".join(bodies) + "\n")
        print(f"{count} readings of {sum(map(len, bodies)) // count} bytes, {len(SENSORS)} sensors")
        mosquitto = Mosquitto(Path(work))
        with running(mosquitto):
            for n in range(arguments.runs):
                theirs.append(one_a_line(mosquitto, lines, count))
                ours.append(drain(mosquitto, filled, count, clock))
                print(f"run {n + 1}: mosquitto_pub {theirs[-1].rate:9,.0f}/s   motekeep {ours[-1].rate:9,.0f}/s")
    theirs_median, ours_median = (statistics.median(run.rate for run in runs) for runs in (theirs, ours))
    ratio = ours_median / theirs_median
    print(f"median: mosquitto_pub {theirs_median:9,.0f}/s   motekeep {ours_median:9,.0f}/s   ratio {ratio:.2f}")
    print(f"bar {BAR:.1f}: {'held' if ratio >= BAR else 'MISSED'}")
    return 0 if ratio >= BAR else 1


if __name__ == "__main__":
    sys.exit(main())
