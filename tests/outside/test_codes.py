"""Resistor markings and engineering notation against standards and an independent library."""

import pytest
from hypothesis import given
from hypothesis import strategies as st
from quantiphy import Quantity
from sumwright.quantity import (
    TOLERANCE_LETTERS,
    format_quantity,
    parse_colour_bands,
    parse_quantity,
    parse_resistor_code,
)

# IEC 60062:2016, letter and digit code for resistance; values as the encyclopaedic table of the RKM code prints them.
LETTER_CODE = {
    "R47": 0.47, "4R7": 4.7, "470R": 470.0, "4K7": 4.7e3, "47K": 47e3, "47K3": 47.3e3, "470K": 470e3, "4M7": 4.7e6,
}  # fmt: skip


@pytest.mark.parametrize("code", LETTER_CODE)
def test_letter_codes_are_those_of_iec_60062(code):
    assert parse_resistor_code(code) == (LETTER_CODE[code], None)
    assert parse_quantity(code, "Ω") == LETTER_CODE[code]


# IEC 60062:2016, tolerance letters, percent (from memory).
IEC_60062_TOLERANCE = {
    "E": 0.005, "L": 0.01, "P": 0.02, "W": 0.05, "B": 0.1, "C": 0.25, "D": 0.5, "F": 1, "G": 2, "H": 3, "J": 5, "K": 10,
    "M": 20, "N": 30,
}  # fmt: skip


def test_tolerance_letters_are_those_of_iec_60062():
    assert TOLERANCE_LETTERS == IEC_60062_TOLERANCE
    for letter, percent in IEC_60062_TOLERANCE.items():
        resistance, tolerance = parse_resistor_code("4K7" + letter)
        assert resistance == 4700.0
        assert tolerance == pytest.approx(percent / 100, rel=1e-15)


def test_a_trailing_k_or_m_is_ten_or_twenty_percent_not_a_prefix():
    # IEC 60062:2016 (from memory): 4K7K read as a second prefix would be a thousand times too large.
    assert parse_resistor_code("4K7K") == (4700.0, 0.10)
    assert parse_resistor_code("4K7M") == (4700.0, 0.20)
    assert parse_resistor_code("4K7J") == (4700.0, 0.05)


@pytest.mark.parametrize(
    ("code", "ohm"),
    # Three-character marking of E96 chips: place in the series of IEC 60063 and a letter for the power of ten. The scheme
    # is in general use; letters from memory, places from the rule 100 · 10^(n/96), to which E96 has no exception.
    [("01C", 10.0e3), ("30C", 20.0e3), ("66X", 47.5), ("96A", 976.0), ("01Y", 1.0), ("01Z", 0.1), ("01F", 10e6),
     ("12B", 1300.0), ("12H", 1300.0), ("51D", 332e3), ("51E", 3.32e6)],
)  # fmt: skip
def test_three_character_codes_of_e96_chips(code, ohm):
    assert parse_resistor_code(code) == (pytest.approx(ohm, rel=1e-12), 0.01)


def test_47r_is_47_ohm_although_a_chip_could_carry_it():
    assert parse_resistor_code("47R").resistance == 47.0


@pytest.mark.parametrize(
    ("bands", "ohm", "tolerance"),
    # IEC 60062:2016 colour code (from memory). Charts in circulation disagree on violet and grey as tolerances; the
    # standard's 0.1 % and 0.01 % are taken.
    [
        ("yellow violet red gold", 4700.0, 0.05), ("brown black orange silver", 10e3, 0.10), ("red red gold gold", 2.2, 0.05),
        ("brown black black red brown", 10e3, 0.01), ("orange orange black black violet", 330.0, 0.001),
        ("yellow violet black brown green", 4700.0, 0.005), ("red violet black silver blue red", 2.7, 0.0025),
        ("brown black black brown grey", 1000.0, 0.0001), ("green blue brown", 560.0, 0.2), ("brown black pink gold", 0.01, 0.05),
    ],
)  # fmt: skip
def test_colour_bands(bands, ohm, tolerance):
    found = parse_colour_bands(bands.split())
    assert found.resistance == pytest.approx(ohm, rel=1e-15)
    assert found.tolerance == pytest.approx(tolerance, rel=1e-15)


PREFIXES = "fpnumkMGT"


@given(
    st.decimals(min_value="-9999", max_value="9999", places=4), st.sampled_from(PREFIXES), st.sampled_from(["", " "])
)
def test_plain_notation_is_read_as_an_independent_library_reads_it(number, prefix, space):
    """QuantiPhy (a general-purpose library for quantities) reads SI prefixes, but no letter codes."""
    text = f"{number}{space}{prefix}V"
    assert parse_quantity(text, "V") == float(Quantity(text))


@given(st.floats(min_value=1e-14, max_value=9.99e13), st.booleans(), st.integers(1, 8))
def test_plain_notation_is_written_as_an_independent_library_writes_it(number, negative, digits):
    number = -number if negative else number
    theirs = Quantity(number, "V").render(
        prec=digits - 1, strip_zeros=False, form="si"
    )  # fmt: skip
    ours = format_quantity(number, "V", digits).replace("\u2212", "-").replace("\u202f", " ").replace("µ", "u")
    assert ours == theirs.replace("µ", "u")
