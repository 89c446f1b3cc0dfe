"""The sets worth choosing between: the best of each arrangement, and what gives way to what.

A set is worth showing if no other of its arrangement is better or as good in every
respect: worst weight error, parts, op amps, different values, output noise, and how
little it loads its sources. One hidden score would decide for the person; a front lets
them see what a part saved costs.
"""

from __future__ import annotations

import math
import re
import time
from collections.abc import Iterable
from dataclasses import dataclass, field
from typing import NamedTuple

import numpy as np

from sumwright.engine.arrangement import USUAL_LEG, able, check_able, ideal_weights, ohms, wanted_weights, weight_errors
from sumwright.engine.realise.best_set import Outcome, Watch, search
from sumwright.engine.realise.preferred import values_within
from sumwright.engine.realise.single_supply import biased_cells, is_single
from sumwright.engine.stage import ARRANGEMENTS, REFERENCE, Cell, Design, cell_name
from sumwright.errors import CannotRealise

BOLTZMANN = 1.380649e-23  # J/K, exact in the SI of 2019
MOST_VALUES = 1800  # nine decades of E192, the most that is searched
CELL_OUTPUT = re.compile(r"cell \d+")
SHOWN = 8  # sets shown of one arrangement at most


class Pair(NamedTuple):
    """Two resistors that stand for one: where, their values [ohm], and `series` or `parallel`."""

    place: str  # as `nodes.Part.name` says it: "north leg", "plus ground, cell 1"
    first: float
    second: float
    how: str


@dataclass(frozen=True)
class Choice:
    """One set of values, and what it is worth with ideal op amps."""

    arrangement: str
    cells: tuple[Cell, ...]
    weights: dict[str, float]  # V/V, made
    offset: float  # V, made
    worst_weight_error: float  # relative; the offset counts as one more weight
    worst_weight: str  # whose error that is
    resistor_count: int
    op_amp_count: int
    noise_gain: float  # of the last cell
    different_values: int
    least_input_resistance: float  # ohm, the least that any signal's source sees
    noise_density: float  # V/sqrt(Hz) at the output, white part
    slowest_gain: float = 1.0  # largest noise gain of any cell: gain-bandwidth over it is about the bandwidth
    inner_gain: float = 1.0  # V/V, size of the gain from the first cell's output to the stage's; 1 with one cell
    parts: tuple[Pair, ...] = ()
    merits: tuple[str, ...] = ()  # why it is shown
    short: tuple[str, ...] = ()  # checks that would fall short with it, where they were looked at

    def respects(self) -> tuple[float, ...]:
        """What is compared, less is better; rounded to what a person would call the same."""
        return (
            float(f"{self.worst_weight_error:.2g}"),
            self.resistor_count,
            self.op_amp_count,
            self.different_values,
            round(math.log(self.noise_density) / math.log(1.25)),
            -round(math.log(min(max(self.least_input_resistance, 1e-3), 1e12)) / math.log(1.6)),
            # A first cell that takes more of the gain than the output shows runs out of headroom first.
            -round(math.log(min(self.inner_gain, 1.0)) / math.log(1.6)),
        )


@dataclass(frozen=True)
class Realisation:
    """What a search gave: choices best first, and what can be said of each arrangement."""

    choices: tuple[Choice, ...]
    bounds: dict[str, float] = field(default_factory=dict)  # by arrangement: no set is better than this
    proved: dict[str, bool] = field(default_factory=dict)  # by arrangement: the first of it is the optimum
    notes: tuple[str, ...] = ()


def resistors_of(cells: Iterable[Cell]) -> list[float]:
    """The fitted resistors [ohm]; a wire (0 ohm) is none."""
    every = []
    for cell in cells:
        every += [leg.resistance for leg in (*cell.minus, *cell.plus)]
        every += [r for r in (cell.minus_ground, cell.plus_ground, cell.feedback) if r is not None]
    return [r for r in every if r > 0]


def assess(design: Design, arrangement: str, cells: tuple[Cell, ...], parts: tuple[Pair, ...] = ()) -> Choice:
    """What a set of cells is worth: every figure of a `Choice`, by the node equations and not by the search."""
    made, offset = ideal_weights(design, cells)
    errors = weight_errors(design, cells)
    worst = max(errors, key=lambda s: abs(errors[s]))
    error = abs(errors[worst])
    # Under 1e-13 it is rounding of the arithmetic; twelve digits, so that equal sets compare equal.
    error = 0.0 if error < 1e-13 else float(f"{error:.12g}")
    every = resistors_of(cells)
    different = set(every)
    if parts:
        different |= {r for p in parts for r in (p.first, p.second)}
        different -= {_resistance_at(cells, p.place) for p in parts}
    density, gains, inputs, inner = _small_signal(design, cells)
    return Choice(
        arrangement=arrangement,
        cells=cells,
        weights=made,
        offset=offset,
        worst_weight_error=error,
        worst_weight=worst,
        resistor_count=len(every) + len(parts),
        op_amp_count=len(cells),
        noise_gain=gains[-1],
        different_values=len(different),
        least_input_resistance=min(inputs.values(), default=math.inf),
        noise_density=density,
        slowest_gain=max(gains),
        inner_gain=abs(inner),
        parts=parts,
    )


def _resistance_at(cells, place: str) -> float | None:
    return dict(places(cells)).get(place)


def places(cells) -> list[tuple[str, float]]:
    """Name and value [ohm] of every resistor, named as `nodes.Part.name` does."""
    out = []
    for k, cell in enumerate(cells):
        where = f", {cell_name(k)}" if len(cells) > 1 else ""
        for leg in (*cell.minus, *cell.plus):
            own = leg.source != REFERENCE and not CELL_OUTPUT.fullmatch(leg.source)
            out.append((f"{leg.source} leg" + ("" if own else where), leg.resistance))
        for name, ohm in (
            ("minus ground", cell.minus_ground),
            ("plus ground", cell.plus_ground),
            ("feedback", cell.feedback),
        ):
            if ohm:
                out.append((name + where, ohm))
    return out


def _small_signal(design: Design, cells) -> tuple[float, list[float], dict[str, float], float]:
    """White output noise [V/sqrt(Hz)], noise gain of each cell, the resistance each signal's source sees, and the first cell's gain to the output.

    Notes
    -----
    Source: superposition of e_n, both i_n and 4kTR of every resistor at the nodes of each cell (J. B. Johnson
    and H. Nyquist, 1928); the resistance a source sees is taken with every other source at 0 V.
    """
    series = {s.name: s.source_resistance for s in design.signals}
    series[REFERENCE] = design.reference.source_resistance if design.reference is not None else 0.0
    four_kt = 4.0 * BOLTZMANN * (design.ambient.nominal + 273.15)
    op_amp = design.op_amp
    squares, gains, inputs = [], [], {}
    through = [1.0] * len(cells)  # gain from each cell's output to the stage's output
    for k in range(len(cells) - 1, -1, -1):
        cell = cells[k]
        minus = [(leg.source, leg.resistance + series.get(leg.source, 0.0)) for leg in cell.minus]
        plus = [(leg.source, leg.resistance + series.get(leg.source, 0.0)) for leg in cell.plus]
        siemens = sum(1.0 / r for _, r in minus) + (1.0 / cell.minus_ground if cell.minus_ground else 0.0)
        gain = 1.0 + cell.feedback * siemens
        tied = cell.plus_ground == 0 or any(r == 0 for _, r in plus)
        node = 0.0 if tied else sum(1.0 / r for _, r in plus) + (1.0 / cell.plus_ground if cell.plus_ground else 0.0)
        plus_ohm = 1.0 / node if node else 0.0
        for source, r in minus:
            if source.startswith("cell ") and source not in series:
                through[int(source[5:]) - 1] = -cell.feedback / r * through[k]
            elif source in series and source != REFERENCE:
                inputs[source] = r - series[source]
        for source, r in plus:
            if source.startswith("cell ") and source not in series:
                through[int(source[5:]) - 1] = (gain * plus_ohm / r if r else gain) * through[k]
            elif source in series and source != REFERENCE:
                rest = node - 1.0 / r if r else 0.0
                inputs[source] = math.inf if rest <= 1e-12 * node else r + 1.0 / rest - series[source]
        square = (op_amp.noise_voltage * gain) ** 2
        square += (op_amp.noise_current * cell.feedback) ** 2 + (op_amp.noise_current * plus_ohm * gain) ** 2
        square += four_kt * (cell.feedback + cell.feedback**2 * siemens + gain**2 * plus_ohm)
        squares.append(square * through[k] ** 2)
        gains.append(gain)
    return math.sqrt(sum(squares)), gains[::-1], inputs, through[0]


def best_choices(
    design: Design, arrangement: str, found: Iterable[tuple[Cell, ...]], shown=SHOWN, parts=None
) -> list[Choice]:
    """Of many sets of one arrangement, the best and those that give a little accuracy for something else."""
    parts = parts or {}
    every = {}
    for cells in found:
        if cells not in every:
            every[cells] = assess(design, arrangement, cells, parts.get(cells, ()))
    if not every:
        return []
    ranked = sorted(every.values(), key=lambda c: (*rank(c), *c.respects()[4:]))
    best = min(c.worst_weight_error for c in ranked if not c.parts or not any(not r.parts for r in ranked))
    # Past the parts' own tolerance a worse set is a worse board; within three times the best it is still in play.
    ranked = [c for c in ranked if c.worst_weight_error <= max(3.0 * best, design.resistor.tolerance)]
    front = undominated(ranked)
    kept: dict[int, list[str]] = {0: ["least weight error"]}
    for merit, key in (
        ("fewest parts", lambda c: c.resistor_count),
        ("fewest different values", lambda c: c.different_values),
        ("least noise", lambda c: c.noise_density),
        ("lightest load on the sources", lambda c: -c.least_input_resistance),
    ):
        k = min((0, *front), key=lambda k: (key(ranked[k]), ranked[k].worst_weight_error, k))
        kept.setdefault(k, []).append(merit)
    for k in front:
        if len(kept) >= shown:
            break
        kept.setdefault(k, [])
    if shown == 1:
        kept = {0: kept[0]}
    return [_with_merits(ranked[k], kept[k]) for k in sorted(kept)]


def rank(c: Choice):
    usual = sum(abs(math.log(r / USUAL_LEG)) for r in resistors_of(c.cells))
    return (c.worst_weight_error, c.resistor_count, c.op_amp_count, c.different_values, round(usual, 6))


def _with_merits(c: Choice, merits) -> Choice:
    return Choice(**{**c.__dict__, "merits": tuple(merits)})


def undominated(choices: list[Choice]) -> list[int]:
    """Indices of the choices that no other beats or equals in every respect (of equals the first stays)."""
    table = np.array([c.respects() for c in choices], float)
    kept: list[int] = []
    for k, row in enumerate(table):
        others = np.delete(table, k, axis=0)
        no_worse = (others <= row).all(axis=1)
        better = (others < row).any(axis=1)
        earlier = np.arange(len(others)) < k
        if not (no_worse & (better | earlier)).any():
            kept.append(k)
    return kept


def realise(
    design: Design,
    *,
    arrangement: str | None = None,
    pairs: bool = False,
    drawer=None,
    least_input: dict[str, float] | None = None,
    seconds: float = 10.0,
    watch: Watch | None = None,
) -> Realisation:
    """Sets of values for the wanted weights and offset, best first.

    Parameters
    ----------
    design : Design
        Wanted weights, offset, sources, and the kind of resistors (series, least and most).
    arrangement : str, optional
        Look at this one alone.
    pairs : bool
        Two resistors may stand for one where that earns its place.
    drawer : Drawer, optional
        Take the resistors from this drawer alone, its counts respected.
    least_input : dict of float, optional
        By signal name, the least leg [ohm] its source may see.
    seconds : float
        About how long to search at most, of processor time.
    watch : callable, optional
        Told the share done, 0 to 1; raises `best_set.Cancelled` to stop.

    Returns
    -------
    Realisation

    Raises
    ------
    CannotRealise
        If the arrangement, or every arrangement, cannot make the weights.
    """
    if arrangement is not None:
        check_able(design, arrangement)
        names: tuple[str, ...] = (arrangement,)
    else:
        wanted_weights(design)  # refuses with its reason
        names = able(design)
    _check_least_input(design, least_input)
    kind = design.resistor
    notes: list[str] = []
    narrowed = False
    if drawer is None:
        values = values_within(kind.series, kind.least, kind.most)
        if values.size > MOST_VALUES:
            usual = np.argsort(np.abs(np.log(values / USUAL_LEG)), kind="stable")[:MOST_VALUES]
            values = np.sort(values[usual])
            narrowed = True
            notes.append(
                f"The design allows {ohms(kind.least)} to {ohms(kind.most)}; searched were {ohms(values[0])} to {ohms(values[-1])}. Narrow the range for a proof."
            )
    else:
        from sumwright.engine.realise.drawer import usable

        values, said = usable(drawer, kind.least, kind.most)
        notes += said
    until = time.thread_time() + seconds
    choices: list[Choice] = []
    bounds, proved = {}, {}
    for k, name in enumerate(names):
        again = arrangement is None and is_another(design, name)

        def share(done, k=k):
            if watch is not None:
                watch((k + done) / len(names))

        left = max(until - time.thread_time(), 0.2) / (len(names) - k)
        if drawer is not None:
            from sumwright.engine.realise.drawer import search_drawer

            outcome = search_drawer(design, name, drawer, values, least_input=least_input, seconds=left, watch=share)
            if not outcome.cells:
                notes.append(f"The drawer has too few resistors for {name}.")
                continue
        else:
            outcome = _wide_search(design, name, values, least_input, left, share)
        found, parts = list(outcome.cells), {}
        if pairs and drawer is None:
            from sumwright.engine.realise.pairs import with_pairs

            parts = with_pairs(design, found, values, least_input)
            found += list(parts)
        choices += best_choices(design, name, found, shown=1 if again else SHOWN, parts=parts)
        if drawer is None and not again and is_single(design):
            lifted = best_choices(design, name, biased_cells(design, name, values), shown=1)
            choices += [_with_merits(c, ("lifted for the single supply",)) for c in lifted]
        bounds[name], proved[name] = 0.0 if narrowed else float(outcome.bound), bool(outcome.whole) and not narrowed
    if not choices:
        raise CannotRealise(" ".join(notes) or "No set of values was found.", able(design))
    choices.sort(key=rank)
    return Realisation(tuple(choices), bounds, proved, tuple(notes))


def _wide_search(design, arrangement, values, least_input, seconds, watch) -> Outcome:
    """The search over all values, then over the low and the high half of them: quieter sets, and kinder ones."""
    outcome = search(
        design, arrangement, values, least_input=least_input, seconds=0.7 * seconds, watch=lambda s: watch(0.6 * s)
    )
    found = list(outcome.cells)
    middle = math.sqrt(values[0] * values[-1])
    for k, half in enumerate((values[values <= middle], values[values >= middle])):
        if half.size < 12 or half.size == values.size:
            continue
        try:
            extra = search(
                design,
                arrangement,
                half,
                least_input=least_input,
                seconds=0.15 * seconds,
                proof=False,
                watch=lambda s, k=k: watch(0.6 + 0.2 * (k + s)),
            )
        except CannotRealise:  # no value of this half is kind enough for a source: the whole range had one
            continue
        found += extra.cells
    return Outcome(found, outcome.bound, outcome.whole)


def is_another(design: Design, arrangement: str) -> bool:
    """Whether the arrangement has the cells of a plainer one, which is searched already: only its best is worth a line."""
    signs = {w.weight > 0 for w in wanted_weights(design)}
    return (arrangement == "two-stage" and len(signs) == 1) or (arrangement == "mixed-sign" and signs == {True})


def _check_least_input(design: Design, least_input) -> None:
    for name, ohm in (least_input or {}).items():
        if name not in design.signal_names:
            raise CannotRealise(f"A least input resistance is given for '{name}', which is no signal of the design.")
        if not (math.isfinite(ohm) and ohm > 0):
            raise CannotRealise(
                f"The least input resistance of '{name}' is {ohm:g} ohm; it must be positive and finite."
            )


__all__ = [
    "ARRANGEMENTS",
    "Choice",
    "Pair",
    "Realisation",
    "assess",
    "best_choices",
    "places",
    "realise",
    "resistors_of",
    "undominated",
    "weight_errors",
]
