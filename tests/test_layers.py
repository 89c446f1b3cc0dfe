"""Who may import whom, seen from a fresh interpreter: engine <- model <- views <- page, and nothing upwards."""

import subprocess
import sys

import pytest

UPPER = ("sumwright.model", "sumwright.views", "sumwright.page")
GRAPHICAL = ("param", "panel", "bokeh")
# Layer: what must not be loaded once every module of it is imported.
LAYERS = {
    "sumwright.errors": ("numpy", "sumwright.engine", "sumwright.files", *GRAPHICAL, *UPPER),
    "sumwright.quantity": ("numpy", "sumwright.engine", "sumwright.files", *GRAPHICAL, *UPPER),
    "sumwright.engine": (
        "sqlalchemy", "sumwright.files", "sumwright.notebook", "sumwright.report", "sumwright.verbs", *GRAPHICAL, *UPPER,
    ),
    "sumwright.files": ("sqlalchemy", "sumwright.notebook", "sumwright.verbs", *GRAPHICAL, *UPPER),
    "sumwright.notebook": UPPER,  # its sign-in is a part of the server, so it knows Bokeh
    "sumwright.model": ("panel", "bokeh", "sumwright.views", "sumwright.page"),
    "sumwright.views": ("sumwright.page",),
    "sumwright.command": ("numpy", "sqlalchemy", *GRAPHICAL, *UPPER),
}  # fmt: skip

LOOK = """
import importlib, pkgutil, sys
layer = importlib.import_module(sys.argv[1])
for found in pkgutil.walk_packages(getattr(layer, "__path__", []), layer.__name__ + "."):
    importlib.import_module(found.name)
print("\\n".join(sys.modules))
"""


def loaded_by(layer):
    """Names of all modules in memory once `layer` is imported whole, in an interpreter of its own."""
    done = subprocess.run([sys.executable, "-c", LOOK, layer], capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr
    return set(done.stdout.split())


@pytest.mark.parametrize("layer", LAYERS)
def test_a_layer_does_not_know_those_above_it(layer):
    loaded = loaded_by(layer)
    assert layer in loaded
    assert not [name for name in LAYERS[layer] if name in loaded]


def test_a_layer_that_imports_upwards_would_be_seen():
    """The look itself works: the page does load the model and the views."""
    loaded = loaded_by("sumwright.page")
    assert {"sumwright.model", "sumwright.views", "panel", "param"} <= loaded
