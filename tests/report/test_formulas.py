"""The printed derivation gives the weights that the ideal recipe and the node equations give."""

import dataclasses

import numpy as np
import pytest
from sumwright.engine.arrangement import ideal_weights
from sumwright.engine.operating_point import operating_point
from sumwright.engine.stage import REFERENCE
from sumwright.report.formulas import derivation
from support.stages import ideal_op_amp, random_chain


def test_printed_weights_are_those_of_two_other_routes():
    rng = np.random.default_rng(77)
    for _ in range(60):
        d = random_chain(rng)
        said = {line.of: line.value for line in derivation(d) if line.name == "w"}
        ideal, offset = ideal_weights(d, d.cells)
        for name in d.signal_names:
            assert said[name] == pytest.approx(ideal[name], rel=1e-9, abs=1e-12)
        made = operating_point(
            dataclasses.replace(d, op_amp=ideal_op_amp(), load=dataclasses.replace(d.load, resistance=None))
        )
        np.testing.assert_allclose([said[n] for n in d.signal_names], made.weights, rtol=1e-6, atol=1e-9)
        if REFERENCE in said:
            assert said[REFERENCE] * d.reference.voltage == pytest.approx(offset, rel=1e-9, abs=1e-12)


def test_a_reader_can_put_the_numbers_in():
    # Kirchhoff at the virtual ground: -Rf/(R + Rs), so -20k/(9.9k + 100 ohm) = -2.
    from support.stages import one_cell

    d = one_cell({"a": 1.0}, minus={"a": 9900.0}, feedback=2e4, plus_ground=0.0)
    d = dataclasses.replace(d, signals=(dataclasses.replace(d.signals[0], source_resistance=100.0),))
    line = next(x for x in derivation(d) if x.name == "w")
    assert line.formula == "−R2/(R1 + 100\u202fΩ)"
    assert line.numbers == "−20k/(9.9k + 100R)"
    assert line.result == "−2.00000"
