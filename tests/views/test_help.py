"""Every quantity that can be typed has help on hover: what it is, its unit, and where its figure comes from."""

import re
from dataclasses import fields
from pathlib import Path

from sumwright.engine.checks import run_checks
from sumwright.engine.stage import Ambient, Load, OpAmp, Reference, ResistorKind, Signal, Supply, Target

SCRIPT = (Path(__file__).parents[2] / "app/static/help.js").read_text(encoding="utf-8")


def test_every_figure_of_the_op_amp_is_explained():
    for f in fields(OpAmp):
        if f.name != "name":
            assert re.search(rf"^  {f.name}: \['[^']{{10,}}', '[^']+', ", SCRIPT, re.M), f.name


def test_every_figure_of_the_surroundings_is_explained():
    groups = {
        "supply": Supply,
        "load": Load,
        "target": Target,
        "reference": Reference,
        "ambient": Ambient,
        "resistor": ResistorKind,
    }
    for group, kind in groups.items():
        for f in fields(kind):
            if (group, f.name) not in (("target", "offset"), ("resistor", "series")):
                assert f"'{group} {f.name}': [" in SCRIPT, (group, f.name)
    for f in fields(Signal):
        if f.name not in ("name", "weight"):
            assert f"'signal {f.name}': [" in SCRIPT, f.name


def test_every_margin_is_explained():
    from sumwright.engine.analysis import Analysis
    from sumwright.files.examples import NAMES, example

    starts = re.findall(r"^  '([A-Z][^']+)': '", SCRIPT, re.M)
    for name in NAMES:
        for check in run_checks(Analysis(example(name))):
            assert any(check.title.startswith(s) for s in starts), check.title
