"""Signed calibration on a device: who is obeyed, what is refused and by which name, and the way back."""

import json
from pathlib import Path

import pytest
from structlog.testing import capture_logs

from keys import Key, make_key, revocation_list
from motekeep.measure.document import digest
from motekeep.measure.document_text import LARGEST_BYTES
from signed_gateway import MINUTE, SignedGateway, document

HISTORY = 20  # minutes of readings, enough to rehearse on


@pytest.fixture(scope="module")
def keys(tmp_path_factory: pytest.TempPathFactory) -> dict[str, Key]:
    folder = tmp_path_factory.mktemp("keys")
    return {name: make_key(folder, name) for name in ("anna", "bert", "mallory")}


@pytest.fixture
def anna(keys: dict[str, Key]) -> Key:
    return keys["anna"]


@pytest.fixture
def gateway(tmp_path: Path, anna: Key) -> SignedGateway:
    """With a history of raw readings, and anna trusted."""
    one = SignedGateway(tmp_path)
    one.trust(anna.line())
    one.live(HISTORY)
    return one


def test_a_signed_offer_comes_into_force_and_is_told_with_issue_digest_and_signer(
    gateway: SignedGateway, anna: Key
) -> None:
    state = gateway.signed(anna, document(7))
    assert state.in_force is not None
    assert (state.in_force.issue, state.in_force.digest) == (7, digest(document(7)))
    assert (state.in_force.signer, state.in_force.key, state.in_force.by) == (anna.principal, anna.fingerprint, "offer")
    assert (state.refused, state.highest_issue, gateway.in_force) == (None, 7, 7)
    assert gateway.front == document(7)
    assert (gateway.folder / "north.toml.sig").read_bytes() == anna.sign(document(7))


def test_no_reading_mixes_two_documents(gateway: SignedGateway, anna: Key) -> None:
    gateway.signed(anna, document(1, 0.8))
    gateway.run(150)
    gateway.signed(anna, document(2, 0.9))
    made = gateway.stored[HISTORY:] + gateway.run(3 * MINUTE)
    issues = [(r.calibration.issue, r.pm2_5.value / r.pm2_5.raw) for r in made if r.calibration and r.pm2_5]  # type: ignore[operator]
    assert {issue: round(ratio, 1) for issue, ratio in issues} == {1: 0.8, 2: 0.9}
    assert [issue for issue, _ in issues] == sorted(issue for issue, _ in issues)


def refused(gateway: SignedGateway, text: bytes, signature: bytes) -> str:
    """The reason, after making sure that nothing else has changed."""
    before = gateway.front, gateway.in_force, dict(gateway.book.values), sorted(gateway.folder.rglob("*.toml"))
    with capture_logs() as logs:
        state = gateway.offer(text, signature)
    assert (gateway.front, gateway.in_force, gateway.book.values, sorted(gateway.folder.rglob("*.toml"))) == before
    assert state.refused is not None
    assert not state.refused.withdrawn
    assert state.refused.digest == digest(text)
    [told] = [log for log in logs if log["event"] == "calibration.refused"]
    assert told["reason"] == state.refused.reason
    return state.refused.reason


OVERFLOW = """
[[step]]
kind = "linear"
slope = { value = 1e308, u = 0.02 }
offset = { value = 0.0, u = 0.1 }
"""
CHANGED = {
    "other-site": document(2, site="harbour"),
    "other-gateway": document(2, gateway="west"),
    "other-sensor": document(2, sensor="south"),
    "expired": document(2, valid_until="2026-11-30T00:00:00Z"),
    "not-yet-valid": document(2, valid_from="2026-12-24T00:00:00Z"),
    "issue-reused": document(1, 0.7),
    "issue-not-higher": document(1),
    "moves-too-far": document(2, 2.5),
    "too-large": document(2) + b"# " + b"x\n" * LARGEST_BYTES,
}


@pytest.mark.parametrize("reason", CHANGED)
def test_a_signed_document_that_must_not_be_used_is_refused_by_name(
    gateway: SignedGateway, anna: Key, reason: str
) -> None:
    gateway.signed(anna, document(1))
    if reason == "issue-not-higher":
        gateway.signed(anna, document(3))
    assert refused(gateway, CHANGED[reason], anna.sign(CHANGED[reason])) == reason


@pytest.mark.parametrize(
    "text",
    [
        document(2, steps=OVERFLOW),
        document(2).replace(b"0.02", b"inf"),
        document(2).replace(b"0.02", b"nan"),
        b"[" * 3000,
        b"a." * 200 + b"a = 1\n",
        b"\x00\xff" * 40,
        b"",
    ],
)
def test_what_is_signed_and_impossible_is_refused_with_its_key(gateway: SignedGateway, anna: Key, text: bytes) -> None:
    gateway.signed(anna, document(1))
    payload = json.dumps({"document": text.decode("latin-1"), "signature": ""})
    text = json.loads(payload)["document"].encode()
    assert refused(gateway, text, anna.sign(text)) == "bad-document"


def test_who_is_not_trusted_is_refused_before_anything_is_read(
    gateway: SignedGateway, anna: Key, keys: dict[str, Key], monkeypatch: pytest.MonkeyPatch
) -> None:
    gateway.signed(anna, document(1))

    def never(_: bytes) -> None:
        raise AssertionError("it was parsed")

    monkeypatch.setattr("motekeep.loops.examination.parse", never)
    text = document(2)
    assert refused(gateway, text, b"") == "unsigned"
    assert refused(gateway, text, keys["mallory"].sign(text)) == "unknown-signer"
    assert refused(gateway, text.replace(b"0.8", b"0.9"), anna.sign(text)) == "bad-signature"
    assert refused(gateway, text, anna.sign(text, "file")) == "other-namespace"
    gateway.trust(anna.line('valid-before="20261130"'))
    assert refused(gateway, text, anna.sign(text)) == "expired-signer"


@pytest.mark.parametrize(
    ("payload", "reason"),
    [
        (b"rubbish", "bad-offer"),
        (b"{}", "bad-offer"),
        (b'{"document": 3, "signature": ""}', "bad-offer"),
        (b'{"document": "\\ud800", "signature": ""}', "bad-offer"),
        (b"x" * 1_000_000, "too-large"),
        (b"[" * 100_000, "bad-offer"),
    ],
)
def test_an_offer_of_another_shape_is_refused(gateway: SignedGateway, payload: bytes, reason: str) -> None:
    state = gateway.offer_payload(payload)
    assert state.refused is not None
    assert state.refused.reason == reason


def test_what_is_in_force_already_is_accepted_quietly(
    gateway: SignedGateway, anna: Key, monkeypatch: pytest.MonkeyPatch
) -> None:
    gateway.signed(anna, document(1))
    told = len(gateway.posted)
    monkeypatch.setattr("motekeep.edges.signers.PROGRAM", "no-such-program")
    with capture_logs() as logs:
        state = gateway.signed(anna, document(1))
    assert (state.refused, len(gateway.posted), logs) == (None, told, [])


def test_dates_decide_nothing_while_nobody_vouches_for_the_clock(tmp_path: Path, anna: Key) -> None:
    gateway = SignedGateway(tmp_path, trusted=False)
    gateway.trust(anna.line('valid-before="20200101"'))
    state = gateway.signed(anna, document(1, valid_until="2026-11-30T00:00:00Z"))
    assert (state.refused, gateway.in_force) == (None, 1)


def test_a_stolen_key_that_burnt_the_highest_number_is_undone_by_removing_it(
    gateway: SignedGateway, anna: Key, keys: dict[str, Key]
) -> None:
    mallory = keys["mallory"]
    gateway.trust(anna.line(), mallory.line())
    gateway.signed(anna, document(1, 0.8))
    gateway.signed(mallory, document(2**52, 0.9))
    assert gateway.in_force == 2**52
    assert refused(gateway, document(2), anna.sign(document(2))) == "issue-not-higher"
    gateway.trust(anna.line())
    gateway.run(40)
    state = gateway.state
    assert (gateway.in_force, gateway.front) == (1, document(1, 0.8))
    assert state.refused is not None
    assert (state.refused.reason, state.refused.issue, state.refused.withdrawn) == ("unknown-signer", 2**52, True)
    assert gateway.signed(anna, document(2)).refused is None
    assert gateway.in_force == 2


def test_a_revoked_key_loses_what_it_signed_as_well(gateway: SignedGateway, anna: Key, keys: dict[str, Key]) -> None:
    bert = keys["bert"]
    gateway.trust(anna.line(), bert.line())
    gateway.revoking = True
    revocation_list(gateway.revoked_file, keys["mallory"])
    gateway.restart()
    gateway.run(2)
    gateway.signed(anna, document(1))
    gateway.signed(bert, document(2))
    gateway.revoked_file.unlink()
    revocation_list(gateway.revoked_file, bert)
    gateway.run(40)
    assert gateway.in_force == 1
    assert gateway.state.refused is not None
    assert gateway.state.refused.reason == "revoked-signer"


def test_a_key_that_has_expired_since_keeps_what_it_signed_and_its_numbers(gateway: SignedGateway, anna: Key) -> None:
    gateway.signed(anna, document(5))
    gateway.trust(anna.line('valid-before="20261130"'))
    gateway.run(40)
    assert gateway.in_force == 5
    gateway.trust(anna.line())
    assert refused(gateway, document(4), anna.sign(document(4))) == "issue-not-higher"


def test_a_restart_changes_nothing(gateway: SignedGateway, anna: Key) -> None:
    gateway.signed(anna, document(1))
    gateway.signed(anna, document(2, 0.9))
    gateway.restart()
    gateway.run(3)
    assert (gateway.in_force, gateway.front, gateway.state.highest_issue) == (2, document(2, 0.9), 2)
    assert gateway.state.in_force is not None
    assert gateway.state.in_force.by == "offer"


def test_the_last_five_are_kept(gateway: SignedGateway, anna: Key) -> None:
    for issue in range(1, 8):
        gateway.signed(anna, document(issue))
    assert [entry.issue for entry in gateway.record.accepted] == [3, 4, 5, 6, 7]
    assert len(list((gateway.folder / "kept" / "north").glob("*.toml"))) == 5


# -- the soak -----------------------------------------------------------------------------------------------------

BENDS = """
[[step]]
kind = "piecewise"
at = [0.0, 50.0, 500.0]
to = [{ value = 0.0, u = 0.1 }, { value = 45.0, u = 1.0 }, { value = 2000.0, u = 9.0 }]
"""


def test_a_document_that_goes_wrong_in_air_that_nobody_rehearsed_is_withdrawn_by_itself(
    gateway: SignedGateway, anna: Key
) -> None:
    gateway.signed(anna, document(1))
    gateway.run(2 * MINUTE)
    assert gateway.signed(anna, document(2, steps=BENDS)).refused is None
    gateway.run(2 * MINUTE)
    assert gateway.in_force == 2
    gateway.mass = 200.0
    with capture_logs() as logs:
        gateway.run(5 * MINUTE)
    assert (gateway.in_force, gateway.front) == (1, document(1))
    state = gateway.state
    assert state.in_force is not None
    assert (state.in_force.issue, state.in_force.by) == (1, "withdrawal")
    assert state.refused is not None
    assert (state.refused.issue, state.refused.reason, state.refused.withdrawn) == (2, "soak-jump", True)
    assert logs[0]["event"] == "calibration.withdrawn"
    # the offer is still at the broker, and comes again
    assert refused(gateway, document(2, steps=BENDS), anna.sign(document(2, steps=BENDS))) == "withdrawn"
    gateway.restart()
    gateway.run(3)
    assert gateway.in_force == 1
    assert gateway.state.refused is not None
    assert gateway.state.refused.reason == "soak-jump"


def test_without_an_earlier_one_readings_are_raw_after_a_withdrawal(gateway: SignedGateway, anna: Key) -> None:
    gateway.signed(anna, document(2, steps=BENDS))
    gateway.mass = 200.0
    last = gateway.run(6 * MINUTE)[-1]
    assert (gateway.in_force, gateway.front, gateway.state.in_force) == (None, None, None)
    assert "uncalibrated" in last.reasons
    assert last.calibration is None


def test_after_the_soak_a_document_has_proven_itself(gateway: SignedGateway, anna: Key) -> None:
    state = gateway.signed(anna, document(2, steps=BENDS))
    assert state.soak_until is not None
    gateway.run(11 * MINUTE)
    assert gateway.state.soak_until is None
    gateway.mass = 200.0
    gateway.run(6 * MINUTE)
    assert gateway.in_force == 2


def test_a_restart_begins_the_soak_anew_with_what_the_rehearsal_said(gateway: SignedGateway, anna: Key) -> None:
    gateway.signed(anna, document(2, steps=BENDS))
    gateway.restart()
    gateway.run(3)
    assert gateway.state.soak_until is not None
    gateway.mass = 200.0
    gateway.run(6 * MINUTE)
    assert gateway.in_force is None


# -- people at the gateway ------------------------------------------------------------------------------------------


def test_a_document_from_a_stick_is_installed_by_the_same_checks(gateway: SignedGateway, anna: Key) -> None:
    text = document(3)
    answer = gateway.ask(kind="install", document=text.decode(), signature=anna.sign(text).decode())
    assert (answer.done, gateway.in_force) == (True, 3)
    assert "issue 3 is in force, signed by anna@example" in answer.said
    worse = gateway.ask(kind="install", document=text.decode() + "\n", signature=anna.sign(text).decode())
    assert not worse.done
    assert "bad-signature" in worse.said


def test_restore_goes_back_by_hand_and_not_under_the_guard(gateway: SignedGateway, anna: Key) -> None:
    for issue in (1, 2, 3):
        gateway.signed(anna, document(issue))
    answer = gateway.ask(kind="restore")
    assert (answer.done, answer.said, gateway.in_force) == (True, "issue 2 is in force again", 2)
    state = gateway.state
    assert state.in_force is not None
    assert (state.in_force.by, state.highest_issue) == ("restore", 3)
    assert gateway.record.by == "restore"
    # the offer of 3 is still retained at the broker: it must not undo what a person did
    assert refused(gateway, document(3), anna.sign(document(3))) == "issue-not-higher"
    assert gateway.signed(anna, document(4)).refused is None


def test_restore_takes_a_number_and_says_what_there_is(gateway: SignedGateway, anna: Key) -> None:
    assert gateway.ask(kind="restore").said == "no such earlier document; kept are issues none"
    for issue in (1, 2, 3):
        gateway.signed(anna, document(issue))
    assert gateway.ask(kind="restore", issue=9).said == "no such earlier document; kept are issues 1, 2, 3"
    assert gateway.ask(kind="restore", issue=1).done
    assert gateway.in_force == 1
    assert gateway.ask(kind="restore", issue=1).said == "issue 1 is in force already"


def test_restore_does_not_bring_back_what_a_stolen_key_has_signed(
    gateway: SignedGateway, anna: Key, keys: dict[str, Key]
) -> None:
    gateway.trust(anna.line(), keys["mallory"].line())
    gateway.signed(keys["mallory"], document(1))
    gateway.signed(anna, document(2))
    gateway.trust(anna.line())
    answer = gateway.ask(kind="restore", issue=1)
    assert (answer.done, gateway.in_force) == (False, 2)
    assert "unknown-signer" in answer.said


def test_a_file_put_there_by_hand_needs_its_signature_where_there_are_signers(
    gateway: SignedGateway, anna: Key
) -> None:
    gateway.put(document(1))
    gateway.run(40)
    assert gateway.state.refused is not None
    assert (gateway.state.refused.reason, gateway.in_force) == ("unsigned", None)
    assert gateway.run(2 * MINUTE)[-1].reasons == ["uncalibrated", "calibration-refused"]
    gateway.put(document(1), anna.sign(document(1)))
    gateway.run(40)
    assert gateway.in_force == 1
    assert gateway.state.in_force is not None
    assert gateway.state.in_force.by == "by-hand"


def test_a_refused_file_by_hand_leaves_the_accepted_one_in_force(gateway: SignedGateway, anna: Key) -> None:
    gateway.signed(anna, document(5))
    gateway.put(document(6, 0.9))
    gateway.run(40)
    assert gateway.in_force == 5
    assert gateway.state.refused is not None
    assert gateway.state.refused.reason == "bad-signature"  # beside it lies the one of issue 5
    assert gateway.front == document(5)
    assert (gateway.folder / "north.toml.refused").read_bytes() == document(6, 0.9)


def test_a_file_that_a_person_removes_is_out_of_force(gateway: SignedGateway, anna: Key) -> None:
    gateway.signed(anna, document(1))
    (gateway.folder / "north.toml").unlink()
    gateway.run(40)
    assert (gateway.in_force, gateway.state.in_force) == (None, None)
    gateway.restart()
    gateway.run(3)
    assert gateway.in_force is None
    assert gateway.ask(kind="restore", issue=1).done
    assert (gateway.in_force, gateway.front) == (1, document(1))


def test_unsigned_documents_are_over_once_there_are_signers(tmp_path: Path, anna: Key) -> None:
    gateway = SignedGateway(tmp_path)
    gateway.put(document(1))
    gateway.run(2)
    assert (gateway.in_force, gateway.state.in_force.signer if gateway.state.in_force else "") == (1, None)
    assert gateway.signed(anna, document(2)).refused is not None
    assert gateway.state.refused is not None
    assert (gateway.state.refused.reason, gateway.in_force) == ("no-signers", 1)
    gateway.trust(anna.line())
    gateway.run(40)
    assert gateway.in_force is None
    assert gateway.signed(anna, document(2)).in_force is not None


def test_an_offer_that_comes_just_when_signers_do_is_judged_with_the_journal_s_numbers(
    gateway: SignedGateway, anna: Key
) -> None:
    gateway.signed(anna, document(5))
    gateway.signers_file.unlink()
    gateway.run(40)
    gateway.trust(anna.line())
    gateway.signed(anna, document(3))
    gateway.run(5)
    assert gateway.in_force == 5
    assert gateway.state.refused is not None
    assert gateway.state.refused.reason == "issue-not-higher"


# -- faults -------------------------------------------------------------------------------------------------------


def test_a_lost_journal_is_no_lost_calibration(gateway: SignedGateway, anna: Key) -> None:
    gateway.signed(anna, document(1))
    gateway.signed(anna, document(2))
    gateway.book.values.clear()
    gateway.restart()
    gateway.run(6)
    assert gateway.in_force == 2


@pytest.mark.parametrize("damage", ["gone", "cut"])
def test_a_lost_file_is_made_good_from_the_journal(gateway: SignedGateway, anna: Key, damage: str) -> None:
    gateway.signed(anna, document(1))
    for path in [*gateway.folder.glob("*.toml"), *gateway.folder.glob("kept/north/*.toml")]:
        path.unlink() if damage == "gone" else path.write_bytes(document(1)[:100])
    gateway.restart()
    gateway.run(40)
    assert gateway.in_force == 1
    assert gateway.front == document(1)


def test_without_ssh_keygen_it_is_said_and_tried_again(
    gateway: SignedGateway, anna: Key, monkeypatch: pytest.MonkeyPatch
) -> None:
    with monkeypatch.context() as patch:
        patch.setattr("motekeep.edges.signers.PROGRAM", "no-such-program")
        state = gateway.signed(anna, document(1))
        assert state.refused is not None
        assert state.refused.reason == "cannot-verify"
    gateway.run(70)
    assert gateway.in_force == 1


def test_a_step_that_raises_refuses_the_document_and_not_the_daemon(
    gateway: SignedGateway, anna: Key, monkeypatch: pytest.MonkeyPatch
) -> None:
    gateway.signed(anna, document(1))

    def fails(*_: object) -> None:
        raise OverflowError("math range error")

    monkeypatch.setattr("motekeep.loops.examination.rehearse", fails)
    assert refused(gateway, document(2), anna.sign(document(2))) == "bad-document"


def test_a_full_disk_changes_nothing(gateway: SignedGateway, anna: Key, monkeypatch: pytest.MonkeyPatch) -> None:
    gateway.signed(anna, document(1))

    def full(*_: object) -> None:
        raise OSError(28, "No space left on device")

    with monkeypatch.context() as patch:
        patch.setattr("motekeep.edges.shelf._write", full)
        assert refused(gateway, document(2), anna.sign(document(2))) == "cannot-store"
    assert gateway.in_force == 1


def test_a_flood_of_offers_is_examined_slowly_and_the_newest_wins(gateway: SignedGateway, anna: Key) -> None:
    good = json.dumps({"document": document(9).decode(), "signature": anna.sign(document(9)).decode()}).encode()
    looked = 0
    for second in range(10):
        for n in range(100):
            gateway.examiner.offer("north", b'{"document": "%d", "signature": "x"}' % (100 * second + n))
        before = len(gateway.posted)
        gateway.run(1)
        looked += len(gateway.posted) - before
    assert looked <= 6
    assert gateway.examiner.replaced > 900
    assert gateway.offer_payload(good).refused is None
    assert gateway.in_force == 9


class CutError(BaseException):
    """The power is gone: nothing of ours handles it."""


@pytest.mark.whole  # some sixty processes of ssh-keygen, one after the other
def test_a_cut_at_any_step_of_a_switch_leaves_the_old_or_the_new_document_whole(
    tmp_path: Path, anna: Key, monkeypatch: pytest.MonkeyPatch
) -> None:
    old, new = document(1, 0.8), document(2, 0.9)
    seen: list[int | None] = []
    for step in range(40):
        gateway = SignedGateway(tmp_path / str(step))
        gateway.trust(anna.line())
        gateway.signed(anna, old)
        left = [step]
        with monkeypatch.context() as patch:
            _cut_after(patch, gateway, left)
            try:
                gateway.signed(anna, new)
            except CutError:
                pass
            else:
                break
        gateway.restart()
        gateway.run(3)
        seen.append(gateway.in_force)
        assert gateway.front == {1: old, 2: new}[gateway.in_force or 0]
        assert gateway.state.highest_issue == gateway.in_force
        assert len(list(gateway.folder.glob("kept/north/*.toml"))) == gateway.in_force
        # and the offer, which is still retained, brings it there
        gateway.signed(anna, new)
        assert gateway.in_force == 2
    else:
        raise AssertionError("the switch has no end")
    assert len(seen) > 8
    assert seen == sorted(seen, key=lambda issue: issue or 0)
    assert set(seen) == {1, 2}


def _cut_after(patch: pytest.MonkeyPatch, gateway: SignedGateway, left: list[int]) -> None:
    """The power goes at the n-th thing that a switch does to the disk."""

    def counted(name: str, target: object) -> None:
        real = getattr(target, name)

        def step(*args: object, **named: object) -> object:
            if left[0] == 0:
                raise CutError
            left[0] -= 1
            return real(*args, **named)

        patch.setattr(target, name, step)

    for name in ("replace", "unlink", "mkdir"):
        counted(name, Path)
    counted("fsync", __import__("os"))
    counted("keep", gateway.book)
