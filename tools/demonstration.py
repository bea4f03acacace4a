"""What `tools/demo` shows: a site of two sensors through trouble and back, as a subscriber sees it.

Owns the story and the checks. Everything in it is real but the air and the sensors: mosquitto, pseudo-terminals, the
daemon as a process of its own, SIGKILL. Started by `tools/demo`, which finds the broker.
"""

import json
import shutil
import signal
import socket
import subprocess
import sys
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import IO, Any

BIN = Path(sys.executable).parent
Message = dict[str, Any]  # Any: JSON as a subscriber gets it
LIMIT_S = 175.0  # it ends by itself in under three minutes, whatever happens
SENSORS = ("north", "south")

CONFIG = """
site = "quarry"
gateway = "east-gate"
interval = 10

[[sensor]]
name = "north"
port = "{ports}/north"
dialect = "bm"
twin = "south"
climate = {{ from = "frame" }}

[[sensor]]
name = "south"
port = "{ports}/south"
dialect = "bm"
climate = {{ from = "frame" }}

[broker]
host = "127.0.0.1"
port = {port}

[store]
path = "{work}/journal.db"
trust_rtc = true

[health]
every = 15
"""


@dataclass
class Seen:
    """Everything that the subscriber saw, by topic level; guarded by its own lock."""

    readings: dict[tuple[str, int], str] = field(default_factory=dict)  # (sensor, seq) to the way it came
    late_order: dict[str, list[int]] = field(default_factory=dict)
    bodies: dict[tuple[str, int], Message] = field(default_factory=dict)
    statuses: list[str] = field(default_factory=list)
    findings: list[Message] = field(default_factory=list)
    amendments: list[Message] = field(default_factory=list)
    changed: threading.Condition = field(default_factory=threading.Condition)

    def take(self, topic: str, document: Message) -> str:
        """Note a message; the line to show for it."""
        kind, _, sensor = topic.split("/", 3)[3].partition("/")
        with self.changed:
            line = self._note(kind, sensor, document)
            self.changed.notify_all()
        return line

    def _note(self, kind: str, sensor: str, document: Message) -> str:
        if kind == "reading":
            return self._reading(sensor, document, "live")
        if kind == "late":
            listed = document["readings"]
            for one in listed:
                self._reading(sensor, one, "late")
                self.late_order.setdefault(sensor, []).append(one["seq"])
            return f"#{listed[0]['seq']} to #{listed[-1]['seq']}, {len(listed)} readings that waited"
        if kind == "health":
            self.statuses.append(document["status"])
            return f"status {document['status']}"
        if kind == "finding":
            self.findings.append(document)
            return f"{document['code']} {document['event']} ({document['confidence']:.0%} sure): {document['evidence']}"
        if kind == "amend":
            self.amendments.append(document)
            return f"from {document['from']}: flag {document['flag']}, {document['reasons']}"
        return json.dumps(document)

    def _reading(self, sensor: str, document: Message, way: str) -> str:
        key = (sensor, document["seq"])
        self.readings.setdefault(key, way)
        self.bodies[key] = document
        mass = document.get("pm2_5")
        figure = f"PM2.5 {mass['value']:5.1f} ug/m3" if mass and mass["value"] is not None else "no figure"
        frames = document["frames"]
        return f"#{document['seq']:<3} {figure}  flag {document['flag']} {document['reasons']}  frames {frames}"

    # -- questions ----------------------------------------------------------------------------------------------

    def live(self, name: str) -> int:
        return sum(way == "live" for (n, _), way in self.readings.items() if n == name)

    def highest(self) -> dict[str, int]:
        return {name: max((seq for n, seq in self.readings if n == name), default=0) for name in SENSORS}

    def gapless(self, name: str, after: int) -> bool:
        numbers = {seq for n, seq in self.readings if n == name and seq > after}
        return bool(numbers) and numbers == set(range(after + 1, max(numbers) + 1))

    def most_bad(self, name: str) -> int:
        return max((body["frames"]["bad"] for (n, _), body in self.bodies.items() if n == name), default=0)

    def stopped_fans(self) -> list[Message]:
        return [f for f in self.findings if f["code"] == "fan-stopped" and f["event"] == "opened"]


class Site:
    """The processes of the demonstration and what can be done to them."""

    def __init__(self, work: Path) -> None:
        self.work = work
        self.seen = Seen()
        self.began = time.monotonic()
        self._running: list[subprocess.Popen[bytes]] = []
        self._config = work / "config.toml"
        self._port = _free_port()
        self._config.write_text(CONFIG.format(ports=work / "ports", port=self._port, work=work))
        (work / "mosquitto.conf").write_text(
            f"listener {self._port} 127.0.0.1\nallow_anonymous true\npersistence true\n"
            f"persistence_location {work}/\nmax_queued_messages 0\n"
        )

    def say(self, text: str) -> None:
        # one write a line: the subscriber's thread says its lines as well
        sys.stdout.write(f"{time.monotonic() - self.began:5.0f} s  {text}\n")
        sys.stdout.flush()

    def wait(self, what: Callable[[Seen], bool], seconds: float) -> bool:
        """Wait until `what` is true of what was seen, at most so long."""
        limit = min(seconds, LIMIT_S - (time.monotonic() - self.began))
        with self.seen.changed:
            return self.seen.changed.wait_for(lambda: what(self.seen), timeout=max(limit, 0.0))

    def start(self, *command: str, log: str) -> subprocess.Popen[bytes]:
        with (self.work / log).open("ab") as out:
            process = subprocess.Popen(command, stdout=out, stderr=out)
        self._running.append(process)
        return process

    def start_broker(self) -> None:
        self.broker = self.start("mosquitto", "-c", str(self.work / "mosquitto.conf"), log="mosquitto.log")
        for _ in range(100):
            with socket.socket() as probe:
                if probe.connect_ex(("127.0.0.1", self._port)) == 0:
                    return
            time.sleep(0.1)
        raise SystemExit(f"mosquitto did not start; see {self.work / 'mosquitto.log'}")

    def stop_broker(self) -> None:
        self.broker.terminate()
        self.broker.wait(10)

    def subscribe(self) -> None:
        """mosquitto_sub with a session of its own, so that it sees what comes while it reconnects."""
        session = ["-c", "-i", "watcher", "-q", "1", "-x", "600"]
        command = ["mosquitto_sub", "-p", str(self._port), "-V", "5", "-t", "motekeep/#", "-v", *session]
        subscriber = subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.DEVNULL)
        self._running.append(subscriber)
        threading.Thread(target=self._read, args=(subscriber.stdout,), daemon=True).start()

    def _read(self, lines: IO[bytes]) -> None:
        for line in lines:
            topic, _, body = line.decode().strip().partition(" ")
            self.say(f"  {topic.split('/', 3)[3]:<14} {self.seen.take(topic, json.loads(body))}")

    def start_sensors(self) -> None:
        self.start(str(BIN / "motesim"), "run", "quarry-gate", "--link", str(self.work / "ports"), log="sensors.log")
        for _ in range(200):
            if all((self.work / "ports" / name).exists() for name in SENSORS):
                return
            time.sleep(0.1)
        raise SystemExit(f"the emulated sensors did not start; see {self.work / 'sensors.log'}")

    def order(self, line: str) -> None:
        """Tell the emulator what goes wrong."""
        with (self.work / "ports" / "control").open("w") as control:
            control.write(line + "\n")

    def start_daemon(self) -> None:
        self._daemon = self.start(str(BIN / "motekeep"), "run", "--config", str(self._config), log="motekeep.log")

    def kill_daemon(self) -> None:
        self._daemon.send_signal(signal.SIGKILL)

    def end(self) -> None:
        for process in reversed(self._running):
            if process.poll() is None:
                process.terminate()
        for process in self._running:
            try:
                process.wait(5)
            except subprocess.TimeoutExpired:
                process.kill()


@dataclass
class Checks:
    """What was checked, and how it went."""

    rows: list[tuple[bool, str, str]] = field(default_factory=list)

    def note(self, well: bool, what: str, figure: str = "") -> None:
        self.rows.append((well, what, figure))

    def table(self) -> str:
        lines = [f"  {'ok  ' if well else 'FAIL'}  {what:<68}  {figure}" for well, what, figure in self.rows]
        return "\n".join(lines)


def story(site: Site, checks: Checks) -> None:
    """One trouble after the other. Each waits for what it should cause, so a slow machine only takes longer."""
    for chapter in (begin, lose_broker, damage_bytes, stop_fan, kill_daemon):
        chapter(site, checks)


def begin(site: Site, checks: Checks) -> None:
    site.say(
        "-- a broker, a subscriber, two emulated sensors on pseudo-terminals, and the daemon; a reading every 10 s"
    )
    site.start_broker()
    site.subscribe()
    site.start_sensors()
    site.start_daemon()
    well = site.wait(lambda s: all(s.live(name) >= 2 for name in SENSORS), 40)
    checks.note(well, "readings of both sensors come live")
    checks.note(bool(site.seen.statuses), "a retained health status is there", " ".join(site.seen.statuses[-1:]))


def lose_broker(site: Site, checks: Checks) -> None:
    site.say("-- the broker goes away for 20 s; the daemon goes on measuring")
    before = site.seen.highest()
    site.stop_broker()
    time.sleep(20)
    site.start_broker()
    site.say("-- the broker is back: what waited comes late, oldest first")
    well = site.wait(lambda s: all(s.late_order.get(name) and s.gapless(name, before[name]) for name in SENSORS), 50)
    late = sum(way == "late" for way in site.seen.readings.values())
    checks.note(well, "all readings of the outage came, without a gap", f"{late} late")
    orders = site.seen.late_order.values()
    checks.note(bool(orders) and all(order == sorted(order) for order in orders), "they came oldest first")


def damage_bytes(site: Site, checks: Checks) -> None:
    site.say("-- a third of the frames of south is damaged on the wire")
    site.order("fault south bad-checksums 0.34")
    well = site.wait(lambda s: s.most_bad("south") > 1, 30)
    site.order("clear south bad-checksums")
    figure = f"{site.seen.most_bad('south')} bad in one reading"
    checks.note(well, "damaged frames are counted, the good ones are used", figure)


def stop_fan(site: Site, checks: Checks) -> None:
    site.say("-- the fan of north stops")
    site.order("fault north fan-stopped")
    stopped = time.monotonic()
    well = site.wait(lambda s: bool(s.stopped_fans()), 90)
    checks.note(well, "the stopped fan is found", f"after {time.monotonic() - stopped:.0f} s")
    if well:
        site.say(f"   remedy: {site.seen.stopped_fans()[0]['remedy']}")
    right = well and all(finding["sensor"] == "north" for finding in site.seen.stopped_fans())
    checks.note(right, "it is found at the right sensor, and at no other")
    checks.note(site.wait(lambda s: s.statuses[-1:] == ["failure"], 10), "the health status says failure")
    amended = site.wait(lambda s: any(a["sensor"] == "north" for a in s.amendments), 5)
    checks.note(amended, "readings made before it was proven are amended")
    failed = site.wait(lambda s: any(n == "north" and b["flag"] == 4 for (n, _), b in s.bodies.items()), 15)
    checks.note(failed, "readings from then on carry flag 4, fail")


def kill_daemon(site: Site, checks: Checks) -> None:
    site.say("-- the daemon is killed (SIGKILL); the broker notices")
    site.kill_daemon()
    checks.note(site.wait(lambda s: s.statuses[-1:] == ["offline"], 25), "the health status says offline")
    gapless = all(site.seen.gapless(name, 0) for name in SENSORS)
    checks.note(gapless, "every number of every sensor was seen, from 1 on", f"{len(site.seen.readings)} readings")


def _free_port() -> int:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])


@contextmanager
def playing(work: Path) -> Iterator[Site]:
    shutil.rmtree(work, ignore_errors=True)
    work.mkdir(parents=True)
    site = Site(work)
    try:
        yield site
    finally:
        site.end()


def main() -> int:
    checks = Checks()
    with playing(Path(sys.argv[1])) as site:
        story(site, checks)
        took = time.monotonic() - site.began
    print(f"\nwhat was checked ({took:.0f} s; logs in {Path(sys.argv[1])}):\n{checks.table()}")
    return 0 if checks.rows and all(well for well, _, _ in checks.rows) else 1


if __name__ == "__main__":
    sys.exit(main())
