"""Property tests are judged by their results, not by the clock of a loaded machine."""

from hypothesis import HealthCheck, settings

settings.register_profile("tests", deadline=None, suppress_health_check=[HealthCheck.too_slow])
settings.load_profile("tests")
