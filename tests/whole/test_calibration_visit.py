"""A visit with a stick: a document is installed, listed and gone back from, with the daemon running or stopped."""

from pathlib import Path

import pytest
from click.testing import CliRunner, Result

from calibration_site import NESTED, Calibrated, accepted, document
from motekeep.cli import main
from motekeep.commands import calibration
from whole_site import Gateway, gateway

pytestmark = pytest.mark.whole

STATE = "calibration/north/state"


def motekeep(site: Gateway, *words: object) -> Result:
    return CliRunner().invoke(main, ["calibration", *map(str, words), "--config", str(site.config)])


def stick(calibrated: Calibrated, text: bytes, *, sign: bool = True) -> Path:
    path = calibrated.site.folder / "stick.toml"
    path.write_bytes(text)
    beside = path.with_name("stick.toml.sig")
    beside.unlink(missing_ok=True)
    if sign:
        beside.write_bytes(calibrated.anna.sign(text))
    return path


def test_a_visit_with_a_stick(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    with gateway(tmp_path) as site:
        calibrated = Calibrated(site)
        subscriber = site.subscribe()
        daemon = site.start_daemon()
        daemon.wait_event("link.connected")
        for issue in (1, 2):
            done = motekeep(site, "install", stick(calibrated, document(issue)))
            assert done.exit_code == 0, done.output
            assert f"issue {issue} is in force, signed by anna@example" in done.output
        listed = motekeep(site, "list").output
        assert "issue 1: kept" in listed
        assert "issue 2: in force, soaking" in listed

        refusals = [
            (document(3, gateway="west-gate"), True, "it is for gateway 'west-gate'"),
            (document(3), False, "unsigned"),
            (document(1), True, "issue-not-higher"),
            (document(2, 0.7), True, "issue-reused"),
            (document(3) + b"#\n" * 500_000, True, "too-large"),
            (NESTED, True, "nested too deeply"),
        ]
        for text, sign, why in refusals:
            done = motekeep(site, "install", stick(calibrated, text, sign=sign))
            assert (done.exit_code, why in done.output) == (1, True), done.output
        assert calibrated.front == document(2)

        back = motekeep(site, "restore", "north")
        assert (back.exit_code, back.output) == (0, "issue 1 is in force again\n")
        told = subscriber.wait_on(STATE, lambda s: s["in_force"] and s["in_force"]["by"] == "restore")
        assert (told["in_force"]["issue"], told["highest_issue"]) == (1, 2)

        assert daemon.terminate()[0] == 0
        monkeypatch.setattr(calibration, "ANSWER_S", 0.5)
        left = motekeep(site, "install", stick(calibrated, document(4)))
        assert left.exit_code == 1
        assert "at its next start" in left.output
        site.start_daemon()
        assert accepted(subscriber, document(4))["in_force"]["by"] == "install"
        assert calibrated.front == document(4)
