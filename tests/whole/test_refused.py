"""What the daemon cannot work with is said in words that name the thing and the way out."""

import subprocess
from pathlib import Path

import pytest

from whole_site import MOTEKEEP, gateway, wait_for

pytestmark = pytest.mark.whole


def test_a_wrong_configuration_ends_with_exit_code_2_and_one_line_that_names_file_key_and_mend(tmp_path: Path) -> None:
    config = tmp_path / "config.toml"
    config.write_text('site = "quarry"\ngateway = "east-gate"\nintervall = 60\n')
    done = subprocess.run(
        [str(MOTEKEEP), "run", "--config", str(config)], capture_output=True, text=True, check=False, timeout=30
    )
    assert done.returncode == 2
    assert done.stdout == ""
    (line,) = done.stderr.splitlines()
    assert str(config) in line
    assert "intervall" in line
    assert "did you mean 'interval'?" in line


def test_a_second_daemon_on_a_port_says_which_process_holds_it_and_leaves_it_alone(tmp_path: Path) -> None:
    for name in ("first", "second"):
        (tmp_path / name).mkdir()
    with gateway(tmp_path / "first") as site, gateway(tmp_path / "second", broker=False) as other:
        subscriber = site.subscribe()
        holder = site.start_daemon()
        holder.wait_event("link.connected")
        port = site.sensors.ports["north"]
        wait_for(port.open_elsewhere, "the first daemon to open its port")
        ours, theirs = port.link, other.sensors.ports["north"].link
        other.config.write_text(other.config.read_text().replace(str(theirs), str(ours)))
        late = other.start_daemon()
        told = str(late.wait_event("line.failed")["error"])
        assert f"process {holder.process.pid}" in told
        assert str(ours) in told
        assert late.running
        subscriber.wait_on("reading/north", lambda d: d["frames"]["good"] + d["frames"]["missing"] > 0)
        assert not holder.events("line.failed"), "the first one never noticed"


def test_a_second_daemon_on_a_journal_says_so_and_writes_nothing(tmp_path: Path) -> None:
    for name in ("first", "second"):
        (tmp_path / name).mkdir()
    with gateway(tmp_path / "first") as site, gateway(tmp_path / "second", broker=False) as other:
        holder = site.start_daemon()
        holder.wait_event("journal.opened")
        other.config.write_text(other.config.read_text().replace(str(other.store), str(site.store)))
        late = other.start_daemon()
        assert "another process writes it" in str(late.wait_event("journal.failed")["error"])
        assert late.running
        assert not late.events("journal.opened")
