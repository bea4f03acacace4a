"""The folder of captures beside the journal: what a sensor said in the two minutes before it was found to fail.

Owns file names, atomic writing and the limit. Knows the capture format by its ending only.
"""

import gzip
import os
from contextlib import suppress
from pathlib import Path

from motekeep.errors import StoreError

FOLDER = "captures"
SUFFIX = ".txt.gz"
# A capture has some 2 to 20 kB. Twenty are the failures of years, or the last ones of a unit that fails all the time.
MOST_FILES = 20
MOST_BYTES = 2 << 20


class CaptureFolder:
    """Captures beside a journal, or below the folder of a replay; meets the `CaptureStore` port."""

    def __init__(self, parent: Path) -> None:
        self.folder = parent / FOLDER

    def keep(self, name: str, text: str) -> None:
        """Write a capture, whole or not at all, and let the oldest go. Raises StoreError."""
        path, part = self.folder / name, self.folder / f".{name}.part"
        try:
            self.folder.mkdir(exist_ok=True)
            try:
                with part.open("wb") as file:
                    file.write(gzip.compress(text.encode("ascii"), mtime=0))
                    file.flush()
                    os.fsync(file.fileno())
                part.rename(path)
            except BaseException:
                with suppress(OSError):
                    part.unlink(missing_ok=True)
                raise
            self._let_go()
        except OSError as error:
            raise StoreError(f"writing {path}", error.strerror or str(error), "make room on its disk") from error

    def _let_go(self) -> None:
        """Names begin with the time, so that the oldest ones sort first."""
        files = sorted(self.folder.glob(f"[!.]*{SUFFIX}"))
        sizes = [file.stat().st_size for file in files]
        while len(files) > MOST_FILES or sum(sizes) > MOST_BYTES:
            files.pop(0).unlink(missing_ok=True)
            sizes.pop(0)
