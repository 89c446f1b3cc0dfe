"""The guide's links lead somewhere, its files open, and the numbers it quotes are the engine's."""

import re
from pathlib import Path

import pytest
from sumwright.engine.analysis import Analysis
from sumwright.engine.arrangement import arrangement_of, ideal_weights
from sumwright.engine.cautions import AC_LIMIT, DC_LIMIT
from sumwright.engine.checks.check import TIGHT
from sumwright.files.design import read_design
from sumwright.files.examples import example

GUIDE = Path(__file__).parents[2] / "assets" / "guide"
CHAPTERS = sorted(GUIDE.glob("*.md"))


def words(name):
    return " ".join((GUIDE / name).read_text(encoding="utf-8").split())


@pytest.mark.parametrize("chapter", CHAPTERS, ids=lambda p: p.name)
def test_every_link_and_picture_is_there(chapter):
    for place in re.findall(r"\]\(([^)#]+)", chapter.read_text(encoding="utf-8")):
        if not place.startswith(("http://", "https://")):
            assert (chapter.parent / place).exists(), f"{chapter.name}: {place}"


def test_every_chapter_and_file_is_reached_from_the_first_page():
    first = (GUIDE / "README.md").read_text(encoding="utf-8")
    assert all(f"({c.name})" in first for c in CHAPTERS if c.name != "README.md")
    everything = "".join(c.read_text(encoding="utf-8") for c in CHAPTERS)
    for extra in GUIDE.iterdir():
        if extra.suffix in (".json", ".png", ".csv"):
            assert extra.name in everything, f"{extra.name} is nowhere in the guide"


@pytest.mark.parametrize("path", sorted(GUIDE.glob("*.json")), ids=lambda p: p.name)
def test_every_design_file_opens(path):
    d = read_design(path)
    assert "invented" in d.title
    if d.cells:
        assert not [c.title for c in Analysis(d).checks if c.status == "short"]


def test_tide_gauge_recipe():
    d = example("tide-gauge")
    text = words("recipes.md")
    assert "`out = 0.7 float + 1.65 V`" in text
    assert (d.signals[0].weight, d.target.offset, d.target.low, d.target.high) == (0.7, 1.65, 0.1, 3.2)
    accuracy = next(c for c in Analysis(d).checks if c.key == "accuracy")
    assert "Accuracy comes to 10 mV, two thirds of it the known shift" in text
    assert accuracy.value == pytest.approx(10e-3, abs=0.5e-3)
    lowest = Analysis(d).errors["lowest"]
    assert abs(lowest.shift) / (abs(lowest.shift) + lowest.expanded_95) == pytest.approx(2 / 3, abs=0.04)


def test_servo_recipe():
    d = read_design(GUIDE / "servo-error.json")
    assert arrangement_of(d.cells) == "mixed-sign"
    assert [s.weight for s in d.signals] == [2.0, -2.0, -0.1]
    assert d.cells[0].plus[0].resistance == d.cells[0].minus[0].resistance


def test_audio_recipe():
    d = example("village-hall-bus")
    made, _ = ideal_weights(d, d.cells)
    assert [s.weight for s in d.signals] == [-2.0, -1.0, -1.0, -0.5]
    assert Analysis(d).ac.cells[0].noise_gain == pytest.approx(5.5, abs=0.05) and "about 5.5" in words("recipes.md")
    assert all(v < 0 for v in made.values())


def test_bits_recipe():
    # half a step of n bits, on the largest: 0.5 / 2**(n - 1), which is 0.39 % of the first of eight
    assert pytest.approx(0.0039, abs=1e-5) == 0.5 / 2**7 and "±0.39 %" in words("recipes.md")
    from sumwright.engine.realise.preferred import values_within

    e96 = [round(float(v), 2) for v in values_within("E96", 1.0, 9.99)]
    for value in (1.0, 2.0, 4.02, 8.06):
        assert value in e96
    d = example("lock-gate-switches")
    weights = [s.weight for s in d.signals]
    assert [w / weights[-1] for w in weights] == [8, 4, 2, 1]


def test_limits_and_margins_are_those_of_the_engine():
    assert f"{DC_LIMIT:g} V DC or {AC_LIMIT:g} V AC RMS" in words("limits.md")
    assert TIGHT == 0.1 and "a tenth of the allowance" in words("model.md")


def test_the_jobs_numbers():
    text = words("the-job.md")
    d = read_design(GUIDE / "kiln-damper-realised.json")
    a = Analysis(d)
    room = a.headroom.cells[0]
    for value, said in (
        (room.lowest, "0.101 V"),
        (room.highest, "4.696 V"),
        (room.limit_high, "7.538 V"),
        (room.inputs_highest, "3.913 V"),
    ):
        assert f"{value:.3f} V" == said and said in text
    high = a.errors["highest"]
    assert (
        f"{high.shift * 1e3:.2f}".replace("-", "−") + " mV" in text
        and f"±{high.expanded_95 * 1e3:.2f} mV at 95 %" in text
    )
    accuracy = next(c for c in a.checks if c.key == "accuracy")
    assert f"{accuracy.value * 1e3:.1f} mV of the 30 mV" in text
    cell = a.ac.cells[0]
    assert f"{cell.phase_margin:.1f}° at {cell.crossover / 1e6:.2f} MHz" in text
    assert f"{a.noise.rms * 1e6:.1f} µV RMS" in text
    feedback = next(t for t in a.noise.terms if t.name == "feedback")
    assert feedback.rms**2 / a.noise.rms**2 == pytest.approx(0.6, abs=0.05) and "three fifths of its power" in text
    for part in a.net.parts:
        assert f"{part.resistance / 1e3:g}k" in text
    from sumwright.engine.boards import monte_carlo

    assert monte_carlo(d, 20000, 1)["highest"].yield_ == 1.0


def test_the_jobs_diagnosis():
    from sumwright.engine.bench.diagnose import diagnose
    from sumwright.engine.bench.readings import parse_meter
    from sumwright.files.readings import read_readings

    text = words("the-job.md")
    d = read_design(GUIDE / "kiln-damper-realised.json")
    found = diagnose(d, read_readings(GUIDE / "kiln-damper-readings.csv", d), meter=parse_meter("0.02 % + 0.2 mV"))
    for name, value, v in zip(found.names, found.fit.value, found.verdicts, strict=True):
        said = [f"{x:+.5f}".replace("-", "−") for x in (value, v.low, v.high)]
        if name == "offset":
            said = [s.lstrip("+") + " V" for s in said]
        assert f"| {name} | {said[0]} | {said[1]} to {said[2]} | {v.word} |" in text
    first = [s for s in found.suspects if s.group == 1]
    assert {(s.fault, s.part) for s in first} == {("source resistance high", "hearth"), ("leg wrong value", "hearth")}
    by = {s.fault: s.estimate for s in first}
    assert by["source resistance high"] == pytest.approx(5.1e3, rel=0.02) and by["leg wrong value"] == pytest.approx(
        107e3, rel=0.01
    )
    assert "meter on the hearth plug itself, loaded and unloaded" in text and first[0].tell.lower().startswith(
        "meter on the hearth plug"
    )
