"""Readings as rows of a table whose columns are named by the CF conventions.

Owns names and units. Knows no file and no CSV.

Names are CF standard names where there is one, with the modifier `standard_error` for u (CF conventions, appendix C;
names from memory). Units are spelled for UDUNITS: `ug m-3`, not UCUM's `ug/m3`. CF puts the size of a count into a
coordinate; a flat table has only its header to say it. There is no standard name for PM4, so it keeps its own.
"""

from dataclasses import dataclass

from motekeep.measure.document import CHANNELS
from motekeep.message.compose import size_key
from motekeep.message.documents import ReadingDocument, ValueDocument

Cell = str | float | int | None

MASS_NAMES = {
    "pm1": "mass_concentration_of_pm1_ambient_aerosol_particles_in_air",
    "pm2_5": "mass_concentration_of_pm2p5_ambient_aerosol_particles_in_air",
    "pm4": "pm4",
    "pm10": "mass_concentration_of_pm10_ambient_aerosol_particles_in_air",
}
NUMBER_NAME = "number_concentration_of_ambient_aerosol_particles_in_air"

# 0.1 L is 1e-4 m3.
PER_M3_BY_DL = 1e4
ZERO_CELSIUS_K = 273.15

# Attributes of the flag column (CF conventions 3.5): the QARTOD values in the same order as their meanings.
FLAG_ATTRIBUTES = {
    "flag_values": "1 2 3 4 9",
    "flag_meanings": "pass not_evaluated suspect fail missing",
}


@dataclass(frozen=True, slots=True)
class Column:
    """One column: the key of `row`, its CF name, its unit for UDUNITS ("" for text)."""

    key: str
    name: str
    unit: str

    @property
    def header(self) -> str:
        return f"{self.name} [{self.unit}]" if self.unit else self.name


def columns(sizes_um: tuple[float, ...] = (0.3, 0.5, 1.0, 2.5, 5.0, 10.0)) -> tuple[Column, ...]:
    """The columns of a table whose counts are above these sizes."""
    listed = [
        Column("site", "site", ""),
        Column("gateway", "gateway", ""),
        Column("sensor", "platform_id", ""),
        Column("seq", "seq", "1"),
        Column("start", "time", ""),
        Column("seconds", "averaging_interval", "s"),
    ]
    for channel in CHANNELS:
        name = MASS_NAMES[channel]
        listed += [
            Column(channel, name, "ug m-3"),
            Column(f"{channel}:u", f"{name} standard_error", "ug m-3"),
            Column(f"{channel}:raw", f"{name} raw", "ug m-3"),
        ]
    listed += [
        Column(f"count:{size_key(size)}", f"{NUMBER_NAME} diameter>{size_key(size)}um", "m-3") for size in sizes_um
    ]
    return (
        *listed,
        Column("rh", "relative_humidity", "1"),
        Column("t", "air_temperature", "K"),
        Column("flag", "aggregate_quality_flag", "1"),
        Column("reasons", "reasons", ""),
        Column("calibration", "calibration_issue", "1"),
    )


def row(document: ReadingDocument) -> dict[str, Cell]:
    """The cells of one reading by the keys of `columns`, in their units. What was not measured is absent."""
    cells: dict[str, Cell] = {
        "site": document.site,
        "gateway": document.gateway,
        "sensor": document.sensor,
        "seq": document.seq,
        "start": document.start,
        "seconds": document.seconds,
        "flag": document.flag,
        "reasons": " ".join(document.reasons),
    }
    for channel in CHANNELS:
        value: ValueDocument | None = getattr(document, channel)
        if value is not None:
            cells |= {channel: value.value, f"{channel}:u": value.u, f"{channel}:raw": value.raw}
    for size, count in (document.counts_per_dL or {}).items():
        cells[f"count:{size}"] = None if count is None else round(count * PER_M3_BY_DL, 3)
    if document.climate is not None:
        cells["rh"] = round(document.climate.rh / 100.0, 5)
        if document.climate.t is not None:
            cells["t"] = round(document.climate.t + ZERO_CELSIUS_K, 3)
    if document.calibration is not None:
        cells["calibration"] = document.calibration.issue
    return cells
