"""A sum as a person writes it."""

import pytest
from sumwright.errors import SumwrightError
from sumwright.model import demo
from sumwright.model.sums import new_design, read_sum


def terms(text):
    wanted = read_sum(text)
    return {s.name: s.weight for s in wanted.signals}, wanted.offset


def test_a_sum_with_signs_fractions_units_and_true_minus():
    weights, offset = terms("out = 0.14 north + 1/4 east \u2212 .5·tare - west + 500 mV")
    assert weights == {"north": 0.14, "east": 0.25, "tare": -0.5, "west": -1.0}
    assert offset == pytest.approx(0.5)


def test_a_sum_over_several_lines_and_without_a_left_side():
    assert terms("out = 0.5 a\n + 0.25 b\n - 0.5 V") == ({"a": 0.5, "b": 0.25}, -0.5)
    assert terms("2 left - 3 right") == ({"left": 2.0, "right": -3.0}, 0.0)


def test_names_of_several_words_stand_in_quotes():
    assert terms('y = 2 "left tank" + 1 "right tank"')[0] == {"left tank": 2.0, "right tank": 1.0}


@pytest.mark.parametrize("sum_", ["out = 0.5 a - 0.25 b", "a 0.5\nb -0.25"])
def test_what_is_asked_of_the_output_stands_in_lines_of_its_own(sum_):
    wanted = read_sum(f"{sum_}\nwindow 0 to 5 V\naccuracy ±20m\nrails: 15 V, -15 V".replace("±", ""))
    assert {s.name: s.weight for s in wanted.signals} == {"a": 0.5, "b": -0.25}
    assert (wanted.window, wanted.accuracy, wanted.rails) == ((0.0, 5.0), 0.02, (15.0, -15.0))
    design = new_design(wanted, demo.op_amp())
    assert (design.target.low, design.target.high, design.target.accuracy) == (0.0, 5.0, 0.02)
    assert (design.supply.high, design.supply.low) == (15.0, -15.0)
    assert read_sum(f"{sum_}\nwindow -5 5\nrails 0 24").window == (-5.0, 5.0)
    for wrong, says in (("window 5 0", "below its top"), ("accuracy 0", "more than 0"), ("rails 5 5", "different"),
                        ("window 0 5x", "window"), ("rails 12 1e9", "a rail")):  # fmt: skip
        with pytest.raises(SumwrightError, match=says):
            read_sum(f"{sum_}\n{wrong}")
    # and a signal may still be called so
    assert read_sum("window 0.5\nrails, 0.25, 0, 10").signals[0].name == "window"


def test_names_of_other_scripts_are_names():
    assert terms("y = 0.5 größe + 0.5 вес")[0] == {"größe": 0.5, "вес": 0.5}


def test_a_list_of_weights_with_ranges_a_heading_and_an_offset():
    wanted = read_sum("name, weight, low, high, source\nleft, 0.5, -1, 1, 4k7\nright, -250m\noffset, 0.1")
    assert [(s.name, s.weight, s.low, s.high, s.source_resistance) for s in wanted.signals] == [
        ("left", 0.5, -1.0, 1.0, 4700.0),
        ("right", -0.25, 0.0, 10.0, 0.0),
    ]
    assert wanted.offset == pytest.approx(0.1)


def test_a_list_may_have_the_weight_first_as_a_sum_has():
    found = read_sum("0.5 left\n− 0.25 right\n0.1 * third one")
    assert [(s.name, s.weight) for s in found.signals] == [("left", 0.5), ("right", -0.25), ("third one", 0.1)]


def test_a_column_of_bare_weights_gets_names():
    assert terms("0.5\n0.25\n-0.1")[0] == {"signal 1": 0.5, "signal 2": 0.25, "signal 3": -0.1}


def test_a_table_pasted_with_tabs():
    assert terms("north\t0.14\neast\t0.1")[0] == {"north": 0.14, "east": 0.1}


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("", "no sum yet"),
        ("out = ", "no signal"),
        ("out = 0.5 a 0.5 b", "before"),
        ("out = 0.5 a + 0 b", "weighs 0"),
        ("out = 0.5 a + 0.5 a", "already"),
        ("out = 1/0 a", "divides by 0"),
        ("out = 0.5 a = 3", "one “=”"),
        ("out = 0.5 a + $", "not a term"),
        ("out = 0.5 reference", "reference"),
        ("a, 0.5, 3, 1", "above its high end"),
        ("b, 0.5\na, banana", "Line 2.*a number"),
    ],
)
def test_what_cannot_be_read_is_refused_in_one_sentence(text, says):
    with pytest.raises(SumwrightError, match=says) as refused:
        read_sum(text)
    assert "\n" not in str(refused.value)


def test_too_many_signals_are_refused():
    with pytest.raises(SumwrightError, match="64 signals"):
        read_sum("out = " + " + ".join(f"0.1 s{i}" for i in range(65)))
