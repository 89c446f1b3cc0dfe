"""How good and how fast the search for real values is. Run by hand: `python tests/benchmarks/realise_speed.py`.

Prints, and asserts nothing of time: the search against trying every set (N = 2, 3 in E24), its optimum against plain
rounding of the recipe (200 random weight lists), and its growth over N = 2 to 16 in E96.
"""

import statistics
import sys
import time
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1]))

from sumwright.engine.arrangement import able, exact_cells
from sumwright.engine.realise.best_set import search
from sumwright.engine.realise.choices import assess, weight_errors
from sumwright.engine.realise.preferred import values_within
from sumwright.errors import CannotRealise
from support.wanted import design_for, least_error_by_trying_all, rounded_cells

SIGNS = {"inverting": -1, "inverting-pair": 1, "non-inverting": 1, "mixed-sign": 0, "two-stage": 0}


def wanted(rng, n, arrangement, spread=1.0):
    sign = SIGNS[arrangement]
    signs = np.full(n, sign) if sign else np.where(np.arange(n) % 2, -1, 1)
    return 10 ** rng.uniform(-spread, spread, n) * signs


def timed(function, *args, **more):
    start = time.perf_counter()
    out = function(*args, **more)
    return time.perf_counter() - start, out


def found(design, arrangement, values):
    outcome = search(design, arrangement, values)
    return min(max(abs(e) for e in weight_errors(design, c).values()) for c in outcome.cells), outcome


def against_exhaustive(rng):
    print("Against trying every set, E24, 1k to 100k for N = 2 and 1k to 10k for N = 3")
    print(f"{'arrangement':16} N   every set     search  times faster  same optimum")
    for arrangement in SIGNS:
        for n, most in ((2, 1e5), (3, 1e4)):
            values = values_within("E24", 1e3, most)
            slow, quick, same = [], [], 0
            for _ in range(3):
                design = design_for(wanted(rng, n, arrangement, 0.5))
                t, expected = timed(least_error_by_trying_all, design, arrangement, values)
                slow.append(t)
                t, (error, outcome) = timed(found, design, arrangement, values)
                quick.append(t)
                same += abs(error - expected) <= 1e-9 * expected + 1e-13 and outcome.whole
            a, b = statistics.median(slow), statistics.median(quick)
            print(f"{arrangement:16} {n} {a:10.3f} s {b:8.4f} s {a / b:13.0f} {same:6d} of 3")


def against_rounding(rng, lists=200):
    print(
        f"\nWorst weight error of plain rounding over that of the search, E96 1k to 1M, {lists} random weight lists, N = 2 to 8"
    )
    print(f"{'arrangement':16} least  median    most   search worse")
    values = values_within("E96", 1e3, 1e6)
    for arrangement in SIGNS:
        ratios, worse = [], 0
        for _ in range(lists):
            design = design_for(wanted(rng, int(rng.integers(2, 9)), arrangement))
            error, _ = found(design, arrangement, values)
            try:
                rounded = assess(
                    design, arrangement, rounded_cells(design, exact_cells(design, arrangement), values)
                ).worst_weight_error
            except CannotRealise:
                continue
            worse += error > rounded + 1e-12
            ratios.append(rounded / max(error, 1e-12))
        print(f"{arrangement:16} {min(ratios):5.2f} {statistics.median(ratios):7.2f} {max(ratios):8.1f} {worse:8d}")


def growth(rng):
    print("\nSeconds of one search, E96 1k to 1M, offset and 50 ohm sources, median of 3 (proved of 3)")
    sizes = (2, 3, 4, 6, 8, 12, 16)
    print(f"{'arrangement':16}" + "".join(f"{f'N={n}':>13}" for n in sizes))
    values = values_within("E96", 1e3, 1e6)
    for arrangement in SIGNS:
        line = f"{arrangement:16}"
        for n in sizes:
            seconds, proved = [], 0
            for _ in range(3):
                offset = -0.5 if arrangement == "inverting" else 0.5
                design = design_for(wanted(rng, n, arrangement), offset=offset, sources=[50.0] * n)
                assert arrangement in able(design)
                t, (_, outcome) = timed(found, design, arrangement, values)
                seconds.append(t)
                proved += outcome.whole
            line += f"{statistics.median(seconds):9.3f} ({proved})"
        print(line, flush=True)


if __name__ == "__main__":
    rng = np.random.default_rng(20240501)
    growth(rng)
    against_rounding(rng)
    against_exhaustive(rng)
