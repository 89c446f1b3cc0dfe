"""Trimmers that surely cover, select-on-test, bias balance, spans, and stages on one supply."""

import itertools

import numpy as np
import pytest
from sumwright.engine.analysis import Analysis
from sumwright.engine.arrangement import arrangement_of, exact_cells, ideal_weights
from sumwright.engine.realise.balance import bias_balance
from sumwright.engine.realise.choices import realise
from sumwright.engine.realise.span import into_window, span_to_span, with_spans
from sumwright.engine.realise.trim import TRIMMER_TOLERANCE, TRIMMERS, select_on_test, trim_for
from sumwright.engine.stage import Reference, Signal, Supply, Target, replace
from sumwright.errors import CannotRealise, InvalidQuantity
from support.stages import op_amp
from support.wanted import design_for

STAGES = {
    "inverting": design_for([-1.0, -2.2], sources=[50.0, 0.0]),
    "inverting-pair": design_for([1.0, 2.2]),
    "non-inverting": design_for([0.25, 0.6, 1.1]),
    "mixed-sign": design_for([2.0, -4.0, 0.7], offset=0.3),
    "two-stage": design_for([2.0, -4.0]),
}


def with_leg(cells, source, ohm):
    def put(legs):
        return tuple(replace(x, resistance=ohm) if x.source == source else x for x in legs)

    return tuple(replace(c, minus=put(c.minus), plus=put(c.plus)) for c in cells)


def jolted(cells, signs, tolerance):
    """Every resistor at one limit or the other."""
    sign = iter(signs)

    def hit(ohm):
        return ohm * (1 + tolerance * next(sign)) if ohm else ohm

    return tuple(
        replace(
            c,
            minus=tuple(replace(x, resistance=hit(x.resistance)) for x in c.minus),
            plus=tuple(replace(x, resistance=hit(x.resistance)) for x in c.plus),
            minus_ground=hit(c.minus_ground), plus_ground=hit(c.plus_ground), feedback=hit(c.feedback),
        )
        for c in cells
    )  # fmt: skip


@pytest.mark.parametrize("arrangement", STAGES)
def test_the_trimmer_covers_every_corner_of_the_other_parts(arrangement):
    """At each corner of all tolerances the ends of the travel lie on both sides of the wanted weight."""
    design = STAGES[arrangement]
    cells = realise(design, arrangement=arrangement).choices[0].cells
    tolerance = design.resistor.tolerance
    trim = trim_for(design, cells, "s1")
    count = sum(
        len(c.minus) + len(c.plus) + sum(bool(x) for x in (c.minus_ground, c.plus_ground, c.feedback)) for c in cells
    )
    wanted = abs(design.signal("s1").weight)
    for signs in itertools.product((-1, 1), repeat=count):
        others = jolted(cells, signs, tolerance)
        for own, travel in itertools.product((-1, 1), repeat=2):
            fixed = trim.fixed * (1 + own * tolerance)
            low = with_leg(others, "s1", fixed + max(0.01 * trim.trimmer, 2.0))
            high = with_leg(others, "s1", fixed + trim.trimmer * (1 + travel * TRIMMER_TOLERANCE))
            reached = sorted(abs(ideal_weights(design, x)[0]["s1"]) for x in (low, high))
            assert reached[0] <= wanted * (1 + 1e-9) and reached[1] >= wanted * (1 - 1e-9)


@pytest.mark.parametrize("arrangement", STAGES)
def test_the_trimmer_covers_no_more_than_needed(arrangement):
    """The next smaller trimmer, with any fixed resistor, would leave a corner out."""
    design = STAGES[arrangement]
    cells = realise(design, arrangement=arrangement).choices[0].cells
    trim = trim_for(design, cells, "s1")
    smaller = [t for t in TRIMMERS if t < trim.trimmer]
    assert trim.covered_low <= trim.needed_low and trim.covered_high >= trim.needed_high
    if smaller:
        from sumwright.engine.realise.preferred import values_within

        t = design.resistor.tolerance
        values = values_within("E96", 10, 1e7)
        end = max(0.01 * smaller[-1], 2.0)
        fits = values[
            (values * (1 + t) + end <= trim.needed_low)
            & (values * (1 - t) + smaller[-1] * (1 - TRIMMER_TOLERANCE) >= trim.needed_high)
        ]
        assert fits.size == 0
    assert 0 < trim.setting < 1 and 0 < trim.resolution < 0.01


def test_an_inverting_leg_by_hand():
    """10k and Rf 10k, all 1 %: the leg must reach 9.9k to 10.1k, worked by hand from R = Rf / |w|."""
    design = design_for([-1.0], series="E24")
    trim = trim_for(design, exact_cells(design, "inverting", feedback=10e3), "s0")
    assert (trim.needed_low, trim.needed_high) == (pytest.approx(9900), pytest.approx(10100))
    assert (trim.fixed, trim.trimmer) == (9100.0, 2000.0)
    assert trim.fixed * 1.01 + 20 <= 9900 and trim.fixed * 0.99 + 1800 >= 10100
    assert trim.resolution == pytest.approx(1 - 10 / 10.02, rel=1e-6)


def test_the_offset_is_trimmed_at_the_reference():
    design = STAGES["mixed-sign"]
    design = replace(design, reference=Reference(2.5, 0.0, 0.02))
    cells = exact_cells(design, "mixed-sign")
    loose = trim_for(design, cells, "reference")
    close = trim_for(replace(design, reference=Reference(2.5, 0.0, 0.0)), cells, "reference")
    assert loose.needed_high - loose.needed_low > close.needed_high - close.needed_low
    with pytest.raises(CannotRealise, match="feeds no leg"):
        trim_for(STAGES["inverting"], exact_cells(STAGES["inverting"], "inverting"), "reference")


@pytest.mark.parametrize("arrangement", STAGES)
@pytest.mark.parametrize("error", [-0.02, 0.013])
def test_select_on_test_brings_the_weight_home(arrangement, error):
    """Whichever part is at fault (the feedback here), the corrected stage, computed anew, is right."""
    design = STAGES[arrangement]
    cells = exact_cells(design, arrangement)
    wrong = (*cells[:-1], replace(cells[-1], feedback=cells[-1].feedback * (1 + error)))
    measured = ideal_weights(design, wrong)[0]["s1"]
    found = select_on_test(design, cells, "s1", measured)
    goal = design.signal("s1").weight
    if abs(measured / goal - 1) < 1e-9:
        assert found.how == "none"
        return
    assert found.how == ("parallel" if abs(measured) < abs(goal) else "series")
    leg = next(x.resistance for c in cells for x in (*c.minus, *c.plus) if x.source == "s1")
    put = 1 / (1 / leg + 1 / found.exact) if found.how == "parallel" else leg + found.exact
    mended = ideal_weights(design, with_leg(wrong, "s1", put))[0]["s1"]
    assert mended == pytest.approx(goal, rel=5e-4)
    assert abs(found.weight / goal - 1) < abs(measured / goal - 1)


def test_select_on_test_refuses_nonsense():
    design = STAGES["inverting"]
    cells = exact_cells(design, "inverting")
    for measured in (0.0, float("nan"), 1.0):
        with pytest.raises(InvalidQuantity, match="measured weight of 's0'"):
            select_on_test(design, cells, "s0", measured)


# Bias balance: LM358 figures (Texas Instruments SLOS068, input offset voltage, bias and offset current), four 100k legs and
# Rf 100k. Output errors worked from superposition: typically 15 mV of offset voltage and 2 mV of bias current, at most
# 35 and 25; with 20k at the other input 0.2 and 5 mV remain.
@pytest.mark.parametrize(
    ("vos", "bias", "offset", "expected"),
    [(3e-3, 20e-9, 2e-9, (15e-3, 2e-3, 0.2e-3)), (7e-3, 250e-9, 50e-9, (35e-3, 25e-3, 5e-3))],
)
def test_bias_balance_of_a_bipolar_summer(vos, bias, offset, expected):
    design = design_for([-1.0] * 4, amp=op_amp(offset_voltage=vos, bias_current=bias, offset_current=offset))
    design = replace(design, cells=exact_cells(design, "inverting", feedback=100e3))
    (b,) = bias_balance(design)
    assert (b.offset_error, b.bias_error, b.balanced_error) == tuple(pytest.approx(x) for x in expected)
    assert b.minus_resistance == pytest.approx(20e3) and b.plus_resistance == 0
    assert b.verdict == "worth it" and b.resistor == 20e3


def test_balance_is_pointless_with_fet_inputs_and_harmful_with_cancelled_bias():
    """OPA277's data sheet (Texas Instruments SBOS079): do not add a resistor to a part that cancels its bias current."""
    cells = exact_cells(design_for([-1.0] * 4), "inverting", feedback=100e3)
    fet = replace(
        design_for([-1.0] * 4, amp=op_amp(offset_voltage=3e-3, bias_current=30e-12, offset_current=5e-12)), cells=cells
    )
    assert bias_balance(fet)[0].verdict == "pointless" and bias_balance(fet)[0].resistor is None
    cancelled = replace(
        design_for([-1.0] * 4, amp=op_amp(offset_voltage=10e-6, bias_current=1e-9, offset_current=1e-9)), cells=cells
    )
    assert bias_balance(cancelled)[0].verdict == "harmful" and bias_balance(cancelled)[0].resistor is None


def test_the_mixed_sign_rule_balances_by_itself():
    design = STAGES["mixed-sign"]
    (b,) = bias_balance(replace(design, cells=exact_cells(design, "mixed-sign")))
    assert b.verdict == "balanced" and b.minus_resistance == pytest.approx(b.plus_resistance)


def test_span_to_span():
    """0.01 V..1 V into 1 V..4.5 V: m 3.53535, b 0.964646 (R. Mancini, Op Amps for Everyone, ch. 4; problem from memory, numbers worked)."""
    spans = span_to_span(0.01, 1.0, 1.0, 4.5)
    assert spans.weights[0] == pytest.approx(3.53535, abs=5e-6) and spans.offset == pytest.approx(0.964646, abs=5e-7)
    assert span_to_span(0, 2, 8, 10) == ((1.0,), 8.0)
    assert span_to_span(-10, 10, 5, 0) == ((-0.25,), 2.5)
    for bad in [(1, 1, 0, 5), (0, 1, 5, 5), (0, float("inf"), 0, 5)]:
        with pytest.raises(InvalidQuantity):
            span_to_span(*bad)


def test_a_window_is_filled_by_the_corners_and_not_passed():
    signals = (Signal("a", 1, -10, 10, 0), Signal("b", -1, 0, 5, 0), Signal("c", 1, 1, 2, 1))
    spans = into_window(signals, 0.0, 5.0, [2, 1, 1])
    corners = [
        spans.offset + sum(w * v for w, v in zip(spans.weights, at, strict=True))
        for at in itertools.product(*((s.low, s.high) for s in signals))
    ]
    assert min(corners) == pytest.approx(0, abs=1e-12) and max(corners) == pytest.approx(5)
    assert np.sign(spans.weights).tolist() == [1, -1, 1]
    assert abs(spans.weights[0]) * 20 == pytest.approx(2.5)
    for bad in (
        lambda: into_window(signals, 5, 0),
        lambda: into_window(signals, 0, 5, [1, 1]),
        lambda: into_window(signals, 0, 5, [0, 1, 1]),
    ):
        with pytest.raises(InvalidQuantity):
            bad()


def single(signs):
    amp = op_amp(
        dropout_high=0.02,
        dropout_low=0.02,
        dropout_resistance=0.0,
        common_mode_high=-0.1,
        common_mode_low=-0.1,
        supply_least=2.0,
    )
    return replace(
        design_for(signs, amp=amp, sources=[50.0] * len(signs)),
        signals=tuple(Signal(f"s{i}", w, -10.0, 10.0, 0.0, 50.0) for i, w in enumerate(signs)),
        supply=Supply(5.0, 0.0),
        reference=Reference(2.5, 0.0),
        target=Target(low=0.0, high=5.0),
    )


@pytest.mark.parametrize("signs", [[1.0, 1.0], [1.0, -1.0], [-1.0, -1.0]])
def test_plus_minus_ten_volts_into_0_to_5_on_one_supply(signs):
    """Every arrangement offered for the single supply holds its output and its inputs between 0 V and 5 V."""
    design = single(signs)
    design = with_spans(design, into_window(design.signals, 0.5, 4.5))
    result = realise(design)
    works = set()
    for c in result.choices:
        headroom = Analysis(replace(design, cells=c.cells)).headroom
        if all(cell.lowest >= -0.01 and cell.highest <= 5.01 for cell in headroom.cells):
            works.add(c.arrangement)
        if "lifted for the single supply" in c.merits:
            assert arrangement_of(c.cells) == c.arrangement
            assert c.worst_weight_error < 0.02
            assert all(cell.lowest >= 0.0 and cell.highest <= 5.0 for cell in headroom.cells), c
    assert "mixed-sign" in works
    if signs != [-1.0, -1.0]:
        assert "two-stage" in works or "inverting-pair" in works


def test_spans_that_need_an_offset_need_a_reference():
    design = replace(single([1.0]), reference=None)
    with pytest.raises(CannotRealise, match="need an offset"):
        with_spans(design, span_to_span(-10, 10, 0, 5))
