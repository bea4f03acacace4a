"""Disk and ports of this machine; supply and temperature from folders laid out as Linux lays them out."""

import os
import pty
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

from motekeep.edges.host import Host


def write(root: Path, files: dict[str, str]) -> Host:
    for name, content in files.items():
        path = root / name
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_text(content)
    return Host(sys_root=root)


class TestDisk:
    def test_room_is_what_statvfs_says_an_ordinary_user_has(self, tmp_path: Path) -> None:
        state = os.statvfs(tmp_path)
        disk = Host().disk(tmp_path)

        assert disk is not None
        assert disk.total == state.f_blocks * state.f_frsize
        # others write to this disk meanwhile
        assert disk.free == pytest.approx(state.f_bavail * state.f_frsize, rel=0.2)
        assert disk.free <= disk.total

    def test_a_file_not_made_yet_is_on_the_disk_of_the_folder_it_will_be_in(self, tmp_path: Path) -> None:
        disk, folder = Host().disk(tmp_path / "not" / "yet" / "journal.db"), Host().disk(tmp_path)

        assert disk is not None
        assert folder is not None
        assert disk.total == folder.total

    def test_a_relative_path_works(self, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
        monkeypatch.chdir(tmp_path)

        assert Host().disk(Path("absent/journal.db")) is not None

    def test_a_path_that_cannot_be_asked_has_no_known_room(self) -> None:
        assert Host().disk(Path("/" + "x" * 5000)) is None


class TestSupply:
    def test_the_alarm_of_any_monitor_counts(self, tmp_path: Path) -> None:
        host = write(
            tmp_path, {"class/hwmon/hwmon0/in0_lcrit_alarm": "0\n", "class/hwmon/hwmon2/in3_lcrit_alarm": "1\n"}
        )

        assert host.supply_low() is True

    def test_all_quiet_is_known_to_be_well(self, tmp_path: Path) -> None:
        assert write(tmp_path, {"class/hwmon/hwmon1/in0_lcrit_alarm": "0\n"}).supply_low() is False

    @pytest.mark.parametrize(
        "files",
        [
            {},
            {"class/hwmon/hwmon0/temp1_input": "48000\n"},
            {"class/hwmon/hwmon0/in0_lcrit_alarm": "\n"},
            {"class/hwmon/hwmon0/in0_lcrit_alarm": "none\n"},
            # other limits are set by firmware at will and alarm on healthy PCs
            {"class/hwmon/hwmon0/in0_min_alarm": "1\n"},
        ],
    )
    def test_without_a_monitor_it_is_not_known(self, tmp_path: Path, files: dict[str, str]) -> None:
        assert write(tmp_path, files).supply_low() is None

    def test_a_monitor_that_answers_with_an_error_is_passed_over(self, tmp_path: Path) -> None:
        (tmp_path / "class/hwmon/hwmon0/in0_lcrit_alarm").mkdir(parents=True)  # reading it fails, as ENODATA would

        assert write(tmp_path, {"class/hwmon/hwmon1/in0_lcrit_alarm": "1\n"}).supply_low() is True


class TestTemperature:
    def test_it_is_the_hottest_zone_of_the_processor_in_degrees(self, tmp_path: Path) -> None:
        host = write(
            tmp_path,
            {
                "class/thermal/thermal_zone0/type": "cpu-thermal\n",
                "class/thermal/thermal_zone0/temp": "48312\n",
                "class/thermal/thermal_zone1/type": "soc-thermal\n",
                "class/thermal/thermal_zone1/temp": "51000\n",
                "class/thermal/thermal_zone2/type": "battery\n",
                "class/thermal/thermal_zone2/temp": "90000\n",
            },
        )

        assert host.temperature_c() == pytest.approx(51.0)

    def test_below_freezing_is_a_temperature(self, tmp_path: Path) -> None:
        files = {"class/thermal/thermal_zone0/type": "cpu-thermal", "class/thermal/thermal_zone0/temp": "-12500"}

        assert write(tmp_path, files).temperature_c() == pytest.approx(-12.5)

    @pytest.mark.parametrize("text", ["", "hot", "-274000", "2147483647"])
    def test_a_zone_without_a_sensible_value_is_passed_over(self, tmp_path: Path, text: str) -> None:
        files = {"class/thermal/thermal_zone0/type": "cpu-thermal", "class/thermal/thermal_zone0/temp": text}

        assert write(tmp_path, files).temperature_c() is None

    def test_a_machine_without_zones_has_none(self, tmp_path: Path) -> None:
        assert Host(sys_root=tmp_path).temperature_c() is None


@pytest.fixture
def port() -> Iterator[str]:
    """A pseudo-terminal, named by its device file; the test's own handle on that file is closed."""
    master, slave = pty.openpty()
    name = os.ttyname(slave)
    os.close(slave)
    yield name
    os.close(master)


class TestHolders:
    def test_another_program_is_named_with_its_number_also_through_a_link(self, port: str, tmp_path: Path) -> None:
        link = tmp_path / "by-path"
        link.symlink_to(port)
        program = (
            f"import os, sys; os.open({port!r}, os.O_RDWR | os.O_NOCTTY); print('open', flush=True); sys.stdin.read()"
        )
        child = subprocess.Popen(
            [sys.executable, "-c", program], stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True
        )
        try:
            assert child.stdout is not None
            assert child.stdout.readline() == "open\n"

            assert [holder.pid for holder in Host().holders(link)] == [child.pid]
            assert Host().who_holds(str(link)).startswith(f"process {child.pid} (python")
        finally:
            child.communicate("\n")

    def test_this_process_itself_is_told_as_such(self, port: str) -> None:
        handle = os.open(port, os.O_RDWR | os.O_NOCTTY)
        try:
            assert Host().who_holds(port) == "this process itself (is the port configured twice?)"
        finally:
            os.close(handle)

    def test_a_free_port_has_no_holder(self, port: str) -> None:
        assert Host().holders(port) == []
        assert "motekeep check` as root" in Host().who_holds(port)

    def test_processes_that_cannot_be_looked_into_are_passed_over(self, tmp_path: Path) -> None:
        device = tmp_path / "ttyUSB0"
        device.touch()
        for pid, command, target in ((7, "shell", "/dev/null"), (52, "terminal", str(device)), (300, "ended", None)):
            folder = tmp_path / "proc" / str(pid)
            folder.mkdir(parents=True)
            (folder / "comm").write_text(command + "\n")
            if target is not None:
                (folder / "fd").mkdir()
                (folder / "fd" / "3").symlink_to(target)
        (tmp_path / "proc" / "self").symlink_to("7")

        assert Host(proc_root=tmp_path / "proc").who_holds(device) == "process 52 (terminal)"
