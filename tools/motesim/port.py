"""A pseudo-terminal that stands for a serial port: made, linked, unplugged and plugged again.

Owns the file descriptors and the link. Must not know what is said through it.
"""

import os
import select
import tty
from pathlib import Path

_READ_MOST = 4096


class Port:
    """One pseudo-terminal behind a stable link. It begins unplugged."""

    def __init__(self, link: Path) -> None:
        self.link = link
        self._master: int | None = None

    @property
    def plugged(self) -> bool:
        return self._master is not None

    def fileno(self) -> int:
        """Raises ValueError while it is unplugged."""
        if self._master is None:
            raise ValueError(f"{self.link} is unplugged")
        return self._master

    def plug(self) -> None:
        """Make the terminal and point the link at it; nothing when it is there."""
        if self._master is not None:
            return
        master, slave = os.openpty()
        tty.setraw(slave)  # no echo before the reader sets its own mode
        name = os.ttyname(slave)
        # closed again at once: from now on a hang-up tells whether anybody has it open
        os.close(slave)
        os.set_blocking(master, False)
        self._master = master
        fresh = self.link.with_name(f".{self.link.name}.new")
        fresh.unlink(missing_ok=True)
        fresh.symlink_to(name)
        fresh.replace(self.link)

    def unplug(self) -> None:
        """Take it away: a reader sees its line lost, the link is gone. Nothing when it is unplugged."""
        if self._master is None:
            return
        self.link.unlink(missing_ok=True)
        os.close(self._master)
        self._master = None

    def open_elsewhere(self) -> bool:
        """Whether a reader has it open."""
        if self._master is None:
            return False
        poll = select.poll()
        poll.register(self._master, select.POLLIN)
        return not any(event & select.POLLHUP for _, event in poll.poll(0))

    def write(self, data: bytes) -> None:
        """Send; what nobody reads, or reads too slowly, is lost, as on a wire."""
        if self._master is None or not data or not self.open_elsewhere():
            return
        try:
            os.write(self._master, data)
        except BlockingIOError:
            return
        except OSError:
            return  # the reader closed it between the look and the write

    def read(self) -> bytes:
        """What the other side sent since last time, empty without any."""
        if self._master is None:
            return b""
        try:
            return os.read(self._master, _READ_MOST)
        except OSError:
            return b""  # nothing there, or nobody at the other end
