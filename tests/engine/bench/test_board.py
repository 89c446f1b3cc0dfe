"""The batch of boards against the one-board solution it stands in for."""

import numpy as np
import pytest
from sumwright.engine.bench.board import Bench
from sumwright.engine.operating_point import operating_point
from support.bench_stages import every_arrangement

STAGES = every_arrangement()


@pytest.mark.parametrize("name", STAGES)
def test_healthy_board_agrees_with_the_operating_point_clipped_or_not(name):
    design = STAGES[name]
    bench = Bench(design)
    rng = np.random.default_rng(4)
    volts = rng.uniform(-30, 30, (40, len(design.signals)))
    expected = [operating_point(design, v) for v in volts]
    assert {p.clipped for p in expected} >= {"no", "high"} or {p.clipped for p in expected} >= {"no", "low"}
    got = bench.outputs(bench.healthy, volts)[0]
    np.testing.assert_allclose(got, [p.output for p in expected], atol=2e-5, rtol=2e-6)
