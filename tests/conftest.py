"""Settings of all tests: seeded randomness, and no time limit for examples that compile a kernel."""

from hypothesis import HealthCheck, settings

settings.register_profile("seeded", derandomize=True, deadline=None,
                          suppress_health_check=[HealthCheck.too_slow, HealthCheck.function_scoped_fixture])
settings.load_profile("seeded")
