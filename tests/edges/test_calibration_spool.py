"""The spool between a person at the gateway and the daemon: each request once, nothing but plain files, bounded."""

import os
from pathlib import Path

from motekeep.edges.calibration_spool import LARGEST_BYTES, MOST_ANSWERS, MOST_TAKEN, CalibrationSpool

TICKET = "0" * 31


def test_a_request_is_taken_once_and_answered_once(tmp_path: Path) -> None:
    spool = CalibrationSpool(tmp_path)
    ticket = spool.put(b"please")
    daemon = CalibrationSpool(tmp_path)
    assert list(daemon.requests()) == [(ticket, b"please")]
    assert list(daemon.requests()) == []
    assert spool.answer_to(ticket) is None
    daemon.answer(ticket, b"done")
    assert spool.answer_to(ticket) == b"done"
    assert spool.answer_to(ticket) is None
    assert list(spool.folder.iterdir()) == []


def test_requests_wait_for_a_daemon_in_the_order_in_which_they_came(tmp_path: Path) -> None:
    spool = CalibrationSpool(tmp_path)
    tickets = [spool.put(b"%d" % n) for n in range(4)]
    for n, ticket in enumerate(tickets):
        os.utime(spool.folder / f"{ticket}.ask", (n, n))
    assert [body for _, body in spool.requests()] == [b"0", b"1", b"2", b"3"]


def test_links_pipes_and_what_is_too_large_are_thrown_away_unread(tmp_path: Path) -> None:
    spool = CalibrationSpool(tmp_path)
    spool.put(b"sound")
    secret = tmp_path / "secret"
    secret.write_text("secret")
    (spool.folder / f"{TICKET}1.ask").symlink_to(secret)
    os.mkfifo(spool.folder / f"{TICKET}2.ask")
    (spool.folder / f"{TICKET}3.ask").write_bytes(b"x" * (LARGEST_BYTES + 1))
    assert [body for _, body in spool.requests()] == [b"sound"]
    assert secret.read_text() == "secret"
    assert list(spool.folder.iterdir()) == []


def test_other_names_are_left_alone(tmp_path: Path) -> None:
    spool = CalibrationSpool(tmp_path)
    spool.put(b"sound")
    for name in ("x.ask", f"{TICKET}4.part", "..ask", f"{TICKET}g.ask"):
        (spool.folder / name).write_text("no")
    assert len(list(spool.requests())) == 1
    assert len(list(spool.folder.iterdir())) == 4


def test_a_turn_takes_a_handful_and_old_answers_go(tmp_path: Path) -> None:
    spool = CalibrationSpool(tmp_path)
    for n in range(MOST_TAKEN + 3):
        spool.put(b"%d" % n)
    assert len(list(spool.requests())) == MOST_TAKEN
    assert len(list(spool.requests())) == 3
    for n in range(MOST_ANSWERS + 5):
        spool.answer(f"{n:032x}", b"said")
    assert len(list(spool.folder.glob("*.said"))) == MOST_ANSWERS


def test_a_folder_that_is_not_there_is_no_request(tmp_path: Path) -> None:
    assert list(CalibrationSpool(tmp_path / "absent").requests()) == []
    CalibrationSpool(tmp_path / "absent").answer("0" * 32, b"said")
