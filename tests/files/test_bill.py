"""The bill of materials: every part once, the schematic's names, safe to open."""

import csv
import io

import pytest
from sumwright.engine.arrangement import exact_cells
from sumwright.engine.designators import designators
from sumwright.engine.nodes import Network
from sumwright.engine.realise.choices import realise
from sumwright.engine.stage import replace
from sumwright.errors import SumwrightError
from sumwright.files.bill import HEADING, bill, bill_csv, safe_cell
from support.stages import op_amp
from support.wanted import design_for


def realised(weights, **kind):
    design = design_for(weights, **kind)
    return replace(design, cells=realise(design).choices[0].cells)


def rows_of(design):
    return list(csv.DictReader(io.StringIO(bill_csv(design))))


def test_every_fitted_resistor_is_listed_once_under_its_value():
    design = realised([0.25] * 4, offset=0.5)
    net = Network(design)
    named = dict(zip(designators(design).resistors, net.parts, strict=True))
    seen = []
    for row in rows_of(design):
        marks = row["designators"].split()
        assert int(row["count"]) == len(marks) == len(row["use"].split("; "))
        if row["part"] == "resistor":
            for mark, use in zip(marks, row["use"].split("; "), strict=True):
                assert named[mark].name == use
                assert row["value"].rstrip("R") in (
                    f"{named[mark].resistance / 1e3:g}k",
                    f"{named[mark].resistance:g}",
                    f"{named[mark].resistance / 1e6:g}M",
                )
            seen += marks
    assert sorted(seen) == sorted(m for m in named if m)


def test_op_amps_capacitors_and_spares():
    design = replace(design_for([1.0, -2.0, 1.0], amp=op_amp(name="quad", per_package=4)))
    cells = exact_cells(design, "two-stage", feedback=20e3)
    design = replace(design, cells=(replace(cells[0], feedback_capacitance=1e-11), cells[1]))
    rows = {row["part"]: row for row in rows_of(design)}
    assert rows["op amp"]["designators"] == "U1" and "2 amplifiers unused" in rows["op amp"]["note"]
    assert "U1B" in rows["op amp"]["use"]
    assert rows["capacitor"]["designators"] == "C1" and rows["capacitor"]["value"].startswith("10")


def test_a_pair_is_listed_as_its_two_resistors():
    design = design_for([2.1, -4.2, 1.11, 3.7], series="E12")
    choice = next(c for c in realise(design, pairs=True).choices if c.parts)
    lines = bill(replace(design, cells=choice.cells))
    bought = sum(line.count for line in lines if line.part == "resistor")
    assert bought == choice.resistor_count
    assert not any("not a value" in line.note for line in lines)
    assert any(m.endswith("a") for line in lines for m in line.designators)


def test_a_value_that_cannot_be_bought_says_so():
    design = replace(design_for([-3.0]), cells=exact_cells(design_for([-3.0]), "inverting", feedback=10e3))
    assert any("not a value of E96" in line.note for line in bill(design) if line.part == "resistor")


@pytest.mark.parametrize("text", ["=1+1", "+SUM(A1)", "-2+3", "@cmd", "\t=1", "\r=1", "\n=1", "  =HYPERLINK(1)"])
def test_no_cell_runs_as_a_formula(text):
    assert safe_cell(text).startswith("'")
    design = realised([-1.0])
    design = replace(design, op_amp=replace(design.op_amp, name=text))
    for row in csv.reader(io.StringIO(bill_csv(design), newline="")):
        assert len(row) == len(HEADING)
        assert not any(cell.lstrip(" ").startswith(("=", "+", "-", "@", "\t", "\r", "\n")) for cell in row)


def test_an_unrealised_design_has_no_bill():
    with pytest.raises(SumwrightError, match="not realised"):
        bill(design_for([1.0]))
