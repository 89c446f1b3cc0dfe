"""How fast the engine is, as ratios to NumPy on the same machine in the same run. Run by hand:

    python tests/benchmarks/engine_speed.py

Prints, for a stage of eight signals in one and in two cells: a million boards at all
three points against drawing the same random numbers; the whole live set against the
same stage by dense nodal matrices; a time record; peak memory. Ratios are
medians of runs in turn, times the least seen; nothing is asserted.
"""

import resource
import statistics
import sys
import time
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1]))

from sumwright.engine import boards, nodes
from sumwright.engine.analysis import Analysis
from sumwright.engine.arrangement import exact_cells
from sumwright.engine.boards import BLOCK, monte_carlo
from sumwright.engine.stage import Ambient, Design, Load, Reference, Signal, Supply, Target, replace
from sumwright.engine.trace import step, trace
from sumwright.engine.waves import Wave
from support.stages import dense_solution, op_amp

WEIGHTS = (0.14, 0.1, 0.09, 0.11, -0.18, 0.2, -0.3, 0.05)


def eight(arrangement):
    """Eight invented signals, an offset from a reference, one or two op amps."""
    sig = tuple(Signal(f"s{i}", w, 0.0, 10.0, 3.0 + 0.5 * i, 50.0, 10.0) for i, w in enumerate(WEIGHTS))
    design = Design(
        "eight", sig, Supply(12.0, -12.0, 0.05), op_amp(), Target(0.5, 0.0, 5.0, 0.04, 1e-3, 100.0),
        Reference(2.5, 0.0, 0.002), Load(1e4, 1e-10), Ambient(25.0, 10.0, 40.0), stray_capacitance=5e-12,
    )  # fmt: skip
    return replace(design, cells=exact_cells(design, arrangement))


def ratio(f, g, clock=time.perf_counter, times=7):
    """Median of f's time over g's, the two run in turn so that a busy machine slows both; and f's least time."""
    f(), g()
    ratios, least = [], float("inf")
    for _ in range(times):
        a = clock()
        f()
        b = clock()
        g()
        c = clock()
        ratios.append((b - a) / (c - b))
        least = min(least, b - a)
    return statistics.median(ratios), least


def cpu(f, times=5):
    f()
    out = []
    for _ in range(times):
        start = time.process_time()
        f()
        out.append(time.process_time() - start)
    return statistics.median(out)


def draw(quantities, count, threads):
    """The same random numbers and nothing else, block by block, on as many threads."""
    blocks = range((count + BLOCK - 1) // BLOCK)

    def run(share):
        u = np.empty((quantities, BLOCK))
        for b in share:
            np.random.Generator(np.random.SFC64(np.random.SeedSequence(1, spawn_key=(b,)))).random(out=u)

    with ThreadPoolExecutor(threads) as pool:
        list(pool.map(run, [blocks[i::threads] for i in range(threads)]))


def live(design):
    """Everything a changed resistor makes new, from nothing."""
    a = Analysis(design)
    return a.dc, a.headroom, a.curves, a.errors, a.ac, a.noise


def moved_live(analysis, design):
    """The same after a slider moved."""
    a = analysis.follow(design)
    return a.dc, a.headroom, a.curves, a.errors, a.ac, a.noise


def dense_live(design):
    """The same questions by dense nodal matrices, one numpy.linalg.solve each."""
    names = [*design.signal_names, "reference"]
    for i in range(len(names)):
        dense_solution(design, np.eye(len(names))[i])
    present = [s.value for s in design.signals] + [2.5]
    dense_solution(design, present)
    net = nodes.Network(design)
    for _ in range(4 * len(net.parts) + 12 * len(design.cells)):
        dense_solution(design, present)
    for f in np.geomspace(1.0, 1e8, 200):
        for i in range(len(names) + len(design.cells)):
            dense_solution(design, np.eye(len(names))[i % len(names)], 2j * np.pi * f)


def main():
    threads = boards._threads()
    for arrangement in ("mixed-sign", "two-stage"):
        design = eight(arrangement)
        net = nodes.Network(design)
        quantities = boards._Recipe(net, ("present",)).quantities
        print(f"\n{arrangement}, eight signals, {len(net.parts)} resistors, {quantities} draws a board")

        def boards_of(d=design):
            return monte_carlo(d, 1_000_000, 1)

        def one_thread(q=quantities):
            draw(q, 1_000_000, 1)

        one, took = ratio(boards_of, one_thread)
        both, _ = ratio(boards_of, lambda q=quantities: draw(q, 1_000_000, threads))
        default, _ = ratio(boards_of, lambda q=quantities: np.random.default_rng(1).random((q, 1_000_000)), times=3)
        burnt, spent = ratio(boards_of, one_thread, time.process_time)
        print(f"  a million boards, three points, statistics: {took * 1e3:.0f} ms wall on {threads} threads at best")
        print(f"    against the same draws on 1 thread {one:.2f}x, on {threads} threads {both:.2f}x,")
        print(f"    against numpy.random.default_rng().random of as many {default:.2f}x")
        print(f"    CPU time {spent * 1e3:.0f} ms at best, {burnt:.2f}x the draws")
        dense, _ = ratio(lambda d=design: dense_live(d), lambda d=design: live(d), time.thread_time, 3)
        _, least = ratio(lambda d=design: live(d), lambda d=design: live(d), time.thread_time, 60)
        print(f"  live set: {least * 1e3:.2f} ms CPU at best; dense nodal matrices {dense:.0f}x")
        a = Analysis(design)
        a.dc, a.headroom, a.curves, a.errors, a.ac, a.noise  # noqa: B018 - asked once, so that there is something to hand on
        signals = [(replace(design.signals[0], value=0.1 * i), *design.signals[1:]) for i in range(20)]
        moved = [replace(design, signals=s) for s in signals]
        ours = cpu(lambda a=a, moved=moved: [moved_live(a, m) for m in moved]) / 20
        print(f"  live set while a slider moves: {ours * 1e3:.2f} ms CPU")
        fast = replace(design, op_amp=op_amp(gain_bandwidth=1e7, second_pole=3e7, slew_rate=8e6))
        for name, wave in (("sine 1 kHz", Wave("sine", 5.0, 4.0, 1e3)), ("square 1 kHz", Wave("square", 5.0, 4.0, 1e3)),
                           ("sine 1 kHz, clipped", Wave("sine", 5.0, 200.0, 1e3)),
                           ("sine 100 kHz, clipped", Wave("sine", 5.0, 200.0, 1e5))):  # fmt: skip
            took = cpu(lambda d=fast, w=wave: trace(d, {"s0": w}, 10e-3))
            r = trace(fast, {"s0": wave}, 10e-3)
            print(f"  record of 10 ms, 10 MHz op amp, {name}: {took * 1e3:.1f} ms CPU, {r.events} events")
        print(f"  step with settling: {cpu(lambda d=fast: step(d, 's0', 1.0)) * 1e3:.1f} ms CPU")
    print(
        f"\npeak memory of this process: {resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024:.0f} MiB (the draws by default_rng included)"
    )


def memory():
    """Peak memory of the million boards alone, with what importing takes."""
    design = eight("mixed-sign")
    before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    monte_carlo(design, 1_000_000, 1)
    after = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    print(
        f"a million boards: {after - before:.0f} MiB over the {before:.0f} MiB of the imports, {after:.0f} MiB in all"
    )


if __name__ == "__main__":
    memory()
    main()
