"""The two clocks of this machine, whether the wall clock can be trusted, and the only way to wait.

Owns the reading of time, of the boot's name and of the evidence of synchronisation. Judges no year as implausible: a
board without a battery clock wakes up in a plausible past. Sets no clock and keeps no history.
"""

import ctypes
import os
import re
import threading
import time
import uuid
from collections.abc import Callable, Mapping
from enum import StrEnum
from pathlib import Path
from threading import Event

import structlog

from motekeep.instant import Instant

log = structlog.get_logger()

BOOT_ID_VARIABLE = "MOTEKEEP_BOOT_ID"
BOOT_ID_FILE = Path("/proc/sys/kernel/random/boot_id")
TIMESYNCD_FLAG = Path("/run/systemd/timesync/synchronized")

STA_UNSYNC = 0x0040
TIME_ERROR = 5

# A wait that came between the two clock reads makes a wrong offset; most reads of the pair take a microsecond.
PAIR_S = 0.001
PAIR_ATTEMPTS = 4


class Voucher(StrEnum):
    """Who says that the wall clock is right."""

    RTC = "a clock with a battery, by configuration"
    TIMESYNCD = "systemd-timesyncd"
    KERNEL = "a time service, through the kernel's clock status"


class _Timex(ctypes.Structure):
    """The head of `struct timex` (adjtimex(2)), the same on every Linux, with room for the rest of the widest one."""

    _fields_ = (
        ("modes", ctypes.c_uint),
        ("offset", ctypes.c_long),
        ("freq", ctypes.c_long),
        ("maxerror", ctypes.c_long),
        ("esterror", ctypes.c_long),
        ("status", ctypes.c_int),
        ("rest", ctypes.c_char * 256),
    )


def kernel_synchronised() -> bool | None:
    """Whether a time service told the kernel that the clock is right (adjtimex(2)); None where reading that is
    forbidden, as under `ProtectClock=yes`, or where there is no such call."""
    try:
        adjtimex = ctypes.CDLL(None, use_errno=True).adjtimex
    except (OSError, AttributeError):
        return None
    timex = _Timex()  # modes = 0 only reads
    state = adjtimex(ctypes.byref(timex))
    if state < 0:
        return None
    return bool(state != TIME_ERROR and not timex.status & STA_UNSYNC)


def normalised_boot_id(text: str) -> str | None:
    """The 32 hexadecimal digits of a boot id as systemd (without dashes) or the kernel (with) writes it; None if it
    is none."""
    digits = text.strip().replace("-", "").lower()
    return digits if re.fullmatch(r"[0-9a-f]{32}", digits) and set(digits) != {"0"} else None


def read_boot_id(environment: Mapping[str, str] = os.environ, file: Path = BOOT_ID_FILE) -> str:
    """What names this boot: the environment first, since the unit hides /proc/sys; then the kernel.

    With neither, a random one for this process. It is never wrong, only narrow: readings that an earlier process of the
    same boot made before the clock was trusted can then be bounded in time, no longer corrected.
    """
    if known := normalised_boot_id(environment.get(BOOT_ID_VARIABLE, "")):
        return known
    try:
        if known := normalised_boot_id(file.read_text("ascii")):
            return known
    except (OSError, UnicodeDecodeError):
        pass
    log.warning("clock.boot_id_unknown", mend=f"start through systemd, or set {BOOT_ID_VARIABLE}")
    return uuid.uuid4().hex


class SystemClock:
    """The `Clock` of the live daemon. Safe from any thread.

    The wall clock counts as trusted when timesyncd has set it in this boot, or the kernel says that some time service
    has, or `trust_rtc` says that the hardware clock of this gateway is good enough. `recheck_s` is the longest that
    an answer is reused: the evidence costs a system call or two, and readers ask many times a second.
    """

    def __init__(
        self,
        *,
        trust_rtc: bool = False,
        boot_id: str | None = None,
        timesyncd_flag: Path = TIMESYNCD_FLAG,
        kernel: Callable[[], bool | None] = kernel_synchronised,
        wall: Callable[[], float] = time.time,
        recheck_s: float = 5.0,
    ) -> None:
        self.boot_id = boot_id or read_boot_id()
        self._trust_rtc = trust_rtc
        self._timesyncd_flag = timesyncd_flag
        self._kernel: Callable[[], bool | None] | None = kernel
        self._wall = wall
        self._recheck_s = recheck_s
        self._checked_at: float | None = None
        self._checked_offset = 0.0
        self._voucher: Voucher | None = None

    def now(self) -> Instant:
        # The evidence is taken before the wall clock is read, never after: a time service that steps the clock in
        # between would else vouch for the wrong time that had been read already.
        voucher = self.voucher()
        utc, boot_s = self._both()
        if voucher is not None and abs(utc - boot_s - self._checked_offset) > 1.0:
            # Somebody has stepped the clock since the evidence was taken; that evidence was for another time.
            self._checked_at = None
            voucher = self.voucher()
            utc, boot_s = self._both()
        return Instant(utc=utc, boot_s=boot_s, boot_id=self.boot_id, trusted=voucher is not None)

    def wait(self, event: Event, seconds: float) -> bool:
        """`Event.wait`, which runs on the monotonic clock: steps of the wall clock neither shorten nor stretch it."""
        return event.wait(min(max(seconds, 0.0), threading.TIMEOUT_MAX))

    def voucher(self) -> Voucher | None:
        """Who vouches for the wall clock at the moment, at most `recheck_s` old; None while nobody does."""
        boot_s = _boot_s()
        if self._checked_at is None or not 0 <= boot_s - self._checked_at < self._recheck_s:
            self._voucher = self._ask()
            utc, self._checked_at = self._both()
            self._checked_offset = utc - self._checked_at
        return self._voucher

    def _ask(self) -> Voucher | None:
        if self._trust_rtc:
            return Voucher.RTC
        if self._timesyncd_flag.exists():
            return Voucher.TIMESYNCD
        if self._kernel is not None:
            synchronised = self._kernel()
            if synchronised is None:
                self._kernel = None  # a system call filter is for the life of the process
            elif synchronised:
                return Voucher.KERNEL
        return None

    def _both(self) -> tuple[float, float]:
        """Wall and boot clock of one moment, to `PAIR_S` unless the machine is too busy for that four times over."""
        for _ in range(PAIR_ATTEMPTS):
            before = _boot_s()
            utc = self._wall()
            after = _boot_s()
            if after - before < PAIR_S:
                break
        return utc, (before + after) / 2


def _boot_s() -> float:
    return time.clock_gettime(time.CLOCK_BOOTTIME)
