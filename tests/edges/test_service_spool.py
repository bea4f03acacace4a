"""The spool of service records: whole files or none, read with suspicion, whoever wrote them."""

import os
import stat
from contextlib import suppress
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from journal_site import ram_folder
from motekeep.edges.service_spool import LARGEST_BYTES, MOST_FILES, ServiceSpool
from motekeep.errors import ServiceError, StoreError
from motekeep.message.documents import ServiceDocument
from service_records import record


@pytest.fixture
def spool(tmp_path: Path) -> ServiceSpool:
    return ServiceSpool(tmp_path / "journal.db")


def test_what_was_put_is_read_whole_and_gone_when_removed(spool: ServiceSpool) -> None:
    said = record(note='a "quoted" note, é')
    spool.put(said)
    [name] = spool.waiting()
    assert spool.read(name) == said
    spool.remove([name, "never.json"])
    assert spool.waiting() == []
    with pytest.raises(FileNotFoundError):
        spool.read(name)


def test_records_wait_in_the_order_of_entry(spool: ServiceSpool) -> None:
    ids = [f"{n:013x}-00000000" for n in (70_000, 3, 500)]
    for id_ in ids:
        spool.put(record(id_))
    assert [spool.read(name).id for name in spool.waiting()] == sorted(ids)


def test_no_folder_is_no_record(spool: ServiceSpool) -> None:
    assert spool.waiting() == []


def test_members_of_the_group_may_enter_records_and_what_they_write_carries_the_group(spool: ServiceSpool) -> None:
    path = spool.put(record())
    folder = spool.folder.stat()
    assert stat.S_IMODE(folder.st_mode) == 0o2770
    assert stat.S_IMODE(path.stat().st_mode) == 0o640
    assert path.stat().st_gid == folder.st_gid


@pytest.mark.skipif(os.geteuid() != 0, reason="only root can give files away")
def test_what_root_enters_belongs_to_the_daemon_whose_store_it_is(tmp_path: Path) -> None:
    store = tmp_path / "store"
    store.mkdir()
    os.chown(store, 4711, 4712)
    path = ServiceSpool(store / "journal.db").put(record())
    for made in (path, path.parent):
        assert (made.stat().st_uid, made.stat().st_gid) == (4711, 4712)


def test_a_folder_that_cannot_be_made_is_one_line_that_names_it(tmp_path: Path) -> None:
    (tmp_path / "service").write_text("a file stands in the way")
    with pytest.raises(StoreError, match=r"writing to .*/service: .*; run as root"):
        ServiceSpool(tmp_path / "journal.db").put(record())


def test_a_half_written_file_is_not_seen(spool: ServiceSpool) -> None:
    spool.put(record())
    (spool.folder / ".half.json").write_text("{")
    (spool.folder / ".0001.part").write_text("{")
    assert len(spool.waiting()) == 1


def test_a_link_a_pipe_and_a_folder_are_refused_and_none_hangs(spool: ServiceSpool, tmp_path: Path) -> None:
    spool.put(record())
    (tmp_path / "secret").write_text("{}")
    (spool.folder / "link.json").symlink_to(tmp_path / "secret")
    os.mkfifo(spool.folder / "pipe.json")
    (spool.folder / "folder.json").mkdir()
    for name in ("link.json", "pipe.json", "folder.json"):
        with pytest.raises(ServiceError, match=name):
            spool.read(name)


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("", "Invalid JSON"),
        ("x" * (LARGEST_BYTES + 1), f"over {LARGEST_BYTES} bytes"),
        (record().json_text().replace('"cleaned"', '"polished"'), "kind"),
        (record().json_text().replace('"note":""', '"note":"","more":1'), "more"),
        (record().json_text().replace('"boot_s":100.0', '"boot_s":NaN'), "boot_s"),
        (record(at="yesterday").json_text(), "at: no time"),
        (record(at="2026-12-01T09:30:00").json_text(), "at: no time"),
        (record(entered="9999-12-31T23:59:59Z").json_text(), "entered: no time"),
        (record().json_text().replace('"boot_s":100.0', '"boot_s":1e300'), "boot_s"),
        (record("00000000-ffffffff").json_text(), "named unlike its id"),
    ],
)
def test_what_is_no_record_is_refused_by_file_and_key_and_kept_aside(spool: ServiceSpool, text: str, said: str) -> None:
    spool.put(record())
    [name] = spool.waiting()
    (spool.folder / name).write_text(text)
    with pytest.raises(ServiceError, match=said) as caught:
        spool.read(name)
    assert name in str(caught.value)
    assert "\n" not in str(caught.value)
    spool.refuse(name)
    assert spool.waiting() == []
    assert (spool.folder / f"{name}.refused").read_text() == text


def test_a_flood_of_files_is_taken_a_hundred_at_a_time(spool: ServiceSpool) -> None:
    spool.put(record())
    for n in range(MOST_FILES + 50):
        (spool.folder / f"{n:05}.json").write_text("")
    assert len(spool.waiting()) == MOST_FILES


@given(st.binary(max_size=300) | st.text(max_size=200).map(str.encode))
@settings(max_examples=60, deadline=None)
def test_bytes_of_any_kind_give_a_record_or_a_named_error(data: bytes) -> None:
    with ram_folder() as folder:
        spool = ServiceSpool(folder / "journal.db")
        spool.put(record())
        [name] = spool.waiting()
        (spool.folder / name).write_bytes(data)
        with suppress(ServiceError):
            assert isinstance(spool.read(name), ServiceDocument)
