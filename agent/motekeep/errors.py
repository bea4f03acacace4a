"""The small tree of named errors.

Each says what was attempted, why it failed, what a person can do, and whether trying again can help. A loop backs
off on a `MotekeepError` with `retry`; any other exception is a bug and ends the process, which systemd restarts.
"""


class MotekeepError(Exception):
    """Base of all named errors; `str()` of it is the one line that an operator reads."""

    retry = False

    def __init__(self, attempted: str, why: str, mend: str) -> None:
        self.attempted = attempted
        self.why = why
        self.mend = mend
        super().__init__(f"{attempted}: {why}; {mend}" if mend else f"{attempted}: {why}")


class ConfigError(MotekeepError):
    """The configuration cannot be used. Exit code 2."""


class PortError(MotekeepError):
    """The serial line is absent, taken, or was lost."""

    retry = True


class StoreError(MotekeepError):
    """The journal could not be opened, read or written."""

    retry = True


class StoreFullError(StoreError):
    """The journal's own limit or the disk is full."""


class BrokerError(MotekeepError):
    """The broker cannot be reached or refuses to talk."""

    retry = True


class ClimateError(MotekeepError):
    """The climate source gave nothing usable."""

    retry = True


class ServiceError(MotekeepError):
    """A service record cannot be used."""


class CaptureError(MotekeepError):
    """A capture file has a line that is not of the capture format."""


class DocumentError(MotekeepError):
    """A calibration document cannot be used; `path` is the key that is at fault, `<text>` for the file as a whole."""

    def __init__(self, path: str, why: str, mend: str) -> None:
        self.path = path
        super().__init__(f"calibration document, {path}", why, mend)


class OfferRefusedError(MotekeepError):
    """A calibration document is refused. `reason` is its name on the state topic; nothing has changed."""

    def __init__(self, reason: str, why: str, mend: str) -> None:
        self.reason = reason
        super().__init__(f"calibration refused, {reason}", why, mend)


class SignersError(MotekeepError):
    """A signature could not be looked at: no ssh-keygen, no time, no memory. Says nothing about the signature."""

    retry = True
