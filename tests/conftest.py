"""Settings that every test shares."""

from hypothesis import HealthCheck, settings

# The same examples in every run, so that a failure is a failure for everybody; no deadline, because the first
# example pays for imports and a busy machine is not a defect.
settings.register_profile(
    "repeatable", derandomize=True, deadline=None, suppress_health_check=[HealthCheck.too_slow]
)
settings.load_profile("repeatable")
