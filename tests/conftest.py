"""What all tests share: Hypothesis must not judge by the clock of a busy machine.

A landing is judged by the same examples each time. New ones are searched for with `tools/test --long`, where somebody
reads what it finds: `--hypothesis-profile=searching`.
"""

from hypothesis import HealthCheck, settings

settings.register_profile("searching", deadline=None, suppress_health_check=[HealthCheck.too_slow])
settings.register_profile("motekeep", settings.get_profile("searching"), derandomize=True)
settings.load_profile("motekeep")
