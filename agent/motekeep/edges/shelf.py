"""The calibration folder: the document in force a sensor, `<folder>/<sensor>.toml`, and the last accepted ones.

Owns the file names, the reading and the durable writing. Knows no correction and no rule of acceptance; what a document
may say is `measure/document_text.py`'s.

    <sensor>.toml, <sensor>.toml.sig           in force, for people to see, and to put a document by hand
    <sensor>.toml.refused                      put there by hand, examined and refused
    kept/<sensor>/<digest>.toml and .toml.sig  accepted ones, named by what is in them: never changed, only added

Every file is written beside its place, synced, renamed, and its folder synced, so that a cut at any moment leaves the
old file or the new one. Which of the kept ones is in force the journal says (`loops/switch.py`); the pair in front is
made to follow.
"""

import os
from collections.abc import Collection
from contextlib import suppress
from pathlib import Path

from motekeep.edges.journal_schema import sync_folder
from motekeep.edges.sshsig import LARGEST_BYTES as LARGEST_SIGNATURE
from motekeep.errors import DocumentError, StoreError
from motekeep.measure.document import CalibrationDocument, digest
from motekeep.measure.document_text import LARGEST_BYTES, parse

KEPT = "kept"
MOST_LISTED = 50  # what a person may have put there is not read for ever


class Shelf:
    """Gives the document in force of a sensor, and says when its file has changed. Writing belongs to one thread."""

    def __init__(self, folder: Path, site: str, gateway: str) -> None:
        self._folder = folder
        self._site = site
        self._gateway = gateway
        self._stamps: dict[str, object] = {}

    def changed(self, sensor: str) -> bool:
        """Whether the sensor's file is another one than when this was last asked; true the first time."""
        stamp = self._stamp(sensor)
        if sensor in self._stamps and self._stamps[sensor] == stamp:
            return False
        self._stamps[sensor] = stamp
        return True

    def in_force(self, sensor: str) -> CalibrationDocument | None:
        """The document of a sensor, None without one. Raises DocumentError when it must not be used."""
        path = self._path(sensor)
        try:
            text = _read(path, LARGEST_BYTES)
        except FileNotFoundError:
            return None
        except OSError as error:
            raise DocumentError(str(path), str(error), "make it readable for motekeep") from error
        try:
            document = parse(text)
        except DocumentError as error:
            raise DocumentError(f"{path}, {error.path}", error.why, error.mend) from error
        if why := document.not_for(self._site, self._gateway, sensor):
            raise DocumentError(str(path), why, "put the document of this sensor there")
        return document

    def shown(self, sensor: str) -> tuple[bytes, bytes] | None:
        """Text and signature of the pair in front, unjudged; None without a document, empty without a signature."""
        return read_pair(self._path(sensor))

    def kept(self, sensor: str, wanted: str) -> tuple[bytes, bytes] | None:
        """Text and signature of an accepted document by its digest; None when it is not there, or not whole."""
        pair = read_pair(self._kept_path(sensor, wanted))
        return pair if pair is not None and digest(pair[0]) == wanted else None

    def all_kept(self, sensor: str) -> list[tuple[bytes, bytes]]:
        """Every whole pair that is kept for a sensor."""
        paths = sorted((self._folder / KEPT / sensor).glob("*.toml"))[:MOST_LISTED]
        pairs = [(path, read_pair(path)) for path in paths]
        return [pair for path, pair in pairs if pair is not None and path == self._kept_path(sensor, digest(pair[0]))]

    def keep(self, sensor: str, text: bytes, signature: bytes) -> None:
        """Put an accepted document beside the others; durable when this returns. Raises StoreError."""
        path = self._kept_path(sensor, digest(text))
        try:
            _make_folder(path.parent, self._folder)
            _write(_signature_of(path), signature)
            _write(path, text)
            sync_folder(path)
        except OSError as error:
            raise _unwritable(path, error) from error

    def show(self, sensor: str, text: bytes, signature: bytes) -> None:
        """Put a pair in front. Raises StoreError."""
        path = self._path(sensor)
        try:
            _write(_signature_of(path), signature)
            _write(path, text)
            sync_folder(path)
        except OSError as error:
            raise _unwritable(path, error) from error
        self._stamps[sensor] = self._stamp(sensor)

    def hide(self, sensor: str) -> None:
        """Leave nothing in front. Raises StoreError."""
        path = self._path(sensor)
        try:
            path.unlink(missing_ok=True)
            _signature_of(path).unlink(missing_ok=True)
            if self._folder.exists():
                sync_folder(path)
        except OSError as error:
            raise _unwritable(path, error) from error
        self._stamps[sensor] = self._stamp(sensor)

    def set_aside(self, sensor: str) -> None:
        """Move what a person has put in front, and must not be used, to `.refused`: they find it there."""
        path = self._path(sensor)
        for one in (path, _signature_of(path)):
            with suppress(OSError):
                one.replace(one.with_name(f"{one.name}.refused"))
        self._stamps[sensor] = self._stamp(sensor)

    def prune(self, sensor: str, digests: Collection[str]) -> None:
        """Drop what is kept beyond these, and what a cut left half written. A file that stays is only a file."""
        wanted = {self._kept_path(sensor, one) for one in digests}
        wanted |= {_signature_of(path) for path in wanted}
        with suppress(OSError):
            for path in (self._folder / KEPT / sensor).iterdir():
                if path not in wanted:
                    path.unlink()

    def _path(self, sensor: str) -> Path:
        return self._folder / f"{sensor}.toml"

    def _kept_path(self, sensor: str, wanted: str) -> Path:
        return self._folder / KEPT / sensor / f"{wanted.removeprefix('sha256:')}.toml"

    def _stamp(self, sensor: str) -> object:
        """Of document and signature: either may come after the other."""
        stamps: list[tuple[int, int] | None] = []
        for path in (self._path(sensor), _signature_of(self._path(sensor))):
            try:
                state = path.stat()
                stamps.append((state.st_mtime_ns, state.st_ino))
            except OSError:
                stamps.append(None)
        return tuple(stamps)


def _signature_of(path: Path) -> Path:
    """`x.toml.sig`, where `ssh-keygen -Y sign` puts it."""
    return path.with_name(path.name + ".sig")


def read_pair(path: Path) -> tuple[bytes, bytes] | None:
    """A document and what lies beside it as its signature, at most a byte more than either may have; None without a
    readable document, an empty signature without one."""
    try:
        text = _read(path, LARGEST_BYTES)
    except OSError:
        return None
    try:
        return text, _read(_signature_of(path), LARGEST_SIGNATURE)
    except OSError:
        return text, b""


def _read(path: Path, most: int) -> bytes:
    """At most a byte more than is allowed, so that whoever judges it sees that it is too long."""
    with path.open("rb") as file:
        return file.read(most + 1)


def _write(path: Path, data: bytes) -> None:
    """Beside its place, synced, renamed. What a cut leaves half written is never looked at."""
    beside = path.with_name(f".{path.name}.new")
    with beside.open("wb") as file:
        file.write(data)
        file.flush()
        os.fsync(file.fileno())
    beside.replace(path)


def _make_folder(folder: Path, top: Path) -> None:
    folder.mkdir(parents=True, exist_ok=True)
    for path in (folder, folder.parent, top):
        sync_folder(path)  # the name of each in the one above


def _unwritable(path: Path, error: OSError) -> StoreError:
    return StoreError(
        f"writing {path}", error.strerror or str(error), "make room, and the folder writable for motekeep"
    )
