"""For every test: nothing is kept in the data folder of whoever runs them, no setting of theirs reaches in, no clock decides."""

import atexit
import os
import shutil
import tempfile

from hypothesis import HealthCheck, settings

for _name in [n for n in os.environ if n.startswith("SUMWRIGHT_")]:
    del os.environ[_name]
os.environ["SUMWRIGHT_DATA"] = tempfile.mkdtemp(prefix="sumwright-test-")
atexit.register(shutil.rmtree, os.environ["SUMWRIGHT_DATA"], ignore_errors=True)
os.environ["XDG_CONFIG_HOME"] = os.environ["SUMWRIGHT_DATA"]

# The same examples every time, and no clock: a busy machine must not fail a test, nor luck pass one.
settings.register_profile("steady", derandomize=True, deadline=None, suppress_health_check=[HealthCheck.too_slow])
# New examples every time, by hand: tests/run --hypothesis-profile=explore
settings.register_profile("explore", deadline=None, max_examples=1000, suppress_health_check=[HealthCheck.too_slow])
settings.load_profile("steady")
