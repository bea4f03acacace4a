"""The real daemon on a clock that runs faster: an hour of its life in a minute or two.

Only what touches time is replaced, from outside: the clock, how long a serial burst takes, and how long the publisher
waits for its broker. The faster clock is derived from this machine's boot time, so that it goes on rising when the
process is killed and started again, and so that a test can stamp what it sees on the same clock.

    python tests/fast_daemon.py --config FILE --speed N [--nursery]

With `--nursery` it reads orders, one a line: `start LOG` makes a daemon by fork and answers with its process id,
`kill` and `stop` send it SIGKILL or SIGTERM and answer with how it ended (`subprocess.Popen.returncode`). Daemons made
so share nothing but the imported modules; without the imports, which take most of a second, one can die fifty times in
an hour of such a clock.
"""

import argparse
import functools
import os
import signal
import sys
import time
from pathlib import Path
from threading import Event

from motekeep import app
from motekeep.config import load
from motekeep.edges.broker import MqttBroker
from motekeep.edges.clock import read_boot_id
from motekeep.edges.ports import BrokerEvent
from motekeep.edges.serial_line import SerialLine
from motekeep.instant import Instant

EPOCH = 1_796_083_200.0  # the wall clock of the emulated site at boot; some full hour


class FastClock:
    """Meets the `Clock` port: `speed` seconds pass in each real one, and waits are that much shorter."""

    def __init__(self, speed: float) -> None:
        self._speed = speed
        self._boot_id = read_boot_id()

    def now(self) -> Instant:
        boot_s = self._speed * time.clock_gettime(time.CLOCK_BOOTTIME)
        return Instant(EPOCH + boot_s, boot_s, self._boot_id, trusted=True)

    def wait(self, event: Event, seconds: float) -> bool:
        return event.wait(max(seconds, 0.0) / self._speed)


def fast_line(port: str, baud: int, longest: int, *, speed: float) -> SerialLine:
    """As `open_line`, on a line that is `speed` times as fast."""

    class FastLine(SerialLine):
        def read(self, timeout_s: float) -> bytes:
            return super().read(timeout_s / speed)

    return FastLine(port, baud, (longest * 10 / baud + 0.012) / speed)


def fast_broker(speed: float) -> type[MqttBroker]:
    class FastBroker(MqttBroker):
        def event(self, timeout_s: float) -> BrokerEvent | None:
            return super().event(timeout_s / speed)

    return FastBroker


def run(config: Path, speed: float) -> int:
    """Until SIGTERM, as `motekeep run` does; the exit code."""
    app._set_up_logging("json")
    # the composition root names its edges; there is no other way to give it faster ones
    vars(app).update(open_line=functools.partial(fast_line, speed=speed), MqttBroker=fast_broker(speed))
    stop = Event()
    signal.signal(signal.SIGTERM, lambda *_: stop.set())
    return app.Daemon(load(config), FastClock(speed), stop, lambda: None).run()


def nursery(config: Path, speed: float) -> int:
    """Obey until the orders end. A daemon is never left behind."""
    child = 0
    try:
        for order in sys.stdin:
            verb, _, log = order.strip().partition(" ")
            if verb == "start":
                child = os.fork()
                if child == 0:
                    _settle(log)
                    os._exit(run(config, speed))
                print(child, flush=True)
            else:
                os.kill(child, signal.SIGKILL if verb == "kill" else signal.SIGTERM)
                print(os.waitstatus_to_exitcode(os.waitpid(child, 0)[1]), flush=True)
                child = 0
    finally:
        if child:
            os.kill(child, signal.SIGKILL)
    return 0


def _settle(log: str) -> None:
    """In the child: orders are not for it, and what it says goes into its log."""
    nothing = os.open(os.devnull, os.O_RDONLY)
    out = os.open(log, os.O_WRONLY | os.O_CREAT | os.O_APPEND, 0o644)
    for descriptor, stands_for in ((nothing, 0), (out, 1), (out, 2)):
        os.dup2(descriptor, stands_for)


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--config", type=Path, required=True)
    parser.add_argument("--speed", type=float, required=True)
    parser.add_argument("--nursery", action="store_true")
    arguments = parser.parse_args()
    return (nursery if arguments.nursery else run)(arguments.config, arguments.speed)


if __name__ == "__main__":
    raise SystemExit(main())
