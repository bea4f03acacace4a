"""What the service manager hears: ready, alive while every loop makes progress, stopping."""

import socket
from collections.abc import Iterator
from pathlib import Path
from threading import Event

import pytest
from structlog.testing import capture_logs

from clocks import FakeClock
from motekeep.edges.systemd import ServiceManager
from motekeep.loops.supervisor import STALLED_S, TURN_S, Hand, Supervisor
from whole_site import gateway, wait_for


class NotifySocket:
    """The manager's end of sd_notify(3)."""

    def __init__(self, folder: Path) -> None:
        self.path = folder / "notify"
        self._socket = socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM)
        self._socket.bind(str(self.path))
        self._socket.setblocking(False)
        self._heard: list[str] = []

    def heard(self) -> list[str]:
        """Every line so far."""
        while True:
            try:
                self._heard += self._socket.recv(4096).decode().splitlines()
            except BlockingIOError:
                return self._heard

    def close(self) -> None:
        self._socket.close()


@pytest.fixture
def notify(tmp_path: Path) -> Iterator[NotifySocket]:
    found = NotifySocket(tmp_path)
    yield found
    found.close()


@pytest.mark.whole
def test_the_daemon_says_ready_feeds_the_watchdog_and_says_when_it_stops(tmp_path: Path, notify: NotifySocket) -> None:
    with gateway(tmp_path) as site:
        daemon = site.start_daemon(environment={"NOTIFY_SOCKET": str(notify.path), "WATCHDOG_USEC": "60000000"})
        wait_for(lambda: "READY=1" in notify.heard(), "READY=1")
        assert any(line.startswith("STATUS=1 sensors, broker 127.0.0.1:") for line in notify.heard())
        wait_for(lambda: notify.heard().count("WATCHDOG=1") >= 3, "the watchdog to be fed")
        assert daemon.terminate()[0] == 0
        heard = notify.heard()
        assert "STOPPING=1" in heard
        assert heard.index("READY=1") < heard.index("WATCHDOG=1") < heard.index("STOPPING=1")


@pytest.mark.whole
def test_waiting_for_its_configuration_counts_as_started_and_alive(tmp_path: Path, notify: NotifySocket) -> None:
    with gateway(tmp_path) as site:
        site.config.unlink()
        daemon = site.start_daemon(environment={"NOTIFY_SOCKET": str(notify.path)})
        wait_for(lambda: "WATCHDOG=1" in notify.heard(), "the watchdog to be fed")
        assert "READY=1" in notify.heard()
        assert f"STATUS=waiting for {site.config}" in notify.heard()
        assert daemon.terminate()[0] == 0


class Ticking:
    """A loop that makes progress until `hangs_at`, boot seconds of the clock, and again from `back_at` on."""

    def __init__(
        self, clock: FakeClock, stop: Event, hangs_at: float = float("inf"), back_at: float = float("inf")
    ) -> None:
        self._clock = clock
        self._stop = stop
        self._hangs_at, self._back_at = hangs_at, back_at

    @property
    def ticked(self) -> float:
        now = self._clock.now().boot_s
        return now if now < self._hangs_at or now >= self._back_at else self._hangs_at

    def run(self) -> None:
        self._stop.wait(30.0)


def fed(notify: NotifySocket, *, hangs_after_s: float, back_after_s: float, for_s: float) -> int:
    """How often a supervisor of two loops, one of which hangs, tells a real socket that all is well."""
    clock, stop, manager = FakeClock(), Event(), ServiceManager({"NOTIFY_SOCKET": str(notify.path)})
    began = clock.now().boot_s
    hung = Ticking(clock, stop, began + hangs_after_s, began + back_after_s)
    hands = [Hand("well", Ticking(clock, stop)), Hand("hung", hung)]  # type: ignore[arg-type]  # `ticked` is read only
    clock.after(for_s, stop.set)

    def alive() -> None:
        manager.feed_watchdog()
        notify.heard()  # a datagram socket holds only a few

    assert Supervisor(hands, lambda _: None, alive, clock, stop).run(lambda: None) == 0
    return notify.heard().count("WATCHDOG=1")


def test_a_loop_that_hangs_starves_the_watchdog(notify: NotifySocket) -> None:
    with capture_logs() as logs:
        times = fed(notify, hangs_after_s=100.0, back_after_s=float("inf"), for_s=1000.0)
    assert times == pytest.approx((100.0 + STALLED_S) / TURN_S, abs=2)
    stalled = [line for line in logs if line["event"] == "loop.stalled"]
    assert [line["loop"] for line in stalled] == ["hung"], "said once, and by its name"


def test_a_loop_that_goes_on_in_time_feeds_the_watchdog_again(notify: NotifySocket) -> None:
    times = fed(notify, hangs_after_s=100.0, back_after_s=300.0, for_s=1000.0)
    assert times == pytest.approx((1000.0 - (200.0 - STALLED_S)) / TURN_S, abs=3)
