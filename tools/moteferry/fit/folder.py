"""From two files to a folder: reads, fits, writes the document, `metrics.json` and `page.html`.

Owns the files of a fit. A file appears whole or not at all.
"""

import json
from collections.abc import Callable
from dataclasses import dataclass, replace
from hashlib import sha256
from pathlib import Path

from moteferry.fit.device import read_device
from moteferry.fit.fitting import Fit, Request, fit
from moteferry.fit.page import page
from moteferry.fit.pairs import align
from moteferry.fit.record import RecordError
from moteferry.fit.reference import read_reference
from moteferry.fit.statement import metrics


@dataclass(frozen=True, slots=True)
class Sources:
    """The two files and how they are read: `sensor` picks one of several, `random` is of `reference.py`."""

    device: Path
    reference: Path
    channel: str
    sensor: str | None
    random: float


def fit_into(
    sources: Sources,
    request: Request,
    out: Path,
    read: Callable[[int], None] = lambda _size: None,
    told: Callable[[str], None] = lambda _what: None,
) -> Fit:
    """Fit and write. `request.data` is filled in here. Raises RecordError, and OSError where a file cannot be used."""
    device = read_device(sources.device, sources.channel, sources.sensor, read)
    reference = read_reference(sources.reference, sources.channel, sources.random)
    path = out / f"{_file_name(device.sensor)}.toml"
    signature = path.with_name(path.name + ".sig")
    if signature.exists():
        raise RecordError(str(path), "is signed already", "give another folder, or remove both to fit anew")
    request = replace(request, data=data_digest(sources.device, sources.reference))
    place = (device.site, device.gateway, device.sensor)
    found = fit(align(device, reference), place, sources.channel, request, told)
    told("the page")
    out.mkdir(parents=True, exist_ok=True)
    _write(path, found.text)
    _write(out / "metrics.json", (json.dumps(metrics(found), indent=1) + "\n").encode())
    _write(out / "page.html", page(found).encode())
    return found


def data_digest(*paths: Path) -> str:
    """`sha256:` and the digest of the digests of the files in this order: what `sha256sum` prints of each, joined."""
    return "sha256:" + sha256("".join(sha256(p.read_bytes()).hexdigest() for p in paths).encode()).hexdigest()


def _file_name(sensor: str) -> str:
    """The device finds its document as `<sensor>.toml`; a name out of a file must not lead out of the folder."""
    if not sensor or sensor.startswith(".") or "/" in sensor or "\0" in sensor:
        raise RecordError("the device record", f"sensor {sensor!r} makes no file name", "mend the record")
    return sensor


def _write(path: Path, content: bytes) -> None:
    waiting = path.with_name(path.name + ".new")
    waiting.write_bytes(content)
    waiting.replace(path)
