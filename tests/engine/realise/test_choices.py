"""The choices shown: ranked, honest, none of them beaten in every respect."""

import math

import pytest
from sumwright.engine.arrangement import arrangement_of, ideal_weights
from sumwright.engine.nodes import Network
from sumwright.engine.noise import noise
from sumwright.engine.realise.choices import assess, places, realise, resistors_of, undominated
from sumwright.engine.realise.preferred import values_within
from sumwright.engine.stage import replace
from sumwright.errors import CannotRealise
from support.stages import ideal_op_amp
from support.wanted import design_for

WANTED = {
    "inverting": design_for([-1.0, -2.2, -0.4], offset=-0.5),
    "inverting-pair": design_for([0.3, 2.2, 0.4], offset=0.5),
    "non-inverting": design_for([0.25] * 4, offset=0.5, sources=[50.0] * 4),
    "mixed-sign": design_for([2.0, -4.0, 0.7], offset=0.3),
    "two-stage": design_for([2.0, -4.0, 0.7, -0.2], offset=-0.3),
}


@pytest.mark.parametrize("arrangement", WANTED)
def test_choices_are_ranked_and_say_what_the_node_equations_say(arrangement):
    design = WANTED[arrangement]
    result = realise(design, arrangement=arrangement)
    errors = [c.worst_weight_error for c in result.choices]
    assert errors == sorted(errors) and result.proved[arrangement]
    assert errors[0] == pytest.approx(result.bounds[arrangement], rel=1e-9, abs=1e-12)
    values = set(values_within("E96", 1e3, 1e6))
    for c in result.choices:
        assert c.arrangement == arrangement == arrangement_of(c.cells)
        made, offset = ideal_weights(design, c.cells)
        assert c.weights == made and c.offset == offset
        off = [abs(made[s.name] / s.weight - 1) for s in design.signals] + [abs(offset / design.target.offset - 1)]
        assert c.worst_weight_error == pytest.approx(max(off), rel=1e-9, abs=1e-12)
        assert set(resistors_of(c.cells)) <= values
        assert c.resistor_count == len(resistors_of(c.cells)) and c.op_amp_count == len(c.cells)


def test_every_arrangement_that_can_has_a_choice():
    result = realise(WANTED["non-inverting"])
    assert {c.arrangement for c in result.choices} == {"inverting-pair", "non-inverting", "mixed-sign", "two-stage"}


def test_no_choice_is_beaten_in_every_respect_but_the_best_of_equals():
    choices = list(realise(WANTED["two-stage"], arrangement="two-stage").choices)
    kept = undominated(choices)
    assert set(range(len(choices))) - set(kept) <= {0}
    assert any(c.merits for c in choices)


def test_refusals_name_the_reason():
    with pytest.raises(CannotRealise, match="'s0' is 0"):
        realise(design_for([0.0, 1.0]))
    with pytest.raises(CannotRealise, match="No E6 value lies between 1600 and 2000"):
        realise(design_for([1.0, 1.0], series="E6", least=1600, most=2000))
    with pytest.raises(CannotRealise, match="'north', which is no signal"):
        realise(design_for([1.0]), least_input={"north": 1e4})
    with pytest.raises(CannotRealise, match="positive and finite"):
        realise(design_for([1.0]), least_input={"s0": -1.0})


def test_a_range_too_wide_to_search_is_narrowed_and_said():
    result = realise(design_for([-1.0, -2.0], series="E192", least=1e-6, most=1e12), arrangement="inverting")
    assert "The design allows 1\u202fµΩ to 1\u202fTΩ; searched were" in result.notes[0]
    assert not result.proved["inverting"] and result.choices[0].worst_weight_error < 1e-3


def test_places_are_named_as_the_drawing_names_them():
    for design in WANTED.values():
        for c in realise(design).choices[:3]:
            net = Network(replace(design, cells=c.cells))
            assert sorted(p.name for p in net.parts) == sorted(name for name, _ in places(c.cells))


def test_noise_density_is_the_noise_analysis_where_it_is_white():
    """With an op amp that is fast and white the short formula and the node equations must agree."""
    for arrangement, design in WANTED.items():
        amp = ideal_op_amp(
            gain_bandwidth=1e13, open_loop_gain=1e9, noise_voltage=7e-9, noise_voltage_corner=0.0, noise_current=1e-12
        )
        design = replace(design, op_amp=amp)
        c = realise(design, arrangement=arrangement).choices[0]
        # Source resistances make noise of their own in the full analysis; the sum counts them in the legs too.
        full = noise(replace(design, cells=c.cells)).density_1khz
        assert c.noise_density == pytest.approx(full, rel=1e-3), arrangement


def test_the_resistance_a_source_sees():
    design = WANTED["non-inverting"]
    c = realise(design, arrangement="non-inverting").choices[0]
    (cell,) = c.cells
    seen = []
    for leg in cell.plus:
        if leg.source != "reference":
            others = sum(
                1 / (x.resistance + (0 if x.source == "reference" else 50.0)) for x in cell.plus if x is not leg
            )
            others += 1 / cell.plus_ground if cell.plus_ground else 0
            seen.append(leg.resistance + 1 / others)
    assert c.least_input_resistance == pytest.approx(min(seen), rel=1e-9)


def test_a_follower_alone_loads_its_source_with_nothing():
    assert math.isinf(
        assess(
            design_for([1.0]), "non-inverting", realise(design_for([1.0]), arrangement="non-inverting").choices[0].cells
        ).least_input_resistance
    )


def test_pairs_are_taken_where_they_earn_their_place():
    design = design_for([2.1, -4.2, 1.11, 3.7], series="E12")
    alone = realise(design)
    paired = realise(design, pairs=True)
    assert paired.choices[0].worst_weight_error < 0.5 * alone.choices[0].worst_weight_error
    assert any(not c.parts for c in paired.choices)
    values = set(values_within("E12", 1e3, 1e6))
    for c in paired.choices:
        at = dict(places(c.cells))
        for p in c.parts:
            total = p.first + p.second if p.how == "series" else p.first * p.second / (p.first + p.second)
            assert at[p.place] == pytest.approx(total, rel=1e-12)
            assert {p.first, p.second} <= values
        assert c.resistor_count == len(at) + len(c.parts)
    # E96 sets that already err less than a tenth of the parts' tolerance gain nothing from a pair.
    assert not any(c.parts for c in realise(design_for([1.0, -1.0]), pairs=True).choices)


def test_a_pair_keeps_the_least_input_resistance_too():
    design = design_for([2.1, -4.2, 1.11, 3.7], series="E12")
    least = {s.name: 20e3 for s in design.signals}
    choices = realise(design, pairs=True, least_input=least).choices
    assert any(c.parts for c in choices)
    for c in choices:
        for cell in c.cells:
            assert all(x.resistance >= 20e3 for x in (*cell.minus, *cell.plus) if x.source in least)
