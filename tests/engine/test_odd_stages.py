"""Stages that nobody draws on purpose: every analysis answers, with finite numbers and without a numeric warning."""

import warnings

import numpy as np
import pytest
from sumwright.engine.analysis import Analysis
from sumwright.engine.arrangement import exact_cells
from sumwright.engine.boards import monte_carlo
from sumwright.engine.noise import noise, spectrum
from sumwright.engine.response import at_signal_frequencies, source_gains
from sumwright.engine.stage import (
    Ambient,
    Cell,
    Design,
    Leg,
    Load,
    Reference,
    ResistorKind,
    Signal,
    Supply,
    Target,
    replace,
)  # fmt: skip
from sumwright.engine.statespace import poles
from sumwright.engine.tighten import after_trim
from sumwright.engine.trace import trace
from sumwright.engine.waves import Wave
from support.stages import op_amp


def stage(arrangement="mixed-sign", **other):
    signals = (Signal("a", 1.0, -1.0, 1.0, 0.3, 50.0, 100.0), Signal("b", -0.5, -1.0, 1.0, -0.2, 50.0, 100.0))
    design = Design(
        "odd", signals, Supply(12.0, -12.0, 0.05), op_amp(), Target(0.0, -10.0, 10.0, 0.05, 1e-3, 1e3),
        Reference(2.5, 10.0, 0.002), Load(1e4, 1e-10), Ambient(25.0, 10.0, 40.0), stray_capacitance=5e-12,
    )  # fmt: skip
    return replace(replace(design, cells=exact_cells(design, arrangement)), **other)


def signals_with(**figures):
    return tuple(replace(s, **figures) for s in stage().signals)


ODD = {
    "a comparator": replace(stage(), cells=(replace(stage().cells[0], feedback=None, minus_ground=None),)),
    "a comparator at rest": replace(
        stage(signals=signals_with(value=0.0)), cells=(replace(stage().cells[0], feedback=None),)
    ),
    "a follower": stage(signals=signals_with()[:1], cells=(Cell(plus=(Leg("a", 0.0),), feedback=1e3),)),
    "no range": stage("two-stage", signals=signals_with(low=0.0, high=0.0, value=0.0, source_resistance=0.0)),
    "sources of a gigaohm": stage(signals=signals_with(source_resistance=1e9)),
    "a second pole far below": stage("two-stage", op_amp=op_amp(second_pole=1.0)),
    "an unstable load": stage(load=Load(None, 1e-8)),
    "nothing uncertain": stage(
        op_amp=op_amp(
            offset_voltage=0.0, offset_drift=0.0, bias_current=0.0, offset_current=0.0, noise_voltage=0.0,
            noise_current=0.0, output_resistance=0.0, dropout_resistance=0.0,
        ),
        resistor=ResistorKind(tolerance=0.0, temperature_coefficient=0.0), ambient=Ambient(),
        supply=Supply(12.0, -12.0), target=Target(), reference=None,
    ),
    "far past its ranges": stage("two-stage", signals=signals_with(value=1e3)),
}  # fmt: skip


@pytest.mark.parametrize("design", ODD.values(), ids=ODD.keys())
def test_every_analysis_answers(design):
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        for out in ((), ("a",), design.signal_names):
            a = Analysis(design, out)
            assert a.checks and a.curves and a.cable_out
            for budget in a.errors.values():
                assert np.isfinite([budget.shift, budget.worst_case, budget.expanded_95]).all()
                assert (budget.limit_effects >= 0).all() and (budget.standard_uncertainties >= 0).all()
            assert np.isfinite([a.dc.output, a.noise.rms, *a.power.op_amps[0][1:2], *after_trim(a)]).all()
            assert np.isfinite([s.dc_gain for s in a.ac.signals]).all() and at_signal_frequencies(a)
            if not out:
                drawn = monte_carlo(design, 500, 1)
                assert all(np.isfinite(d.standard_deviation) for d in drawn.values())
            run = trace(a, {design.signals[0].name: Wave("sine", 0.0, 1.0, 1e4)}, 1e-3, samples=101)
            assert np.isfinite(run.outputs).all()


@pytest.mark.parametrize("arrangement", ["mixed-sign", "two-stage"])
def test_an_output_without_resistance_has_no_pole_of_its_own(arrangement):
    """A load's capacitance then does nothing: neither to the margins, nor to the bandwidth, nor to the noise."""
    bare = stage(arrangement, op_amp=op_amp(output_resistance=0.0, second_pole=None), load=Load(None, 0.0))
    loaded = replace(bare, load=Load(1e4, 2e-9))
    a, b = Analysis(bare), Analysis(loaded)
    for one, other in ((a.ac.cells, b.ac.cells), (a.ac.signals, b.ac.signals)):
        for x, y in zip(one, other, strict=True):
            assert [type(v) for v in x] == [type(v) for v in y]
            assert [v for v in x if isinstance(v, float)] == pytest.approx(
                [v for v in y if isinstance(v, float)], rel=1e-5
            )
    assert a.ac.cells[-1].gain_margin_db is None
    assert a.noise.rms == pytest.approx(b.noise.rms, rel=1e-12)
    for k, s in enumerate(b.ac.signals):
        half = abs(source_gains(b.net, [s.bandwidth_3db])[k, 0]) / abs(s.dc_gain)
        assert half == pytest.approx(0.5**0.5, rel=1e-9)


@pytest.mark.parametrize("share", [0.5, 0.8, 0.98, 1.1])
def test_the_skirt_of_a_resonance_is_in_the_noise_where_the_band_ends_beside_it(share):
    """Against the same density summed up on a grid fine enough for any of it."""
    net = Analysis(stage(load=Load(1e4, 3e-9))).net
    ring = max(poles(net), key=lambda p: p.imag / max(-p.real, 1.0))
    top = share * abs(ring) / (2 * np.pi)
    assert -ring.real < 0.15 * abs(ring)
    x, weight = np.polynomial.legendre.leggauss(20)
    edges = np.linspace(np.log(10.0), np.log(top), 201)
    half, middle = np.diff(edges) / 2, (edges[1:] + edges[:-1]) / 2
    f = np.exp(middle[:, None] + half[:, None] * x)
    power = (spectrum(net.design, f.ravel()).total ** 2) @ (half[:, None] * weight * f).ravel()
    assert noise(net.design, band=(10.0, top)).rms == pytest.approx(np.sqrt(power), rel=2e-5)
