"""Guard bands against JCGM 106:2012 and ILAC-G8:09/2019."""

import numpy as np
import pytest
from scipy.stats import multivariate_normal
from sumwright.engine.bench.fit import false_acceptance, guarded_risks, verdict

# ILAC-G8:09/2019, table 1: probability of false acceptance at the acceptance limit for a guard band of r·U, one-sided,
# U at 95 % (k = 2). It prints 50, 5, 2.5, 0.16 % and 1 ppm (from memory); the exact normal values stand here.
ILAC = [(0.0, 0.5), (0.83, 0.0485), (1.0, 0.02275), (1.5, 0.00135), (3.0, 9.87e-10)]


@pytest.mark.parametrize(("ratio", "risk"), ILAC)
def test_risk_at_the_acceptance_limit(ratio, risk):
    u, limit = 0.01, 5.0
    at = limit - ratio * 2 * u
    assert false_acceptance(at, u, -np.inf, limit) == pytest.approx(risk, rel=0.005)


# JCGM 106:2012, table 1 (from memory): conformance probability and the distance to the limit in standard uncertainties.
@pytest.mark.parametrize(("probability", "z"), [(0.80, 0.84), (0.90, 1.28), (0.95, 1.64), (0.99, 2.33), (0.999, 3.09)])
def test_one_sided_conformance_probability(probability, z):
    assert 1 - false_acceptance(-z, 1.0, -np.inf, 0.0) == pytest.approx(probability, abs=0.0015)


# JCGM 106:2012, 9.5: resistors of nominally 1500 ohm, u0 = 0.12, tolerance ± 0.2, um = 0.04 (inputs from memory).
# Risks in percent: guard band, consumer's, producer's.
@pytest.mark.parametrize(
    ("guard", "consumer", "producer"), [(0.0, 1.894, 3.721), (0.04, 0.433, 11.47), (0.08, 0.0469, 24.77)]
)
def test_global_risks_of_the_resistor_example(guard, consumer, producer):
    got = guarded_risks(1500.0, 0.12, 1499.8, 1500.2, 0.04, guard)
    assert 100 * got[0] == pytest.approx(consumer, rel=0.002)
    assert 100 * got[1] == pytest.approx(producer, rel=0.002)


def test_global_risks_agree_with_the_bivariate_normal():
    u0, um, guard = 0.3, 0.1, 0.07
    joint = multivariate_normal([0, 0], [[u0**2, u0**2], [u0**2, u0**2 + um**2]])

    def box(a, b, c, d):
        return joint.cdf([b, d]) - joint.cdf([a, d]) - joint.cdf([b, c]) + joint.cdf([a, c])

    consumer = 2 * box(0.5, 9, -0.5 + guard, 0.5 - guard)
    producer = 2 * box(-0.5, 0.5, 0.5 - guard, 9)
    np.testing.assert_allclose(guarded_risks(0.0, u0, -0.5, 0.5, um, guard), [consumer, producer], rtol=2e-3)


@pytest.mark.parametrize(
    ("value", "word"),
    [(0.0, "in"), (0.80, "in"), (0.81, "undecided"), (1.0, "undecided"), (1.19, "undecided"), (1.2, "out"), (-1.3, "out"), (-0.9, "undecided")],
)  # fmt: skip
def test_verdict_with_a_guard_band_of_two_standard_uncertainties(value, word):
    """The four-state rule of ILAC-G8:09/2019, 4.2.3, both conditional states called undecided."""
    assert verdict(value, 0.1 - 1e-12, -1.0, 1.0).word == word


def test_the_readings_said_to_decide_do_decide():
    undecided = verdict(0.95, 0.1, -1.0, 1.0, readings=10)
    assert undecided.word == "undecided"
    total = 10 + undecided.more
    assert verdict(0.95, 0.1 * np.sqrt(10 / total), -1.0, 1.0).word == "in"
    assert verdict(0.95, 0.1 * np.sqrt(10 / (total - 1)), -1.0, 1.0).word == "undecided"
    assert verdict(1.0, 0.1, -1.0, 1.0).more is None
