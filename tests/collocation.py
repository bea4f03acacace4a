"""A sensor beside a reference for tests of the fit: records with a known truth, as arrays and as files."""

import json
from dataclasses import dataclass, replace
from functools import cache
from pathlib import Path

import numpy as np
from scipy.signal import lfilter

from moteferry.fit.device import DeviceRecord
from moteferry.fit.fitting import Request
from moteferry.fit.record import Floats
from moteferry.fit.reference import RANDOM_SHARE, ReferenceRecord
from motekeep.instant import rfc3339

START = 1_796_083_200.0  # 2026-12-01T00:00:00Z
HOUR_S, MINUTE_S = 3600.0, 60.0
EVERY_S = 300.0  # readings of five minutes: twelve an hour are quick and still bend within it
A_DAY = 288
REQUEST = Request(
    issue=3,
    made_at=START + 90 * 86_400.0,
    valid_from=START + 90 * 86_400.0,
    valid_until=START + 455 * 86_400.0,
    reference_words="our own invention",
    data="sha256:" + "0" * 64,
    replicates=40,  # how sure the parameters are is not what most tests ask
)


@dataclass(frozen=True, slots=True)
class Collocation:
    """Readings, (n,), and the hours of the reference; `true` is dry PM2.5 of each reading."""

    device: DeviceRecord
    reference: ReferenceRecord
    true: Floats


@cache
def collocation(
    days: int = 30,
    *,
    slope: float = 1.4,
    offset: float = 0.8,
    kappa: float = 0.35,
    noise: float = 0.3,
    seed: int = 1,
    u: float | None = 0.3,
) -> Collocation:
    """The sensor says slope x true x growth + offset; AR(1) air with a day in it, RH 35 to 80 %."""
    rng = np.random.default_rng(seed)
    n = days * A_DAY
    at = START + EVERY_S * np.arange(n)
    phase = 2.0 * np.pi * (at % 86_400.0) / 86_400.0
    rh = 58.0 + 14.0 * np.cos(phase) + slowly(rng, n, 200) * 4.0
    t = 10.0 - 6.0 * np.cos(phase) + slowly(rng, n, 600) * 2.0
    true = np.exp(2.3 + 0.7 * slowly(rng, n, 60) + 0.15 * np.cos(2 * phase))
    rh = np.clip(rh, 35.0, 80.0)
    growth = 1.0 + kappa / 1.65 * rh / (100.0 - rh)
    raw = np.maximum(slope * true * growth + offset + 0.4 * slowly(rng, n, 3), 0.0)
    hours = true.reshape(-1, 12).mean(axis=1)
    reference = hours + noise * rng.standard_normal(len(hours))
    length = np.full(n, EVERY_S)
    device = DeviceRecord(
        "quarry", "east-gate", "north", "pm2_5", at, length, length, raw, rh, t, np.zeros((0, 2)), left_out={}
    )
    part, common = (np.full(len(hours), (u or 0.0) * share**0.5) for share in (RANDOM_SHARE, 1.0 - RANDOM_SHARE))
    record = ReferenceRecord(
        at[::12], np.full(len(hours), HOUR_S), np.maximum(reference, 0.0), part, common, u is not None, 0
    )
    return Collocation(device, record, true)


def slowly(rng: np.random.Generator, n: int, memory: float) -> Floats:
    """A series of unit variance that forgets over `memory` steps."""
    phi = np.exp(-1.0 / memory)
    noise = rng.standard_normal(n) * np.sqrt(1.0 - phi**2)
    noise[0] /= np.sqrt(1.0 - phi**2)
    return np.asarray(lfilter([1.0], [1.0, -phi], noise))


def reading(record: DeviceRecord, i: int, **changed: object) -> dict[str, object]:
    """One reading as it is published."""
    raw = round(float(record.raw[i]), 2)
    return {
        "schema": "motekeep/reading/1",
        "site": record.site,
        "gateway": record.gateway,
        "sensor": record.sensor,
        "seq": i + 1,
        "start": rfc3339(float(record.start[i])),
        "seconds": int(record.seconds[i]),
        "clock": "synced",
        "boot": "b",
        "boot_s": float(record.start[i] - START),
        "pm2_5": {"raw": raw, "value": raw, "u": None},
        "unit": "ug/m3",
        "k": 1,
        "climate": {"rh": round(float(record.rh[i]), 1), "t": round(float(record.t[i]), 1)},
        "frames": {"good": 60, "bad": 0, "missing": 0},
        "flag": 2,
        "reasons": ["uncalibrated"],
    } | changed


def write_device(path: Path, record: DeviceRecord) -> Path:
    path.write_text("".join(json.dumps(reading(record, i)) + "\n" for i in range(len(record.start))))
    return path


def write_reference(path: Path, record: ReferenceRecord) -> Path:
    rows = ["start,seconds,pm2_5,u" if record.stated else "start,seconds,pm2_5"]
    for start, seconds, value, part in zip(record.start, record.seconds, record.value, record.u_random, strict=True):
        row = f"{rfc3339(float(start))},{seconds:.0f},{value:.3f}"
        rows.append(f"{row},{part / RANDOM_SHARE**0.5:.4f}" if record.stated else row)
    path.write_text("\n".join(rows) + "\n")
    return path


def shifted(record: ReferenceRecord, hours: float) -> ReferenceRecord:
    return replace(record, start=record.start + hours * HOUR_S)
