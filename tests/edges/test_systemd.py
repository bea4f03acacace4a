"""The notify socket against a real AF_UNIX socket, and credentials from a real folder."""

import os
import socket
import uuid
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest
from structlog.testing import capture_logs

from motekeep.edges.systemd import CREDENTIAL_BYTES, UNIT_CREDENTIALS, ServiceManager, read_secret, secret_file

Listen = Callable[[str], socket.socket]


@pytest.fixture
def listen() -> Iterator[Listen]:
    """The manager's end: a datagram socket at the address, with `@` for an abstract one."""
    open_sockets: list[socket.socket] = []

    def at(address: str) -> socket.socket:
        inlet = socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM)
        inlet.settimeout(5)
        inlet.bind("\0" + address[1:] if address.startswith("@") else address)
        open_sockets.append(inlet)
        return inlet

    yield at
    for inlet in open_sockets:
        inlet.close()


@pytest.fixture(params=["path", "abstract"])
def address(request: pytest.FixtureRequest, tmp_path: Path) -> str:
    return str(tmp_path / "notify") if request.param == "path" else f"@motekeep-test-{uuid.uuid4().hex}"


class TestNotify:
    @pytest.mark.parametrize(
        ("tell", "expected"),
        [
            (lambda m: m.ready(), b"READY=1"),
            (lambda m: m.ready("measuring"), b"READY=1\nSTATUS=measuring"),
            (lambda m: m.status("2 sensors, 0 waiting"), b"STATUS=2 sensors, 0 waiting"),
            (lambda m: m.feed_watchdog(), b"WATCHDOG=1"),
            (lambda m: m.stopping(), b"STOPPING=1"),
            (lambda m: m.extend_timeout(30.5), b"EXTEND_TIMEOUT_USEC=30500000"),
            (lambda m: m.extend_timeout(30, "salvaging"), b"EXTEND_TIMEOUT_USEC=30000000\nSTATUS=salvaging"),
        ],
    )
    def test_each_message_arrives_in_the_words_of_sd_notify(
        self, address: str, listen: Listen, tell: Callable[[ServiceManager], bool], expected: bytes
    ) -> None:
        inlet = listen(address)
        manager = ServiceManager({"NOTIFY_SOCKET": address})

        assert manager.present
        assert tell(manager) is True
        assert inlet.recv(4096) == expected

    def test_a_status_of_several_lines_cannot_smuggle_in_a_message(self, tmp_path: Path, listen: Listen) -> None:
        inlet = listen(str(tmp_path / "notify"))

        ServiceManager({"NOTIFY_SOCKET": str(tmp_path / "notify")}).status("port lost\nWATCHDOG=1\r\nREADY=1")

        assert inlet.recv(4096) == b"STATUS=port lost WATCHDOG=1 READY=1"

    def test_a_long_status_fits_the_managers_buffer(self, tmp_path: Path, listen: Listen) -> None:
        inlet = listen(str(tmp_path / "notify"))

        assert ServiceManager({"NOTIFY_SOCKET": str(tmp_path / "notify")}).ready("ü" * 100_000)

        assert len(inlet.recv(100_000)) < 4096

    @pytest.mark.parametrize(
        "environment", [{}, {"NOTIFY_SOCKET": ""}, {"NOTIFY_SOCKET": "@"}, {"NOTIFY_SOCKET": "vsock:2:1"}]
    )
    def test_without_a_manager_nothing_happens(self, environment: dict[str, str]) -> None:
        manager = ServiceManager(environment)

        assert not manager.present
        assert [manager.ready(), manager.feed_watchdog(), manager.stopping()] == [False, False, False]

    def test_a_manager_that_is_gone_is_no_error_and_is_logged_once_a_change(
        self, tmp_path: Path, listen: Listen
    ) -> None:
        manager = ServiceManager({"NOTIFY_SOCKET": str(tmp_path / "notify")})
        with capture_logs() as logs:
            assert [manager.feed_watchdog() for _ in range(3)] == [False] * 3
            listen(str(tmp_path / "notify"))
            assert [manager.feed_watchdog() for _ in range(2)] == [True] * 2

        assert [entry["event"] for entry in logs] == ["systemd.notify_failed", "systemd.notify_works_again"]

    def test_a_hung_manager_does_not_hang_the_daemon(
        self, tmp_path: Path, listen: Listen, monkeypatch: pytest.MonkeyPatch
    ) -> None:
        monkeypatch.setattr("motekeep.edges.systemd.SEND_TIMEOUT_S", 0.01)
        listen(str(tmp_path / "notify"))
        manager = ServiceManager({"NOTIFY_SOCKET": str(tmp_path / "notify")})

        # nobody reads, so the queue of the socket fills up: 10 datagrams by default (net.unix.max_dgram_qlen)
        assert any(not manager.feed_watchdog() for _ in range(5000))


class TestWatchdog:
    def test_its_time_is_in_seconds(self) -> None:
        environment = {"WATCHDOG_USEC": "60000000", "WATCHDOG_PID": str(os.getpid())}

        assert ServiceManager(environment).watchdog_s == 60

    def test_it_counts_for_this_process_when_no_process_is_named(self) -> None:
        assert ServiceManager({"WATCHDOG_USEC": "500000"}).watchdog_s == 0.5

    @pytest.mark.parametrize(
        "environment",
        [
            {},
            {"WATCHDOG_USEC": "60000000", "WATCHDOG_PID": "1"},
            {"WATCHDOG_USEC": "0"},
            {"WATCHDOG_USEC": "-5"},
            {"WATCHDOG_USEC": "soon"},
            {"WATCHDOG_USEC": "60000000", "WATCHDOG_PID": "me"},
        ],
    )
    def test_there_is_none_for_others_and_none_in_nonsense(self, environment: dict[str, str]) -> None:
        assert ServiceManager(environment, pid=4711).watchdog_s is None


class TestCredentials:
    @pytest.mark.parametrize(
        ("content", "expected"),
        [
            (b"heron lake", b"heron lake"),
            (b"heron lake\n", b"heron lake"),
            (b"heron lake \r\n", b"heron lake "),
            (b"\xff\x00\xfe", b"\xff\x00\xfe"),
            (b"\n", None),
            (b"", None),
        ],
    )
    def test_the_content_comes_without_its_last_line_break_and_blank_means_none(
        self, tmp_path: Path, content: bytes, expected: bytes | None
    ) -> None:
        (tmp_path / "mqtt-password").write_bytes(content)

        assert ServiceManager({"CREDENTIALS_DIRECTORY": str(tmp_path)}).credential("mqtt-password") == expected

    def test_an_absent_one_is_none(self, tmp_path: Path) -> None:
        assert ServiceManager({"CREDENTIALS_DIRECTORY": str(tmp_path)}).credential("mqtt-password") is None
        assert ServiceManager({}).credential("mqtt-password") is None

    @pytest.mark.parametrize("name", ["", ".", "..", "../secret", "/etc/hostname"])
    def test_a_name_cannot_leave_the_folder(self, tmp_path: Path, name: str) -> None:
        folder = tmp_path / "credentials"
        folder.mkdir()
        (tmp_path / "secret").write_text("not yours")

        assert ServiceManager({"CREDENTIALS_DIRECTORY": str(folder)}).credential(name) is None

    def test_a_mistaken_path_to_something_huge_is_refused(self, tmp_path: Path) -> None:
        (tmp_path / "huge").write_bytes(b"x" * (CREDENTIAL_BYTES + 1))

        with capture_logs() as logs:
            assert read_secret(tmp_path / "huge") is None
        assert logs[0]["event"] == "systemd.credential_too_large"

    def test_a_folder_in_the_place_of_a_secret_is_none(self, tmp_path: Path) -> None:
        assert read_secret(tmp_path) is None


class TestSecretFile:
    def test_outside_the_unit_a_credential_is_read_where_the_unit_loads_it_from(self, tmp_path: Path) -> None:
        (tmp_path / "mqtt-password").write_text("heron lake")

        assert secret_file(UNIT_CREDENTIALS / "mqtt-password", tmp_path) == tmp_path / "mqtt-password"

    def test_without_that_file_the_message_will_name_what_is_configured(self, tmp_path: Path) -> None:
        assert secret_file(UNIT_CREDENTIALS / "mqtt-key", tmp_path) == UNIT_CREDENTIALS / "mqtt-key"

    def test_any_other_path_is_taken_as_it_is(self, tmp_path: Path) -> None:
        (tmp_path / "mqtt-password").write_text("heron lake")

        assert secret_file(Path("/srv/mqtt-password"), tmp_path) == Path("/srv/mqtt-password")
