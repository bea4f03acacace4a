"""A file that only takes up room, to be given back when the disk is full.

On a full disk SQLite can neither insert nor delete; a few megabytes given back at that moment keep the journal going
for days. It goes in slices, since whoever filled the disk takes from each of them too. Owns the file; does not decide
when.
"""

import os
from pathlib import Path

# Restored only when the disk has this many times its size: else it would take the room it has just given.
PLENTY = 4
SLICES = 8


class Ballast:
    """`bytes_` of really allocated blocks at `path`."""

    def __init__(self, path: Path, bytes_: int) -> None:
        self._path = path
        self._bytes = bytes_

    @property
    def left(self) -> int:
        """Bytes of it that are still there."""
        try:
            return self._path.stat().st_size
        except OSError:
            return 0

    @property
    def low(self) -> bool:
        """Whether half of it is gone."""
        return self.left <= self._bytes // 2

    def give_back(self) -> bool:
        """Give a slice; whether there was one. Raises nothing: without it the disk is as full as before."""
        try:
            left = self.left - max(self._bytes // SLICES, 1)
            if left > 0:
                os.truncate(self._path, left)
            else:
                self._path.unlink()
        except OSError:
            return False
        return True

    def restore(self, free: int | None) -> bool:
        """Lay it down again, whole, when the disk has plenty (`free` bytes); whether it is there now."""
        if self.left == self._bytes:
            return True
        if free is None or free < PLENTY * self._bytes:
            return False
        try:
            descriptor = os.open(self._path, os.O_WRONLY | os.O_CREAT | os.O_CLOEXEC, 0o640)
            try:
                # allocates blocks, where truncate would only promise them
                os.posix_fallocate(descriptor, 0, self._bytes)
            finally:
                os.close(descriptor)
        except OSError:
            self._path.unlink(missing_ok=True)
            return False
        return True


def free_bytes(folder: Path) -> int | None:
    """Bytes that this user may still write on the file system of `folder`; None when that cannot be told."""
    try:
        state = os.statvfs(folder)
    except OSError:
        return None
    return state.f_bavail * state.f_frsize
