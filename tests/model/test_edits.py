"""What the resistors do when a wish changes: the changed leg follows, the others weigh what they did."""

from dataclasses import replace

import numpy as np
import pytest
from sumwright.engine.arrangement import exact_cells, ideal_weights
from sumwright.engine.stage import Reference
from sumwright.errors import CannotRealise, InvalidDesign, InvalidQuantity
from sumwright.model import demo, edits, sums


def exact(text, arrangement):
    design = sums.new_design(sums.read_sum(text), demo.op_amp())
    return replace(design, cells=exact_cells(design, arrangement))


def weights(design):
    made, offset = ideal_weights(design, design.cells)
    return np.array([made[n] for n in design.signal_names]), offset


CASES = [
    ("out = - 0.5 a - 0.25 b - 0.1 c", "inverting", -0.7),
    ("out = 0.5 a + 0.25 b + 0.1 c", "inverting-pair", 0.7),
    ("out = 0.5 a + 0.25 b + 0.1 c", "non-inverting", 0.7),
    ("out = 2 a + 3 b", "non-inverting", 1.5),
    ("out = 0.5 a + 0.25 b - 0.4 c", "mixed-sign", 0.9),
    ("out = 0.5 a + 0.25 b - 0.4 c", "mixed-sign", 2.5),
    ("out = 0.5 a + 0.25 b - 0.4 c + 0.5 V", "two-stage", 0.9),
]


@pytest.mark.parametrize("follow", ["exact", "nearest"])
@pytest.mark.parametrize(("text", "arrangement", "weight"), CASES)
def test_a_changed_weight_is_made_and_the_others_stay(text, arrangement, weight, follow):
    design = exact(text, arrangement)
    design = replace(design, resistor=replace(design.resistor, series="E192"))
    changed = edits.with_weight(design, "a", weight, follow)
    made, offset = weights(changed)
    # nearest E192 steps are 1.2 % apart: half of it on the leg, and as much again on the ground leg it shares
    tolerance = 1e-9 if follow == "exact" else 0.013
    np.testing.assert_allclose(made, [s.weight for s in changed.signals], rtol=tolerance)
    assert offset == pytest.approx(design.target.offset, rel=tolerance, abs=1e-12)


def test_other_legs_keep_their_values_to_the_ohm():
    design = demo.design()
    changed = edits.with_weight(design, "north", 0.2, "nearest")
    before = {leg.source: leg.resistance for leg in design.cells[0].plus + design.cells[0].minus}
    after = {leg.source: leg.resistance for leg in changed.cells[0].plus + changed.cells[0].minus}
    assert {n for n in before if before[n] != after[n]} == {"north"}
    assert changed.cells[0].feedback == design.cells[0].feedback


def test_a_board_as_fitted_keeps_every_resistor():
    design = demo.design()
    changed = edits.with_weight(design, "north", 0.33, "kept")
    assert changed.cells == design.cells
    assert changed.signal("north").weight == 0.33


def test_a_weight_of_the_wrong_sign_names_the_arrangements_that_can():
    design = exact("out = - 0.5 a - 0.25 b", "inverting")
    with pytest.raises(CannotRealise) as refused:
        edits.with_weight(design, "a", 0.5)
    assert set(refused.value.able) == {"mixed-sign", "two-stage"}


@pytest.mark.parametrize(("text", "arrangement", "weight"), CASES)
def test_a_signal_more_has_a_leg_and_a_signal_less_has_none(text, arrangement, weight):
    design = exact(text, arrangement)
    more = edits.added(design, "exact")
    assert len(more.signals) == len(design.signals) + 1
    np.testing.assert_allclose(weights(more)[0], [s.weight for s in more.signals], rtol=1e-9)
    less = edits.removed(more, "a", "exact")
    np.testing.assert_allclose(weights(less)[0], [s.weight for s in less.signals], rtol=1e-9)


def test_the_last_signal_stays():
    with pytest.raises(InvalidDesign, match="only signal"):
        edits.removed(exact("out = - 0.5 a", "inverting"), "a")


def test_a_renamed_signal_is_renamed_on_its_legs():
    changed = edits.with_name(demo.design(), "north", "northern corner")
    assert weights(changed)[0] == pytest.approx(weights(demo.design())[0])


@pytest.mark.parametrize("name", ["", "reference", "output", "cell 1", "east", "x" * 65])
def test_names_that_a_file_refuses_are_refused(name):
    with pytest.raises(InvalidDesign):
        edits.with_name(demo.design(), "north", name)


def test_an_offset_without_a_reference_gets_one():
    design = exact("out = 0.5 a + 0.25 b", "non-inverting")
    changed = edits.with_offset(design, 0.5, "exact")
    assert changed.reference == Reference(2.5)
    assert weights(changed)[1] == pytest.approx(0.5)


def test_rails_the_wrong_way_round_are_refused_with_both_values():
    with pytest.raises(InvalidQuantity, match=r"−7\.5 V.*−8 V"):
        edits.with_figure(demo.design(), "supply", "high", -8.0)
    with pytest.raises(InvalidQuantity, match="Load resistance must be more than 0; it is −10k"):
        edits.with_figure(demo.design(), "load", "resistance", -1e4)


def test_a_new_sum_starts_from_a_better_set_than_the_nearest_values():
    design = sums.new_design(sums.read_sum("y = 1/3 left - 2 right + 1 V"), demo.design().op_amp)

    def worst(d):  # by the ideal weights, not by the search
        made, offset = ideal_weights(d, d.cells)
        return max(abs(offset - 1.0), *(abs(made[s.name] / s.weight - 1.0) for s in d.signals))

    near, best = edits.realised(design), edits.realised_best(design)
    assert worst(near) > 0.02 and worst(best) < 0.005
    series = edits.nearest_in_series(design)
    cell = best.cells[0]
    fitted = [leg.resistance for leg in (*cell.minus, *cell.plus)] + [cell.feedback]
    assert all(series(ohm) == pytest.approx(ohm, rel=1e-9) for ohm in fitted)


def test_nearest_values_are_nearest_by_ratio():
    # E24 around 3.3 k (IEC 60063): 3.0, 3.3, 3.6
    design = replace(demo.design(), resistor=replace(demo.design().resistor, series="E24"))
    near = edits.nearest_in_series(design)
    assert [near(v) for v in (3140.0, 3150.0, 3440.0, 3450.0)] == [3000.0, 3300.0, 3300.0, 3600.0]
