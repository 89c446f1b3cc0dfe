"""Comparing two frozen designs tells what changed, by name, and nothing else."""

from sumwright.notebook.compare import Change, compare, key_results

A = {
    "design": {
        "format": "sumwright-design/1",
        "title": "Vat",
        "signals": [
            {"name": "north", "weight": 0.25, "value": 1.0, "source_resistance": 50},
            {"name": "east", "weight": 0.5, "value": 2.0, "source_resistance": 50},
        ],
        "supply": {"high": 12, "low": -12, "tolerance": 0.05},
        "ambient": {"nominal": 25},
        "noise_band": [0.1, 1e5],
        "cells": [
            {"minus": [], "plus": [{"from": "north", "resistance": 40000}, {"from": "east", "resistance": 20000}],
             "minus_ground": None, "plus_ground": None, "feedback": 20000, "feedback_capacitance": 0},
        ],
    },
    "unplugged": [],
    "results": {"output": [1.25, "V"], "phase margin": [61.0, "°"]},
    "checks": [{"title": "Swing to + rail", "margin": -0.684, "unit": "V", "status": "short"}],
}  # fmt: skip


def _copy(value):
    return {k: _copy(v) for k, v in value.items()} if isinstance(value, dict) else [_copy(v) for v in value] if isinstance(value, list) else value  # fmt: skip


def test_the_same_twice_differs_in_nothing():
    found = compare(A, _copy(A))
    assert found.values == () and found.results == ()
    assert (found.same_values, found.same_results) == (
        19,
        4,
    )  # title, 2 x 3 of signals, 3 rails, 1 ambient, 2 band, 2 legs, 4 of the cell


def test_each_changed_value_is_named_once_with_both_sides_and_its_unit():
    b = _copy(A)
    b["design"]["signals"][1]["weight"] = 0.4
    b["design"]["cells"][0]["feedback_capacitance"] = 4.7e-12
    b["design"]["cells"][0]["plus_ground"] = 10000
    b["design"]["supply"]["high"] = 6
    b["design"]["noise_band"] = [1.0, 1e5]
    b["unplugged"] = ["east"]
    b["results"]["phase margin"] = [70.0, "°"]
    b["checks"][0].update(margin=0.2, status="clear")
    found = compare(A, b)
    assert set(found.values) == {
        Change("east, weight", 0.5, 0.4, "V/V"),
        Change("feedback capacitance", 0, 4.7e-12, "F"),
        Change("plus ground", None, 10000, "Ω"),
        Change("supply, high", 12, 6, "V"),
        Change("noise band, from", 0.1, 1.0, "Hz"),
        Change("east, cable", None, "out", ""),
    }
    assert set(found.results) == {
        Change("phase margin", 61.0, 70.0, "°"),
        Change("Swing to + rail, margin", -0.684, 0.2, "V"),
        Change("Swing to + rail", "short", "clear", ""),
    }


def test_order_of_rows_and_legs_is_no_change():
    b = _copy(A)
    b["design"]["signals"].reverse()
    b["design"]["cells"][0]["plus"].reverse()
    assert compare(A, b).values == ()


def test_a_leg_that_went_to_the_other_node_and_a_signal_that_went_are_shown():
    b = _copy(A)
    b["design"]["signals"].pop()
    leg = b["design"]["cells"][0]["plus"].pop()
    b["design"]["cells"][0]["minus"].append(leg)
    found = {c.what: (c.before, c.after) for c in compare(A, b).values}
    assert found["east leg, plus node"] == (20000, None)
    assert found["east leg, minus node"] == (None, 20000)
    assert found["east, weight"] == (0.5, None)


def test_a_frozen_entry_without_results_still_compares():
    found = compare({"title": "x", "design": {}}, A)
    assert found.same_values == 2  # the two ground legs, fitted on neither side
    assert len(found.values) == 17 and all(c.before is None for c in found.values)
    assert compare({"title": "x", "design": A["design"]}, A).values == ()


def test_key_results_are_taken_from_the_analysis_document():
    document = {
        "dc": {"output": 1.0, "ideal_output": 1.1, "offset": 0.0, "clipped": "no", "weights": {"north": 0.25}},
        "errors": {"present": {"worst_case": 0.01, "expanded_95": 0.004, "terms": [1, 2]}},
        "headroom": {"cells": [{"highest": 3.0, "lowest": 0.0, "output_current_peak": 1e-3}]},
        "ac": {"signals": {"north": {"bandwidth_3db": None}}, "cells": [{"phase_margin": 60.0, "noise_gain": 2.0, "crossover": 1e6}]},
        "noise": {"rms": 1e-5},
        "checks": [{"key": "k", "title": "T", "status": "clear", "value": 1, "limit": 2, "margin": 1, "unit": "V", "advice": "", "why": ""}],
    }  # fmt: skip
    results, checks = key_results(document)
    assert results["output"] == [1.0, "V"]
    assert results["north, made weight"] == [0.25, "V/V"]
    assert results["error present, expanded 95"] == [0.004, "V"]
    assert results["phase margin"] == [60.0, "°"]
    assert results["north, bandwidth"] == [None, "Hz"]
    assert results["noise"] == [1e-5, "V RMS"]
    assert checks == [{"key": "k", "title": "T", "status": "clear", "value": 1, "limit": 2, "margin": 1, "unit": "V"}]
    assert key_results({}) == ({}, [])
