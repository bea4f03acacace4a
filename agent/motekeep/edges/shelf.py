"""The calibration folder: one document in force a sensor, `<folder>/<sensor>.toml`.

Owns the file names and the reading. Knows no correction; what a document may say is `measure/document_text.py`'s.
"""

from pathlib import Path

from motekeep.errors import DocumentError
from motekeep.measure.document import CalibrationDocument
from motekeep.measure.document_text import LARGEST_BYTES, parse


class Shelf:
    """Gives the document in force of a sensor, and says when its file has changed."""

    def __init__(self, folder: Path, site: str, gateway: str) -> None:
        self._folder = folder
        self._site = site
        self._gateway = gateway
        self._stamps: dict[str, tuple[int, int] | None] = {}

    def changed(self, sensor: str) -> bool:
        """Whether the sensor's file is another one than when this was last asked; true the first time."""
        try:
            state = self._path(sensor).stat()
            stamp: tuple[int, int] | None = (state.st_mtime_ns, state.st_ino)
        except OSError:
            stamp = None
        if sensor in self._stamps and self._stamps[sensor] == stamp:
            return False
        self._stamps[sensor] = stamp
        return True

    def in_force(self, sensor: str) -> CalibrationDocument | None:
        """The document of a sensor, None without one. Raises DocumentError when it must not be used."""
        path = self._path(sensor)
        try:
            with path.open("rb") as file:
                text = file.read(LARGEST_BYTES + 1)
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

    def _path(self, sensor: str) -> Path:
        return self._folder / f"{sensor}.toml"
