"""The best set is the optimum: no set of the same values errs less."""

import numpy as np
import pytest
from sumwright.engine.arrangement import able, exact_cells
from sumwright.engine.realise.best_set import Cancelled, search
from sumwright.engine.realise.choices import assess, weight_errors
from sumwright.engine.realise.preferred import values_within
from sumwright.errors import CannotRealise
from support.wanted import design_for, least_error_by_trying_all, rounded_cells


def least(design, arrangement, values):
    outcome = search(design, arrangement, values)
    for cells in outcome.cells:
        assert set(resistors(cells)) <= set(values)
    good = search(design, arrangement, values, proof=False)
    for found in (outcome, good):
        errors = [max(abs(e) for e in weight_errors(design, cells).values()) for cells in found.cells]
        np.testing.assert_allclose(errors, np.sort(errors), rtol=1e-11, atol=1e-12)  # best first, each once
        assert len(set(found.cells)) == len(found.cells)
    return max(abs(e) for e in weight_errors(design, outcome.cells[0]).values()), outcome


def resistors(cells):
    for c in cells:
        yield from (x.resistance for x in (*c.minus, *c.plus))
        yield from (r for r in (c.minus_ground, c.plus_ground, c.feedback) if r)


def one_sign_is_enough(design, arrangement):
    """Arrangements whose cells are another's for these signs are compared under the other's name."""
    signs = {s.weight > 0 for s in design.signals} | ({design.target.offset > 0} if design.target.offset else set())
    return (arrangement == "two-stage" and len(signs) == 1) or (arrangement == "mixed-sign" and signs == {False})


CASES = [
    # weights, offset, source resistances, series, least, most
    ([-1.0, -2.2], 0.0, None, "E24", 1e3, 1e5),
    ([1.0, 2.2], 0.0, None, "E24", 1e3, 1e4),
    ([0.31, 0.27], 0.0, [600, 0], "E12", 1e3, 1e5),
    ([3.7, 0.4], 0.0, None, "E6", 1e3, 1e6),
    ([1.0, -0.61], 0.0, [50, 50], "E24", 1e3, 1e4),
    ([5.3, -1.7], 0.0, None, "E24", 2e3, 3e4),
    ([0.25, 0.25, 0.5], 0.0, None, "E12", 1e3, 2e4),
    ([-7.0, -0.9, -2.1], 0.0, [0, 1500, 0], "E12", 1e3, 3e4),
    ([2.0, -3.0, 0.7], 0.0, None, "E6", 1e3, 1e5),
    ([1.3, -0.2], 0.5, [0, 600], "E12", 1e3, 1e4),
    ([0.8], 0.9, [100], "E24", 1e3, 1e4),
    ([-1.5, -0.3], -1.2, None, "E6", 1e3, 1e5),
    # so narrow that some leg cannot come near: the nearest values of the legs are then not the best set
    ([9.0, 0.2], 0.0, None, "E24", 1e4, 2e4),
    ([8.0, -0.3], 0.0, None, "E12", 1e4, 3e4),
    ([6.0, 0.2, -3.0], 0.0, None, "E6", 1e4, 1e5),
    ([0.1, 0.2, 0.9], 0.0, [0, 5000, 0], "E6", 1e3, 1e4),
]


@pytest.mark.parametrize("case", CASES, ids=str)
def test_it_equals_trying_every_set(case):
    weights, offset, sources, series, low, high = case
    design = design_for(weights, offset=offset, sources=sources)
    values = values_within(series, low, high)
    for arrangement in able(design):
        if one_sign_is_enough(design, arrangement):
            continue
        found, outcome = least(design, arrangement, values)
        expected = least_error_by_trying_all(design, arrangement, values)
        assert found == pytest.approx(expected, rel=1e-9, abs=1e-13), arrangement
        assert outcome.whole and outcome.bound == pytest.approx(expected, rel=1e-9, abs=1e-12), arrangement


@pytest.mark.parametrize("seed", range(12))
def test_it_equals_trying_every_set_of_random_wants(seed):
    rng = np.random.default_rng(seed)
    n = int(rng.integers(2, 4))
    low = 10 ** rng.uniform(3, 4)
    values = values_within(str(rng.choice(["E6", "E12"])), low, low * 10 ** rng.uniform(0.3, 1.2))
    weights = 10 ** rng.uniform(-1.2, 1.2, n) * rng.choice([-1, 1], n)
    design = design_for(weights, sources=list(rng.choice([0.0, 600.0, 3000.0], n)))
    for arrangement in able(design):
        if not one_sign_is_enough(design, arrangement):
            found, outcome = least(design, arrangement, values)
            assert found == pytest.approx(least_error_by_trying_all(design, arrangement, values), rel=1e-9, abs=1e-13)
            assert outcome.whole


@pytest.mark.parametrize("n", [4, 16])
def test_many_signals_come_with_a_proof_and_beat_rounding(n):
    rng = np.random.default_rng(n)
    weights = 10 ** rng.uniform(-1, 1, n) * np.where(np.arange(n) % 2, 1, -1)
    design = design_for(weights, offset=0.5, sources=[50.0] * n)
    values = values_within("E96", 1e3, 1e6)
    for arrangement in able(design):
        found, outcome = least(design, arrangement, values)
        assert outcome.whole and outcome.bound == pytest.approx(found, rel=1e-9)
        rounded = assess(design, arrangement, rounded_cells(design, exact_cells(design, arrangement), values))
        assert found <= rounded.worst_weight_error


def test_a_search_cut_short_says_so_with_a_bound_that_holds():
    rng = np.random.default_rng(5)
    design = design_for(10 ** rng.uniform(-1, 1, 10) * np.where(np.arange(10) % 3, 1, -1))
    values = values_within("E24", 1e4, 3e4)
    outcomes = [search(design, "mixed-sign", values, seconds=seconds) for seconds in (0.0, 1.5)]
    errors = [min(max(abs(e) for e in weight_errors(design, c).values()) for c in o.cells) for o in outcomes]
    assert not outcomes[0].whole
    assert max(o.bound for o in outcomes) <= min(errors) + 1e-12


def test_a_least_input_resistance_is_kept():
    design = design_for([-1.0, -2.0])
    values = values_within("E24", 1e3, 1e5)
    outcome = search(design, "inverting", values, least_input={"s1": 47e3})
    for (cell,) in outcome.cells:
        assert next(x.resistance for x in cell.minus if x.source == "s1") >= 47e3
    with pytest.raises(CannotRealise, match="'s1' wants at least 200000 ohm"):
        search(design, "inverting", values, least_input={"s1": 200e3})


def test_it_can_be_stopped():
    def stop(share):
        raise Cancelled("stopped")

    with pytest.raises(Cancelled):
        search(design_for([1.0, -2.0, 3.0]), "mixed-sign", values_within("E96", 1e3, 1e6), watch=stop)


def test_the_wrong_sign_is_refused():
    with pytest.raises(CannotRealise) as refused:
        search(design_for([1.0, -2.0]), "inverting", values_within("E24", 1e3, 1e5))
    assert refused.value.able == ("mixed-sign", "two-stage")
