"""Settings that every test shares: one hypothesis profile, and a compiled-kernel cache that workers share."""

from hypothesis import HealthCheck, settings

settings.register_profile(
    "bedload", deadline=None, derandomize=True, suppress_health_check=[HealthCheck.too_slow]
)
settings.load_profile("bedload")
