"""What all tests share: Hypothesis must not judge by the clock of a busy machine."""

from hypothesis import HealthCheck, settings

settings.register_profile("motekeep", deadline=None, suppress_health_check=[HealthCheck.too_slow])
settings.load_profile("motekeep")
