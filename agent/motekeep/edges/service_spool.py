"""The spool of service records: one small file a record, from whoever enters it to the daemon that journals it.

Owns the folder `service` beside the journal, its rights and its file names. Must not know what a record changes.

The command writes, the running daemon reads and removes once the record is durable; without a daemon a file waits. A
file appears by rename, so whoever lists the folder sees whole ones only. Members of the group may write there (2770),
so what is read is untrusted: regular files only, no links, of bounded size and number.
"""

import os
import stat
from collections.abc import Iterable
from contextlib import suppress
from pathlib import Path

from pydantic import ValidationError

from motekeep.edges.journal_schema import sync_folder
from motekeep.errors import ServiceError, StoreError
from motekeep.instant import from_rfc3339
from motekeep.message.documents import ServiceDocument

FOLDER = "service"
SUFFIX = ".json"
REFUSED = ".refused"
LARGEST_BYTES = 8192  # a note of 500 characters, each escaped, leaves half of it
MOST_FILES = 100  # taken at once; the rest waits for the next look
LATEST = 7_258_118_400.0  # 2200; the earliest is 1970, where a board without a battery clock may wake up
FOLDER_MODE, FILE_MODE = 0o2770, 0o640


class ServiceSpool:
    """The spool beside a journal; meets the `ServiceInbox` port on the daemon's side."""

    def __init__(self, journal: Path) -> None:
        self.folder = journal.parent / FOLDER

    # -- whoever enters a record ----------------------------------------------------------------------------------

    def put(self, record: ServiceDocument) -> Path:
        """Leave a record for the daemon; durable when this returns. Raises StoreError."""
        path = self.folder / f"{record.id}{SUFFIX}"
        part = self.folder / f".{record.id}.part"
        try:
            self._make_folder()
            try:
                with part.open("xb") as file:
                    file.write(record.json_text().encode() + b"\n")
                    file.flush()
                    self._hand_over(file.fileno())
                    os.fsync(file.fileno())
                part.rename(path)
            except BaseException:
                with suppress(OSError):
                    part.unlink(missing_ok=True)
                raise
            sync_folder(path)
        except OSError as error:
            mend = "run as root, or as a member of the group that owns it"
            raise StoreError(f"writing to {self.folder}", error.strerror or str(error), mend) from error
        return path

    def _make_folder(self) -> None:
        """systemd-tmpfiles makes it on a device; elsewhere it gets the owner of the folder that it is in."""
        try:
            self.folder.mkdir()
        except FileExistsError:
            return
        parent = self.folder.parent.stat()
        if os.geteuid() == 0:
            os.chown(self.folder, parent.st_uid, parent.st_gid)
        with suppress(PermissionError):  # under the unit nobody may make what lends its group; then it stays private
            self.folder.chmod(FOLDER_MODE)

    def _hand_over(self, descriptor: int) -> None:
        """The daemon, whose the folder is, must be able to read what root or an operator wrote."""
        os.fchmod(descriptor, FILE_MODE)
        if os.geteuid() == 0:
            folder = self.folder.stat()
            os.fchown(descriptor, folder.st_uid, folder.st_gid)

    # -- the daemon -----------------------------------------------------------------------------------------------

    def waiting(self) -> list[str]:
        """Names of the records that wait, oldest first (their names begin with the time of entry), at most a hundred.

        Empty when there is no folder, or none that can be read."""
        try:
            names = [entry.name for entry in os.scandir(self.folder) if _is_record(entry.name)]
        except OSError:
            return []
        return sorted(names)[:MOST_FILES]

    def read(self, name: str) -> ServiceDocument:
        """The record in this file. Raises ServiceError when it is none, FileNotFoundError when it is gone."""
        path = self.folder / name
        mend = f"enter it with `motekeep service add`, and remove {path}"
        try:
            # a pipe or a link that somebody left there must neither hang nor lead the daemon elsewhere
            descriptor = os.open(path, os.O_RDONLY | os.O_NOFOLLOW | os.O_NONBLOCK)
            with open(descriptor, "rb") as file:  # noqa: PTH123 (a descriptor has no path of its own)
                if not stat.S_ISREG(os.fstat(descriptor).st_mode):
                    raise ServiceError(f"reading {path}", "it is no regular file", mend)
                text = file.read(LARGEST_BYTES + 1)
        except FileNotFoundError:
            raise
        except OSError as error:
            raise ServiceError(f"reading {path}", error.strerror or str(error), mend) from error
        if len(text) > LARGEST_BYTES:
            raise ServiceError(f"reading {path}", f"it has over {LARGEST_BYTES} bytes", mend)
        try:
            record = ServiceDocument.model_validate_json(text)
        except ValidationError as error:
            first = error.errors()[0]
            where = ".".join(map(str, first["loc"]))
            raise ServiceError(f"reading {path}", f"{where + ': ' if where else ''}{first['msg']}", mend) from error
        for key in ("at", "entered"):
            if not _is_moment(getattr(record, key)):
                raise ServiceError(f"reading {path}", f"{key}: no time between 1970 and 2200", mend)
        if name != f"{record.id}{SUFFIX}":
            raise ServiceError(f"reading {path}", f"it is named unlike its id {record.id}", mend)
        return record

    def remove(self, names: Iterable[str]) -> None:
        """They are durable elsewhere. One that cannot be removed is seen again, and known by its id."""
        for name in names:
            with suppress(OSError):
                (self.folder / name).unlink(missing_ok=True)

    def refuse(self, name: str) -> None:
        """Out of the way, but kept for whoever looks."""
        path = self.folder / name
        with suppress(OSError):
            path.rename(path.with_name(name + REFUSED))


def _is_moment(text: str) -> bool:
    """Whether this is a time that may be reckoned with: RFC 3339, from 1970 to 2199."""
    try:
        return 0.0 <= from_rfc3339(text) < LATEST
    except (ValueError, OverflowError):
        return False


def _is_record(name: str) -> bool:
    return name.endswith(SUFFIX) and not name.startswith(".")
