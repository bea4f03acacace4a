"""The unit in the eyes of systemd itself, and the udev rule in the eyes of its grammar."""

import re
import shutil
import subprocess
from pathlib import Path

import pytest

SYSTEMD = Path(__file__).parents[2] / "systemd"
HOST_UNITS = ("/usr/lib/systemd/system", "/lib/systemd/system")

needs_systemd = pytest.mark.skipif(
    shutil.which("systemd-analyze") is None, reason="no systemd-analyze here; apt-get install systemd"
)


def analyze(*words: str | Path) -> subprocess.CompletedProcess[str]:
    return subprocess.run(["systemd-analyze", *words], capture_output=True, text=True, check=False, timeout=60)


@pytest.fixture
def root(tmp_path: Path) -> Path:
    """A root with our unit, the program it starts, and the host's own units, which ours refers to."""
    units = tmp_path / "etc/systemd/system"
    units.mkdir(parents=True)
    shutil.copy(SYSTEMD / "motekeep.service", units)
    [hosts] = [folder for folder in map(Path, ("/usr/lib/systemd/system", "/lib/systemd/system")) if folder.is_dir()][
        :1
    ]
    (tmp_path / "usr/lib/systemd").mkdir(parents=True)
    shutil.copytree(hosts, tmp_path / "usr/lib/systemd/system", symlinks=True)
    program = tmp_path / "opt/motekeep/bin/motekeep"
    program.parent.mkdir(parents=True)
    program.write_text("#!/bin/sh\n")
    program.chmod(0o755)
    return tmp_path


def with_drop_ins(root: Path, *names: str) -> None:
    folder = root / "etc/systemd/system/motekeep.service.d"
    folder.mkdir()
    for name in names:
        shutil.copy(SYSTEMD / "drop-ins" / f"{name}.conf", folder / f"motekeep-{name}.conf")


def exposure(root: Path) -> float:
    result = analyze(f"--root={root}", "security", "--offline=true", "--no-pager", "motekeep.service")
    found = re.search(r"Overall exposure level for motekeep.service: ([\d.]+)", result.stdout)
    assert found, result.stderr
    return float(found[1])


DROP_INS = sorted(file.stem for file in (SYSTEMD / "drop-ins").glob("*.conf"))


@needs_systemd
class TestUnit:
    @pytest.mark.parametrize("drop_ins", [[], *([name] for name in DROP_INS), DROP_INS])
    def test_systemd_has_nothing_to_say_against_it(self, root: Path, drop_ins: list[str]) -> None:
        with_drop_ins(root, *drop_ins)

        result = analyze(f"--root={root}", "verify", "motekeep.service")

        assert (result.returncode, result.stderr, result.stdout) == (0, "", "")

    def test_a_misspelled_line_would_be_seen(self, root: Path) -> None:
        unit = root / "etc/systemd/system/motekeep.service"
        unit.write_text(unit.read_text().replace("NoNewPrivileges=", "NoNewPriviliges="))

        assert "NoNewPriviliges" in analyze(f"--root={root}", "verify", "motekeep.service").stderr

    def test_its_exposure_is_at_most_1_5(self, root: Path) -> None:
        assert exposure(root) <= 1.5

    def test_a_loosened_unit_would_be_seen(self, root: Path) -> None:
        unit = root / "etc/systemd/system/motekeep.service"
        unit.write_text(unit.read_text().replace("CapabilityBoundingSet=\n", ""))

        assert exposure(root) > 1.5

    def test_reading_the_kernels_clock_status_costs_at_most_half_a_point(self, root: Path) -> None:
        with_drop_ins(root, "chrony")

        assert exposure(root) <= 2.0

    def test_a_limit_of_memory_costs_nothing(self, root: Path) -> None:
        bare = exposure(root)
        with_drop_ins(root, "memory")

        assert exposure(root) == bare


class TestUdev:
    def rules(self) -> list[str]:
        text = (SYSTEMD / "motekeep.udev").read_text()
        return [line for line in text.splitlines() if line and not line.startswith("#")]

    def test_every_line_is_of_the_grammar_of_udev(self) -> None:
        """udev(7): comma separated KEY, optional {attribute}, operator, quoted value."""
        pair = r'[A-Z]+(\{[A-Za-z_/]+\})?(==|!=|=|\+=|-=|:=)"[^"]*"'

        assert [line for line in self.rules() if not re.fullmatch(rf"{pair}(, *{pair})*", line)] == []

    def test_every_jump_has_its_label(self) -> None:
        text = "\n".join(self.rules())

        assert set(re.findall(r'GOTO="(\w+)"', text)) == set(re.findall(r'LABEL="(\w+)"', text))

    def test_no_adapter_is_named(self) -> None:
        assert not re.search(r"idVendor|idProduct|ID_VENDOR|ID_MODEL|serial}", "\n".join(self.rules()))
