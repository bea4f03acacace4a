"""What has to say the same in two places does: unit, installer, example configuration, pins, hooks; and no file names
what does not belong in it."""

import re
import subprocess
import tomllib
from importlib.metadata import distribution
from pathlib import Path

import pytest
from packaging.requirements import Requirement
from packaging.utils import canonicalize_name

from motekeep import __version__
from motekeep.edges.systemd import LOADED_FROM, UNIT_CREDENTIALS

CHECKOUT = Path(__file__).parents[1]
UNIT = (CHECKOUT / "systemd/motekeep.service").read_text()
INSTALL = (CHECKOUT / "tools/install").read_text()
SYSUSERS = (CHECKOUT / "systemd/motekeep.sysusers").read_text()
TMPFILES = (CHECKOUT / "systemd/motekeep.tmpfiles").read_text()
EXAMPLE = tomllib.loads((CHECKOUT / "config.example.toml").read_text())
PROJECT = tomllib.loads((CHECKOUT / "pyproject.toml").read_text())


def unit_values(key: str) -> list[str]:
    return re.findall(rf"^{key}=(.*)$", UNIT, re.MULTILINE)


def unit_value(key: str) -> str:
    [value] = unit_values(key)
    return value


def install_path(name: str) -> str:
    """A path that tools/install spells."""
    found = re.search(rf"^readonly {name}=(\S+)", INSTALL, re.MULTILINE)
    assert found, name
    return found[1]


def owner_and_mode(path: str) -> tuple[str, str, str]:
    """(mode, user, group) that systemd-tmpfiles gives a path."""
    [line] = [line.split() for line in TMPFILES.splitlines() if line.split()[1:2] == [path]]
    return line[2], line[3], line[4]


class TestUnit:
    def test_it_starts_the_command_that_the_installer_puts_there_with_the_file_it_puts_there(self) -> None:
        program, *words = unit_value("ExecStart").split()

        assert program == f"{install_path('CURRENT')}/bin/{next(iter(PROJECT['project']['scripts']))}"
        assert words == ["run", "--config", f"{install_path('CONFIG')}/config.toml"]

    def test_its_user_and_group_are_those_that_sysusers_makes(self) -> None:
        users = [line.split()[1] for line in SYSUSERS.splitlines() if line.startswith("u ")]
        groups = [line.split()[1] for line in SYSUSERS.splitlines() if line.startswith("g ")]

        assert users == [unit_value("User")] == [unit_value("Group")]
        assert groups == [unit_value("SupplementaryGroups")]

    def test_its_state_folder_is_the_one_of_installer_tmpfiles_and_example(self) -> None:
        folder = f"/var/lib/{unit_value('StateDirectory')}"

        assert folder == install_path("STATE")
        assert owner_and_mode(folder) == (unit_value("StateDirectoryMode"), unit_value("User"), unit_value("Group"))
        assert EXAMPLE["store"]["path"].startswith(f"{folder}/")
        assert EXAMPLE["calibration"]["folder"].startswith(f"{folder}/")

    def test_signers_are_writable_by_root_alone_where_the_example_looks_for_them(self) -> None:
        mode, user, group = owner_and_mode(EXAMPLE["calibration"]["signers"])

        assert (user, group) == ("root", unit_value("Group"))
        assert int(mode, 8) & 0o022 == 0

    def test_every_credential_has_a_default_so_that_none_can_stop_the_unit(self) -> None:
        loaded = dict(value.split(":", 1) for value in unit_values("LoadCredential"))
        defaults = [value.split(":", 1)[0] for value in unit_values("SetCredential")]

        assert sorted(loaded) == sorted(defaults)
        assert loaded == {name: str(LOADED_FROM / name) for name in loaded}
        assert all(owner_and_mode(path) == ("0600", "root", "root") for path in loaded.values())

    def test_the_example_reads_its_password_where_the_unit_puts_it(self) -> None:
        assert Path(EXAMPLE["broker"]["password_file"]) == UNIT_CREDENTIALS / "mqtt-password"
        assert UNIT_CREDENTIALS.name == "motekeep.service"

    @pytest.mark.parametrize("file", ["motekeep.service", "drop-ins/chrony.conf", "drop-ins/memory.conf"])
    def test_every_line_of_its_service_section_has_a_reason_right_above_it(self, file: str) -> None:
        section = (CHECKOUT / "systemd" / file).read_text().partition("[Service]\n")[2].partition("\n[")[0]
        lines = section.splitlines()
        bare = [
            line
            for above, line in zip(["", *lines], lines, strict=False)
            if line and not line.startswith("#") and not above.startswith("# ")
        ]

        assert len([line for line in lines if "=" in line and not line.startswith("#")]) >= 2
        assert bare == []

    def test_every_drop_in_says_the_command_that_installs_it(self) -> None:
        for file in (CHECKOUT / "systemd/drop-ins").glob("*.conf"):
            assert f"tools/install --drop-in {file.stem}\n" in file.read_text()


class TestVersions:
    @staticmethod
    def pins() -> dict[str, str]:
        lines = (CHECKOUT / "tools/constraints.txt").read_text().splitlines()
        pairs = [line.split("==") for line in lines if line and not line.startswith("#")]
        return {canonicalize_name(name): version for name, version in pairs}

    @staticmethod
    def asked() -> list[Requirement]:
        project = PROJECT["project"]
        groups = [
            project["dependencies"],
            *project["optional-dependencies"].values(),
            PROJECT["build-system"]["requires"],
        ]
        own = project["name"]
        return [r for group in groups for r in map(Requirement, group) if r.name != own]

    @staticmethod
    def applies(requirement: Requirement, extras: frozenset[str]) -> bool:
        marker = requirement.marker
        return marker is None or any(marker.evaluate({"extra": extra}) for extra in ("", *extras))

    def test_each_thing_that_the_project_asks_for_is_pinned_to_a_version_it_allows(self) -> None:
        pins = self.pins()
        wrong = [str(r) for r in self.asked() if not r.specifier.contains(pins.get(canonicalize_name(r.name), "0"))]

        assert wrong == []

    def test_what_those_pull_in_is_pinned_as_well(self) -> None:
        """As far as it is installed here; pip comes with every environment and stays free."""
        waiting = [(r, frozenset(r.extras)) for r in self.asked()]
        seen: set[tuple[str, frozenset[str]]] = set()
        while waiting:
            requirement, extras = waiting.pop()
            name = canonicalize_name(requirement.name)
            if (name, extras) in seen:
                continue
            seen.add((name, extras))
            try:
                requires = distribution(name).requires or []
            except ModuleNotFoundError:
                continue  # an environment of the extra `test` has not all of `dev`
            further = [r for r in map(Requirement, requires) if self.applies(r, extras)]
            waiting.extend((r, frozenset(r.extras)) for r in further)

        missing = {name for name, _ in seen} - self.pins().keys() - {"pip", "motekeep"}
        assert missing == set()

    def test_the_version_is_one(self) -> None:
        assert PROJECT["project"]["version"] == __version__

    def test_hooks_run_the_tools_of_the_environment_and_fetch_nothing(self) -> None:
        hooks = (CHECKOUT / ".pre-commit-config.yaml").read_text()
        tools = {entry.split()[0] for entry in re.findall(r"^ +entry: (.*)$", hooks, re.MULTILINE)}

        assert re.findall(r"repo: (\S+)", hooks) == ["local"]
        assert set(re.findall(r"language: (\S+)", hooks)) == {"system"}
        assert tools == {"ruff", "mypy", "lint-imports"}
        assert all(re.search(rf"\b{tool}\b", (CHECKOUT / "tools/test").read_text()) for tool in tools)


# Put together from pieces, or this file would be the first to break its own rule.
UNWANTED = {
    "a package registry": [
        "py" + "pi.org",
        "pythonhosted" + ".org",
        "pi" + "wheels",
        "registry." + "npm",
        "deb." + "debian.org",
        "crates" + ".io",
    ],
    "a path of some machine": ["/wo" + "rk/", "/tmp/" + "dev", "." + "library/", "/home/" + "pi/"],
}


def tracked() -> list[Path]:
    listed = subprocess.run(
        ["git", "ls-files", "-z", "--cached", "--others", "--exclude-standard"],
        cwd=CHECKOUT,
        capture_output=True,
        text=True,
        check=False,
    )
    if listed.returncode != 0:
        pytest.skip("not a git checkout: what is tracked is not known")
    return [CHECKOUT / name for name in listed.stdout.split("\0") if name and (CHECKOUT / name).is_file()]


@pytest.mark.parametrize("kind", UNWANTED)
def test_no_file_names(kind: str) -> None:
    found = [
        f"{file.relative_to(CHECKOUT)}: {word}"
        for file in tracked()
        for word in UNWANTED[kind]
        if word in file.read_text("utf-8", errors="replace")
    ]

    assert found == []
