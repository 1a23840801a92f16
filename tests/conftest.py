"""Settings of all tests: hypothesis draws the same examples every time, and no test is judged by its speed."""

from hypothesis import HealthCheck, settings

settings.register_profile(
    "ensembles", derandomize=True, deadline=None, max_examples=25, suppress_health_check=[HealthCheck.too_slow]
)
settings.load_profile("ensembles")
