"""How every loop fails: back off with a cap, log at most every 30 s with a count, log once on recovery."""

from structlog.typing import FilteringBoundLogger

from motekeep.errors import MotekeepError

FIRST_S, CAP_S, LOG_EVERY_S = 1.0, 30.0, 30.0


class Backoff:
    """Failures of one thing in a row. `failed` gives the seconds to wait before the next try."""

    def __init__(self, log: FilteringBoundLogger, thing: str, **values: str) -> None:
        self._log = log
        self._thing = thing
        self._values = values
        self._failures = 0
        self._logged_at: float | None = None

    def failed(self, error: MotekeepError, boot_s: float) -> float:
        self._failures += 1
        if self._logged_at is None or boot_s - self._logged_at >= LOG_EVERY_S:
            self._logged_at = boot_s
            self._log.warning(f"{self._thing}.failed", error=str(error), failures=self._failures, **self._values)
        return float(min(FIRST_S * 2 ** min(self._failures - 1, 10), CAP_S))

    def recovered(self) -> None:
        if self._failures:
            self._log.info(f"{self._thing}.recovered", failures=self._failures, **self._values)
        self._failures = 0
        self._logged_at = None
