"""The spool of calibration: what a person at the gateway asks of the running daemon, and what it answers.

Owns the folder `spool` in the calibration folder, its rights and its file names. Must not know what is asked.

A request appears by rename as `<ticket>.ask`, the daemon takes it (removing it) and answers in `<ticket>.said`. Without
a daemon a request waits for one. Who may write here can only ask: a document still has to be signed. What is read is
untrusted all the same: regular files only, no links, of bounded size and number.
"""

import os
import re
import stat
import uuid
from collections.abc import Iterator
from contextlib import suppress
from pathlib import Path

from motekeep.edges.journal_schema import sync_folder
from motekeep.errors import StoreError

FOLDER = "spool"
ASKED, SAID = ".ask", ".said"
# A document of 64 KiB with each character escaped, and its signature.
LARGEST_BYTES = 512 * 1024
MOST_TAKEN = 8  # a turn; whoever asks for more waits for the next one
MOST_ANSWERS = 50
TICKET = re.compile(r"[0-9a-f]{32}")
FOLDER_MODE, FILE_MODE = 0o2770, 0o660


class CalibrationSpool:
    """Both ends of it; `put` and `answer_to` are of the command, `requests` and `answer` of the daemon."""

    def __init__(self, calibration: Path) -> None:
        self.folder = calibration / FOLDER

    def put(self, body: bytes) -> str:
        """Ask; the ticket under which the answer will come. Durable when this returns. Raises StoreError."""
        ticket = uuid.uuid4().hex
        try:
            self._make_folder()
            self._write(self.folder / f"{ticket}{ASKED}", body)
        except OSError as error:
            mend = "run as root, or as a member of the group that owns it"
            raise StoreError(f"writing to {self.folder}", error.strerror or str(error), mend) from error
        return ticket

    def answer_to(self, ticket: str) -> bytes | None:
        """What the daemon says to it, None while it has not; given once."""
        path = self.folder / f"{ticket}{SAID}"
        body = _read(path)
        if body is not None:
            with suppress(OSError):
                path.unlink()
        return body

    def requests(self) -> Iterator[tuple[str, bytes]]:
        """Tickets and what is asked, each given once. It is gone before it is acted upon, so that one which brings the
        daemon down does not do so again at the next start."""
        for path in self._files(ASKED)[:MOST_TAKEN]:
            body = _read(path)
            with suppress(OSError):
                path.unlink()
                if body is not None:
                    yield path.name.removesuffix(ASKED), body

    def answer(self, ticket: str, body: bytes) -> None:
        """A command that is gone reads no answer, so only the newest stay; one that cannot be written is lost."""
        with suppress(OSError):
            self._write(self.folder / f"{ticket}{SAID}", body)
            for path in self._files(SAID)[:-MOST_ANSWERS]:
                path.unlink()

    def _files(self, suffix: str) -> list[Path]:
        """The oldest first."""
        try:
            with os.scandir(self.folder) as entries:
                found = [
                    (entry.stat(follow_symlinks=False).st_mtime, Path(entry.path))
                    for entry in entries
                    if entry.name.endswith(suffix) and TICKET.fullmatch(entry.name.removesuffix(suffix))
                ]
        except OSError:
            return []
        return [path for _, path in sorted(found)]

    def _make_folder(self) -> None:
        try:
            self.folder.mkdir(parents=True)
        except FileExistsError:
            return
        parent = self.folder.parent.stat()
        if os.geteuid() == 0:
            os.chown(self.folder, parent.st_uid, parent.st_gid)
        with suppress(PermissionError):
            self.folder.chmod(FOLDER_MODE)

    def _write(self, path: Path, body: bytes) -> None:
        part = path.with_name(f".{path.name}.part")
        with part.open("wb") as file:
            file.write(body)
            file.flush()
            os.fchmod(file.fileno(), FILE_MODE)
            if os.geteuid() == 0:
                folder = self.folder.stat()
                os.fchown(file.fileno(), folder.st_uid, folder.st_gid)
            os.fsync(file.fileno())
        part.rename(path)
        sync_folder(path)


def _read(path: Path) -> bytes | None:
    """A regular file of sane size, by no link; None for anything else."""
    try:
        descriptor = os.open(path, os.O_RDONLY | os.O_NOFOLLOW | os.O_NONBLOCK | os.O_CLOEXEC)
    except OSError:
        return None
    with os.fdopen(descriptor, "rb") as file:
        state = os.fstat(descriptor)
        if not stat.S_ISREG(state.st_mode) or state.st_size > LARGEST_BYTES:
            return None
        return file.read(LARGEST_BYTES)
