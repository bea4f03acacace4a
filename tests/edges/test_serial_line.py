"""The serial line against real pseudo-terminals and sockets: bursts whole, a lost line named, a held port told."""

import os
import pty
import socket
import threading
from collections.abc import Iterator
from pathlib import Path

import pytest

from motekeep.edges.serial_line import SerialLine, open_line
from motekeep.errors import PortError

BURST = bytes(range(32))


class Plug:
    """The far end of a pseudo-terminal under a stable name, as an adapter has it."""

    def __init__(self, link: Path) -> None:
        self._link = link
        self.plug()

    def plug(self) -> None:
        self.master, slave = pty.openpty()
        self._link.symlink_to(os.ttyname(slave))
        os.close(slave)

    def unplug(self) -> None:
        os.close(self.master)
        self._link.unlink()


@pytest.fixture
def plug(tmp_path: Path) -> Plug:
    return Plug(tmp_path / "adapter")


@pytest.fixture
def line(plug: Plug, tmp_path: Path) -> Iterator[SerialLine]:
    opened = open_line(str(tmp_path / "adapter"), 9600, 40)
    yield opened
    opened.close()


def test_a_burst_comes_whole_and_silence_is_empty(plug: Plug, line: SerialLine) -> None:
    os.write(plug.master, BURST)
    assert line.read(5.0) == BURST
    assert line.read(0.01) == b""


def test_no_byte_is_changed_or_echoed(plug: Plug, line: SerialLine) -> None:
    every = bytes(range(256))
    os.write(plug.master, every)
    heard = b""
    while len(heard) < 256:
        heard += line.read(5.0)
    assert heard == every
    line.write(b"\x11\x13\r\n\x04")
    assert os.read(plug.master, 100) == b"\x11\x13\r\n\x04"


def test_a_flood_is_taken_in_bounded_reads(plug: Plug, line: SerialLine) -> None:
    writer = threading.Thread(target=lambda: [os.write(plug.master, bytes(1000)) for _ in range(20)], daemon=True)
    writer.start()
    sizes = []
    while sum(sizes) < 20_000:
        sizes.append(len(line.read(5.0)))
    assert max(sizes) <= 2 * 4096


def test_an_unplugged_adapter_is_one_named_error(plug: Plug, line: SerialLine) -> None:
    plug.unplug()
    with pytest.raises(PortError, match="the line was lost"):
        line.read(0.5)


def test_it_can_be_opened_again_after_a_replug(plug: Plug, line: SerialLine, tmp_path: Path) -> None:
    plug.unplug()
    with pytest.raises(PortError, match="no such device"):
        open_line(str(tmp_path / "adapter"), 9600, 40)
    plug.plug()
    again = open_line(str(tmp_path / "adapter"), 9600, 40)
    os.write(plug.master, BURST)
    assert again.read(5.0) == BURST
    again.close()


def test_a_held_port_names_its_holder(line: SerialLine, tmp_path: Path) -> None:
    with pytest.raises(PortError, match=f"process itself|{os.getpid()}"):
        open_line(str(tmp_path / "adapter"), 9600, 40)


def test_nonsense_is_told_as_what_to_write_instead() -> None:
    with pytest.raises(PortError, match="socket://host:port"):
        open_line("magic://x", 9600, 40)


def test_a_serial_server_over_tcp_works_and_its_end_is_named() -> None:
    with socket.create_server(("127.0.0.1", 0)) as server:
        port = server.getsockname()[1]
        line = open_line(f"socket://127.0.0.1:{port}", 9600, 40)
        client, _ = server.accept()
        client.sendall(BURST)
        heard = b""
        while len(heard) < len(BURST):
            heard += line.read(5.0)
        assert heard == BURST
        line.write(b"ask")
        assert client.recv(10) == b"ask"
        client.close()
        with pytest.raises(PortError, match="the line was lost"):
            line.read(5.0)
        line.close()
    with pytest.raises(PortError, match="serial server is up"):
        open_line(f"socket://127.0.0.1:{port}", 9600, 40)


@pytest.mark.filterwarnings("ignore::DeprecationWarning:serial.rfc2217")
def test_a_serial_server_with_rfc2217_works() -> None:
    import serial  # noqa: PLC0415 (only this test plays a server of that protocol)
    import serial.rfc2217  # noqa: PLC0415

    with socket.create_server(("127.0.0.1", 0)) as server:
        port = server.getsockname()[1]
        device = serial.serial_for_url("loop://", timeout=0.1)

        def serve() -> None:
            client, _ = server.accept()
            client.settimeout(10.0)
            far = type("Far", (), {"write": lambda _, data: client.sendall(data)})
            manager = serial.rfc2217.PortManager(device, far())
            try:
                while data := client.recv(1024):
                    device.write(b"".join(manager.filter(data)))
                    if back := device.read(device.in_waiting):
                        client.sendall(b"".join(manager.escape(back)))
            except OSError:
                return

        thread = threading.Thread(target=serve, daemon=True)
        thread.start()
        line = open_line(f"rfc2217://127.0.0.1:{port}", 9600, 40)
        line.write(BURST)  # the device at the far end sends back what it gets
        heard = b""
        while len(heard) < len(BURST):
            heard += line.read(5.0)
        assert heard == BURST
        line.close()
