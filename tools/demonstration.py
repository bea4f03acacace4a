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

BIN = Path(sys.executable).parent
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
    bodies: dict[tuple[str, int], dict[str, object]] = field(default_factory=dict)
    statuses: list[str] = field(default_factory=list)
    findings: list[dict[str, object]] = field(default_factory=list)
    amendments: list[dict[str, object]] = field(default_factory=list)
    changed: threading.Condition = field(default_factory=threading.Condition)

    def take(self, topic: str, document: dict[str, object]) -> str:
        """Note a message; the line to show for it."""
        kind, _, sensor = topic.split("/", 3)[3].partition("/")
        with self.changed:
            line = self._note(kind, sensor, document)
            self.changed.notify_all()
        return line

    def _note(self, kind: str, sensor: str, document: dict[str, object]) -> str:
        if kind == "reading":
            return self._reading(sensor, document, "live")
        if kind == "late":
            listed = document["readings"]
            assert isinstance(listed, list)
            for one in listed:
                self._reading(sensor, one, "late")
                self.late_order.setdefault(sensor, []).append(one["seq"])
            return f"#{listed[0]['seq']} to #{listed[-1]['seq']}, {len(listed)} readings that waited"
        if kind == "health":
            self.statuses.append(str(document["status"]))
            return f"status {document['status']}"
        if kind == "finding":
            self.findings.append(document)
            return f"{document['code']} {document['event']} ({document['confidence']:.0%} sure): {document['evidence']}"
        if kind == "amend":
            self.amendments.append(document)
            return f"from {document['from']}: flag {document['flag']}, {document['reasons']}"
        return json.dumps(document)

    def _reading(self, sensor: str, document: dict[str, object], way: str) -> str:
        key = (sensor, int(str(document["seq"])))
        self.readings.setdefault(key, way)
        self.bodies[key] = document
        mass = document.get("pm2_5")
        figure = f"PM2.5 {mass['value']:5.1f} ug/m3" if isinstance(mass, dict) and mass["value"] is not None else "no figure"
        frames = document["frames"]
        return f"#{document['seq']:<3} {figure}  flag {document['flag']} {document['reasons']}  frames {frames}"


class Site:
    """The processes of the demonstration and what can be done to them."""

    def __init__(self, work: Path) -> None:
        self.work = work
        self.seen = Seen()
        self.began = time.monotonic()
        self.daemon: subprocess.Popen[bytes] | None = None
        self._running: list[subprocess.Popen[bytes]] = []
        self._config = work / "config.toml"
        self._port = _free_port()
        self._config.write_text(CONFIG.format(ports=work / "ports", port=self._port, work=work))
        (work / "mosquitto.conf").write_text(
            f"listener {self._port} 127.0.0.1\nallow_anonymous true\npersistence true\n"
            f"persistence_location {work}/\nmax_queued_messages 0\n"
        )

    def say(self, text: str) -> None:
        print(f"{time.monotonic() - self.began:5.0f} s  {text}", flush=True)

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
        subscriber = subprocess.Popen(
            ["mosquitto_sub", "-p", str(self._port), "-V", "5", "-t", "motekeep/#", "-v", "-q", "1", "-c", "-i", "watcher"]
            + ["-x", "600"],
            stdout=subprocess.PIPE,
            stderr=subprocess.DEVNULL,
        )
        self._running.append(subscriber)
        threading.Thread(target=self._read, args=(subscriber,), daemon=True).start()

    def _read(self, subscriber: subprocess.Popen[bytes]) -> None:
        assert subscriber.stdout is not None
        for line in subscriber.stdout:
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
        self.daemon = self.start(str(BIN / "motekeep"), "run", "--config", str(self._config), log="motekeep.log")

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
    say, wait = site.say, site.wait
    say("-- a broker, a subscriber, two emulated sensors on pseudo-terminals, and the daemon; a reading every 10 s")
    site.start_broker()
    site.subscribe()
    site.start_sensors()
    site.start_daemon()
    well = wait(lambda s: all(sum(way == "live" for (n, _), way in s.readings.items() if n == name) >= 2 for name in SENSORS), 40)
    checks.note(well, "readings of both sensors come live")
    checks.note(bool(site.seen.statuses), "a retained health status is there", site.seen.statuses[-1] if site.seen.statuses else "")

    say("-- the broker goes away for 20 s; the daemon goes on measuring")
    before = _highest(site.seen)
    site.stop_broker()
    time.sleep(20)
    site.start_broker()
    say("-- the broker is back: what waited comes late, oldest first")
    well = wait(lambda s: all(s.late_order.get(name) for name in SENSORS), 40)
    well = well and wait(lambda s: all(_gapless(s, name, before) for name in SENSORS), 15)
    late = sum(way == "late" for way in site.seen.readings.values())
    checks.note(well, "all readings of the outage came late, without a gap", f"{late} late")
    ordered = all(order == sorted(order) for order in site.seen.late_order.values())
    checks.note(ordered and bool(site.seen.late_order), "they came oldest first")

    say("-- a third of the frames of south is damaged on the wire")
    site.order("fault south bad-checksums 0.34")
    damaged = lambda s: [b for (n, _), b in s.bodies.items() if n == "south" and b["frames"]["bad"] > 1]  # type: ignore[index]  # noqa: E731
    well = wait(lambda s: bool(damaged(s)), 30)
    site.order("clear south bad-checksums")
    checks.note(well, "damaged frames are counted, the good ones are used", str(damaged(site.seen)[0]["frames"]) if well else "")

    say("-- the fan of north stops")
    site.order("fault north fan-stopped")
    stopped = time.monotonic()
    found = lambda s: [f for f in s.findings if f["code"] == "fan-stopped" and f["event"] == "opened"]  # noqa: E731
    well = wait(lambda s: bool(found(s)), 90)
    checks.note(well, "the stopped fan is found", f"after {time.monotonic() - stopped:.0f} s")
    if well:
        say(f"   remedy: {found(site.seen)[0]['remedy']}")
    right = well and found(site.seen)[0]["sensor"] == "north" and all(f["sensor"] == "north" for f in found(site.seen))
    checks.note(right, "it is found at the right sensor, and at no other")
    well = wait(lambda s: s.statuses[-1:] == ["failure"], 10)
    checks.note(well, "the health status says failure")
    well = wait(lambda s: any(a["sensor"] == "north" for a in s.amendments), 5)
    checks.note(well, "readings made before it was proven are amended")
    failed = lambda s: any(n == "north" and b["flag"] == 4 for (n, _), b in s.bodies.items())  # noqa: E731
    checks.note(wait(failed, 15), "readings from then on carry flag 4, fail")

    say("-- the daemon is killed (SIGKILL); the broker notices")
    assert site.daemon is not None
    site.daemon.send_signal(signal.SIGKILL)
    well = wait(lambda s: s.statuses[-1:] == ["offline"], 25)
    checks.note(well, "the health status says offline")
    gapless = all(_gapless(site.seen, name, {n: 0 for n in SENSORS}) for name in SENSORS)
    checks.note(gapless, "every number of every sensor was seen, from 1 on", f"{len(site.seen.readings)} readings")


def _highest(seen: Seen) -> dict[str, int]:
    return {name: max((seq for n, seq in seen.readings if n == name), default=0) for name in SENSORS}


def _gapless(seen: Seen, name: str, after: dict[str, int]) -> bool:
    numbers = {seq for n, seq in seen.readings if n == name and seq > after[name]}
    return bool(numbers) and numbers == set(range(after[name] + 1, max(numbers) + 1))


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
