"""The bring-up sheet leaves room to write; the calibration record says what was measured, and how well."""

from datetime import UTC, datetime
from html import unescape

import pytest
from sumwright.engine.analysis import Analysis
from sumwright.files.examples import example
from sumwright.report.bench_papers import bring_up_sheet, calibration_record

NOON = datetime(2026, 12, 1, 12, 0, tzinfo=UTC)


def step(**more):
    return {
        "number": 1, "apply": {"ridge": 10.0, "wind": 0.0}, "probe": "output", "expect": 2.15, "low": 2.1, "high": 2.2, "unit": "V",
        "why": "ridge alone", "miss": "its leg", **more,
    }  # fmt: skip


def diagnosis(design, verdict="in", value=1.0):
    return {
        "fit": {
            "weights": {s.name: {"value": s.weight * value, "standard_uncertainty": 4e-5} for s in design.signals},
            "offset": {"value": 1.151, "standard_uncertainty": 2e-4}, "chi_squared": 5.2, "degrees_of_freedom": 6, "p_value": 0.52,
        },
        "verdicts": {s.name: verdict for s in design.signals},
        "suspects": [{"fault": "leg open", "part": "wind", "probability": 0.9, "estimate": None, "explain": "<b>no current</b>"}],
        "next_reading": {"wind": 5.0},
    }  # fmt: skip


def readings(design):
    return [
        {s.name: (s.high if i == j else 0.0) for j, s in enumerate(design.signals)} | {"output": 2.0} for i in range(3)
    ]


def test_every_step_has_its_limits_and_two_blanks():
    steps = [step(number=i + 1, low=1.0 + i, high=1.5 + i) for i in range(4)]
    text = bring_up_sheet(Analysis(example()), {"steps": steps}, author="R. Okafor", now=NOON)
    assert text.count('<td class="write') == 2 * len(steps)
    for i in range(4):
        assert f"{1.0 + i:.3f}\u2009V" in text and f"{1.5 + i:.3f}\u2009V" in text
    assert "signature" in text and "Not for protection" in text
    assert "ridge 10.000\u2009V" in text and "wind 0.000" not in text


def test_a_step_of_nothing_says_so():
    assert "every signal at 0 V" in bring_up_sheet(Analysis(example()), [step(apply={})], now=NOON)


def test_the_record_gives_weights_uncertainty_verdicts_and_statement():
    d = example()
    text = calibration_record(
        d,
        diagnosis(d),
        readings(d),
        meter="bench meter 7, ±0.02 %, due 2027-03",
        board="0042",
        author="R. Okafor",
        now=NOON,
    )
    assert "all in" in text and "bench meter 7" in text and "0042" in text
    for s in d.signals:
        assert f"{s.weight:+.5f}".replace("-", "−") in text
    assert "40.0" not in text and "40µ" in text  # two figures, as an uncertainty is written
    assert "No uncertainty of the readings was stated" in text
    assert "χ² = 5.2 with 6 degrees of freedom" in text


@pytest.mark.parametrize(("verdict", "headline"), [("in", "all in"), ("out", "5 out"), ("undecided", "5 undecided")])
def test_the_headline_is_the_worst_verdict(verdict, headline):
    d = example()
    assert headline in calibration_record(d, diagnosis(d, verdict), readings(d), now=NOON)


def test_explanations_stay_text():
    d = example()
    text = calibration_record(d, diagnosis(d), readings(d), now=NOON)
    assert "<b>no current</b>" not in text and "<b>no current</b>" in unescape(text)
