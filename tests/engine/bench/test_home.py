"""What mends a board: one fault is cured at its part, and the other parts are left alone."""

import numpy as np
import pytest
from sumwright.engine.bench.board import Bench
from sumwright.engine.bench.home import cure
from sumwright.engine.bench.suspects import Diagnosis
from sumwright.engine.operating_point import operating_point
from support.bench_stages import broken, stage

DESIGN = stage()
RUN = [np.where(np.arange(5) == k, 4.0, 0.0) for k in range(5)] + [
    np.zeros(5),
    np.full(5, 5.0),
    np.array([9.0, 1, 8, 2, 3]),
]


def diagnosed(board):
    return Diagnosis(Bench(DESIGN), RUN, [operating_point(board, v).output for v in RUN], 5e-4)


def ohm(design, source):
    return next(x.resistance for c in design.cells for x in (*c.minus, *c.plus) if x.source == source)


@pytest.mark.parametrize(("factor", "how"), [(1.9, "parallel"), (0.5, "series")])
def test_a_wrong_leg_is_mended_at_that_leg_and_every_weight_comes_home(factor, how):
    board = broken(DESIGN, "leg wrong value", "east", factor)
    mend = cure(diagnosed(board))
    assert (mend.part, mend.fault, mend.resistor.how) == ("east", "leg wrong value", how)
    assert mend.says.startswith("Replace the east leg by ")
    is_, value = ohm(board, "east"), mend.resistor.value
    made = is_ * value / (is_ + value) if how == "parallel" else is_ + value
    mended = broken(DESIGN, "leg wrong value", "east", made / ohm(DESIGN, "east"))
    wanted, before, after = (operating_point(d).weights for d in (DESIGN, board, mended))
    assert np.max(np.abs(before / wanted - 1)) > 0.3
    np.testing.assert_allclose(after, wanted, rtol=0.02)


def test_a_wrong_feedback_is_mended_at_the_feedback():
    mend = cure(diagnosed(broken(DESIGN, "feedback wrong value", "cell 1", 2.0)))
    assert (mend.part, mend.resistor.how) == ("cell 1", "parallel")
    assert mend.resistor.weight == pytest.approx(DESIGN.cells[0].feedback, rel=0.02)


def test_a_fault_that_no_resistor_mends_says_to_mend_it_first():
    mend = cure(diagnosed(broken(DESIGN, "leg open", "south")))
    assert (mend.part, mend.fault, mend.resistor) == ("south", "leg open", None)
    assert "Mend that" in mend.says


def test_a_healthy_board_and_one_with_two_faults_have_no_single_cure():
    assert cure(diagnosed(DESIGN)) is None
    twice = broken(broken(DESIGN, "leg wrong value", "east", 1.9), "leg wrong value", "tare", 0.4)
    assert cure(diagnosed(twice)) is None
    assert cure(Diagnosis(Bench(DESIGN), np.zeros((0, 5)), [], 5e-4)) is None
