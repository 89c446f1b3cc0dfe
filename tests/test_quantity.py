"""Engineering notation: what is read, what is refused, and how it is written."""

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st
from sumwright.errors import InvalidQuantity
from sumwright.quantity import (
    MINUS,
    THIN,
    format_exact,
    format_fixed,
    format_percent,
    format_quantity,
    format_resistor,
    parse_colour_bands,
    parse_quantity,
    parse_resistor_code,
    unbroken,
)

READ = [
    ("4k7", "", 4700.0), ("4.7k", "", 4700.0), ("4K7", "Ω", 4700.0), ("4.7 kΩ", "Ω", 4700.0), ("10 kΩ", "Ω", 1e4),
    ("10 k\u2126", "Ω", 1e4), ("4,7k", "Ω", 4700.0), ("100n", "F", 1e-7), ("100 nF", "F", 1e-7), ("n15", "F", 1.5e-10),
    ("p33", "F", 0.33e-12), ("10 µF", "F", 1e-5), ("10 \u03bcF", "F", 1e-5), ("10uF", "F", 1e-5), ("-12", "V", -12.0),
    ("\u221212", "V", -12.0), ("+6.00 V", "V", 6.0), (f"6.00{THIN}V", "V", 6.0), ("6.00\u00a0V", "V", 6.0),
    ("25m", "V", 0.025), ("25 mV", "V", 0.025), ("2M2", "Ω", 2.2e6), ("2m2", "Ω", 2.2e-3), ("1M", "Ω", 1e6),
    ("1m", "Ω", 1e-3), ("0R47", "Ω", 0.47), ("R47", "Ω", 0.47), ("470R", "Ω", 470.0), ("470 ohm", "Ω", 470.0),
    ("1e-3", "", 1e-3), ("1.5E3 V", "V", 1500.0), (".5", "", 0.5), ("5.", "", 5.0), ("1 %", "", 0.01),
    ("25 ppm", "", 25e-6), ("25 ppm/K", "1/K", 25e-6), ("100 ppm/°C", "1/K", 1e-4), ("20 dB", "V/V", 10.0),
    ("200k", "V/V", 2e5), ("13 V/µs", "V/s", 1.3e7), ("0.5V/us", "V/s", 5e5), ("8 nV/√Hz", "V/√Hz", 8e-9),
    ("5 µV/K", "V/K", 5e-6), ("5 µV/°C", "V/K", 5e-6), ("150 K/W", "K/W", 150.0), ("150K/W", "K/W", 150.0),
    ("85 °C", "°C", 85.0), (" 4k7 ", "", 4700.0), (4700, "", 4700.0), (0.1, "", 0.1), (-0.0, "", 0.0),
    ("0,125", "", 0.125),
]  # fmt: skip


@pytest.mark.parametrize(("typed", "unit", "number"), READ)
def test_a_value_is_read_as_an_engineer_means_it(typed, unit, number):
    assert parse_quantity(typed, unit) == number


def test_case_tells_milli_from_mega_and_nothing_else_apart():
    assert parse_quantity("5M") / parse_quantity("5m") == 1e9
    assert parse_quantity("5K") == parse_quantity("5k")


REFUSED = [
    "", "   ", "nan", "NaN", "inf", "Infinity", "-inf", "1e400", "-1e400", "k", "-", ".", "+", "4k7k5", "5kk", "0x10",
    "1_000", "1,000", "12,345", "1e3k", "2 meg", "4.7.1", "--5", "4 7k", "five", "1/3", "١٢", "\u202e4k7", "4k7\u202e",
    "<b>4</b>", "9" * 5000, "$5", "5 apples", "e5", "1e", "4k7e2", "9e99999", "999999999 dB",
]  # fmt: skip


@pytest.mark.parametrize("typed", REFUSED)
def test_what_is_not_a_number_is_refused_in_one_line(typed):
    for unit in ("", "V", "V/V"):
        with pytest.raises(InvalidQuantity) as refusal:
            parse_quantity(typed, unit)
        sentence = str(refusal.value)
        assert "\n" not in sentence and len(sentence) < 250 and sentence.isprintable()


@pytest.mark.parametrize("value", [None, True, False, [], {}, b"4k7", math.nan, math.inf, -math.inf, 10**400, 1j])
def test_what_is_no_finite_number_is_refused(value):
    with pytest.raises(InvalidQuantity):
        parse_quantity(value)


def test_a_refusal_quotes_what_was_typed_and_says_what_to_write():
    with pytest.raises(InvalidQuantity, match=r'north leg: "4k7x" is not a number.*4k7, 4\.7k, 100n'):
        parse_quantity("4k7x", name="north leg")


@pytest.mark.parametrize(
    ("typed", "unit", "says"),
    [("12 mA", "V", "is in A; it must be in V"), ("5 V", "Ω", "is in V"), ("4R7", "V", "is a resistance"), ("5 V", "", "no unit")],
)  # fmt: skip
def test_another_unit_is_refused_by_name(typed, unit, says):
    with pytest.raises(InvalidQuantity, match=says):
        parse_quantity(typed, unit)


@pytest.mark.parametrize("typed", ["4K7K", "4K7M", "47KJ", "470RK", "R47J"])
def test_a_marking_with_its_tolerance_is_never_read_as_a_second_prefix(typed):
    with pytest.raises(InvalidQuantity, match="tolerance"):
        parse_quantity(typed, "Ω")


@given(st.text(max_size=40) | st.from_regex(r"[+-]?[0-9.,]*[kKmMunpRGT]?[0-9]* ?[VAΩ%dB]*", fullmatch=True))
def test_any_text_is_a_finite_number_or_a_refusal(text):
    for unit in ("", "V", "Ω", "V/V", "°C"):
        try:
            number = parse_quantity(text, unit)
        except InvalidQuantity as refusal:
            assert "\n" not in str(refusal)
        else:
            assert math.isfinite(number)


@given(st.floats(allow_nan=False, allow_infinity=False, min_value=-1e30, max_value=1e30))
def test_the_exact_notation_reads_back_to_the_last_bit(number):
    text = format_exact(number)
    assert parse_quantity(text) == number
    assert text.isascii()


@given(st.floats(min_value=1e-14, max_value=9e13), st.integers(1, 9))
def test_a_written_quantity_reads_back_within_its_last_digit(number, digits):
    text = format_quantity(number, "V", digits)
    assert parse_quantity(text, "V") == pytest.approx(number, rel=0.5001 * 10.0 ** (1 - digits))


@pytest.mark.parametrize(
    ("number", "unit", "text"),
    [
        (35.04e-6, "A", f"35.0{THIN}µA"), (-12.0, "V", f"{MINUS}12.0{THIN}V"), (999.96, "V", f"1.00{THIN}kV"),
        (999.4, "", "999"), (0.0, "V", f"0.00{THIN}V"), (1.39e6, "Hz", f"1.39{THIN}MHz"), (None, "V", "–"),
        (math.inf, "V", "–"), (9.996e-7, "F", f"1.00{THIN}µF"), (1e-18, "F", f"1.00e{MINUS}18{THIN}F"),
    ],
)  # fmt: skip
def test_quantities_are_written_with_true_minus_thin_space_and_prefix(number, unit, text):
    assert format_quantity(number, unit) == text


@pytest.mark.parametrize(
    ("ohm", "text"),
    [(4700, "4.7k"), (16900, "16.9k"), (121e3, "121k"), (1e6, "1M"), (2.2e6, "2.2M"), (470, "470R"), (0.47, "0.47R"), (33333.3, "33.33k")],
)  # fmt: skip
def test_resistors_are_written_as_they_are_said(ohm, text):
    assert format_resistor(ohm) == text
    assert parse_quantity(text, "Ω") == pytest.approx(ohm, rel=1e-4)


def test_what_rounds_to_zero_has_no_sign():
    assert format_fixed(-0.0001, "V", sign=True) == f"0.000{THIN}V"
    assert format_fixed(-4.2, "V") == f"{MINUS}4.200{THIN}V"
    assert format_quantity(-0.0, "V") == f"0.00{THIN}V"


def test_a_number_in_a_sentence_keeps_its_unit_on_its_line():
    said = "Lowest 0.050 V, 4 signals, 5 kΩ at 25 °C, 13 V/µs, 5 % of 3 s1; 2 ppm/K."
    kept = "Lowest 0.050_V, 4 signals, 5_kΩ at 25_°C, 13_V/µs, 5_% of 3 s1; 2_ppm/K."
    assert unbroken(said) == kept.replace("_", THIN)
    assert parse_quantity(unbroken("5 kΩ"), "Ω") == parse_quantity("5\u2009kΩ", "Ω") == 5000.0


def test_percent_drops_zeros_and_keeps_figures():
    assert format_percent(0.0075) == f"0.75{THIN}%"
    assert format_percent(0.01) == f"1{THIN}%"
    assert format_percent(-0.00123, 2, sign=True) == f"{MINUS}0.12{THIN}%"


@pytest.mark.parametrize("code", ["", "K", "4K7X", "0R0", "97A", "00A", "01Q", "10CC", "4,7K", None, 47])
def test_what_is_no_marking_is_refused(code):
    with pytest.raises(InvalidQuantity, match="marking"):
        parse_resistor_code(code)


@pytest.mark.parametrize(
    "bands", [[], ["red", "red"], ["red"] * 7, ["gold", "red", "red"], ["red", "red", "red", "black"], ["black"] * 3, ["pink", "1", "2"]]
)  # fmt: skip
def test_impossible_bands_are_refused(bands):
    with pytest.raises(InvalidQuantity):
        parse_colour_bands(bands)
