"""A small TCP proxy between a client and a broker that can misbehave: delay, stall, swallow PUBACKs, cut, refuse.

One thread a direction and connection, no root needed. All faults can be changed while connections are open.
"""

import socket
import threading
import time
from collections.abc import Iterator
from contextlib import contextmanager, suppress

PUBACK = 4
POLL_S = 0.02


class Proxy:
    """Listens on `port`. `latency_s` is added each way; `stalled` passes nothing on and closes nothing; with
    `swallow_pubacks` the broker's PUBACKs vanish; while `refusing` every new connection is closed at once."""

    def __init__(self, target_port: int) -> None:
        self.latency_s = 0.0
        self.stalled = False
        self.swallow_pubacks = False
        self.refusing = False
        self.connections = 0
        self.swallowed = 0
        self._target_port = target_port
        self._listener = socket.create_server(("127.0.0.1", 0))
        self.port = int(self._listener.getsockname()[1])
        self._open: list[socket.socket] = []
        self._closed = threading.Event()
        self._lock = threading.Lock()
        threading.Thread(target=self._accept, daemon=True).start()

    def cut(self) -> None:
        """Close all connections that are open now."""
        with self._lock:
            open_, self._open = self._open, []
        for end in open_:
            with suppress(OSError):
                end.shutdown(socket.SHUT_RDWR)
            end.close()

    def close(self) -> None:
        self._closed.set()
        with suppress(OSError):
            self._listener.shutdown(socket.SHUT_RDWR)
        self._listener.close()
        self.cut()

    def _accept(self) -> None:
        while not self._closed.is_set():
            try:
                client, _ = self._listener.accept()
            except OSError:
                return
            self.connections += 1
            if self.refusing:
                client.close()
                continue
            try:
                broker = socket.create_connection(("127.0.0.1", self._target_port), timeout=5.0)
            except OSError:
                client.close()
                continue
            broker.settimeout(None)
            with self._lock:
                self._open += [client, broker]
            threading.Thread(target=self._pass_on, args=(client, broker, False), daemon=True).start()
            threading.Thread(target=self._pass_on, args=(broker, client, True), daemon=True).start()

    def _pass_on(self, source: socket.socket, sink: socket.socket, down: bool) -> None:
        filter_ = _PacketFilter(self) if down else None
        try:
            while data := source.recv(65536):
                if self.latency_s:
                    time.sleep(self.latency_s)
                while self.stalled:
                    if self._closed.wait(POLL_S):
                        return
                sink.sendall(filter_.feed(data) if filter_ is not None else data)
        except OSError:
            pass
        finally:
            for end in (source, sink):
                with suppress(OSError):
                    end.shutdown(socket.SHUT_RDWR)


class _PacketFilter:
    """Cuts the broker's bytes into MQTT packets (MQTT 5 section 2.1) and leaves out PUBACKs while it shall."""

    def __init__(self, proxy: Proxy) -> None:
        self._proxy = proxy
        self._held = b""

    def feed(self, data: bytes) -> bytes:
        self._held += data
        passed = b""
        while (size := _packet_size(self._held)) is not None and len(self._held) >= size:
            packet, self._held = self._held[:size], self._held[size:]
            if self._proxy.swallow_pubacks and packet[0] >> 4 == PUBACK:
                self._proxy.swallowed += 1
            else:
                passed += packet
        return passed


def _packet_size(data: bytes) -> int | None:
    """Bytes of the packet that `data` begins with; None while its length is not whole."""
    length = 0
    for index, byte in enumerate(data[1:5]):
        length |= (byte & 0x7F) << (7 * index)
        if byte < 0x80:
            return 2 + index + length
    return None


@contextmanager
def proxied(target_port: int) -> Iterator[Proxy]:
    proxy = Proxy(target_port)
    try:
        yield proxy
    finally:
        proxy.close()
