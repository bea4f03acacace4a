"""A whole gateway that has signers: documents and keys for it, offers at its broker, and what it answers.

Beside `whole_site.py`, for the tests and benchmarks of calibration. Any: states are looked at as the JSON they are.
"""

import json
import subprocess
import threading
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

from keys import Key, make_key
from motekeep.measure.document import digest
from whole_site import ROOT, DaemonProcess, Gateway, Subscriber

TEXT = """
issue = {issue}
site = "quarry"
gateway = "{gateway}"
sensor = "north"
made_at = 2026-11-20T10:00:00Z
valid_from = 2021-01-01T00:00:00Z
valid_until = 2150-01-01T00:00:00Z
[range]
pm2_5 = [0.0, 500.0]
[[step]]
kind = "linear"
slope = {{ value = {slope}, u = 0.02 }}
offset = {{ value = 0.0, u = 0.1 }}
[residual]
pm2_5 = {{ u = 0.5 }}
"""
CALIBRATION = """
[calibration]
folder = "{folder}"
signers = "{signers}"
soak = {soak}
"""


# Within the length of a line, so that its depth is what is refused.
NESTED = b"a = " + (b"[" * 100 + b"\n") * 30 + (b"]" * 100 + b"\n") * 30


def document(issue: int, slope: float = 0.8, gateway: str = "east-gate") -> bytes:
    return TEXT.format(issue=issue, slope=slope, gateway=gateway).encode()


class Calibrated:
    """Adds signers to a gateway's configuration; `anna` is trusted, `carl` is expired, `mallory` unknown."""

    def __init__(self, site: Gateway, *, soak_s: int = 100) -> None:
        self.site = site
        self.folder = site.folder / "calibration"
        self.signers = site.folder / "signers"
        self.anna, self.carl, self.mallory = (make_key(site.folder / "keys", n) for n in ("anna", "carl", "mallory"))
        self.signers.write_text(self.anna.line() + self.carl.line('valid-before="20260101"'))
        text = CALIBRATION.format(folder=self.folder, signers=self.signers, soak=soak_s)
        site.config.write_text(site.config.read_text() + text)

    @property
    def front(self) -> bytes | None:
        path = self.folder / "north.toml"
        return path.read_bytes() if path.exists() else None

    def payload(self, text: bytes, signature: bytes) -> bytes:
        return json.dumps({"document": text.decode(), "signature": signature.decode()}).encode()

    def offer(self, payload: bytes, *, retain: bool = True, qos: int = 1) -> None:
        """With `qos` 0 and not retained the broker forgets it at once; with 1 it waits for a session that is away."""
        beside = self.site.folder / "payload"
        beside.write_bytes(payload)
        retained = ["-r"] if retain else []
        words = ["-q", str(qos), *retained, "-t", f"{ROOT}/calibration/north/offer", "-f", str(beside)]
        subprocess.run(self.site.mosquitto.client("mosquitto_pub", *words), check=True, timeout=20.0)

    def signed(self, text: bytes, key: Key | None = None) -> bytes:
        return self.payload(text, (key or self.anna).sign(text))


def state_when(subscriber: Subscriber, what: Callable[[dict[str, Any]], object]) -> dict[str, Any]:
    return subscriber.wait_on("calibration/north/state", what)


def accepted(subscriber: Subscriber, text: bytes) -> dict[str, Any]:
    wanted = digest(text)
    return state_when(subscriber, lambda s: s["in_force"] is not None and s["in_force"]["digest"] == wanted)


def rss_kb(daemon: DaemonProcess) -> int:
    for line in Path(f"/proc/{daemon.process.pid}/status").read_text().splitlines():
        if line.startswith("VmRSS:"):
            return int(line.split()[1])
    raise AssertionError("no such process")


class Flood:
    """Offers at so many a second, each another one, from a client of its own; `size` is that of the document."""

    def __init__(self, site: Calibrated, a_second: float, size: int = 2000) -> None:
        words = ["-q", "0", "-l", "-t", f"{ROOT}/calibration/north/offer"]
        self._process = subprocess.Popen(
            site.site.mosquitto.client("mosquitto_pub", *words), stdin=subprocess.PIPE, stderr=subprocess.DEVNULL
        )
        self._site, self._pause_s, self._size = site, 1.0 / a_second, size
        self._over = threading.Event()
        self.sent = 0
        self._thread = threading.Thread(target=self._play, name="flood")

    def __enter__(self) -> "Flood":
        self._thread.start()
        return self

    def __exit__(self, *_: object) -> None:
        self._over.set()
        self._thread.join(10.0)
        self._process.terminate()
        self._process.wait(10.0)

    def _play(self) -> None:
        """A sound signature over other bytes: each costs the device its dearest refusal."""
        assert self._process.stdin is not None
        text = document(1000)
        signature = self._site.anna.sign(text)
        began = time.monotonic()
        while not self._over.is_set():
            filler = b"# " + b"%d\n" % self.sent + b"#" * 60 + b"\n"
            other = text + filler * max(1, (self._size - len(text)) // len(filler))
            self._process.stdin.write(self._site.payload(other, signature) + b"\n")
            self._process.stdin.flush()
            self.sent += 1
            self._over.wait(max(began + self.sent * self._pause_s - time.monotonic(), 0.0))
