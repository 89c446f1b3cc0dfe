"""What every room shares: how Hypothesis looks for counterexamples."""

from hypothesis import HealthCheck, settings

# The same examples every time, and no clock: a busy machine must not fail a test, nor luck pass one.
settings.register_profile("steady", derandomize=True, deadline=None, suppress_health_check=[HealthCheck.too_slow])
# New examples every time, by hand: tests/run --hypothesis-profile=explore
settings.register_profile("explore", deadline=None, max_examples=1000, suppress_health_check=[HealthCheck.too_slow])
settings.load_profile("steady")
