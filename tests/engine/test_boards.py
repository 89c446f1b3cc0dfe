"""Boards drawn at random: the same equations, repeatable, inside the worst case, first order when small."""

import numpy as np
import pytest
from sumwright.engine import boards, nodes
from sumwright.engine.boards import BLOCK, draw_boards, monte_carlo, statistics
from sumwright.engine.budget import POINTS, error_budgets, supply_error
from sumwright.engine.stage import Ambient, Cell, Leg, ResistorKind, replace
from sumwright.errors import InvalidQuantity
from support.stages import one_cell, op_amp, random_chain


def chain(seed, tolerance=0.01):
    design = random_chain(np.random.default_rng(seed))
    return replace(
        design, ambient=Ambient(25.0, 5.0, 60.0), resistor=ResistorKind("E96", tolerance, tolerance / 100),
        target=replace(design.target, accuracy=0.05),
    )  # fmt: skip


@pytest.mark.parametrize("seed", range(6))
def test_every_board_solves_the_node_equations(seed):
    """Redo a block from the same draws with the general solver."""
    design = chain(seed)
    net, amp = nodes.Network(design), design.op_amp
    recipe = boards._Recipe(net, POINTS)
    ours = recipe.block(recipe.scratch(), 7, 0)
    u = np.random.Generator(np.random.SFC64(np.random.SeedSequence(7, spawn_key=(0,)))).random(
        (recipe.quantities, BLOCK)
    )
    u, n, cells = u[:, :500], recipe.resistors, net.cell_count
    heat = -20.0 + 55.0 * u[-1]
    r = np.tile(net.resistances, (500, 1)).T.copy()
    kind = design.resistor
    r[recipe.order] *= (1 + kind.tolerance * (2 * u[:n] - 1)) * (
        1 + kind.temperature_coefficient * (2 * u[n : 2 * n] - 1) * heat
    )
    q = 2 * u[2 * n : -1] - 1
    x = np.stack([recipe.x.T] * 500)
    x[:, -1] *= (1 + design.reference.tolerance * q[-1])[:, None]
    one = np.ones(3)
    e, cm = np.empty((500, cells, 1)), np.empty((500, cells))
    into_m, into_p = np.empty((500, cells, 1)), np.empty((500, cells, 1))
    for k in range(cells):
        v = q[6 * k : 6 * k + 6]
        e[:, k, 0] = amp.offset_voltage * v[0] + amp.offset_drift * v[1] * heat + supply_error(design) * v[5]
        cm[:, k] = v[4] / amp.cmrr
        into_m[:, k, 0] = -(amp.bias_current * v[2] - amp.offset_current * v[3] / 2)
        into_p[:, k, 0] = -(amp.bias_current * v[2] + amp.offset_current * v[3] / 2)
    sol = nodes.solve(
        net, x, resistances=r.T, error=e * one, common_mode=cm, into_minus=into_m * one, into_plus=into_p * one
    )
    theirs = sol.output[:, -1].T - recipe.ideals
    # held back at nominal: what a later cell draws from an earlier output
    np.testing.assert_allclose(ours[:, :500], theirs, atol=1e-7 if cells > 1 else 1e-10)


def test_the_same_seed_makes_the_same_boards_whatever_the_threads(monkeypatch):
    design = chain(1)
    two = draw_boards(design, 3 * BLOCK + 17, 5).errors
    monkeypatch.setattr(boards, "_threads", lambda: 1)
    one = draw_boards(design, 3 * BLOCK + 17, 5).errors
    np.testing.assert_array_equal(one, two)
    np.testing.assert_array_equal(draw_boards(design, 100, 5).errors, one[:, :100])
    np.testing.assert_array_equal(draw_boards(design, 50, 5, first=BLOCK).errors, one[:, BLOCK : BLOCK + 50])
    assert not np.array_equal(draw_boards(design, 100, 6).errors, one[:, :100])


@pytest.mark.parametrize("seed", range(4))
def test_small_limits_converge_to_the_first_order_result(seed):
    design = chain(seed, tolerance=1e-4)
    budgets, drawn = error_budgets(design), monte_carlo(design, 60_000, seed)
    for point in POINTS:
        u = budgets[point].combined
        assert drawn[point].standard_deviation == pytest.approx(u, rel=0.015)
        assert drawn[point].mean == pytest.approx(budgets[point].shift, abs=0.02 * u)


@pytest.mark.parametrize("seed", range(4))
def test_no_board_passes_the_worst_case_by_more_than_second_order(seed):
    design = chain(seed, tolerance=0.001)
    budgets, drawn = error_budgets(design), draw_boards(design, 40_000, seed)
    for point, errors in zip(drawn.points, drawn.errors, strict=True):
        b = budgets[point]
        spread = b.worst_case - abs(b.shift)
        assert np.abs(errors - b.shift).max() <= spread * (1 + 0.02)


def test_yield_counts_the_boards_inside():
    errors = np.array([-2.0, -1.0, 0.0, 1.0, 1.5])
    assert statistics(errors, 0, 1.0).yield_ == pytest.approx(0.6)
    assert statistics(errors, 0, None).yield_ is None
    assert statistics(errors, 0, 1.0).mean == pytest.approx(-0.1)
    assert statistics(errors, 0, 1.0).standard_deviation == pytest.approx(np.std(errors, ddof=1))
    np.testing.assert_array_equal(errors, [-2.0, -1.0, 0.0, 1.0, 1.5])  # sorted a copy


@pytest.mark.parametrize("draws", [2, 999, 12_345, 32_000, 100_001])
def test_the_interval_from_the_tails_is_that_of_a_full_sort(draws):
    errors = np.random.default_rng(draws).gamma(2.0, size=draws)
    found = statistics(errors, 0, 1.0)
    assert (found.low_95, found.high_95) == boards.shortest_interval(errors)
    rising = np.sort(errors)  # the first boards tell nothing of the tails
    found = statistics(rising, 0, 1.0)
    assert (found.low_95, found.high_95) == boards.shortest_interval(rising)


def test_progress_can_stop_a_run():
    seen = []
    design = chain(2)
    found = monte_carlo(design, 100 * BLOCK, 1, progress=lambda done: seen.append(done) or len(seen) < 2)
    assert len(seen) == 2 and found["present"].draws == seen[-1] < 100 * BLOCK


def test_bad_requests_are_refused_with_their_value():
    for draws, seed, says in ((0, 1, "it is 0"), (10, -3, "it is -3"), (10**9, 1, "1 to 20000000")):
        with pytest.raises(InvalidQuantity, match=says):
            monte_carlo(chain(0), draws, seed)


def test_temperature_is_one_for_a_whole_board():
    """With equal coefficients drawn apart, a gain of two parts drifts; with none, it does not move at all."""
    design = one_cell({"a": 1.0}, minus={"a": 1e4}, plus_ground=0.0, feedback=1e4,
                      amp=op_amp(offset_voltage=0.0, bias_current=0.0, offset_current=0.0, offset_drift=1e-5, cmrr=1e30, psrr=1e30))  # fmt: skip
    design = replace(
        design, ambient=Ambient(25.0, 25.0, 85.0), resistor=ResistorKind(tolerance=0.0, temperature_coefficient=0.0)
    )
    errors = draw_boards(design, 20_000, 3).errors[0]
    # offset = drift × ΔT × noise gain 2, drift and ΔT rectangular: a product, with mean absolute value 1/4 of its limit
    limit = 1e-5 * 60 * 2
    assert np.abs(errors - errors.mean()).max() <= limit * 1.001
    assert np.abs(errors - np.median(errors)).mean() == pytest.approx(limit / 4, rel=0.03)


def test_a_tied_pin_and_a_shared_reference_are_drawn_too():
    base = random_chain(np.random.default_rng(0), cells=1, count=2)
    cells = (
        Cell((Leg("s0", 1e4), Leg("reference", 2e4)), (), None, 0.0, 1e4),
        Cell((Leg("s1", 1e4), Leg("reference", 3e4)), (Leg("cell 1", 0.0),), None, None, 1e4),
    )
    design = replace(base, cells=cells)
    b, drawn = error_budgets(design)["present"], monte_carlo(design, 60_000, 1)["present"]
    assert drawn.standard_deviation == pytest.approx(b.combined, rel=0.02)


def test_a_pin_straight_on_a_source_with_resistance_is_drawn_too():
    """A follower-like cell: a leg of 0 ohm behind 50 ohm; its bias current makes 50 ohm's worth of error."""
    design = one_cell({"a": 2.0}, plus={"a": 0.0}, minus_ground=1e4, feedback=1e4, amp=op_amp(bias_current=1e-4))
    design = replace(design, signals=(replace(design.signals[0], weight=2.0, source_resistance=50.0),))
    b, drawn = error_budgets(design)["present"], monte_carlo(design, 60_000, 1)["present"]
    assert drawn.mean == pytest.approx(b.shift, abs=0.02 * b.combined)
    assert drawn.standard_deviation == pytest.approx(b.combined, rel=0.02)
