"""For every test: nothing is kept in the data folder of whoever runs them, and no setting of theirs reaches in."""

import os
import tempfile

for _name in [n for n in os.environ if n.startswith("SUMWRIGHT_")]:
    del os.environ[_name]
os.environ["SUMWRIGHT_DATA"] = tempfile.mkdtemp(prefix="sumwright-test-")
os.environ["XDG_CONFIG_HOME"] = os.environ["SUMWRIGHT_DATA"]
