"""Climate from Linux: an IIO or hwmon device folder in sysfs.

Owns the file names of both: IIO gives milli-percent and milli-degrees as `_input`, or raw * scale + offset; hwmon
gives `humidity1_input` and `temp1_input` in thousandths (kernel ABI documents sysfs-bus-iio and hwmon/sysfs-interface).
"""

from pathlib import Path

from motekeep.errors import ClimateError
from motekeep.measure.climate import plausible
from motekeep.measure.interval import Climate


class SysfsClimate:
    """Reads one device folder at each call; a few hundred microseconds, most of it the sensor's own bus."""

    def __init__(self, folder: Path) -> None:
        self._folder = folder

    def read(self) -> Climate:
        """Climate now. Raises ClimateError when the folder is gone or what it says is absurd."""
        attempted = f"reading climate from {self._folder}"
        try:
            humid = self._milli("in_humidityrelative", "humidity1")
            if humid is None:
                raise ClimateError(attempted, "no humidity there", "name the folder of an IIO or hwmon humidity sensor")
            warm = self._milli("in_temp", "temp1")
            return plausible(humid, warm, "iio")
        except OSError as error:
            raise ClimateError(attempted, str(error), "check wiring and driver of the climate sensor") from error
        except ValueError as error:
            raise ClimateError(attempted, str(error), "check the climate sensor") from error

    def _milli(self, iio: str, hwmon: str) -> float | None:
        """A quantity in its own unit; both interfaces count thousandths."""
        for name in (f"{iio}_input", f"{hwmon}_input"):
            path = self._folder / name
            if path.exists():
                return float(path.read_text()) / 1000.0
        raw = self._folder / f"{iio}_raw"
        if not raw.exists():
            return None
        scale, offset = (self._number(f"{iio}_{word}", default) for word, default in (("scale", 1.0), ("offset", 0.0)))
        return (float(raw.read_text()) + offset) * scale / 1000.0

    def _number(self, name: str, default: float) -> float:
        path = self._folder / name
        return float(path.read_text()) if path.exists() else default
