"""The results document of any design that can be read: only texts, finite numbers and null."""

import json
import math

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st
from sumwright.engine.analysis import Analysis
from sumwright.engine.stage import Supply, Target, replace
from sumwright.errors import InvalidDesign
from sumwright.files.design import read_design, write_design
from sumwright.files.examples import NAMES, example
from sumwright.files.results import to_json
from support.stages import random_chain

NUMBERS = [
    "open_loop_gain", "gain_bandwidth", "second_pole", "slew_rate", "input_resistance", "differential_capacitance",
    "common_mode_capacitance", "output_resistance", "offset_voltage", "bias_current", "cmrr", "psrr", "noise_voltage",
    "noise_current_corner", "dropout_high", "dropout_resistance", "common_mode_low", "output_current", "supply_current",
    "thermal_resistance",
]  # fmt: skip
figures = st.dictionaries(
    st.sampled_from(NUMBERS), st.just(0.0) | st.none() | st.floats(-29, 29).map(lambda x: 10.0**x), max_size=5
)


def leaves(document):
    if isinstance(document, dict):
        for key, value in document.items():
            assert isinstance(key, str)
            yield from leaves(value)
    elif isinstance(document, list):
        for value in document:
            yield from leaves(value)
    else:
        yield document


@given(
    st.integers(0, 10**9), figures, st.sampled_from([None, 1.0, 2e3, 1e6]), st.booleans(), st.booleans(),
    st.sampled_from([Supply(15.0, -15.0, 0.05), Supply(5.0, 0.0, 0.1), Supply(-1.0, -12.0)]),
)  # fmt: skip
@settings(max_examples=150)
def test_any_readable_design_has_results(seed, changes, load, still, open_loop, supply):
    design = random_chain(np.random.default_rng(seed), load=load)
    design = replace(
        design, op_amp=replace(design.op_amp, **changes), supply=supply, target=Target(0.5, -1, 4, 0.01, 1e-4, 1e3)
    )
    if still:
        design = replace(design, signals=tuple(replace(s, low=s.value, high=s.value) for s in design.signals))
    if open_loop and (design.cells[-1].minus or design.cells[-1].minus_ground):
        design = replace(design, cells=(*design.cells[:-1], replace(design.cells[-1], feedback=None)))
    try:
        design = read_design(write_design(design))
    except InvalidDesign:
        return
    with np.errstate(all="ignore"):
        document = to_json(Analysis(design))
    for leaf in leaves(document):
        assert leaf is None or isinstance(leaf, str) or math.isfinite(leaf)
    assert json.loads(json.dumps(document, allow_nan=False)) == document


def test_nothing_is_rounded_and_infinity_is_null():
    analysis = Analysis(example())
    document = to_json(analysis)
    assert document["dc"]["output"] == analysis.dc.output
    assert document["noise"]["rms"] == analysis.noise.rms
    cell = replace(example().cells[0], feedback=None, feedback_capacitance=0.0)
    with np.errstate(all="ignore"):
        document = to_json(Analysis(replace(example(), cells=(cell,))))
    assert document["ac"]["cells"][0]["noise_gain"] is None


def test_names_and_sources_of_the_terms_are_the_parts():
    for name in NAMES:
        analysis = Analysis(example(name))
        parts = {part.name for part in analysis.net.parts}
        terms = to_json(analysis)["errors"]["present"]["terms"]
        assert parts <= {term["source"] for term in terms}
