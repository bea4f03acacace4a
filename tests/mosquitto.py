"""A real mosquitto of one's own on loopback, and what its clients see.

Each broker gets a free port and a folder; what is started here is stopped here, by its process id.
"""

import json
import os
import shutil
import socket
import subprocess
import time
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path

PATIENCE_S = 15.0
HELLO = "hello"


def free_port() -> int:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])


class Mosquitto:
    """A broker that can be stopped (SIGTERM), killed (SIGKILL) and started again on the same port.

    `lines` are added to its configuration; `acl` and `users` (name to password) turn access rules and passwords on.
    With `defaults` it keeps mosquitto's own limit of messages queued for a client.
    """

    def __init__(
        self,
        folder: Path,
        lines: Sequence[str] = (),
        *,
        acl: str | None = None,
        users: dict[str, str] | None = None,
        tls: "Certificates | None" = None,
        defaults: bool = False,
    ) -> None:
        self.folder = folder
        self.port = free_port()
        self.tls = tls
        self._process: subprocess.Popen[bytes] | None = None
        # started as root it would change to its own user and could not read the folder any more
        config = [f"listener {self.port} 127.0.0.1", f"allow_anonymous {'false' if users else 'true'}", "user root"]
        config += lines if defaults else ["max_queued_messages 0", *lines]
        if acl is not None:
            (folder / "acl").write_text(acl)
            config.append(f"acl_file {folder / 'acl'}")
        if users is not None:
            passwords = folder / "passwords"
            passwords.touch(mode=0o600)
            for name, password in users.items():
                subprocess.run(["mosquitto_passwd", "-b", str(passwords), name, password], check=True)
            config.append(f"password_file {passwords}")
        if tls is not None:
            config += [f"cafile {tls.ca}", f"certfile {tls.server}.crt", f"keyfile {tls.server}.key"]
            config += ["require_certificate true"]
        self._config = folder / f"mosquitto-{self.port}.conf"
        self._config.write_text("\n".join(config) + "\n")

    def start(self) -> None:
        log = (self.folder / f"mosquitto-{self.port}.log").open("ab")
        self._process = subprocess.Popen(["mosquitto", "-c", str(self._config)], stdout=log, stderr=log)
        log.close()
        deadline = time.monotonic() + PATIENCE_S
        while True:
            try:
                socket.create_connection(("127.0.0.1", self.port), timeout=1.0).close()
                return
            except OSError:
                if self._process.poll() is not None or time.monotonic() > deadline:
                    raise AssertionError(f"mosquitto does not start, see {log.name}") from None
                time.sleep(0.02)

    def stop(self) -> None:
        if self._process is not None:
            self._process.terminate()
            self._process.wait(PATIENCE_S)
            self._process = None

    def kill(self) -> None:
        assert self._process is not None
        self._process.kill()
        self._process.wait(PATIENCE_S)
        self._process = None

    def log_text(self) -> str:
        return (self.folder / f"mosquitto-{self.port}.log").read_text(errors="replace")

    def client(self, program: str, *arguments: str) -> list[str]:
        command = [program, "-h", "127.0.0.1", "-p", str(self.port), "-V", "5"]
        if self.tls is not None:
            command += [
                "--cafile",
                str(self.tls.ca),
                "--cert",
                f"{self.tls.client}.crt",
                "--key",
                f"{self.tls.client}.key",
            ]
        return command + list(arguments)

    def publish(self, topic: str, payload: str, *arguments: str) -> None:
        command = self.client("mosquitto_pub", "-q", "1", "-t", topic, "-m", payload, *arguments)
        subprocess.run(command, check=True, timeout=PATIENCE_S)

    @contextmanager
    def subscriber(self, topic: str = "#") -> Iterator["Subscriber"]:
        out = self.folder / f"heard-{time.monotonic_ns()}"
        command = self.client("mosquitto_sub", "-q", "1", "-t", topic, "-t", HELLO, "-F", "%t %r %p")
        with out.open("wb") as sink:
            process = subprocess.Popen(command, stdout=sink)
        try:
            heard = Subscriber(out)
            deadline = time.monotonic() + PATIENCE_S
            while not heard.messages(HELLO):  # a subscription is in force once something is heard
                assert time.monotonic() < deadline, "mosquitto_sub hears nothing"
                self.publish(HELLO, "")
                time.sleep(0.02)
            yield heard
        finally:
            process.terminate()
            process.wait(PATIENCE_S)


class Subscriber:
    """What a mosquitto_sub has written so far."""

    def __init__(self, out: Path) -> None:
        self._out = out

    def raw(self) -> list[tuple[str, bool, str]]:
        """(topic, retained, payload), in order; a line that is still being written is left out."""
        whole, _, _ = self._out.read_text(errors="replace").rpartition("\n")
        found = []
        for line in whole.splitlines():
            topic, retained, payload = line.split(" ", 2)
            found.append((topic, retained == "1", payload))
        return found

    def messages(self, topic: str) -> list[str]:
        return [payload for heard, _, payload in self.raw() if heard == topic]

    def seqs(self, topic: str) -> list[int]:
        """Sequence numbers of all readings heard on a reading or late topic, in order, doubles included."""
        found: list[int] = []
        for payload in self.messages(topic):
            document = json.loads(payload)
            found += [r["seq"] for r in document["readings"]] if "readings" in document else [document["seq"]]
        return found


class Certificates:
    """An authority of one's own, a server certificate for 127.0.0.1 and client certificates, made by openssl."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self.ca = folder / "ca.crt"
        self._openssl(
            "req", "-x509", *self._new_key("ca"), "-days", "2", "-subj", "/CN=a test authority", "-out", str(self.ca)
        )
        self.server = self.issue("server", "subjectAltName=IP:127.0.0.1,DNS:localhost")
        self.client = self.issue("client")

    def issue(self, name: str, extension: str = "", *, days: int = 2) -> Path:
        """Files `<name>.key` and `<name>.crt`; the path is without the ending."""
        path = self.folder / name
        self._openssl("req", *self._new_key(name), "-subj", f"/CN={name}", "-out", f"{path}.csr")
        Path(f"{path}.ext").write_text(extension)
        signing = ["-CA", str(self.ca), "-CAkey", str(self.folder / "ca.key"), "-CAcreateserial", "-days", str(days)]
        self._openssl("x509", "-req", "-in", f"{path}.csr", *signing, "-extfile", f"{path}.ext", "-out", f"{path}.crt")
        return path

    def _new_key(self, name: str) -> list[str]:
        key = str(self.folder / f"{name}.key")
        return ["-newkey", "ec", "-pkeyopt", "ec_paramgen_curve:prime256v1", "-nodes", "-keyout", key]

    def _openssl(self, *arguments: str) -> None:
        environment = {"PATH": os.environ["PATH"]}
        subprocess.run(["openssl", *arguments], check=True, capture_output=True, env=environment)


@contextmanager
def running(mosquitto: Mosquitto) -> Iterator[Mosquitto]:
    assert shutil.which("mosquitto"), "mosquitto is not installed; tools/test says how"
    mosquitto.start()
    try:
        yield mosquitto
    finally:
        mosquitto.stop()
