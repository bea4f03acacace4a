"""The documents that leave the device, as pydantic models: reading, late, amend, finding, health.

Owns their fields, units and rounding; JSON Schema is generated from these models. Times are RFC 3339 UTC, units UCUM.
Fields without a value that mean "not measured" are null; optional fields that do not apply are left out.
"""

from typing import Annotated, Literal

from pydantic import BaseModel, ConfigDict, Field

Clock = Literal["synced", "corrected", "bounded", "unsynced"]
Status = Literal["normal", "maintenance_required", "out_of_specification", "function_check", "failure", "offline"]
Flag = Annotated[int, Field(description="QARTOD: 1 pass, 2 not evaluated, 3 suspect, 4 fail, 9 missing")]
Time = Annotated[str, Field(json_schema_extra={"format": "date-time"}, description="RFC 3339 UTC")]


class Document(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True)

    def json_text(self) -> str:
        """The compact JSON that is published: fields never set are left out, nulls that were set stay."""
        return self.model_dump_json(exclude_unset=True, by_alias=True)


class ValueDocument(Document):
    """One figure: raw as the sensor gave it, corrected value, standard uncertainty (null: not evaluated)."""

    raw: float | None
    value: float | None
    u: float | None
    u_random: float | None = Field(
        default=None, description="the part of u that is independent from reading to reading; the rest is common to all"
    )


class ClimateDocument(Document):
    rh: float = Field(description="relative humidity, %")
    t: float | None = Field(default=None, description="temperature, Cel")


class FramesDocument(Document):
    good: int
    bad: int
    missing: int


class ProvenanceDocument(Document):
    issue: int
    digest: str


class ReadingDocument(Document):
    """One reading. `(gateway, sensor, seq)` is unique for ever and gapless.

    A merged reading (reason `merged`) stands for all of `from_seq` to `seq`. `start_between` brackets the start of a
    reading with clock `bounded`.
    """

    schema_: Literal["motekeep/reading/1"] = Field(alias="schema")
    site: str
    gateway: str
    sensor: str
    seq: int
    from_seq: int | None = None
    start: Time
    start_between: tuple[Time, Time] | None = None
    seconds: int | float
    clock: Clock
    boot: str
    boot_s: float
    pm1: ValueDocument | None = None
    pm2_5: ValueDocument | None = None
    pm4: ValueDocument | None = None
    pm10: ValueDocument | None = None
    unit: Literal["ug/m3"]
    k: Literal[1] = Field(description="coverage factor of u")
    counts_per_dL: dict[str, float | None] | None = Field(  # noqa: N815 (UCUM's own spelling of the unit)
        default=None, description="mean counts per 0.1 L above the size in um; null where a count was censored"
    )
    climate: ClimateDocument | None = None
    frames: FramesDocument
    calibration: ProvenanceDocument | None = None
    flag: Flag
    reasons: list[str]


Category = Literal["good", "moderate", "unhealthy for sensitive groups", "unhealthy", "very unhealthy", "hazardous"]


class HourlyValueDocument(Document):
    """One channel of an hour. `mean` is null when under three quarters of what was due were measured.

    `nowcast`, `aqi` and `category` exist for PM2.5 and PM10 only: US EPA NowCast, and the index of it by the table of
    2024. `mean_24h` is over this hour and the 23 before it and needs 18 of them; `hours_24h` says how many there are.
    """

    mean: float | None
    u: float | None
    completeness: float = Field(ge=0, le=1, description="share of the seconds due that were measured")
    nowcast: float | None = None
    aqi: int | None = None
    category: Category | None = None
    mean_24h: float | None
    hours_24h: int


class HourlyDocument(Document):
    """The last full hour of a sensor, retained. Information only: not a regulatory figure and not an alarm.

    Sent again for the same `start` when an amendment or a late reading changed it.
    """

    schema_: Literal["motekeep/hourly/1"] = Field(alias="schema")
    site: str
    gateway: str
    sensor: str
    start: Time
    seconds: Literal[3600]
    pm1: HourlyValueDocument | None = None
    pm2_5: HourlyValueDocument | None = None
    pm4: HourlyValueDocument | None = None
    pm10: HourlyValueDocument | None = None
    unit: Literal["ug/m3"]
    k: Literal[1] = Field(description="coverage factor of u")
    flag: Flag
    reasons: list[str]


class AmendDocument(Document):
    """Readings of `sensor` that start in [from, to) have, from now on, this flag, and these reasons as well.

    As a restamp it names a range of sequence numbers instead, their clock from now on, and the seconds to add to their
    `start`. It holds for those that were received as `unsynced`: what came as `corrected` or `bounded` has it already.
    """

    schema_: Literal["motekeep/amend/1"] = Field(alias="schema")
    sensor: str
    from_: Time | None = Field(default=None, alias="from")
    to: Time | None = None
    flag: Flag | None = None
    reasons: list[str]
    from_seq: int | None = None
    to_seq: int | None = None
    clock: Clock | None = None
    shift_s: float | None = None


class FindingDocument(Document):
    """A finding as it opens or closes."""

    schema_: Literal["motekeep/finding/1"] = Field(alias="schema")
    at: Time
    event: Literal["opened", "closed"]
    sensor: str | None = None
    code: str
    category: Status
    since: Time
    confidence: float
    evidence: str
    remedy: str
    capture: str | None = Field(
        default=None, description="file on the gateway with what the sensor said in the two minutes before a failure"
    )


class ServiceDocument(Document):
    """What a person did at a sensor. `id` is unique for ever: a record that comes twice is one.

    `clock` says how far to trust `at`: `synced` and `unsynced` are the gateway's own clock when it was entered,
    `corrected` is stamped afterwards from this boot's offset, `stated` is what the person said. `entered` is when the
    record was made, `boot` and `boot_s` the same moment on the clock that never steps.
    """

    schema_: Literal["motekeep/service/1"] = Field(alias="schema")
    site: str
    gateway: str
    sensor: str
    id: Annotated[str, Field(pattern=r"^[0-9a-f-]{8,64}$")]
    kind: Literal["cleaned", "fan-replaced", "unit-replaced", "moved", "note"]
    at: Time
    clock: Literal["synced", "corrected", "unsynced", "stated"]
    entered: Time
    boot: str
    boot_s: float = Field(ge=0, le=1e9)
    note: str = Field(default="", max_length=500)


class OpenFinding(Document):
    code: str
    category: Status
    since: Time
    confidence: float
    evidence: str
    remedy: str


class CalibrationState(Document):
    issue: int
    valid_until: Time | None = None


class SensorHealth(Document):
    status: Status
    laser_hours: float | None = None
    dust_dose_ug: float | None = None
    calibration: CalibrationState | None = None
    findings: list[OpenFinding]


class StoreHealth(Document):
    waiting: int
    oldest_waiting: Time | None
    bytes: int
    disk_free: int | None
    lost: dict[str, int] = Field(description="each loss of detail, counted since the journal began, by its kind")


class LinkHealth(Document):
    since: Time | None
    reconnects: int
    refused: int


class HealthDocument(Document):
    """The retained health status; overdue after `next_by`. The will has only the place and status `offline`."""

    schema_: Literal["motekeep/health/1"] = Field(alias="schema")
    site: str
    gateway: str
    status: Status
    at: Time | None = None
    next_by: Time | None = None
    boot: str | None = None
    life: int | None = Field(default=None, description="how many times the daemon has started with this journal")
    version: str | None = None
    uptime_s: float | None = None
    clock: Clock | None = None
    store: StoreHealth | None = None
    link: LinkHealth | None = None
    sensors: dict[str, SensorHealth] | None = None
    findings: list[OpenFinding] | None = None


class CalibrationOfferRequest(Document):
    """To the device: a calibration document and its detached SSH signature, namespace `calibration@motekeep`, both as
    the exact text of their files."""

    model_config = ConfigDict(extra="ignore", frozen=True)
    document: str
    signature: str = ""


class CalibrationInForce(Document):
    """The document that readings are made with. `signer` and `key` are null for one that was put there by hand on a
    gateway without signers; `by` says how it came into force."""

    issue: int
    digest: str
    signer: str | None
    key: str | None = Field(description="fingerprint of the signing key")
    valid_until: Time
    since: Time
    by: Literal["offer", "install", "restore", "withdrawal", "by-hand"]


class CalibrationRefused(Document):
    """What was refused last, or withdrawn after it had been in force. `issue` is null where the text was not read: what
    carries no accepted signature is not."""

    at: Time
    issue: int | None
    digest: str
    reason: str
    why: str
    withdrawn: bool


class CalibrationStateDocument(Document):
    """How a sensor is calibrated. `highest_issue` is the highest ever accepted: the next one must exceed it, while its
    signer is trusted. `soak_until` is when a new document has proven itself, if measuring goes on; null once it has."""

    schema_: Literal["motekeep/calibration/1"] = Field(alias="schema")
    site: str
    gateway: str
    sensor: str
    at: Time
    in_force: CalibrationInForce | None
    highest_issue: int | None
    soak_until: Time | None
    refused: CalibrationRefused | None


class ResendRequest(Document):
    """To the device: send this range again; answered on `late`."""

    model_config = ConfigDict(extra="ignore", frozen=True)
    sensor: str
    from_seq: int = Field(ge=1)
    to_seq: int = Field(ge=1)


class TakenReceipt(Document):
    """To the device: an archive has stored all readings up to this one."""

    model_config = ConfigDict(extra="ignore", frozen=True)
    through_seq: int = Field(ge=0)


class LateDocument(Document):
    """The backlog, oldest first, at most 100 readings."""

    readings: list[ReadingDocument] = Field(max_length=100)


def health_offline(site: str, gateway: str, boot: str) -> HealthDocument:
    """What the broker says for us when we are gone, and what we say when we leave. `boot` tells a late will of an
    earlier boot from a current one."""
    return HealthDocument(schema="motekeep/health/1", site=site, gateway=gateway, status="offline", boot=boot)
