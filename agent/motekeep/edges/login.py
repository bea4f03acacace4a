"""Where the broker is and what this gateway shows it: address, names, password, certificates.

Owns the reading of the files; they are read anew for each connection, so that a renewed one is used without a restart.
Must not know MQTT.
"""

import ssl
from dataclasses import dataclass
from pathlib import Path

from motekeep.errors import BrokerError

# The largest message that is taken from above: a calibration document of 64 KiB, escaped as JSON, with its signature.
DOWN_BYTES = 256 * 1024
# What may lie here unread. A gateway expects a handful of retained documents at once; a flood beyond that is dropped
# and counted, and retained messages come again with the next connection.
INLET_BYTES = 4 * DOWN_BYTES

PASSWORD_BYTES = 4096  # more is not a password but the wrong file


@dataclass(frozen=True, slots=True)
class Tls:
    """Files in PEM. Without `ca` the system's authorities are trusted; `cert` and `key` identify this gateway."""

    ca: Path | None = None
    cert: Path | None = None
    key: Path | None = None


@dataclass(frozen=True, slots=True)
class BrokerSettings:
    """`will` and what is given to `stop` are (topic, body), retained. `filters` are subscribed at each connection.

    Without a will nothing outlives a link. With `filter_qos` 0 retained messages come past the queue that a broker
    keeps for each client (mosquitto: 1,000 messages, the rest is dropped), which who listens to a fleet needs.
    `inlet_bytes` is how much may have come in and lie unread.

    A broken link is forgiven for `will_delay_s` before the will is sent. A link that held for `steady_s` starts the
    backoff, which runs from the first to the second of `backoff_s`, from its beginning again.
    """

    host: str
    port: int
    client_id: str
    will: tuple[str, str] | None = None
    filters: tuple[str, ...] = ()
    filter_qos: int = 1
    inlet_bytes: int = INLET_BYTES
    username: str | None = None
    password_file: Path | None = None
    tls: Tls | None = None
    keepalive_s: int = 30
    will_delay_s: int = 30
    backoff_s: tuple[float, float] = (1.0, 60.0)
    steady_s: float = 30.0


def read_password(file: Path | None) -> str | None:
    """The first line end and what follows it are not part of the password. Raises BrokerError."""
    if file is None:
        return None
    try:
        with file.open("rb") as handle:
            return handle.read(PASSWORD_BYTES).decode().partition("\n")[0].rstrip("\r")
    except (OSError, UnicodeDecodeError) as error:
        raise BrokerError(f"reading the password file {file}", str(error), "see [broker] password_file") from error


def tls_context(tls: Tls) -> ssl.SSLContext:
    """A context that verifies the broker and its name. Raises BrokerError."""
    try:
        context = ssl.create_default_context(cafile=tls.ca)
        context.minimum_version = ssl.TLSVersion.TLSv1_2
        if tls.cert is not None:
            context.load_cert_chain(tls.cert, tls.key, password="")  # else OpenSSL asks on a terminal
    except OSError as error:  # SSLError is one
        files = ", ".join(str(file) for file in (tls.ca, tls.cert, tls.key) if file is not None)
        raise BrokerError(f"loading the TLS files {files}", str(error), "see [broker] tls") from error
    return context
