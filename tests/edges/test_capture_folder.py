"""Captures of failures: whole files, the newest twenty, readable by replay."""

import gzip
import os
from pathlib import Path

import pytest

from motekeep.edges.capture_folder import MOST_BYTES, MOST_FILES, CaptureFolder
from motekeep.errors import StoreError


def name(n: int) -> str:
    return f"20261201T09{n:02}00Z-north-fan-stopped.txt.gz"


def test_a_capture_is_what_was_given_compressed(tmp_path: Path) -> None:
    folder = CaptureFolder(tmp_path)
    folder.keep(name(1), "1.000 north frame 424d\n")
    assert [f.name for f in folder.folder.iterdir()] == [name(1)]
    assert gzip.decompress((folder.folder / name(1)).read_bytes()) == b"1.000 north frame 424d\n"


def test_the_newest_twenty_stay(tmp_path: Path) -> None:
    folder = CaptureFolder(tmp_path)
    for n in range(MOST_FILES + 7):
        folder.keep(name(n), f"{n}\n")
    assert sorted(f.name for f in folder.folder.iterdir()) == [name(n) for n in range(7, MOST_FILES + 7)]


def test_together_they_stay_within_two_mebibytes(tmp_path: Path) -> None:
    folder = CaptureFolder(tmp_path)
    for n in range(12):
        folder.keep(name(n), os.urandom(220_000).hex())
    left = sorted(f.name for f in folder.folder.iterdir())
    assert sum(f.stat().st_size for f in folder.folder.iterdir()) <= MOST_BYTES
    assert left[-1] == name(11)
    assert 5 < len(left) < 12


def test_other_files_in_the_folder_are_nobody_elses_business(tmp_path: Path) -> None:
    folder = CaptureFolder(tmp_path)
    folder.folder.mkdir()
    (folder.folder / "notes.txt").write_text("mine")
    for n in range(MOST_FILES + 2):
        folder.keep(name(n), "x\n")
    assert (folder.folder / "notes.txt").read_text() == "mine"


def test_a_folder_that_cannot_be_made_is_a_named_error_and_leaves_nothing(tmp_path: Path) -> None:
    (tmp_path / "captures").write_text("in the way")
    with pytest.raises(StoreError, match=name(1)):
        CaptureFolder(tmp_path).keep(name(1), "x\n")
