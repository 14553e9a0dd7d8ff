"""Settings for every test: hypothesis draws the same examples in every run, and keeps no files."""

from hypothesis import HealthCheck, settings

settings.register_profile(
    "oakum",
    derandomize=True,
    deadline=None,
    database=None,
    max_examples=60,
    suppress_health_check=[HealthCheck.too_slow, HealthCheck.function_scoped_fixture],
)
settings.load_profile("oakum")
