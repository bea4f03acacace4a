"""The topic tree under `<root>/<site>/<gateway>/`, MQTT 5. Owns every topic name; nothing else spells one."""

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Topics:
    """Topics of one gateway."""

    root: str
    site: str
    gateway: str

    def _of(self, *levels: str) -> str:
        return "/".join((self.root, self.site, self.gateway, *levels))

    def reading(self, sensor: str) -> str:
        return self._of("reading", sensor)

    def late(self, sensor: str) -> str:
        return self._of("late", sensor)

    def amend(self, sensor: str) -> str:
        return self._of("amend", sensor)

    def hourly(self, sensor: str) -> str:
        return self._of("hourly", sensor)

    def taken(self, sensor: str) -> str:
        return self._of("taken", sensor)

    def calibration_offer(self, sensor: str) -> str:
        return self._of("calibration", sensor, "offer")

    def calibration_state(self, sensor: str) -> str:
        return self._of("calibration", sensor, "state")

    @property
    def health(self) -> str:
        return self._of("health")

    @property
    def finding(self) -> str:
        return self._of("finding")

    @property
    def service(self) -> str:
        return self._of("service")

    @property
    def resend(self) -> str:
        return self._of("resend")
