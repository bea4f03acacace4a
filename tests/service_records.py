"""Service records for the tests."""

from motekeep.message.documents import ServiceDocument


def record(id_: str = "0193f0000000-00c0ffee", **changes: object) -> ServiceDocument:
    """Somebody cleaned `north` at 09:30; `changes` by field name."""
    fields: dict[str, object] = {
        "schema": "motekeep/service/1",
        "site": "quarry",
        "gateway": "east-gate",
        "sensor": "north",
        "id": id_,
        "kind": "cleaned",
        "at": "2026-12-01T09:30:00Z",
        "clock": "synced",
        "entered": "2026-12-01T09:30:00Z",
        "boot": "b" * 32,
        "boot_s": 100.0,
        "note": "",
    }
    return ServiceDocument.model_validate(fields | changes)
