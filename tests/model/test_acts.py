"""What a browser may send: every field is checked, whatever comes."""

import json

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from sumwright.engine.arrangement import arrangement_of
from sumwright.engine.stage import ARRANGEMENTS
from sumwright.errors import CannotRealise, SumwrightError
from sumwright.files.design import read_design, write_design
from sumwright.model import acts, demo
from sumwright.model.typed import SPANS
from sumwright.model.workbench import Workbench
from sumwright.sitting import read_step, step_document


@pytest.fixture
def bench():
    return Workbench(demo.design())


def do(bench, act, **message):
    return acts.ACTS[act](bench, message)


def test_values_are_typed_as_engineers_write_them(bench):
    do(bench, "part", part="0/feedback", text="4k7")
    assert bench.cells[0].feedback == 4700.0
    do(bench, "part", part="0/minus/tare", text="0.1M")
    assert bench.cells[0].minus[0].resistance == 100e3
    do(bench, "capacitor", cell=0, text="4p7")
    assert bench.cells[0].feedback_capacitance == pytest.approx(4.7e-12)
    do(bench, "capacitor", cell=0, text="")
    assert bench.cells[0].feedback_capacitance == 0.0
    do(bench, "signal", signal="north", figure="value", text="\u221225m")
    assert bench.design.signal("north").value == pytest.approx(-0.025)
    do(bench, "figure", group="supply", figure="tolerance", text="2")
    assert bench.supply.tolerance == pytest.approx(0.02)
    do(bench, "figure", group="resistor", figure="temperature_coefficient", text="50")
    assert bench.resistor.temperature_coefficient == pytest.approx(50e-6)
    do(bench, "figure", group="load", figure="resistance", text="")
    assert bench.load.resistance is None


def test_typing_half_of_what_is_wrong_says_what_is_allowed(bench):
    with pytest.raises(SumwrightError, match=r"8\.5\.1"):
        do(bench, "signal", signal="east", figure="value", text="8.5.1")


@pytest.mark.parametrize(
    ("act", "message", "says"),
    [
        ("part", {"part": "0/feedback", "text": "1e30"}, r"resistor: 10.mΩ to 1.TΩ"),
        ("part", {"part": "0/feedback", "text": "1e-29"}, r"10.mΩ to 1.TΩ"),
        ("figure", {"group": "supply", "figure": "high", "text": "1e9"}, r"1.GV .* a rail: −1.kV to 1.kV"),
        ("weight", {"signal": "north", "text": "1e12"}, r"1e12 .* a weight, either sign: 0.00001 to 100000"),
        ("weight", {"signal": "tare", "text": "-1e12"}, r"a weight"),
        ("signal", {"signal": "north", "figure": "high", "text": "1e20"}, r"10.kV"),
        ("capacitor", {"cell": 0, "text": "1e-30"}, r"1.fF to 1.mF"),
        ("figure", {"group": "resistor", "figure": "tolerance", "text": "400"}, r"400.% .* 0.% to 50.%"),
        ("figure", {"group": "op_amp", "figure": "per_package", "text": "1e9"}, r"1 to 64"),
        ("draw_sum", {"text": "out = 1e12 a"}, r"a weight"),
        ("offset", {"text": "1e9"}, r"an offset"),
    ],
)
def test_a_slip_of_the_keyboard_is_told_what_is_allowed(bench, act, message, says):
    before = bench.snapshot
    with pytest.raises(SumwrightError, match=says):
        do(bench, act, **message)
    assert bench.snapshot == before
    assert not bench.history.past


def test_every_figure_that_can_be_typed_has_its_span(bench):
    assert {(g, f) for g, figures in acts.UNITS.items() for f in figures} <= set(SPANS)
    assert {("signal", f) for f in acts.SIGNAL_UNITS} <= set(SPANS)
    # a legal file is opened whatever it holds
    document = json.loads(write_design(bench.design))
    document["cells"][0]["feedback"] = 1e15
    do(bench, "open", text=json.dumps(document))
    assert bench.cells[0].feedback == 1e15


def test_a_refused_weight_can_be_taken_with_another_arrangement(bench):
    do(bench, "draw_sum", text="out = - 0.5 a - 0.25 b")
    do(bench, "arrange", arrangement="inverting")
    with pytest.raises(CannotRealise) as refused:
        do(bench, "weight", signal="a", text="0.5")
    steps = len(bench.history.past)
    do(bench, "weight", signal="a", text="0.5", arrangement=refused.value.able[0])
    assert bench.analysis.dc.weights[0] == pytest.approx(0.5, rel=0.03)
    assert len(bench.history.past) == steps + 1


@pytest.mark.parametrize("arrangement", ARRANGEMENTS)
def test_every_arrangement_is_drawn_or_refused_with_those_that_can(bench, arrangement):
    try:
        do(bench, "arrange", arrangement=arrangement)
    except CannotRealise as refused:
        assert refused.able == ("mixed-sign", "two-stage")
    else:
        assert arrangement in ("mixed-sign", "two-stage")


def test_what_is_saved_is_what_is_on_the_sheet(bench):
    do(bench, "value", signal="north", value=1.25)
    saved = do(bench, "save")["download"]
    assert read_design(saved["text"]) == bench.design
    assert saved["name"] == "grain-hopper-four-corners.json"


def test_two_signals_of_one_sheet_never_share_a_look(bench):
    for text in ("out = 0.5 a + 0.25 b", "out = 0.5 c", "out = 0.5 a + 0.25 c + 0.1 b"):
        do(bench, "draw_sum", text=text)
        looks = [bench.style(name) for name in bench.signal_names]
        assert sorted(looks) == list(range(len(looks)))


def test_a_file_without_cells_is_drawn_and_says_so(bench):
    document = json.loads(write_design(bench.design))
    del document["cells"]
    assert "nearest values" in do(bench, "open", text=json.dumps(document))["note"]
    assert bench.design.cells


def test_an_op_amp_is_taken_from_the_list(bench):
    do(bench, "amplifier", op_amp="Precision bipolar, 0.6 MHz")
    assert bench.op_amp.name == "Precision bipolar, 0.6 MHz"


junk = st.one_of(
    st.none(), st.booleans(), st.integers(), st.floats(), st.text(max_size=20), st.lists(st.integers(), max_size=3),
    st.sampled_from(["north", "4k7", "-1e400", "<img src=x onerror=alert(1)>", "nan", "0/feedback", "supply", "high",
                     "two-stage", "op_amp", "value"]),
)  # fmt: skip
FIELDS = (
    "signal", "value", "text", "figure", "group", "part", "cell", "arrangement", "names", "out", "places", "follow",
    "series", "end", "op_amp", "symbols", "theme",
)  # fmt: skip
SHARED = Workbench(demo.design())


@settings(max_examples=300, deadline=None)
@given(act=st.sampled_from(sorted(acts.ACTS)), message=st.dictionaries(st.sampled_from(FIELDS), junk, max_size=6))
def test_whatever_comes_is_done_or_refused_and_the_sheet_stays_whole(act, message):
    try:
        acts.ACTS[act](SHARED, message)
    except SumwrightError as refused:
        assert "\n" not in str(refused)
    assert not SHARED.problem
    assert SHARED.analysis.design == SHARED.design


def test_the_arrangement_that_was_chosen_stays_shown_where_its_legs_are_anothers():
    bench = Workbench(demo.design())
    do(bench, "draw_sum", text="out = - a - 0.5 b - 0.25 c")
    assert bench.arrangement == "inverting"
    do(bench, "arrange", arrangement="mixed-sign")
    assert (bench.arrangement, arrangement_of(bench.cells)) == ("mixed-sign", "inverting")
    do(bench, "undo")
    assert bench.arrangement == "inverting"
    do(bench, "redo")
    do(bench, "signal", signal="a", figure="value", text="1")
    assert read_step(step_document(bench.snapshot)) == bench.snapshot
    # what only the chosen one can make is made by it, without asking
    do(bench, "weight", signal="a", text="0.5")
    assert bench.arrangement == arrangement_of(bench.cells) == "mixed-sign"
    do(bench, "arrange", arrangement="two-stage")
    assert bench.arrangement == "two-stage"
    do(bench, "undo")
    assert bench.arrangement == "mixed-sign"
