"""A whole gateway on loopback: broker, subscriber, sensors on pseudo-terminals, and the daemon as a process.

Used by `tests/whole` and `tools/bench`. The air and the sensors are emulated, everything else is real. What is started
here is stopped here, by its process id, however the test ends. Any: documents are looked at as the JSON that they are.
"""

import itertools
import json
import os
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from mosquitto import HELLO, Mosquitto
from motesim.capture import capture_lines
from motesim.plan import SensorPlan, SitePlan
from motesim.port import Port

MOTEKEEP = Path(sys.executable).parent / "motekeep"
FAST_DAEMON = Path(__file__).with_name("fast_daemon.py")
ROOT = "motekeep/quarry/east-gate"
PATIENCE_S = 40.0  # a test that waits longer has failed; on a busy machine things only come later

CONFIG = """
site = "quarry"
gateway = "east-gate"
interval = {interval}
{sensors}
[broker]
host = "127.0.0.1"
port = {broker_port}
late_rate = {late_rate}

[store]
path = "{store}"
trust_rtc = true

[health]
every = {health_every}
"""
SENSOR = """
[[sensor]]
name = "{name}"
port = "{port}"
dialect = "bm"
climate = {{ from = "fixed", rh = 50.0, t = 20.0 }}
"""


def boot_s() -> float:
    return time.clock_gettime(time.CLOCK_BOOTTIME)


def wait_for(what: Callable[[], object], why: str, patience_s: float = PATIENCE_S) -> None:
    deadline = time.monotonic() + patience_s
    while not what():
        assert time.monotonic() < deadline, f"waited {patience_s:.0f} s in vain: {why}"
        time.sleep(0.02)


class Sensors:
    """Emulated `bm` sensors on pseudo-terminals, `speed` times as fast as real ones; one thread plays them all.

    They breathe one air and keep talking whether or not anybody listens, as sensors do. `hear` is told every frame.
    """

    def __init__(
        self,
        folder: Path,
        names: Sequence[str],
        *,
        speed: float = 1.0,
        seed: int = 1,
        hear: Callable[[str, bytes], None] | None = None,
    ) -> None:
        folder.mkdir(parents=True, exist_ok=True)
        self.ports = {name: Port(folder / name) for name in names}
        self._speed = speed
        self._hear = hear
        self._lock = threading.Lock()
        self._over = threading.Event()
        plans = tuple(SensorPlan(name, seed=10 * seed + index) for index, name in enumerate(names))
        self._plan = SitePlan("quarry", seed, 1_796_083_200.0, 30 * 86400.0, plans)
        self._thread = threading.Thread(target=self._play, name="sensors")

    def start(self) -> None:
        self._thread.start()

    def plug(self, name: str) -> None:
        with self._lock:
            self.ports[name].plug()

    def unplug(self, name: str) -> None:
        with self._lock:
            self.ports[name].unplug()

    def stop(self) -> None:
        self._over.set()
        if self._thread.is_alive():
            self._thread.join(10.0)
        for name in self.ports:
            self.unplug(name)

    def _play(self) -> None:
        began, first = time.monotonic(), None
        for line in capture_lines(self._plan):
            at, name, kind, said = line.split(" ", 3)
            if kind != "frame":
                continue
            first = float(at) if first is None else first
            due_s = began + (float(at) - first) / self._speed
            if self._over.wait(max(due_s - time.monotonic(), 0.0)):
                return
            data = bytes.fromhex(said)
            with self._lock:
                self.ports[name].write(data)
            if self._hear is not None:
                self._hear(name, data)


@dataclass(frozen=True, slots=True)
class Heard:
    """One message at the subscriber; `boot_s` is when its line came."""

    boot_s: float
    topic: str
    retained: bool
    text: str

    @property
    def document(self) -> dict[str, Any]:
        found: dict[str, Any] = json.loads(self.text)
        return found


class Subscriber:
    """A mosquitto_sub with a session that outlives its connections, so that it misses nothing while it is away."""

    def __init__(self, mosquitto: Mosquitto, topic: str = f"{ROOT}/#") -> None:
        self.heard: list[Heard] = []
        self._changed = threading.Condition()
        command = mosquitto.client("mosquitto_sub", "-c", "-i", "watcher", "-x", "3600", "-q", "1", "-t", topic)
        command += ["-t", HELLO, "-F", "%r %t %p"]
        self._process = subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.DEVNULL)
        self._thread = threading.Thread(target=self._read, name="subscriber")
        self._thread.start()
        try:
            # a subscription is in force once something is heard
            for _ in range(200):
                mosquitto.publish(HELLO, "")
                if self.wait(bool, 0.1):
                    return
            raise AssertionError("mosquitto_sub hears nothing")
        except BaseException:
            self.stop()
            raise

    def wait(self, what: Callable[[list[Heard]], object], seconds: float = PATIENCE_S) -> bool:
        """Until `what` is true of all that was heard, at most so long; whether it was."""
        with self._changed:
            return bool(self._changed.wait_for(lambda: what(self.heard), timeout=seconds))

    def on(self, level: str) -> list[Heard]:
        """What was heard on one topic below the gateway."""
        return [heard for heard in list(self.heard) if heard.topic == f"{ROOT}/{level}"]

    def wait_on(
        self, level: str, what: Callable[[dict[str, Any]], object], seconds: float = PATIENCE_S
    ) -> dict[str, Any]:
        """The first document on this topic of which `what` is true."""

        def found() -> dict[str, Any] | None:
            return next((h.document for h in self.on(level) if what(h.document)), None)

        assert self.wait(lambda _: found() is not None, seconds), f"waited {seconds:.0f} s in vain on {level}"
        document = found()
        assert document is not None
        return document

    def stop(self) -> None:
        self._process.terminate()
        self._process.wait(10.0)
        self._thread.join(10.0)

    def _read(self) -> None:
        assert self._process.stdout is not None
        for line in self._process.stdout:
            retained, topic, text = line.decode().rstrip("\n").split(" ", 2)
            with self._changed:
                self.heard.append(Heard(boot_s(), topic, retained == "1", text))
                self._changed.notify_all()


class DaemonProcess:
    """`motekeep run`, or the same daemon on a faster clock, with its log."""

    def __init__(self, program: Sequence[str], config: Path, log: Path, environment: Mapping[str, str]) -> None:
        self.log = log
        with log.open("ab") as out:
            self.process = subprocess.Popen(
                [*program, "--config", str(config)], stdout=out, stderr=out, env={**os.environ, **environment}
            )

    def events(self, name: str) -> list[dict[str, object]]:
        """The log lines of one event; a line that is still being written is left out."""
        whole, _, _ = self.log.read_text(errors="replace").rpartition("\n")
        lines = [json.loads(line) for line in whole.splitlines() if line.startswith("{")]
        return [line for line in lines if line.get("event") == name]

    def wait_event(self, name: str, what: Callable[[dict[str, object]], object] = bool) -> dict[str, object]:
        wait_for(lambda: any(what(line) for line in self.events(name)), f"{name} in {self.log}")
        return next(line for line in self.events(name) if what(line))

    @property
    def running(self) -> bool:
        return self.process.poll() is None

    def terminate(self, patience_s: float = PATIENCE_S) -> tuple[int, float]:
        """SIGTERM; the exit code and how many seconds it took."""
        began = time.monotonic()
        self.process.send_signal(signal.SIGTERM)
        code = self.process.wait(patience_s)
        return code, time.monotonic() - began

    def kill(self) -> None:
        """SIGKILL: nothing of the process runs any more."""
        self.process.kill()
        self.process.wait(PATIENCE_S)


class Gateway:
    """Broker, sensors and daemon of one test, in one folder. Made by `gateway`, which stops it all."""

    def __init__(self, folder: Path, stack: ExitStack, names: Sequence[str], speed: float | None) -> None:
        self.folder = folder
        self.names = tuple(names)
        self.store = folder / "store" / "journal.db"
        self.config = folder / "config.toml"
        self.speed = speed
        self._stack = stack
        self._logs = itertools.count(1)
        # the session of the subscriber must outlive a broker that is stopped
        self.mosquitto = Mosquitto(folder, ["persistence true", f"persistence_location {folder}/"])
        stack.callback(self.mosquitto.stop)
        self.sensors = Sensors(folder / "ports", names, speed=speed or 1.0)
        stack.callback(self.sensors.stop)

    def write_config(
        self,
        *,
        interval: int = 10,
        broker_port: int | None = None,
        late_rate: float = 5.0,
        health_every: float = 5.0,
    ) -> None:
        ports = self.sensors.ports
        self.config.write_text(
            CONFIG.format(
                interval=interval,
                sensors="".join(SENSOR.format(name=name, port=ports[name].link) for name in self.names),
                broker_port=self.mosquitto.port if broker_port is None else broker_port,
                late_rate=late_rate,
                store=self.store,
                health_every=health_every,
            )
        )

    def start_daemon(self, *, command: Path = MOTEKEEP, environment: Mapping[str, str] | None = None) -> DaemonProcess:
        log = self.folder / f"motekeep-{next(self._logs)}.log"
        program = [str(command), "run"]
        if self.speed is not None:
            program = [sys.executable, str(FAST_DAEMON), "--speed", str(self.speed)]
        daemon = DaemonProcess(program, self.config, log, environment or {})
        self._stack.callback(daemon.kill)
        return daemon

    def subscribe(self) -> Subscriber:
        subscriber = Subscriber(self.mosquitto)
        self._stack.callback(subscriber.stop)
        return subscriber


@contextmanager
def gateway(
    folder: Path,
    names: Sequence[str] = ("north",),
    *,
    broker: bool = True,
    plugged: bool = True,
    speed: float | None = None,
) -> Iterator[Gateway]:
    """All of it, in a folder of its own: configured, the broker running, the sensors talking; no daemon yet.

    With `speed` the daemon lives on a clock that runs so many times faster (`fast_daemon`), and so do the sensors.
    """
    with ExitStack() as stack:
        site = Gateway(folder, stack, names, speed)
        site.store.parent.mkdir()
        site.write_config()
        if broker:
            site.mosquitto.start()
        if plugged:
            for name in names:
                site.sensors.plug(name)
        site.sensors.start()
        yield site


def readings(heard: Sequence[Heard]) -> Iterator[tuple[Heard, dict[str, Any]]]:
    """Every reading among them, live and late, in the order in which they came."""
    for one in heard:
        kind = one.topic.removeprefix(f"{ROOT}/").partition("/")[0]
        if kind == "reading":
            yield one, one.document
        elif kind == "late":
            for document in one.document["readings"]:
                yield one, document
