"""Choices from a drawer: its counts respected, and still the best there is."""

import numpy as np
import pytest
from sumwright.engine.arrangement import able
from sumwright.engine.realise.choices import realise
from sumwright.engine.realise.drawer import Bin, Drawer, in_stock, to_buy, used
from sumwright.errors import CannotRealise
from support.wanted import design_for, least_error_from_counts


def drawer(**counts):
    return Drawer(tuple(Bin(float(v), None, c) for v, c in counts.items()))


def of(counts):
    return Drawer(tuple(Bin(v, None, c) for v, c in counts.items()))


@pytest.mark.parametrize("seed", range(16))
def test_the_best_that_the_counts_allow(seed):
    rng = np.random.default_rng(seed)
    values = sorted(
        {float(v) for v in rng.choice([1e3, 1.5e3, 2.2e3, 3.3e3, 4.7e3, 6.8e3, 1e4, 1.5e4, 2.2e4, 3.3e4], 5)}
    )
    counts = {v: int(rng.integers(1, 3)) for v in values}
    weights = 10 ** rng.uniform(-0.7, 0.7, 2) * rng.choice([-1, 1], 2)
    design = design_for(weights, sources=[0.0, 200.0])
    for arrangement in able(design):
        signs = {w > 0 for w in weights}
        if (arrangement == "two-stage" and len(signs) == 1) or (arrangement == "mixed-sign" and signs == {False}):
            continue
        expected = least_error_from_counts(design, arrangement, counts)
        if not np.isfinite(expected):
            with pytest.raises(CannotRealise, match="too few"):
                realise(design, arrangement=arrangement, drawer=of(counts))
            continue
        result = realise(design, arrangement=arrangement, drawer=of(counts))
        assert all(in_stock(c.cells, counts) for c in result.choices)
        assert result.choices[0].worst_weight_error == pytest.approx(expected, rel=1e-9, abs=1e-12), arrangement
        assert result.proved[arrangement]


def test_one_resistor_short_changes_the_choice():
    design = design_for([-1.0, -1.0])
    plenty = realise(design, arrangement="inverting", drawer=of({1e4: 3, 9.1e3: 5})).choices[0]
    assert plenty.worst_weight_error == 0
    scarce = realise(design, arrangement="inverting", drawer=of({1e4: 2, 9.1e3: 1})).choices[0]
    assert scarce.worst_weight_error > 0 and max(used(scarce.cells).values()) <= 2


def test_a_value_without_a_count_is_there_as_often_as_wanted():
    assert realise(design_for([-1.0] * 5), drawer=of({1e4: None})).choices[0].worst_weight_error == 0


def test_too_small_a_drawer_is_refused():
    with pytest.raises(CannotRealise, match="too few resistors for inverting"):
        realise(design_for([-1.0] * 5), arrangement="inverting", drawer=of({1e4: 3}))
    with pytest.raises(CannotRealise, match="no resistor from 1000 to 1e\\+06 ohm"):
        realise(design_for([-1.0]), drawer=of({10.0: 3}))


def test_values_outside_the_designs_range_are_left_out_and_said():
    result = realise(design_for([-1.0]), drawer=of({10.0: 3, 1e4: 4}))
    assert any("1 value of the drawer" in n for n in result.notes)


def test_what_to_buy_meets_the_goal():
    design = design_for([-1.0, -2.0, -3.3])
    counts = {1e4: 4, 2e4: 1}
    result = realise(design, arrangement="inverting", drawer=of(counts))
    assert result.choices[0].worst_weight_error > 0.01
    bought = to_buy(design, result, of(counts), 0.01)
    assert 0 < sum(p.count for p in bought) <= 2
    more = dict(counts)
    for p in bought:
        more[p.value] = more.get(p.value, 0) + p.count
    assert realise(design, arrangement="inverting", drawer=of(more)).choices[0].worst_weight_error <= 0.01
    assert to_buy(design, realise(design, drawer=of(more)), of(more), 0.01) == []


def test_a_goal_nothing_meets_is_refused():
    design = design_for([-1.0, -3.1])
    result = realise(design, arrangement="inverting", drawer=of({1e4: 4}))
    with pytest.raises(CannotRealise, match="No set from E96"):
        to_buy(design, result, of({1e4: 4}), 1e-9)


def test_a_hundred_values_and_eight_signals_are_searched():
    rng = np.random.default_rng(1)
    from sumwright.engine.realise.preferred import values_within

    values = values_within("E48", 1e3, 1e5)
    counts = {float(v): int(rng.integers(0, 3)) for v in values}
    weights = 10 ** rng.uniform(-0.5, 0.5, 8) * np.where(np.arange(8) % 2, 1, -1)
    result = realise(design_for(weights), drawer=of(counts))
    assert {c.arrangement for c in result.choices} == {"mixed-sign", "two-stage"}
    for c in result.choices:
        assert in_stock(c.cells, counts)
        assert c.worst_weight_error >= result.bounds[c.arrangement] - 1e-12
