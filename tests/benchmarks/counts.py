"""Counts of arcs and of vertices against the least numbers, with certified deviations.

Run: python tests/benchmarks/counts.py

A second argument "thorough" spends more time on the arcs. The last rows are measured for growth with the count.
"""

import os
import sys
import time
from collections.abc import Callable
from pathlib import Path

os.environ.setdefault("OMP_NUM_THREADS", "1")
sys.path.insert(0, str(Path(__file__).resolve().parents[2]))

import numpy as np

from geometry.bspline import Spline
from geometry.deviation import hausdorff
from geometry.economy.arcs import fewest_arcs
from geometry.economy.least import least_arcs, least_vertices
from geometry.economy.lines import fewest_vertices
from tests.spline_shapes import SHAPES, made, spline_through

ERRORS = (0.1, 0.01, 0.001)


def timed(task: Callable[[], object]) -> tuple[object, float]:
    """Return a result and the processor time it took, ms."""
    start = time.process_time()
    result = task()
    return result, 1e3 * (time.process_time() - start)


def row(spline: Spline, error: float, thorough: bool) -> str:
    """Return the counts of one spline at one chord error."""
    cells = []
    chain, spent = timed(lambda: fewest_arcs(spline, error, thorough))
    cells.append((len(chain.bulges), least_arcs(spline, error), chain, spent))
    for on_curve in (False, True):
        line, spent = timed(lambda on=on_curve: fewest_vertices(spline, error, on))
        cells.append((len(line.points), least_vertices(spline, error, on_curve), line, spent))
    parts = []
    for count, least, curve, spent in cells:
        off = hausdorff(spline, curve, 1e-3 * error).certified / error
        parts.append(f"{count:6d} {least:8.1f} {(count - 2) / least:6.3f} {off:6.3f} {spent:7.0f}")
    return " | ".join(parts)


def main() -> None:
    """Print the tables."""
    thorough = "thorough" in sys.argv[1:]
    head = " | ".join(f"{name:>6s}    least (n-2)/l  dev/e      ms" for name in ("arcs", "free", "on"))
    print(f"{'shape':14s} {'e':>7s} | {head}")
    for name in SHAPES:
        spline = made(name)
        for error in ERRORS:
            print(f"{name:14s} {error:7g} | {row(spline, error, thorough)}", flush=True)
    print("growth: waves, arcs, ms an arc; chord error, vertices, ms a vertex")
    for waves in (10, 40, 160):
        x = np.linspace(0.0, 100.0 * waves, 100 * waves + 1)
        spline = spline_through(np.stack([x, 20.0 * np.sin(0.02 * np.pi * x)], axis=1), x, False)
        chain, spent = timed(lambda s=spline: fewest_arcs(s, 0.003))
        print(f"{waves:6d} {len(chain.bulges):6d} {spent / len(chain.bulges):.3f}")
    spline = made("ellipse")
    for error in (1e-3, 1e-5, 3e-8):
        line, spent = timed(lambda e=error: fewest_vertices(spline, e))
        print(f"{error:g} {len(line.points):6d} {spent / len(line.points):.4f}")


if __name__ == "__main__":
    main()
