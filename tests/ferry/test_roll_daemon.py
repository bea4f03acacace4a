"""A roll onto the real daemon: it verifies, refuses by name, switches, and is brought back."""

import json
from pathlib import Path

import pytest
from click.testing import CliRunner

from emulated_fleet import document_text, write_signed
from keys import make_key
from moteferry.cli import main
from moteferry.roll.offer import Target
from whole_site import gateway

pytestmark = pytest.mark.whole

NORTH = Target("quarry", "east-gate", "north")


def test_documents_travel_to_a_daemon_and_back(tmp_path: Path) -> None:
    operator, stranger = make_key(tmp_path / "keys", "operator"), make_key(tmp_path / "keys", "stranger")
    (tmp_path / "signers").write_text(operator.line())
    site_folder = tmp_path / "site"
    site_folder.mkdir()
    with gateway(site_folder) as site:
        site.write_config(interval=10, health_every=5.0)
        calibration = f'[calibration]\nfolder = "{tmp_path}/calibration"\nsigners = "{tmp_path}/signers"\nsoak = 5\n'
        site.config.write_text(site.config.read_text() + calibration)
        where = ["--broker", f"127.0.0.1:{site.mosquitto.port}", "--register", str(tmp_path / "register.db")]

        def roll(*words: str) -> tuple[int, dict]:
            result = CliRunner().invoke(main, ["roll", *words, *where, "--yes", "--json", "--patience", "60"])
            assert result.exit_code in (0, 1), result.output
            return result.exit_code, json.loads(result.stdout)

        def document(issue: int, slope: float, key: Path) -> str:
            [path] = write_signed(tmp_path / f"of-{key.name}", key, {NORTH: document_text(NORTH, issue, slope)})
            return str(path)

        subscriber = site.subscribe()
        site.start_daemon()
        subscriber.wait_on("reading/north", bool)

        code, told = roll(document(3, 0.9, operator.path), "--hold", "6")
        assert (code, told["outcome"]) == (0, "done"), told
        code, told = roll(document(4, 0.9, stranger.path), "--hold", "0")
        [failure] = told["failures"]
        assert (code, failure["step"]) == (1, "refused")
        assert failure["why"].startswith("unknown-signer: ")

        assert roll(document(4, 0.7, operator.path), "--hold", "0")[0] == 0
        code, told = roll("--undo", "--key", str(operator.path), "--out", str(tmp_path / "undo"), "--hold", "0")
        assert (code, told["outcome"]) == (0, "done"), told
        reading = subscriber.wait_on(
            "reading/north", lambda r: (r.get("calibration") or {}).get("issue") == 5 and r["pm2_5"]["raw"] is not None
        )
        raw, value = reading["pm2_5"]["raw"], reading["pm2_5"]["value"]
        assert value == pytest.approx(0.9 * raw + 0.4, abs=0.02)

    history = CliRunner().invoke(main, ["history", "--register", str(tmp_path / "register.db"), "--json"])
    assert [(t["issue"], t["signer"]) for t in json.loads(history.stdout)] == [
        (issue, "operator@example") for issue in (3, 4, 5)
    ]
