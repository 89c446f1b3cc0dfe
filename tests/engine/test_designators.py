"""Every fitted part has one name, and the names follow the order of the network's parts."""

import dataclasses

import numpy as np
from sumwright.engine.designators import designators
from sumwright.engine.nodes import Network
from support.stages import one_cell, op_amp, random_chain


def test_resistors_are_numbered_in_the_order_of_the_networks_parts():
    d = one_cell({"a": 1.0, "b": 1.0}, minus={"a": 1e4}, plus={"b": 2e4}, feedback=1e4, plus_ground=5e3)
    names = designators(d)
    assert names.resistors == ("R1", "R2", "R3", "R4")
    assert [p.kind for p in Network(d).parts] == ["minus", "plus", "plus_ground", "feedback"]
    assert names.capacitors == ("",)
    assert names.op_amps == ("U1",)


def test_a_leg_of_nothing_is_a_wire_and_takes_no_number():
    d = one_cell({"a": 1.0}, plus={"a": 0.0}, feedback=1e4)
    assert designators(d).resistors == ("", "R1")


def test_amplifiers_of_one_package_share_its_number():
    d = random_chain(np.random.default_rng(3), cells=3, per_package=2)
    assert designators(d).op_amps == ("U1A", "U1B", "U2A")
    assert designators(dataclasses.replace(d, op_amp=op_amp(per_package=1))).op_amps == ("U1", "U2", "U3")


def test_only_fitted_capacitors_are_numbered():
    rng = np.random.default_rng(11)
    for _ in range(10):
        d = random_chain(rng)
        fitted = [c.feedback_capacitance > 0 for c in d.cells]
        got = designators(d).capacitors
        assert [bool(c) for c in got] == fitted
        assert [c for c in got if c] == [f"C{i + 1}" for i in range(sum(fitted))]
