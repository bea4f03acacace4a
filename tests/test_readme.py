"""The README says what the code does: its tables are held against the code."""

from pathlib import Path

from motekeep.cli import main
from motekeep.health.finding import KINDS
from motekeep.measure.document_text import parse
from motekeep.message.schema import CHANNELS

ROOT = Path(__file__).parent.parent
README = (ROOT / "README.md").read_text()


def rows(first_cell: str) -> list[list[str]]:
    """The rows of the table whose head begins with this cell."""
    lines = README.splitlines()
    start = next(i for i, line in enumerate(lines) if line.startswith(f"| {first_cell} |"))
    table = []
    for line in lines[start + 2 :]:
        if not line.startswith("|"):
            break
        table.append([cell.strip() for cell in line.strip("|").split("|")])
    return table


def test_every_command_stands_in_the_readme_and_no_other() -> None:
    told = {row[0].strip("`").removeprefix("motekeep ") for row in rows("command")}
    assert told == set(main.commands)


def test_every_topic_stands_in_the_readme_with_its_retained_flag() -> None:
    told = {(row[0].strip("`").replace("<sensor>", "{sensor}"), row[1]) for row in rows("topic")}
    assert told == {(c.address, "yes" if c.retained else "no") for c in CHANNELS}


def test_every_finding_stands_in_the_readme_with_its_category_and_flag() -> None:
    told = {(row[0].strip("`"), row[1], row[2]) for row in rows("finding")}
    flags = {None: "", 3: "3", 4: "4"}
    assert told == {(code, k.category.value.replace("_", " "), flags[k.flag]) for code, k in KINDS.items()}


def test_the_two_commands_and_the_installer_exist_and_can_be_run() -> None:
    for script in ("tools/demo", "tools/test", "tools/install"):
        assert script in README
        assert (ROOT / script).stat().st_mode & 0o111


def test_the_cautions_are_there() -> None:
    for word in (
        "regulatory",
        "smoke",
        "life-safety",
        "disconnect its power",
        "eye-safe",
        "flammable",
        "reversed supply",
    ):
        assert word in README


def test_the_calibration_document_of_the_readme_is_a_valid_one() -> None:
    text = README.split("```toml\n")[1].split("```")[0]
    document = parse(text.encode())
    assert (document.issue, document.sensor) == (7, "north")
