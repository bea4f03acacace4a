"""The broker is gone and the daemon is killed again and again: everything that was committed arrives.

The story and its bars are those of `tools/bench/outage.py`, here in its short form and, in the long tier, as it stands.
"""

import subprocess
import sys
from pathlib import Path

import pytest

OUTAGE = Path(__file__).resolve().parents[2] / "tools" / "bench" / "outage.py"


def run(*arguments: str, patience_s: float) -> None:
    done = subprocess.run(
        [sys.executable, str(OUTAGE), *arguments], capture_output=True, text=True, check=False, timeout=patience_s
    )
    assert done.returncode == 0, done.stdout + done.stderr
    assert "committed and missing                          0" in done.stdout


@pytest.mark.whole
def test_ten_minutes_without_a_broker_and_five_kills_lose_nothing() -> None:
    run("--gone", "10", "--kills", "5", patience_s=300.0)


@pytest.mark.long
def test_an_hour_without_a_broker_and_fifty_kills_lose_nothing() -> None:
    run(patience_s=900.0)
