"""Reading and fitting a record of five million rows: seconds, and memory against that of the numbers.

Run by hand: python tests/benchmarks/bench_capture.py [rows]
"""

import resource
import sys
import tempfile
import time
from pathlib import Path

import numpy as np
from sumwright.engine.bench.capture import fit_capture
from sumwright.engine.operating_point import operating_point
from sumwright.files.capture import read_capture

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))
from support.bench_stages import stage


def main(rows=5_000_000):
    design = stage("inverting", (-1.0, -0.5), offset=0.0)
    w = operating_point(design).weights
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "record.csv"
        rng = np.random.default_rng(0)
        with path.open("w") as stream:
            stream.write("recorder,one\ntime (s),north (V),east (V),output (V)\n")
            for start in range(0, rows, 100_000):
                t = np.arange(start, min(start + 100_000, rows)) * 1e-6
                a, b = 4 * np.sin(2 * np.pi * 50.1 * t), 3 * np.sign(np.sin(2 * np.pi * 333 * t))
                y = w[0] * a + w[1] * b + 1e-3 * rng.normal(size=len(t))
                np.savetxt(stream, np.column_stack([t, a, b, y]), fmt="%.6f", delimiter=",")
        size = path.stat().st_size
        before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
        at = time.perf_counter()
        record = read_capture(path)
        read = time.perf_counter() - at
        after = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
        at = time.perf_counter()
        np.loadtxt(path, delimiter=",", skiprows=2, max_rows=rows // 20)
        plain = 20 * (time.perf_counter() - at)
        at = time.perf_counter()
        got = fit_capture(
            design, record.time, record.channels["output"], {n: record.channels[n] for n in ("north", "east")}
        )
        fitted = time.perf_counter() - at
    numbers = 4 * 8 * rows / 2**20
    print(
        f"{rows:,} rows, {size / 2**20:.0f} MB: read in {read:.1f} s ({plain / read:.1f} times as fast as numpy.loadtxt)"
    )
    print(
        f"memory grew by {(after - before) / 1024:.0f} MB for {numbers:.0f} MB of numbers ({(after - before) / 1024 / numbers:.1f} times)"
    )
    print(
        f"fitted in {fitted:.1f} s; weights off by {np.abs(got.fit.value[:2] / w - 1).max():.1e}; found {[f.key for f in got.findings]}"
    )


if __name__ == "__main__":
    main(*map(int, sys.argv[1:2]))
