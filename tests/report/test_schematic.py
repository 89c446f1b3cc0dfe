"""The drawing shows every part once, by the numbers of the parts list, and is well-formed whatever the chain."""

import dataclasses
import re
import xml.etree.ElementTree as ET

import numpy as np
import pytest
from sumwright.engine.analysis import Analysis
from sumwright.engine.arrangement import exact_cells
from sumwright.engine.designators import designators
from sumwright.engine.nodes import Network
from sumwright.engine.operating_point import operating_point
from sumwright.engine.stage import Cell, Design, Leg, Reference, Signal, Supply, Target
from sumwright.quantity import format_fixed, format_resistor
from sumwright.report.schematic import SYMBOLS, schematic
from support.stages import one_cell, op_amp, random_chain

SVG = "{http://www.w3.org/2000/svg}"


def texts(drawing):
    return [e.text for e in ET.fromstring(drawing.file()).iter(f"{SVG}text")]


def wanted(arrangement, count=3):
    sign = {"inverting": -1, "inverting-pair": 1, "non-inverting": 1}.get(arrangement)
    signals = tuple(
        Signal(f"in {i}", (sign or (-1) ** i) * (0.1 + 0.05 * i), -5.0, 5.0, 0.3 * i + 0.2, 50.0) for i in range(count)
    )
    d = Design("x", signals, Supply(12.0, -12.0), op_amp(per_package=2), Target(0.25 * (sign or 1)), Reference(2.5))
    return dataclasses.replace(d, cells=exact_cells(d, arrangement))


@pytest.mark.parametrize("arrangement", ["inverting", "inverting-pair", "non-inverting", "mixed-sign", "two-stage"])
@pytest.mark.parametrize("symbols", SYMBOLS)
def test_every_part_of_every_arrangement_is_drawn_once_with_its_number_and_value(arrangement, symbols):
    d = wanted(arrangement)
    point = operating_point(d)
    said = texts(schematic(d, point, symbols=symbols))
    names, net = designators(d), Network(d)
    for name, part in zip(names.resistors, net.parts, strict=True):
        assert said.count(name) == 1
        assert format_resistor(part.resistance) in said
    for name in (*names.op_amps, *d.signal_names):
        assert said.count(name) == 1
    assert format_fixed(point.output, "V") in said


def test_the_resistor_symbol_is_a_rectangle_or_a_zigzag_by_standard():
    d = wanted("inverting")
    fitted = len(Network(d).parts)
    iec, ieee = (str(schematic(d, symbols=s).svg()) for s in ("iec", "ieee"))
    assert iec.count('width="48" height="13"') == fitted
    assert ieee.count('width="48" height="13"') == 0
    assert ieee.count("l4 -7l8 14") == fitted
    with pytest.raises(ValueError, match="symbols must be one of"):
        schematic(d, symbols="other")


def test_any_chain_gives_a_well_formed_drawing_inside_its_own_frame():
    rng = np.random.default_rng(20260)
    for _ in range(40):
        d = random_chain(rng)
        drawing = schematic(d, Analysis(d).dc)
        root = ET.fromstring(drawing.file())
        assert "nan" not in drawing.file() and "var(" not in drawing.file()
        for e in root.iter(f"{SVG}text"):
            assert -8 <= float(e.get("x")) <= drawing.width + 8, e.text
            assert 0 <= float(e.get("y")) <= drawing.height, e.text
        assert sorted(t for t in texts(drawing) if re.fullmatch(r"R\d+", t)) == sorted(
            n for n in designators(d).resistors if n
        )


def test_a_name_cannot_write_markup():
    evil = '<script>x</script>&"'
    d = one_cell({"a": 1.0}, minus={"a": 1e4}, feedback=1e4, plus_ground=0.0)
    d = dataclasses.replace(
        d, signals=(dataclasses.replace(d.signals[0], name=evil),), cells=(Cell((Leg(evil, 1e4),), (), None, 0.0, 1e4),)
    )
    text = schematic(d, operating_point(d)).file()
    assert "<script" not in text
    assert evil in texts(schematic(d, operating_point(d)))


def test_a_clipped_output_is_red_and_said_in_words():
    d = one_cell({"a": 9.0}, minus={"a": 1e3}, feedback=1e5, plus_ground=0.0, amp=op_amp(), supply=12.0)
    drawing = schematic(d, operating_point(d))
    assert "clipped low" in texts(drawing)
    assert "clipped low" in drawing.alt
    assert "var(--accent)" in str(drawing.svg())
    assert "var(--accent)" not in str(schematic(d).svg())


def test_a_pulled_cable_is_drawn_open():
    d = wanted("non-inverting")
    said = texts(schematic(d, Analysis(d, ("in 1",)).dc, unplugged=("in 1",)))
    assert said.count("open") == 1
