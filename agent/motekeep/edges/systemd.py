"""What the service manager and the daemon say to each other: readiness, status, watchdog, credentials.

Owns the notify socket (sd_notify(3)) and the credential folder (systemd.exec(5), CREDENTIALS). Knows nothing of what
is worth telling; started by hand, without a service manager, everything here quietly does nothing.
"""

import contextlib
import os
import socket
from collections.abc import Mapping
from pathlib import Path

import structlog

log = structlog.get_logger()

# The socket's buffer is full when the manager hangs; measuring does not wait for it longer than this.
SEND_TIMEOUT_S = 0.5
# A status is one line for people; the whole message must fit the manager's receive buffer of 4096 bytes.
STATUS_CHARACTERS = 500
# A password or a PEM key; more is a mistaken path, and the device should not read it all into memory.
CREDENTIAL_BYTES = 64 * 1024
# As the unit has them; a test holds the two together.
UNIT_CREDENTIALS = Path("/run/credentials/motekeep.service")
LOADED_FROM = Path("/etc/motekeep")


class ServiceManager:
    """The service manager that started this process, if one did.

    No method raises: a manager that cannot be told must not stop the measuring. The watchdog then bites, which is
    right.
    """

    def __init__(self, environment: Mapping[str, str] = os.environ, *, pid: int | None = None) -> None:
        self._environment = environment
        self._pid = os.getpid() if pid is None else pid
        self._address = _address(environment.get("NOTIFY_SOCKET", ""))
        self._failing = False

    @property
    def present(self) -> bool:
        """Whether there is a service manager that wants to be told."""
        return self._address is not None

    @property
    def watchdog_s(self) -> float | None:
        """How long this process may stay silent; feed it in half of that. None without a watchdog for this process."""
        try:
            microseconds = int(self._environment.get("WATCHDOG_USEC", ""))
            pid = int(self._environment.get("WATCHDOG_PID", self._pid))
        except ValueError:
            return None
        # A child inherits the variables; the watchdog is not for it.
        return microseconds / 1e6 if microseconds > 0 and pid == self._pid else None

    def ready(self, status: str = "") -> bool:
        """The daemon works: the unit counts as started. Each method says whether the manager was told."""
        return self._tell("READY=1", *_status(status))

    def status(self, text: str) -> bool:
        """One line for `systemctl status`."""
        return self._tell(*_status(text))

    def feed_watchdog(self) -> bool:
        """Every loop made progress since the last time."""
        return self._tell("WATCHDOG=1")

    def extend_timeout(self, seconds: float, status: str = "") -> bool:
        """Starting or stopping takes longer than the unit allows; from now on it may take `seconds` more. Say it
        again in time."""
        return self._tell(f"EXTEND_TIMEOUT_USEC={round(seconds * 1e6)}", *_status(status))

    def stopping(self, status: str = "") -> bool:
        return self._tell("STOPPING=1", *_status(status))

    def credential_path(self, name: str) -> Path | None:
        """Where the credential is, whether or not it holds anything; None when the unit passes no credentials."""
        folder = self._environment.get("CREDENTIALS_DIRECTORY", "")
        if not folder or name in ("", ".", "..") or "/" in name:
            return None
        return Path(folder) / name

    def credential(self, name: str) -> bytes | None:
        """The content, without the line break that editors leave at the end; None when it is absent or holds nothing,
        which is how the unit passes an optional credential that nobody has put there."""
        path = self.credential_path(name)
        if path is None:
            return None
        return read_secret(path)

    def _tell(self, *lines: str) -> bool:
        if self._address is None or not lines:
            return False
        try:
            with socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM | socket.SOCK_CLOEXEC) as outlet:
                outlet.settimeout(SEND_TIMEOUT_S)
                outlet.sendto("\n".join(lines).encode(), self._address)
        except OSError as error:
            if not self._failing:
                log.warning("systemd.notify_failed", why=str(error))
            self._failing = True
            return False
        if self._failing:
            log.info("systemd.notify_works_again")
        self._failing = False
        return True


def secret_file(path: Path, etc: Path = LOADED_FROM) -> Path:
    """Where to read a configured secret. Commands that people run stand outside of the unit: while it is stopped its
    credential folder does not exist. They, run as root, then find the file that the unit would load it from."""
    loaded_from = etc / path.name
    if path.parent == UNIT_CREDENTIALS and not path.exists() and loaded_from.exists():
        return loaded_from
    return path


def read_secret(path: Path) -> bytes | None:
    """A secret from a file; None when the file is absent, unreadable, blank or larger than `CREDENTIAL_BYTES`."""
    content = b""
    with contextlib.suppress(OSError), path.open("rb") as file:
        content = file.read(CREDENTIAL_BYTES + 1)
    if len(content) > CREDENTIAL_BYTES:
        log.warning("systemd.credential_too_large", path=str(path), limit_bytes=CREDENTIAL_BYTES)
        return None
    return content.rstrip(b"\r\n") or None


def _address(text: str) -> str | None:
    """The socket address: a path, or a name in the abstract name space, which is written with `@` for its NUL byte."""
    if text.startswith("@") and len(text) > 1:
        return "\0" + text[1:]
    if text.startswith("/"):
        return text
    if text:
        # A virtual machine's manager can be on vsock; a gateway's is not.
        log.warning("systemd.notify_address_unknown", address=text)
    return None


def _status(text: str) -> tuple[str, ...]:
    """A line break would start another variable, so a status is held to one line."""
    line = " ".join(text.split())[:STATUS_CHARACTERS]
    return (f"STATUS={line}",) if line else ()
