"""The short form of `tools/bench/install_kill.py`: SIGKILL amid an installation leaves old or new, whole."""

import sys
from pathlib import Path

import pytest

BENCH = Path(__file__).resolve().parents[2] / "tools" / "bench"


@pytest.mark.whole
def test_a_start_after_a_kill_has_the_old_or_the_new_document_whole(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(sys, "path", [str(BENCH), *sys.path])
    from install_kill import run  # noqa: PLC0415 (found there only)

    tally, strange = run(tmp_path, 10, seed=11)
    assert tally.wrong == []
    assert strange == []
    assert tally.old + tally.new == 10
