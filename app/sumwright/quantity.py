"""Numbers as engineers write them: "4k7" to 4700.0 and back, the only place that does.

Reading follows IEC 60062: a letter may stand where the decimal point would
(4k7, 2M2, 0R47, p33), or behind the number as an SI prefix (4.7k, 100n). Case
carries meaning only where it must: `m` is milli and `M` is mega; `K` is read as
`k`, as resistors are marked. Writing uses a true minus (U+2212) and a narrow
no-break space (U+202F) before the unit, so that columns of figures align and a
number never parts from its unit at the end of a line.

General libraries for quantities read prefixes but not the letter codes, take
"0x10" for zero and "1e400" for infinity; the sheet must refuse those, so the
grammar is spelled out here. The tests hold it against one such library.
"""

from __future__ import annotations

import math
import re
from functools import lru_cache
from typing import NamedTuple

from sumwright.errors import InvalidQuantity, shown

MINUS = "\u2212"
THIN = "\u202f"

PREFIXES = {
    "f": -15, "p": -12, "n": -9, "u": -6, "µ": -6, "m": -3, "k": 3, "K": 3, "M": 6, "G": 9, "T": 12,
}  # fmt: skip
_WRITTEN = {-15: "f", -12: "p", -9: "n", -6: "µ", -3: "m", 0: "", 3: "k", 6: "M", 9: "G", 12: "T"}

# Unit as the project names it: spellings it may be typed in, each with the power of ten it carries.
_UNITS: dict[str, dict[str, int]] = {
    "": {"%": -2, "ppm": -6},
    "V": {"V": 0},
    "A": {"A": 0},
    "W": {"W": 0},
    "F": {"F": 0},
    "Hz": {"Hz": 0, "hz": 0},
    "s": {"s": 0},
    "Ω": {"Ω": 0, "ohm": 0, "ohms": 0, "Ohm": 0, "Ohms": 0, "R": 0},
    "K/W": {"K/W": 0, "°C/W": 0},
    "°C": {"°C": 0, "C": 0},
    "V/s": {"V/s": 0, "V/ms": 3, "V/us": 6, "V/µs": 6},
    "V/K": {"V/K": 0, "V/°C": 0},
    "1/K": {"1/K": 0, "/K": 0, "ppm/K": -6, "ppm/°C": -6, "%/K": -2},
    "V/V": {"V/V": 0, "dB": 0},
    "V/√Hz": {"V/√Hz": 0, "V/rtHz": 0},
    "A/√Hz": {"A/√Hz": 0, "A/rtHz": 0},
}
_ANY_UNIT = {spelling for spellings in _UNITS.values() for spelling in spellings}

_SAME = str.maketrans({
    MINUS: "-", "\u2010": "-", "\u2011": "-", "\u2013": "-",  # minus, hyphens, en dash
    "\u03bc": "µ", "\u2126": "Ω",  # Greek mu, the ohm sign
    "\u2009": " ", "\u00a0": " ", THIN: " ",
})  # fmt: skip
_PLAIN = re.compile(r"([+-]?)(\d+(?:[.,]\d*)?|[.,]\d+)(?:[eE]([+-]?\d{1,5}))? ?(.*)", re.ASCII)
_LETTER = re.compile(r"([+-]?)(\d*)([RfpnuµmkKMGT])(\d+) ?(.*)", re.ASCII)
_THOUSANDS = re.compile(r"[1-9]\d{0,2},\d{3}", re.ASCII)
# A number and its unit in a sentence, parted by a space that may end a line.
_PARTED = re.compile(
    rf"(?<=\d) (?=[fpnuµmkMGT]?(?:{'|'.join(re.escape(u) for u in sorted(_ANY_UNIT, key=len, reverse=True))})(?!\w))"
)
_EXAMPLES = f"write for example 4k7, 4.7k, 100n, 25m, {MINUS}12 or 1e-3"


def parse_quantity(value: object, unit: str = "", name: str = "") -> float:
    """The number that `value` stands for, in SI base units.

    Parameters
    ----------
    value : int, float or str
        A number, or a text in engineering notation: `4k7`, `4.7k`, `4.7 kΩ`, `100n`,
        `-12`, `+6.00 V`, `2M2`, `0R47`, `1e-3`, `4,7k`. True minus, thin and
        no-break spaces and both micro signs are read. `m` is milli, `M` mega.
    unit : str, optional
        The unit the text may carry, as the project spells it (`V`, `Ω`, `V/s`, ...).
        The empty unit takes `%` and `ppm`; `V/V` takes `dB` (20 log); `V/s` takes
        `V/µs`. A text without unit is always in the base unit.
    name : str, optional
        What the number is, put in front of the sentence if it cannot be read.

    Raises
    ------
    InvalidQuantity
        If it is not a number, not finite, or carries another unit. The sentence
        quotes what was typed and says what is allowed.
    """
    if isinstance(value, str):
        return _parse_text(value, unit, name)
    if isinstance(value, bool) or not isinstance(value, int | float):
        raise _refused(value, name, f"is not a number; {_EXAMPLES}")
    try:
        number = float(value)
    except OverflowError:
        number = math.inf
    if not math.isfinite(number):
        raise _refused(value, name, "is not a finite number")
    return number


def _parse_text(typed: str, unit: str, name: str) -> float:
    text = " ".join(typed.translate(_SAME).split())
    if not text:
        raise _refused(typed, name, f"is empty; {_EXAMPLES}")
    if letter := _LETTER.fullmatch(text):
        sign, whole, prefix, part, tail = letter.groups()
        _refuse_marking(typed, text, unit, name)
        if prefix == "R" and unit not in ("", "Ω"):
            raise _refused(typed, name, f"is a resistance; a number in {unit} is wanted")
        power = 0 if prefix == "R" else PREFIXES[prefix]
        return _finite(typed, name, f"{sign}{whole or 0}.{part}e{power + _power(typed, tail, unit, name, False)}")
    if not (plain := _PLAIN.fullmatch(text)):
        raise _refused(typed, name, f"is not a number; {_EXAMPLES}")
    sign, digits, exponent, tail = plain.groups()
    if _THOUSANDS.fullmatch(digits):
        raise _refused(
            typed, name, "may mean thousands or a decimal; write the decimal with a point and thousands without a comma"
        )
    _refuse_marking(typed, text, unit, name)
    if tail == "dB" and unit == "V/V":
        return _decibels(typed, name, f"{sign}{digits.replace(',', '.')}e{exponent or 0}")
    power = _power(typed, tail, unit, name, True)
    if exponent and tail[:1] in PREFIXES and tail not in _ANY_UNIT:
        raise _refused(typed, name, "has both an exponent and a prefix; write one of them")
    return _finite(typed, name, f"{sign}{digits.replace(',', '.')}e{int(exponent or 0) + power}")


def _power(typed: str, tail: str, unit: str, name: str, prefixed: bool) -> int:
    """The power of ten that prefix and unit behind the number stand for."""
    tail = tail.strip()
    spellings = _UNITS.get(unit, {unit: 0})
    if not tail:
        return 0
    if tail in spellings:
        return spellings[tail]
    if prefixed and tail[0] in PREFIXES and unit != "°C":
        rest = tail[1:].strip()
        if not rest:
            return PREFIXES[tail[0]]
        if rest in spellings and rest not in ("%", "ppm", "°C", "C", "dB"):
            return PREFIXES[tail[0]] + spellings[rest]
    bare = tail[1:].strip() if tail[0] in PREFIXES and tail not in _ANY_UNIT else tail
    if bare in _ANY_UNIT:
        raise _refused(typed, name, f"is in {bare}; " + (f"it must be in {unit}" if unit else "no unit is wanted here"))
    if tail[:3].lower() == "meg":
        raise _refused(typed, name, "is not understood; M stands for mega and m for milli")
    raise _refused(typed, name, f"is not a number{f' in {unit}' if unit else ''}; {_EXAMPLES}")


def _decibels(typed: str, name: str, number: str) -> float:
    try:
        return _finite(typed, name, 10.0 ** (float(number) / 20.0))
    except OverflowError:
        raise _refused(typed, name, "is not a finite number") from None


def _finite(typed: str, name: str, number: str | float) -> float:
    result = float(number)
    if not math.isfinite(result):
        raise _refused(typed, name, "is not a finite number")
    return result


def _refused(value: object, name: str, why: str) -> InvalidQuantity:
    return InvalidQuantity(f"{name + ': ' if name else ''}{shown(value)} {why}.")


# Resistor markings ---------------------------------------------------------------------------

# Letters for the tolerance, percent: IEC 60062:2016, table of tolerance letters (from memory).
TOLERANCE_LETTERS = {
    "E": 0.005, "L": 0.01, "P": 0.02, "W": 0.05, "B": 0.1, "C": 0.25, "D": 0.5, "F": 1.0, "G": 2.0, "H": 3.0,
    "J": 5.0, "K": 10.0, "M": 20.0, "N": 30.0,
}  # fmt: skip
# Three-character code of E96 chips: position in the series and a letter for the power of ten (from memory).
# R is left out: it may stand for Y on chips, but 47R is 47 ohm to everybody.
_CHIP_POWER = {"Z": -3, "Y": -2, "X": -1, "S": -1, "A": 0, "B": 1, "H": 1, "C": 2, "D": 3, "E": 4, "F": 5}
_DIGIT_COLOURS = ("black", "brown", "red", "orange", "yellow", "green", "blue", "violet", "grey", "white")
_POWER_COLOURS = {**{c: k for k, c in enumerate(_DIGIT_COLOURS)}, "gold": -1, "silver": -2, "pink": -3}
# Percent, IEC 60062:2016 (from memory); charts in circulation disagree on violet and grey.
_TOLERANCE_COLOURS = {
    "brown": 1.0, "red": 2.0, "orange": 0.05, "yellow": 0.02, "green": 0.5, "blue": 0.25, "violet": 0.1,
    "grey": 0.01, "gold": 5.0, "silver": 10.0,
}  # fmt: skip
_MARKED = re.compile(r"(\d*)([RkKMGT])(\d*)([A-Z]?)", re.ASCII)


class ResistorCode(NamedTuple):
    """What is marked on a resistor."""

    resistance: float  # ohm
    tolerance: float | None  # relative limit; None = not marked

    def __str__(self) -> str:
        value = format_quantity(self.resistance, "Ω", trim=True)
        return value if self.tolerance is None else f"{value} ±{self.tolerance * 100:g}{THIN}%"


def _marking(text: str) -> ResistorCode | None:
    """A letter code that ends in a tolerance letter, else None."""
    marked = _MARKED.fullmatch(text)
    return _from_marking(marked) if marked and marked[4] in TOLERANCE_LETTERS and marked[1] + marked[3] else None


def _refuse_marking(typed: str, text: str, unit: str, name: str) -> None:
    """The letter at the end of 4K7K is a tolerance; taken for a prefix it would be a thousand times off."""
    if unit in ("", "Ω") and (code := _marking(text)):
        raise _refused(typed, name, f"is a marking with its tolerance, {code}; type {format_resistor(code.resistance)}")


def _from_marking(marked: re.Match[str]) -> ResistorCode:
    whole, letter, part, tolerance = marked.groups()
    power = 0 if letter == "R" else PREFIXES[letter]
    percent = TOLERANCE_LETTERS.get(tolerance)
    return ResistorCode(
        float(f"{whole or 0}.{part or 0}e{power}"), None if percent is None else float(f"{percent:g}e-2")
    )


def parse_resistor_code(code: str) -> ResistorCode:
    """Resistance and tolerance from the marking of a resistor, by IEC 60062.

    A letter stands where the decimal point would, and a letter at the end is the
    tolerance, never a second prefix: `4K7` is 4.7 kΩ, `4K7K` 4.7 kΩ ±10 %, `4K7M`
    4.7 kΩ ±20 %. Three-character codes of E96 chips are a place in the series and
    a letter: `01C` is 10 kΩ ±1 %.

    Parameters
    ----------
    code : str
        The marking, in any case but for the tolerance letter.

    Raises
    ------
    InvalidQuantity
        If it is neither kind of code, or marks nothing above zero.

    Notes
    -----
    Source: IEC 60062:2016, letter and digit code and tolerance letters; the
    three-character code as chip makers print it for the E96 series of IEC 60063.
    """
    if not isinstance(code, str):
        raise _refused(code, "", "is not a resistor marking; write for example 4K7, 4K7J, R47 or 01C")
    text = code.strip()
    marked = _MARKED.fullmatch(text)
    if marked and (marked[1] or marked[3]) and (not marked[4] or marked[4] in TOLERANCE_LETTERS):
        result = _from_marking(marked)
        if 0.0 < result.resistance < math.inf:
            return result
    chip = re.fullmatch(r"(\d\d)([A-Z])", text, re.ASCII)
    if chip and 1 <= int(chip[1]) <= 96 and chip[2] in _CHIP_POWER:
        figures = round(10 ** ((int(chip[1]) - 1) / 96 + 2))  # E96 follows the rule without exception
        return ResistorCode(float(f"{figures}e{_CHIP_POWER[chip[2]]}"), 0.01)
    raise _refused(code, "", "is not a resistor marking; write for example 4K7, 4K7J, R47 or 01C")


def parse_colour_bands(bands: list[str] | tuple[str, ...]) -> ResistorCode:
    """Resistance and tolerance from 3 to 6 colour bands, read from the end they crowd.

    Three bands carry no tolerance band, which means ±20 %; four have two figures,
    five and six have three; a sixth band is the temperature coefficient and is not read.

    Raises
    ------
    InvalidQuantity
        If a colour stands where it has no meaning, or the count is not 3 to 6.

    Notes
    -----
    Source: IEC 60062:2016, colour code (from memory).
    """
    colours = [str(b).strip().lower().replace("gray", "grey").replace("purple", "violet") for b in bands]
    if not 3 <= len(colours) <= 6:
        raise InvalidQuantity(f"{len(colours)} colour bands were given; a resistor has 3 to 6.")
    figures = 2 if len(colours) <= 4 else 3
    for k, colour in enumerate(colours[: figures + 2]):
        table = _DIGIT_COLOURS if k < figures else _POWER_COLOURS if k == figures else _TOLERANCE_COLOURS
        if colour not in table:
            raise InvalidQuantity(f"Colour band {k + 1} is {shown(bands[k])}; it may be {', '.join(table)}.")
    digits = "".join(str(_DIGIT_COLOURS.index(c)) for c in colours[:figures])
    percent = _TOLERANCE_COLOURS[colours[figures + 1]] if len(colours) > 3 else 20.0
    if not int(digits):
        raise InvalidQuantity("The colour bands mark a resistance of zero, which is a link.")
    return ResistorCode(float(f"{digits}e{_POWER_COLOURS[colours[figures]]}"), float(f"{percent:g}e-2"))


# Writing ----------------------------------------------------------------------------------------


def format_quantity(
    value: float | None, unit: str = "", digits: int = 3, *, sign: bool = False, trim: bool = False
) -> str:
    """`value` in engineering notation with `digits` significant figures: `35.0 µA`.

    Parameters
    ----------
    value : float or None
        In base units. None and what is not finite is written as an en dash.
    unit : str, optional
        Stands behind a narrow no-break space, with the prefix.
    digits : int, optional
        Significant figures, 1 to 15.
    sign : bool, optional
        Write a plus before what is above zero.
    trim : bool, optional
        Drop zeros at the end of the decimals.
    """
    if value is None or not math.isfinite(value):
        return "–"
    figures, power = _engineering(value, digits)
    if trim and "." in figures:
        figures = figures.rstrip("0").rstrip(".")
    prefix = _WRITTEN.get(power)
    if prefix is None:
        figures, prefix = figures + f"e{power}", ""
    text = _signed(figures, sign)
    return f"{text}{THIN}{prefix}{unit}" if unit else text + prefix


def _engineering(value: float, digits: int) -> tuple[str, int]:
    """Figures and the power of ten, a multiple of three, after rounding."""
    if value == 0:
        return f"{0:.{digits - 1}f}", 0
    mantissa, exponent = f"{value:.{digits - 1}e}".split("e")
    power = int(exponent) // 3 * 3
    lead = int(exponent) - power
    # The rounded figures shift by decimal text, so 999.96 becomes 1.000k and never 1000.
    return f"{float(mantissa) * 10**lead:.{max(0, digits - 1 - lead)}f}", power


def _signed(figures: str, sign: bool) -> str:
    negative = figures.startswith("-")
    bare = figures[1:] if negative else figures
    # Zero carries no sign, whichever side it was rounded from.
    if not bare.strip("0."):
        return bare
    return (MINUS if negative else "+" if sign else "") + bare.replace("-", MINUS)


def format_fixed(value: float | None, unit: str = "", decimals: int = 3, *, sign: bool = False) -> str:
    """`value` with that many decimals and no prefix: `4.273 V`; zero never has a sign."""
    if value is None or not math.isfinite(value):
        return "–"
    text = _signed(f"{value:.{decimals}f}", sign)
    return f"{text}{THIN}{unit}" if unit else text


def format_percent(fraction: float | None, digits: int = 2, *, sign: bool = False) -> str:
    """A relative quantity in percent with that many significant figures, zeros dropped: `0.75 %`."""
    if fraction is None or not math.isfinite(fraction):
        return "–"
    text = f"{fraction * 100:.{digits}g}"
    if "e" in text:
        text = f"{float(text):.12f}".rstrip("0").rstrip(".") if abs(fraction) < 1 else f"{float(text):.0f}"
    return f"{_signed(text, sign)}{THIN}%"


@lru_cache(maxsize=1024)
def unbroken(text: str) -> str:
    """A sentence whose numbers never part from their units at the end of a line."""
    return _PARTED.sub(THIN, text)


def format_resistor(value: float | None, digits: int = 4) -> str:
    """A resistance [ohm] as it is marked and said: `4.7k`, `470R`, `2.2M`, `0.47R`."""
    if value is None or not math.isfinite(value):
        return "–"
    text = f"{value:.{digits}g}" if 1e-3 <= value < 1 else format_quantity(value, "", digits, trim=True)
    return text if text[-1:].isalpha() else text + "R"


def format_exact(value: float) -> str:
    """The shortest engineering notation that reads back as exactly `value`: what an edit field holds.

    Plain ASCII, no unit: `4.7k`, `100n`, `-12`, `0.25`. Values from 0.001 to below 1000
    carry no prefix.
    """
    if value == 0:
        return "0"
    exponent = f"{value:.16e}".split("e")[1]
    digits = repr(float(value))
    if 1e-3 <= abs(value) < 1e3:
        return digits.removesuffix(".0") if "e" not in digits else f"{value:.18f}".rstrip("0")
    power = int(exponent) // 3 * 3
    if power not in _WRITTEN:
        return digits
    for places in range(17):
        figures, at = _engineering(value, places + 1)
        text = figures.rstrip("0").rstrip(".") if "." in figures else figures
        text += _WRITTEN.get(at, f"e{at}").replace("µ", "u")
        if float(f"{figures}e{at}") == value:
            return text
    return digits


__all__ = [
    "MINUS", "PREFIXES", "THIN", "TOLERANCE_LETTERS", "ResistorCode", "format_exact", "format_fixed",
    "format_percent", "format_quantity", "format_resistor", "parse_colour_bands", "parse_quantity",
    "parse_resistor_code", "unbroken",
]  # fmt: skip
