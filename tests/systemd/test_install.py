"""tools/install, run for real into roots of our own.

Most tests give it a stand-in interpreter that makes a virtual environment without any package, so they need no
network and take milliseconds; the last one builds the real thing.
"""

import os
import shutil
import signal
import stat
import subprocess
import sys
import textwrap
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path

import pytest

from motekeep import __version__

CHECKOUT = Path(__file__).parents[2]

# Answers what tools/install asks of an interpreter. PIP is what `pip install` does in the environment, RUNS what the
# installed command prints, VERSION and HOME what the interpreter says of itself.
INTERPRETER = """\
#!/bin/bash
case "$*" in
  *sys.exit*) [[ "${VERSION:-3.11}" =~ ^3\\.1[123]$ ]] ;;
  *version_info*) echo "${VERSION:-3.11}" ;;
  *ensurepip*) [ -z "${NO_VENV:-}" ] ;;
  *realpath*) echo "${HOME_OF_PYTHON:-/usr/bin/python3.11}" ;;
  *"import motekeep.app"*) [ -z "${NO_DAEMON:-}" ] || { echo Traceback; echo "ImportError: $NO_DAEMON"; exit 1; } ;;
  "-m venv "*)
    mkdir -p "$3/bin" && cp "$0" "$3/bin/python" && echo "command = $0 -m venv $3" > "$3/pyvenv.cfg" ;;
  "-m pip install "*)
    eval "${PIP:-true}" || exit 1
    here=$(dirname "$0")
    printf '#!%s/python\\n' "$here" > "$here/other-script"
    printf '#!/bin/sh\\necho "%s"\\n' "$RUNS" > "$here/motekeep"
    chmod +x "$here/motekeep" ;;
  *) echo "the stand-in was asked for: $*" >&2; exit 9 ;;
esac
"""

UNIT = "etc/systemd/system/motekeep.service"
SYSTEM_FILES = [
    UNIT,
    "etc/sysusers.d/motekeep.conf",
    "etc/tmpfiles.d/motekeep.conf",
    "etc/udev/rules.d/70-motekeep.rules",
]


@dataclass
class Device:
    """A root folder and the way to install into it."""

    root: Path
    python: Path
    checkout: Path = CHECKOUT
    environment: dict[str, str] = field(default_factory=dict)

    def command(self, *options: str) -> list[str]:
        where = ["--root", str(self.root), "--python", str(self.python)]
        return [str(self.checkout / "tools/install"), *where, *options]

    def install(self, *options: str, **environment: str) -> subprocess.CompletedProcess[str]:
        return subprocess.run(
            self.command(*options),
            capture_output=True,
            text=True,
            env={**os.environ, **self.environment, **environment},
            check=False,
            timeout=60,
        )

    def installed(self, *options: str, **environment: str) -> str:
        result = self.install(*options, **environment)
        assert result.returncode == 0, result.stderr
        return result.stdout

    def refused(self, *options: str, code: int = 1, **environment: str) -> str:
        """The one line it says."""
        result = self.install(*options, **environment)
        assert result.returncode == code
        lines = result.stderr.splitlines()
        assert len(lines) == 1, result.stderr
        assert lines[0].startswith("tools/install: ")
        return lines[0]

    @property
    def in_use(self) -> Path:
        return (self.root / "opt/motekeep").resolve()

    @property
    def releases(self) -> set[str]:
        return {folder.name for folder in (self.root / "opt/motekeep-releases").iterdir() if folder.is_dir()}


@pytest.fixture
def device(tmp_path: Path) -> Device:
    python = tmp_path / "python"
    python.write_text(INTERPRETER)
    python.chmod(0o755)
    (tmp_path / "root").mkdir()
    environment = {"TMPDIR": str(tmp_path), "RUNS": f"motekeep, version {__version__}"}
    return Device(tmp_path / "root", python, environment=environment)


@pytest.fixture
def copy(device: Device, tmp_path: Path) -> Device:
    """Installs from a checkout that the test may change."""
    checkout = tmp_path / "checkout"
    top = ["pyproject.toml", "config.example.toml", "README.md", "LICENSE"]
    for name in (*top, "tools/install", "tools/constraints.txt"):
        (checkout / name).parent.mkdir(parents=True, exist_ok=True)
        shutil.copy(CHECKOUT / name, checkout / name)
    (checkout / "agent/motekeep").mkdir(parents=True)
    shutil.copy(CHECKOUT / "agent/motekeep/__init__.py", checkout / "agent/motekeep")
    shutil.copytree(CHECKOUT / "systemd", checkout / "systemd")
    device.checkout = checkout
    return device


class TestFirst:
    def test_everything_is_in_its_place_and_the_next_step_is_said(self, device: Device) -> None:
        said = device.installed()

        assert all((device.root / name).is_file() for name in SYSTEM_FILES)
        assert (device.root / "etc/motekeep/signers").is_dir()
        example = (CHECKOUT / "config.example.toml").read_text()
        assert (device.root / "etc/motekeep/config.toml").read_text() == example
        assert "motekeep check" in said
        assert str(device.root / "var/lib/motekeep") in said

    def test_nothing_of_the_image_names_the_folder_it_was_built_in(self, device: Device) -> None:
        device.installed()

        assert not (device.root / "opt/motekeep").readlink().is_absolute()
        assert (device.root / "usr/local/bin/motekeep").readlink() == Path("/opt/motekeep/bin/motekeep")
        for file in ("bin/other-script", "pyvenv.cfg"):
            text = (device.in_use / file).read_text()
            assert f"/opt/motekeep-releases/{device.in_use.name}" in text
            assert str(device.root) not in text

    def test_it_is_not_started_at_boot_before_somebody_configured_it(self, device: Device) -> None:
        device.installed()
        assert not (device.root / "etc/systemd/system/multi-user.target.wants").exists()

        device.installed("--enable")
        wanted = device.root / "etc/systemd/system/multi-user.target.wants/motekeep.service"
        assert wanted.readlink() == Path("/etc/systemd/system/motekeep.service")

    @pytest.mark.skipif(os.geteuid() != 0, reason="owners can only be given by root")
    def test_owners_and_modes_keep_secrets_from_others(self, device: Device) -> None:
        (device.root / "etc/motekeep").mkdir(parents=True)
        (device.root / "etc/motekeep/mqtt-password").write_text("heron lake")
        device.installed()

        accounts = [line.split(":") for line in (device.root / "etc/passwd").read_text().splitlines()]
        [owner] = [int(account[2]) for account in accounts if account[0] == "motekeep"]
        modes = {
            name: (stat.S_IMODE((device.root / name).stat().st_mode), (device.root / name).stat().st_uid)
            for name in ("etc/motekeep", "etc/motekeep/config.toml", "etc/motekeep/mqtt-password", "var/lib/motekeep")
        }
        assert modes == {
            "etc/motekeep": (0o750, 0),
            "etc/motekeep/config.toml": (0o640, 0),
            "etc/motekeep/mqtt-password": (0o600, 0),
            "var/lib/motekeep": (0o750, owner),
        }


@pytest.mark.whole
class TestAgain:
    def test_configuration_and_data_stay_and_the_new_example_lies_beside(self, copy: Device) -> None:
        copy.installed()
        config, data = copy.root / "etc/motekeep/config.toml", copy.root / "var/lib/motekeep/journal.db"
        config.write_text('site = "ours"\n')
        data.parent.mkdir(parents=True, exist_ok=True)
        data.write_text("a year of readings")
        (copy.checkout / "config.example.toml").write_text("# of the new version\n")

        said = copy.installed()

        assert config.read_text() == 'site = "ours"\n'
        assert data.read_text() == "a year of readings"
        assert (copy.root / "etc/motekeep/config.example.toml").read_text() == "# of the new version\n"
        assert "next:" not in said

    def test_the_version_before_is_kept_and_older_ones_go(self, device: Device) -> None:
        used = []
        for _ in range(3):
            device.installed()
            used.append(device.in_use.name)

        assert len(set(used)) == 3
        assert device.releases == set(used[1:])

    def test_drop_ins_of_ours_are_renewed_and_those_of_the_operator_are_left(self, copy: Device) -> None:
        copy.installed("--drop-in", "chrony", "--drop-in", "memory")
        folder = copy.root / "etc/systemd/system/motekeep.service.d"
        (folder / "override.conf").write_text("[Service]\nNice=5\n")
        (copy.checkout / "systemd/drop-ins/chrony.conf").write_text("# newer\n")

        copy.installed()

        assert sorted(file.name for file in folder.iterdir()) == [
            "motekeep-chrony.conf",
            "motekeep-memory.conf",
            "override.conf",
        ]
        assert (folder / "motekeep-chrony.conf").read_text() == "# newer\n"
        assert (folder / "override.conf").read_text() == "[Service]\nNice=5\n"

    @pytest.mark.parametrize(
        ("broken", "told"),
        [
            ({"PIP": "echo 'ERROR: No matching distribution found for paho-mqtt'; false"}, "No matching distribution"),
            ({"RUNS": "ImportError: no module"}, "does not run: ImportError: no module"),
            ({"NO_DAEMON": "no module paho"}, "does not run: ImportError: no module paho"),
        ],
    )
    def test_a_version_that_cannot_be_built_or_run_leaves_the_old_one_alone(
        self, device: Device, broken: dict[str, str], told: str
    ) -> None:
        device.installed()
        before, unit = device.in_use, (device.root / UNIT).stat().st_mtime_ns

        line = device.refused(**broken)

        assert told in line
        assert "motekeep-install-" in line, "names the log with all of it"
        assert device.in_use == before
        assert device.releases == {before.name}
        assert (device.root / UNIT).stat().st_mtime_ns == unit

    def test_what_a_killed_run_left_behind_goes_with_the_next(self, device: Device) -> None:
        device.installed()
        before = device.in_use
        running = device.root.parent / "running"
        with subprocess.Popen(
            device.command(),
            env={**os.environ, **device.environment, "PIP": f"touch {running}; sleep 60"},
            stdout=subprocess.DEVNULL,
            stderr=subprocess.DEVNULL,
            start_new_session=True,
        ) as process:
            while not running.exists():
                assert process.poll() is None
            os.killpg(process.pid, signal.SIGKILL)
        assert device.in_use == before
        assert len(device.releases) == 2

        device.installed()

        assert device.in_use != before
        assert device.releases == {before.name, device.in_use.name}


@pytest.mark.whole
class TestUninstall:
    def test_configuration_and_data_are_left_and_named_and_all_else_goes(self, device: Device) -> None:
        device.installed("--enable", "--drop-in", "memory")
        data = device.root / "var/lib/motekeep/journal.db"
        data.parent.mkdir(parents=True, exist_ok=True)
        data.write_text("a year of readings")

        said = device.installed("--uninstall")

        left = {str(file.relative_to(device.root)) for file in device.root.rglob("*") if not file.is_dir()}
        accounts = {name for name in left if name.startswith("etc/") and "motekeep" not in name}
        assert left - accounts == {
            "etc/motekeep/config.toml",
            "etc/motekeep/config.example.toml",
            "var/lib/motekeep/journal.db",
        }
        assert f"{device.root}/etc/motekeep" in said
        assert f"{device.root}/var/lib/motekeep" in said

    def test_a_second_time_is_no_error(self, device: Device) -> None:
        device.installed()
        device.installed("--uninstall")

        device.installed("--uninstall")

    def test_drop_ins_of_the_operator_are_left(self, device: Device) -> None:
        device.installed("--drop-in", "memory")
        own = device.root / "etc/systemd/system/motekeep.service.d/override.conf"
        own.write_text("[Service]\nNice=5\n")

        device.installed("--uninstall")

        assert [file.name for file in own.parent.iterdir()] == ["override.conf"]

    def test_a_command_of_that_name_by_somebody_else_is_left(self, device: Device) -> None:
        command = device.root / "usr/local/bin/motekeep"
        command.parent.mkdir(parents=True)
        command.write_text("#!/bin/sh\n")

        device.installed()
        device.installed("--uninstall")

        assert command.read_text() == "#!/bin/sh\n"


class TestRefusals:
    @pytest.mark.parametrize("version", ["3.9", "3.10", "3.14"])
    def test_another_python_is_named_with_what_is_needed(self, device: Device, version: str) -> None:
        line = device.refused(VERSION=version)

        assert f"is Python {version}, needed is 3.11 to 3.13" in line

    def test_an_interpreter_that_does_not_run_is_named(self, device: Device) -> None:
        device.python = device.root / "absent"

        assert "absent does not run" in device.refused()

    def test_a_python_without_environments_says_which_package(self, device: Device) -> None:
        assert "apt-get install python3-venv" in device.refused(NO_VENV="yes")

    @pytest.mark.parametrize("file", ["config.example.toml", "systemd/motekeep.udev", "tools/constraints.txt"])
    def test_an_incomplete_checkout_names_the_file(self, copy: Device, file: str) -> None:
        (copy.checkout / file).unlink()

        assert f"no {file}" in copy.refused()

    @pytest.mark.parametrize(
        ("options", "told"),
        [
            (["--frobnicate"], "unknown option --frobnicate"),
            (["--wheels"], "--wheels needs a value"),
        ],
    )
    def test_wrong_usage_is_told_from_failure_by_its_code(self, device: Device, options: list[str], told: str) -> None:
        assert told in device.refused(*options, code=2)

    @pytest.mark.parametrize("name", ["chron", "../motekeep", ""])
    def test_an_unknown_drop_in_lists_those_there_are(self, device: Device, name: str) -> None:
        line = device.refused("--drop-in", name, code=1 if name else 2)

        assert "choose from: chrony memory" in line or "needs a value" in line

    def test_an_empty_folder_of_wheels_says_how_to_fill_it(self, device: Device, tmp_path: Path) -> None:
        assert "holds no wheels; tools/install --help" in device.refused("--wheels", str(tmp_path))

    def test_a_program_of_somebody_else_in_the_place_is_not_overwritten(self, device: Device) -> None:
        (device.root / "opt/motekeep").mkdir(parents=True)

        assert "was not made by tools/install" in device.refused()

    def test_two_at_once_are_one_too_many(self, device: Device) -> None:
        releases = device.root / "opt/motekeep-releases"
        releases.mkdir(parents=True)
        hold = ["flock", str(releases / ".lock"), "sh", "-c", "echo; read line"]
        with subprocess.Popen(hold, stdin=subprocess.PIPE, stdout=subprocess.PIPE) as held:
            assert held.stdout is not None
            held.stdout.readline()

            line = device.refused()

            held.communicate(b"\n")
        assert "another tools/install is at work" in line
        device.installed()

    def test_a_root_that_is_not_there_is_named(self, device: Device, tmp_path: Path) -> None:
        device.root = tmp_path / "absent"

        assert "is not a folder" in device.refused()

    def test_a_full_disk_is_told_before_anything_is_built(self, device: Device, tmp_path: Path) -> None:
        tools = tmp_path / "tools"
        tools.mkdir()
        (tools / "df").write_text("#!/bin/sh\necho head\necho '/dev/x 100 90 4096 99% /'\n")
        (tools / "df").chmod(0o755)

        assert "only 4 MB are free" in device.refused(PATH=f"{tools}:{os.environ['PATH']}")
        assert device.releases == set()

    @pytest.mark.skipif(os.geteuid() != 0, reason="whoever runs the tests is already somebody else")
    def test_without_root_rights_it_says_so(self, copy: Device, tmp_path: Path) -> None:
        for folder in (tmp_path, *tmp_path.parents[:3]):
            folder.chmod(0o755)
        result = subprocess.run(
            [copy.checkout / "tools/install"], capture_output=True, text=True, user="nobody", check=False, timeout=60
        )

        assert (result.returncode, result.stderr) == (
            1,
            "tools/install: only root can install; run it with sudo, or with --root DIR to fill an image\n",
        )


# A machine in a mount namespace: /etc and /opt of the host are seen, what is written goes to memory and is gone
# afterwards. `systemctl` is a stand-in that remembers what it was told; it refuses to start a release that holds a file
# `broken`, and one that holds `dying` does not stay up. Nobody sleeps.
MACHINE = """\
set -e
mount -t tmpfs none "$MACHINE"
mkdir -p "$MACHINE/etc" "$MACHINE/work" "$MACHINE/bin"
mount -t overlay none -o "lowerdir=/etc,upperdir=$MACHINE/etc,workdir=$MACHINE/work" /etc
for folder in /opt /run /var/lib /usr/local/bin; do mount -t tmpfs none "$folder"; done
mkdir -p /run/systemd/system
cat > "$MACHINE/bin/systemctl" <<'END'
#!/bin/sh
echo "$*" >> "$MACHINE/told"
case "$*" in
  *is-active*chrony*) [ -e "$MACHINE/chrony" ] ;;
  *is-active*) [ -e "$MACHINE/active" ] ;;
  *is-enabled*) [ -e "$MACHINE/enabled" ] ;;
  *restart*|*--now*)
    rm -f "$MACHINE/active"
    [ ! -e /opt/motekeep/broken ] || exit 1
    [ -e /opt/motekeep/dying ] || touch "$MACHINE/active" ;;
esac
END
printf '#!/bin/sh\\n' | tee "$MACHINE/bin/udevadm" > "$MACHINE/bin/sleep"
chmod +x "$MACHINE/bin/"*
export PATH="$MACHINE/bin:$PATH"
cd /
"""


@pytest.mark.whole
@pytest.mark.skipif(os.geteuid() != 0, reason="a mount namespace needs root")
class TestLive:
    @pytest.fixture
    def run(self, device: Device, tmp_path: Path) -> Iterator["subprocess.Popen[str]"]:
        (tmp_path / "machine").mkdir()
        with subprocess.Popen(
            ["unshare", "--mount", "--propagation", "private", "bash"],
            env={
                **os.environ,
                "MACHINE": str(tmp_path / "machine"),
                "PYTHON": str(device.python),
                **device.environment,
            },
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            stderr=subprocess.STDOUT,
            text=True,
        ) as process:
            yield process

    @staticmethod
    def story(run: "subprocess.Popen[str]", script: str, fault: str = "") -> str:
        given = f'INSTALL="{CHECKOUT}/tools/install --python $PYTHON"\nexport FAULT={fault}\n'
        said, _ = run.communicate(MACHINE + given + textwrap.dedent(script), timeout=60)
        return said

    def test_a_running_service_is_restarted_with_the_new_version_after_systemd_read_the_unit(
        self, run: "subprocess.Popen[str]"
    ) -> None:
        said = self.story(
            run,
            """\
            $INSTALL >/dev/null
            touch "$MACHINE/active"; : > "$MACHINE/told"
            $INSTALL
            cat "$MACHINE/told"
            """,
        )

        told = [line for line in said.splitlines() if line in ("daemon-reload", "restart motekeep.service")]
        assert told == ["daemon-reload", "restart motekeep.service"]

    def test_a_first_installation_starts_nothing_unless_told_to(self, run: "subprocess.Popen[str]") -> None:
        said = self.story(
            run,
            """\
            $INSTALL >/dev/null
            [ ! -e "$MACHINE/active" ] && echo not started
            $INSTALL --enable >/dev/null
            [ -e "$MACHINE/active" ] && echo started
            """,
        )

        assert said.splitlines() == ["not started", "started"]

    @pytest.mark.parametrize("fault", ["broken", "dying"])
    def test_a_new_version_that_does_not_keep_running_gives_way_to_the_old_one_with_its_unit(
        self, run: "subprocess.Popen[str]", fault: str
    ) -> None:
        said = self.story(
            run,
            """\
            $INSTALL >/dev/null
            touch "$MACHINE/active"
            before=$(readlink /opt/motekeep)
            echo "# of the old version" >> /opt/motekeep/systemd/motekeep.service
            PIP='touch "$(dirname "$0")/../$FAULT"' $INSTALL >/dev/null || echo "exit $?"
            [ "$(readlink /opt/motekeep)" = "$before" ] && echo back in use
            tail -n 1 /etc/systemd/system/motekeep.service
            [ -e "$MACHINE/active" ] && echo running
            """,
            fault,
        )

        error, code, *rest = said.splitlines()
        assert "does not keep running (journalctl -u motekeep says why)" in error
        assert "is back in service" in error
        assert code == "exit 1"
        assert rest == ["back in use", "# of the old version", "running"]

    def test_an_interpreter_that_the_service_cannot_see_is_refused(self, run: "subprocess.Popen[str]") -> None:
        said = self.story(run, "HOME_OF_PYTHON=/home/pat/.local/bin/python3.11 $INSTALL || true")

        assert "the service would not see /home/pat/.local/bin/python3.11" in said
        assert len(said.splitlines()) == 1

    def test_another_time_service_brings_up_the_drop_in(self, run: "subprocess.Popen[str]") -> None:
        said = self.story(
            run,
            """\
            touch "$MACHINE/chrony"
            $INSTALL | grep -c -- "--drop-in chrony"
            $INSTALL --drop-in chrony | grep -c -- "--drop-in chrony"
            """,
        )

        assert said.splitlines() == ["1", "0"]

    def test_uninstalling_stops_the_service_first(self, run: "subprocess.Popen[str]") -> None:
        said = self.story(
            run,
            """\
            $INSTALL --enable >/dev/null; : > "$MACHINE/told"
            $INSTALL --uninstall >/dev/null
            cat "$MACHINE/told"
            ls /etc/motekeep /opt
            """,
        )

        assert said.splitlines()[0] == "disable --quiet --now motekeep.service"
        assert "config.toml" in said
        assert "motekeep-releases" not in said


@pytest.mark.skipif(shutil.which("shellcheck") is None, reason="no shellcheck here; apt-get install shellcheck")
def test_the_script_is_clean_in_the_eyes_of_shellcheck() -> None:
    result = subprocess.run(
        ["shellcheck", CHECKOUT / "tools/install"], capture_output=True, text=True, check=False, timeout=60
    )

    assert (result.returncode, result.stdout) == (0, "")


@pytest.mark.whole
def test_the_real_package_installs_with_the_pinned_versions_and_its_command_runs(tmp_path: Path) -> None:
    """With packages from the network, as on a device."""
    (tmp_path / "root").mkdir()
    device = Device(tmp_path / "root", Path(sys.executable), environment={"TMPDIR": str(tmp_path)})
    environment = {**os.environ, **device.environment}
    result = subprocess.run(device.command(), capture_output=True, text=True, env=environment, check=False, timeout=600)
    assert result.returncode == 0, result.stderr

    def python(*words: str) -> str:
        # the console script names /opt, where it will be; the interpreter beside it works here too
        return subprocess.run(
            [device.in_use / "bin/python", "-I", *words], capture_output=True, text=True, check=True, timeout=60
        ).stdout

    version = python("-c", "from motekeep.cli import main; main(['--version'])")
    packages = python("-m", "pip", "freeze", "--disable-pip-version-check").splitlines()
    dependencies = {package for package in packages if not package.startswith("motekeep")}

    assert "motekeep, version" in version
    assert dependencies
    assert dependencies <= set((CHECKOUT / "tools/constraints.txt").read_text().splitlines())
    # heavy things are never on a device: they double its memory, and some have no wheel for it
    assert not [package for package in packages if package.startswith(("numpy", "scipy", "rich", "typer", "cffi"))]
