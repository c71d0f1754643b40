"""Settings for every test: fixed hypothesis examples, generated matrices, small shared fixtures."""

from hypothesis import HealthCheck, settings

settings.register_profile(
    "gutz", derandomize=True, deadline=None, suppress_health_check=[HealthCheck.too_slow], max_examples=100
)
settings.load_profile("gutz")
