"""The gateway itself: room on the disk, the alarm of its supply, its temperature, and who holds a serial port.

Owns reading of statvfs, of the sensor files that Linux keeps under /sys, and of /proc. Judges nothing: limits belong to
`health/`. What cannot be known is None, never a guess.
"""

import os
import re
from dataclasses import dataclass
from pathlib import Path

# Zones that measure the processor, by the kernel's names for them; others are batteries, radios, chargers.
PROCESSOR_ZONES = re.compile(r"(cpu|soc|pkg|package|core)", re.IGNORECASE)
# A zone whose driver has nothing to say reports absurd values; silicon that runs is inside of this.
PLAUSIBLE_C = (-60.0, 150.0)
# One or two programs hold a port; more only makes the message long.
HOLDERS = 3


@dataclass(frozen=True, slots=True)
class Disk:
    """Room on the file system of a path, in bytes; `free` is what an ordinary user can still write."""

    free: int
    total: int


@dataclass(frozen=True, slots=True)
class Holder:
    """A process that has a port open; `command` is the kernel's short name of it, at most 15 characters."""

    pid: int
    command: str

    def __str__(self) -> str:
        if self.pid == os.getpid():
            return "this process itself (is the port configured twice?)"
        return f"process {self.pid} ({self.command})"


class Host:
    """Reads the machine below `sys_root` and `proc_root`; other roots are for tests."""

    def __init__(self, *, sys_root: Path = Path("/sys"), proc_root: Path = Path("/proc")) -> None:
        self._sys = sys_root
        self._proc = proc_root

    def disk(self, path: Path) -> Disk | None:
        """Of the file system that `path` is on, or would be on once made."""
        for candidate in (path, *path.absolute().parents):
            try:
                state = os.statvfs(candidate)
            except (FileNotFoundError, NotADirectoryError):
                continue
            except OSError:
                return None
            return Disk(free=state.f_bavail * state.f_frsize, total=state.f_blocks * state.f_frsize)
        return None

    def supply_low(self) -> bool | None:
        """Whether a monitor reports the supply under its critical limit (`in*_lcrit_alarm` of Linux's hwmon sysfs
        interface); on boards with a 5 V monitor that is the under-voltage alarm. None without such a monitor: most
        PCs, and USB power that sags only at the sensor, are not seen."""
        alarms = [
            value
            for file in sorted((self._sys / "class/hwmon").glob("hwmon*/in*_lcrit_alarm"))
            if (value := _read_integer(file)) is not None
        ]
        return any(alarms) if alarms else None

    def temperature_c(self) -> float | None:
        """The hottest of the processor's own thermal zones, in Cel; None when it has none."""
        readings = []
        for zone in (self._sys / "class/thermal").glob("thermal_zone*"):
            kind = _read_text(zone / "type")
            millidegrees = _read_integer(zone / "temp")
            if kind is None or millidegrees is None or not PROCESSOR_ZONES.search(kind):
                continue
            if PLAUSIBLE_C[0] < millidegrees / 1000 < PLAUSIBLE_C[1]:
                readings.append(millidegrees / 1000)
        return max(readings, default=None)

    def holders(self, port: str | Path) -> list[Holder]:
        """Processes that have `port` (a device or a link to it) open, as far as this user may see: root sees all, the
        daemon under its unit only itself. An empty list therefore does not mean that nobody has."""
        device = os.path.realpath(port)
        found = []
        for process in sorted(self._proc.glob("[0-9]*"), key=lambda folder: int(folder.name)):
            if _has_open(process, device):
                found.append(Holder(int(process.name), _read_text(process / "comm") or "?"))
            if len(found) == HOLDERS:
                break
        return found

    def who_holds(self, port: str | Path) -> str:
        """For the end of an error message: `process 412 (picocom)`, or how to find out."""
        return " and ".join(map(str, self.holders(port))) or "`motekeep check` as root can see which"


def _has_open(process: Path, device: str) -> bool:
    try:
        for descriptor in (process / "fd").iterdir():
            try:
                if str(descriptor.readlink()) == device:
                    return True
            except OSError:
                continue  # closed since it was listed
    except OSError:
        pass  # the process has ended, or belongs to somebody else
    return False


def _read_text(file: Path) -> str | None:
    try:
        return file.read_text("utf-8", errors="replace").strip()
    except OSError:
        # A monitor that is asleep or has no value answers with an error (EAGAIN, ENODATA); the file goes with its
        # device.
        return None


def _read_integer(file: Path) -> int | None:
    try:
        return int(_read_text(file) or "")
    except ValueError:
        return None
