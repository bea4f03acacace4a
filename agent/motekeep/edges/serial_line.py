"""The serial line, through pyserial's `serial_for_url`: a device, a pseudo-terminal, `socket://` or `rfc2217://`.

Owns opening, reading in bursts and what a lost line looks like: pyserial answers an unplugged adapter with
SerialException, bare OSError, termios.error or TypeError, depending on the call; here it is always PortError.
"""

import fcntl
import os
import select
import termios
import time
from pathlib import Path
from typing import Any

import serial

from motekeep.edges.host import Host
from motekeep.errors import PortError

LOST = (OSError, TypeError, termios.error)  # serial.SerialException is an OSError
# Never one read call without an end: a line that floods must not grow a buffer. 4 KiB is over 4 s of 9600 baud.
MOST = 4096


class SerialLine:
    """One open line. `read` waits for the first byte, lets the burst finish, and takes it whole: two wake-ups a
    frame instead of one a byte."""

    def __init__(self, port: str, baud: int, burst_s: float) -> None:
        self._name = port
        self._burst_s = burst_s
        self._serial: Any = _open(port, baud)  # Any: in_waiting is not in the base class that the stubs know
        self._device: int | None = self._serial.fileno() if "://" not in port else None

    def read(self, timeout_s: float) -> bytes:
        """All that came with the next burst, at most 4096 bytes; empty when none came in `timeout_s`."""
        try:
            if self._device is not None:
                return self._read_device(self._device, timeout_s)
            if self._serial.timeout != timeout_s:  # setting it sets the whole line up anew: a tenth of a read
                self._serial.timeout = timeout_s
            first = self._serial.read(1)
            if not first:
                return b""
            time.sleep(self._burst_s)
            rest = b""
            # in_waiting is a length on a device but only 0 or 1 on socket://, so it is asked until it is 0
            while len(rest) < MOST and (waiting := self._serial.in_waiting):
                rest += self._serial.read(min(waiting, MOST))
        except LOST as error:
            raise PortError(f"reading {self._name}", f"the line was lost ({error})", "check plug and cable") from error
        return bytes(first + rest)

    def _read_device(self, device: int, timeout_s: float) -> bytes:
        """The same on the descriptor itself: 50 us of CPU a burst less than by the calls of pyserial."""
        ready, _, _ = select.select([device], [], [], timeout_s)
        if not ready:
            return b""
        time.sleep(self._burst_s)
        data = os.read(device, MOST)
        if not data:
            raise OSError("it is ready to be read and gives nothing")
        return data

    def write(self, data: bytes) -> None:
        try:
            self._serial.write(data)
        except LOST as error:
            raise PortError(f"writing {self._name}", f"the line was lost ({error})", "check plug and cable") from error

    def close(self) -> None:
        try:
            self._serial.close()
        except LOST:
            return  # it was lost already


def open_line(port: str, baud: int, longest: int) -> SerialLine:
    """Open a line for a dialect whose longest frame is `longest` bytes. Raises PortError saying what to do."""
    frame_s = longest * 10 / baud
    return SerialLine(port, baud, frame_s + 0.012)  # USB adapters hand bytes over up to 16 ms late


def _open(port: str, baud: int) -> serial.SerialBase:
    attempted = f"opening {port}"
    local = "://" not in port
    try:
        line: serial.SerialBase = serial.serial_for_url(
            port,
            baudrate=baud,
            timeout=1.0,
            write_timeout=2.0 if local else None,  # rfc2217:// has none
            exclusive=True if local else None,
        )
        if local:
            # the advisory lock stops only those who ask for it; this stops everybody but root
            fcntl.ioctl(line.fileno(), termios.TIOCEXCL)
    except LOST as error:
        raise PortError(attempted, *_told(port, error)) from error
    except ValueError as error:
        raise PortError(attempted, str(error), "name a device, socket://host:port or rfc2217://host:port") from error
    return line


def _told(port: str, error: BaseException) -> tuple[str, str]:
    number = getattr(error, "errno", None)
    text = str(error)
    if "://" in port:
        return f"no connection ({text})", "check that the serial server is up and the address is right"
    if number == 2 or (number is None and not Path(port).exists()):
        return "no such device", "plug the adapter in, or name one of /dev/serial/by-id/"
    if number in (11, 16) or "exclusively lock" in text:
        return f"another program has it open: {Host().who_holds(port)}", "end that program, or use another port"
    if number == 13:
        return "permission denied", "put the user into the group of the device (dialout)"
    if number == 1:
        return (
            "the device policy of the unit refuses it",
            "the driver was loaded after the unit: `systemctl restart motekeep`, or add DeviceAllow",
        )
    return text, "check the device"
