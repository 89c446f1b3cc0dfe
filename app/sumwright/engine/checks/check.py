"""What a check is, and the few things all of them say the same way."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

from sumwright.engine.stage import Design
from sumwright.quantity import format_fixed

# Below this share of its allowance a margin is tight: common practice keeps a tenth in hand.
TIGHT = 0.1


@dataclass(frozen=True, slots=True)
class Check:
    """One question asked of a stage, and its answer.

    `value`, `limit`, `margin` and `allowance` are in `unit`; None is what is not
    known or has no end. `margin` below zero falls short by that much. `allowance`
    is the whole room there is, so margin / allowance compares unlike checks.
    """

    key: str
    title: str
    status: str  # clear, tight, short, unknown
    value: float | None
    limit: float | None
    margin: float | None
    unit: str
    advice: str  # what would cure it: the part and the amount; or what to type
    allowance: float | None
    why: str  # one or two sentences with the numbers

    @property
    def room(self) -> float:
        """Margin as a share of the allowance: the order of the margins, unknown ones last."""
        if self.status == "unknown":
            return math.inf
        if self.margin is None or not self.allowance:
            return 1e9 if self.margin is None or self.margin >= 0 else -1e9
        return self.margin / self.allowance


def judged(
    key: str,
    title: str,
    unit: str,
    value: float,
    limit: float,
    margin: float,
    allowance: float,
    why: str,
    advice: Callable[[float], str],
) -> Check:
    """A check with its word; `advice(goal)` is asked only where it is wanted.

    `goal` is the margin the cure should leave: none where the check falls short,
    a tenth of the allowance where it is only tight.
    """
    value, limit, margin, allowance = float(value), float(limit), float(margin), float(allowance)
    # a margin that is not a number falls short too
    status = "short" if not margin >= 0 else "tight" if margin < TIGHT * allowance else "clear"
    said = ""
    if status != "clear":
        said = advice(0.0 if status == "short" else TIGHT * allowance)
        if said and status == "tight":
            said = f"To clear it: {said}"
    return Check(key, title, status, value, limit, margin, unit, _sentence(said), allowance, why)


def unknown(key: str, title: str, unit: str, why: str, advice: str, value: float | None = None) -> Check:
    """A check that cannot be answered; `advice` says what to type."""
    return Check(key, title, "unknown", value, None, None, unit, advice, None, why)


def endless(key: str, title: str, unit: str, limit: float | None, why: str) -> Check:
    """A check that holds because what it asks about does not exist."""
    return Check(key, title, "clear", None, limit, None, unit, "", None, why)


def choices(*ways: str) -> str:
    """Ways to cure one thing, as the sheet lists them: `a; or b; or c`."""
    return "; or ".join(way for way in ways if way)


def _sentence(text: str) -> str:
    return text[0].upper() + text[1:] + "." if text and text[-1] != "." else text


def spoken(part: str) -> str:
    """A part's name in a sentence: what is not a leg is called a resistor."""
    if part.endswith(" leg") or " leg, cell" in part:
        return part
    head, comma, where = part.partition(", ")
    return f"{head} resistor{comma}{where}"


def of_cell(design: Design, k: int) -> tuple[str, str]:
    """What key and title of a check carry for cell `k`: nothing where there is one cell."""
    if len(design.cells) == 1:
        return "", ""
    return f"_cell_{k + 1}", f", cell {k + 1}"


def half_supply(design: Design) -> float:
    """Half the total supply [V]: the room a swing or an input has to one side."""
    return 0.5 * (design.supply.high - design.supply.low)


def volts(value: float, decimals: int = 3, sign: bool = False) -> str:
    return format_fixed(value, "V", decimals, sign=sign)


def up(value: float, decimals: int = 2) -> float:
    """Rounded away from falling short again; a hair of rounding error does not count."""
    scaled = value * 10.0**decimals
    return math.ceil(scaled - 1e-9) / 10.0**decimals if math.isfinite(scaled) else value


def down(value: float, decimals: int = 2) -> float:
    scaled = value * 10.0**decimals
    return math.floor(scaled + 1e-9) / 10.0**decimals if math.isfinite(scaled) else value


def down_figures(value: float, figures: int = 2) -> float:
    """Rounded down to so many significant figures."""
    if value <= 0 or not math.isfinite(value):
        return value
    return down(value, figures - 1 - math.floor(math.log10(value)))


def up_figures(value: float, figures: int = 2) -> float:
    """Rounded up to so many significant figures."""
    if value <= 0 or not math.isfinite(value):
        return value
    return up(value, figures - 1 - math.floor(math.log10(value)))


def rail_for(design: Design, side: int, need: float, goal: float) -> float | None:
    """The nominal rail [V] whose worst tolerance reaches `need` V and leaves `goal`.

    `side` is 1 for the + rail and -1 for the - rail. A goal that is a tenth of half
    the supply grows with the rail itself, so it is solved for, not added. None where
    the op amp does not work on that much supply.
    """
    supply, amp = design.supply, design.op_amp
    other = -side * (supply.low if side > 0 else supply.high)  # distance of the other rail, counted outward
    share = 0.5 * TIGHT if goal > 0 else 0.0
    wanted = side * need  # counted outward from ground
    outward = wanted + share * other
    keep = 1.0 - supply.tolerance if outward > 0 else 1.0 + supply.tolerance
    if keep <= share:
        return None
    rail = up(outward / (keep - share))
    total = rail * (1 + supply.tolerance) + other * (1 + supply.tolerance)
    return side * rail if total <= amp.supply_most else None
