"""The tiny side file that remembers which sequence numbers were used, for when the journal itself cannot say.

Owns `<journal>.seq`: two slots of fixed size, written in turn and in place, so that a torn write never costs both and
a full disk takes the write still (the blocks are allocated). Must not know why it is asked.

While the store is well the file is renewed only every `STRIDE` commits: it would else cost a quarter of all bytes that
wear the card. A file that says so (`exact` false) may be up to `STRIDE` numbers behind, and whoever goes on from it
alone skips that many: a hole that subscribers see, never a number used twice.
"""

import fcntl
import json
import os
import zlib
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path

STRIDE = 16
SLOT_BYTES = 8192  # about 80 bytes a sensor with a long name, 16 sensors at most
ENCODING = "ascii"


@dataclass(frozen=True, slots=True)
class Used:
    """The last number used, by sensor. `exact`: no later one was used before the next writing."""

    last: Mapping[str, int] = field(default_factory=dict)
    exact: bool = True

    def beyond(self, sensor: str) -> int:
        """The highest number that may have been used; 0 for a sensor never heard of."""
        last = self.last.get(sensor, 0)
        return last if self.exact or not last else last + STRIDE


class SequenceFile:
    """Reads and writes the side file. Both raise OSError."""

    def __init__(self, path: Path) -> None:
        self._path = path
        self._serial = 0
        self._claim: int | None = None

    def claim(self) -> bool:
        """Be the only process that writes this journal, until `release` or death; False when another one is.

        Raises OSError where the file can neither be opened nor made.
        """
        if self._claim is None:
            try:
                descriptor = os.open(self._path, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o640)
            except OSError:
                descriptor = os.open(self._path, os.O_RDONLY | os.O_CLOEXEC)
            try:
                fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
            except BlockingIOError:
                os.close(descriptor)
                return False
            self._claim = descriptor
        return True

    def release(self) -> None:
        if self._claim is not None:
            os.close(self._claim)
            self._claim = None

    def read(self) -> Used | None:
        """The newer slot of those that are whole; None without any."""
        try:
            content = self._path.read_bytes()
        except FileNotFoundError:
            return None
        slots = [_parse(content[at : at + SLOT_BYTES]) for at in range(0, 2 * SLOT_BYTES, SLOT_BYTES)]
        newest = max((s for s in slots if s is not None), key=lambda s: s[0], default=None)
        if newest is None:
            return None
        self._serial = newest[0]
        return newest[1]

    def write(self, used: Used) -> None:
        """Durable when this returns."""
        self._serial += 1
        slot = _format(self._serial, used)
        descriptor = os.open(self._path, os.O_WRONLY | os.O_CREAT | os.O_CLOEXEC, 0o640)
        try:
            new = os.fstat(descriptor).st_size < 2 * SLOT_BYTES
            if new:
                os.pwrite(descriptor, bytes(2 * SLOT_BYTES), 0)
            os.pwrite(descriptor, slot, SLOT_BYTES * (self._serial % 2))
            os.fdatasync(descriptor)
        finally:
            os.close(descriptor)


def _format(serial: int, used: Used) -> bytes:
    text = json.dumps({"serial": serial, "exact": used.exact, "last": dict(used.last)}, separators=(",", ":"))
    slot = f"{zlib.crc32(text.encode(ENCODING)):08x} {text}\n".encode(ENCODING)
    if len(slot) > SLOT_BYTES:
        raise ValueError(f"{len(used.last)} sensors do not fit into {SLOT_BYTES} bytes")
    return slot.ljust(SLOT_BYTES, b"\0")


def _parse(slot: bytes) -> tuple[int, Used] | None:
    line, newline, _ = slot.partition(b"\n")
    digest, _, text = line.partition(b" ")
    if not newline or digest != f"{zlib.crc32(text):08x}".encode(ENCODING):
        return None
    data = json.loads(text)
    return data["serial"], Used({str(k): int(v) for k, v in data["last"].items()}, bool(data["exact"]))
