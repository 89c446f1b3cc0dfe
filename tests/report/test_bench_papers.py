"""The bring-up sheet leaves room to write; the calibration record says what was measured, and how well."""

import dataclasses
import re
from datetime import UTC, datetime
from html import unescape

import pytest
from sumwright.command import main
from sumwright.engine.analysis import Analysis
from sumwright.engine.bench.plan import plan
from sumwright.engine.operating_point import operating_point
from sumwright.engine.stage import Leg
from sumwright.files.design import write_design
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
        assert f"{1.0 + i:.3f}\u00a0V" in text and f"{1.5 + i:.3f}\u00a0V" in text
    assert "signature" in text and "Not for protection" in text
    assert "ridge 10.000\u00a0V" in text and "wind 0.000" not in text


def test_a_step_of_nothing_says_so():
    assert "every signal at 0\u00a0V" in bring_up_sheet(Analysis(example()), [step(apply={"ridge": 0.0})], now=NOON)


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


@pytest.mark.parametrize(
    ("verdict", "headline"), [("in", "all in"), ("out", "5 weights out"), ("undecided", "5 weights undecided")]
)
def test_the_headline_is_the_worst_verdict(verdict, headline):
    d = example()
    assert headline in calibration_record(d, diagnosis(d, verdict), readings(d), now=NOON)


def test_explanations_stay_text():
    d = example()
    text = calibration_record(d, diagnosis(d), readings(d), now=NOON)
    assert "<b>no current</b>" not in text and "<b>no current</b>" in unescape(text)


# The command ---------------------------------------------------------------------------------------


@pytest.fixture
def files(tmp_path):
    d = example()
    (tmp_path / "vent.json").write_text(write_design(d), encoding="utf-8")
    net = operating_point(d)
    lines = ["ridge,bed,sun,damp,wind,output"]
    for row in [[0.0] * 5, *([10.0 * (i == j) / (2 if j == 4 else 1) for j in range(5)] for i in range(5)), [2.0] * 5]:
        lines.append(",".join(map(str, [*row, round(net.offset + float(net.weights @ row), 6)])))
    (tmp_path / "run.csv").write_text("\n".join(lines) + "\n", encoding="utf-8")
    return tmp_path


def test_the_command_writes_both_papers(files):
    out = files / "x.html"
    design = str(files / "vent.json")
    assert main(["report", design, "-o", str(out), "--kind", "bring-up", "--author", "R. Okafor"]) == 0
    text = out.read_text(encoding="utf-8")
    assert text.count('<td class="write') == 2 * len(plan(example()))
    assert (
        main(
            [
                "report",
                design,
                "-o",
                str(out),
                "--kind",
                "calibration",
                "--readings",
                str(files / "run.csv"),
                "--meter",
                "0.02 % + 0.1 mV",
                "--board",
                "0042",
            ]
        )
        == 0
    )
    text = out.read_text(encoding="utf-8")
    assert "all in" in text and "0042" in text and "0.02 % + 0.1 mV" in text
    assert "Standard uncertainty of a reading, as stated" in text


def test_a_board_with_a_wrong_leg_is_out(files):
    d = example()
    wrong = dataclasses.replace(
        d, cells=(dataclasses.replace(d.cells[0], minus=(Leg("wind", d.cells[0].minus[0].resistance * 1.04),)),)
    )
    made = operating_point(wrong)
    rows = [[0.0] * 5, *([10.0 * (i == j) / (2 if j == 4 else 1) for j in range(5)] for i in range(5)), [2.0] * 5]
    lines = [
        "ridge,bed,sun,damp,wind,output",
        *(",".join(map(str, [*r, made.offset + float(made.weights @ r)])) for r in rows),
    ]
    (files / "run.csv").write_text("\n".join(lines), encoding="utf-8")
    out = files / "x.html"
    assert (
        main(
            [
                "report",
                str(files / "vent.json"),
                "-o",
                str(out),
                "--kind",
                "calibration",
                "--readings",
                str(files / "run.csv"),
                "--meter",
                "0.02 % + 0.1 mV",
            ]
        )
        == 0
    )
    text = out.read_text(encoding="utf-8")
    assert re.search(r"\d weights? (and the offset )?out", text) and "leg wrong value" in text


@pytest.mark.parametrize(
    "more",
    [
        ["--kind", "calibration"],
        ["--readings", "run.csv"],
        ["--kind", "bring-up", "--bundle", "x.zip"],
        ["--kind", "other"],
    ],
)
def test_what_does_not_go_together_is_refused_and_nothing_written(files, capsys, more):
    out = files / "x.html"
    assert main(["report", str(files / "vent.json"), "-o", str(out), *more]) == 2
    assert capsys.readouterr().err.count("\n") == 1
    assert not out.exists()


def test_the_offset_counts_in_the_headline_and_a_reading_that_tells_nothing_is_not_asked_for():
    d = example()
    found = diagnosis(d, "in") | {"offset_verdict": "out", "next_reading_bits": 0.0}
    found["verdicts"]["ridge"] = "out"
    text = calibration_record(d, found, readings(d), meter="0.1 % + 2 mV", now=NOON)
    assert "1 weight and the offset out" in text and "0.1 % + 2 mV" in text
    assert "tell them apart best" not in text
    assert "tell them apart best" in calibration_record(d, found | {"next_reading_bits": 0.5}, readings(d), now=NOON)
