"""Time certified deviation against a sampled one: python tests/benchmarks/deviation.py [largest number of vertices].

Prints processor time in milliseconds and as a ratio to the time of a plain sampled distance (both curves flattened to a
hundredth of the tolerance, nearest vertex to vertex by a k-d tree, both ways), which has no bound at all.
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
from geometry.curve import Curve
from geometry.deviation import exceeding, hausdorff, within
from geometry.polyline import Polyline


def wavy_spline(spans: int, step: float, seed: int) -> Spline:
    """Return a closed wavy cubic of knot spacing about `step`."""
    rng = np.random.default_rng(seed)
    angle = 2.0 * np.pi * np.arange(spans) / spans
    radius = spans * step / (2.0 * np.pi)
    waves = max(3, spans // 250)
    wave = 1.0 + 0.3 * np.cos(waves * angle + rng.uniform(0.0, 6.0)) / max(1.0, waves / 3.0)
    control = radius * wave[:, None] * np.stack([np.cos(angle), np.sin(angle)], axis=1)
    control = np.vstack([control, control[:1]])
    knots = np.concatenate([[0.0] * 3, np.linspace(0.0, 1.0, len(control) - 2), [1.0] * 3])
    return Spline(knots, control, 3, True)


def jagged(spline: Spline, vertices: int, amplitude: float, seed: int) -> Polyline:
    """Return a polyline along a spline whose vertices are thrown off evenly by up to `amplitude` in each coordinate."""
    rng = np.random.default_rng(seed)
    points = spline.evaluate(np.linspace(0.0, 1.0, vertices, endpoint=False))
    return Polyline(points + rng.uniform(-amplitude, amplitude, points.shape), True)


def sampled(a: Curve, b: Curve, delta: float) -> float:
    """Return the vertex-to-vertex distance, both ways."""
    from scipy.spatial import cKDTree

    p, q = a.flatten(delta).points, b.flatten(delta).points
    return float(max(cKDTree(q).query(p)[0].max(), cKDTree(p).query(q)[0].max()))


def cost(task: Callable[[], object]) -> float:
    """Return the least processor time of some runs, milliseconds."""
    best, spent, runs = np.inf, 0.0, 0
    while runs < 3 or (spent < 300.0 and runs < 50):
        begin = time.process_time()
        task()
        taken = 1e3 * (time.process_time() - begin)
        best, spent, runs = min(best, taken), spent + taken, runs + 1
        if spent > 5_000.0:
            break
    return best


def main() -> None:
    """Print the table."""
    largest = int(sys.argv[1]) if len(sys.argv) > 1 else 100_000
    print(
        "vertices spans | sampled ms | within yes, near, no | hausdorff tol/100, 1e-6 | exceeding (ratios to sampled)"
    )
    for vertices, spans in ((12, 6), (100, 40), (500, 150), (500, 500), (10_000, 3_333), (100_000, 33_333)):
        if vertices > largest:
            continue
        spline = wavy_spline(spans, vertices / spans, 1)
        outline = jagged(spline, vertices, 0.35, 2)
        true = hausdorff(outline, spline, 1e-4).certified
        plain = cost(lambda s=spline, o=outline, t=true: sampled(o, s, t / 100.0))
        tasks: list[Callable[[], object]] = [
            lambda s=spline, o=outline, t=true: within(o, s, 1.2 * t),
            lambda s=spline, o=outline, t=true: within(o, s, 1.01 * t),
            lambda s=spline, o=outline, t=true: within(o, s, 0.9 * t),
            lambda s=spline, o=outline, t=true: hausdorff(o, s, t / 100.0),
            lambda s=spline, o=outline: hausdorff(o, s, 1e-6),
            lambda s=spline, o=outline, t=true: (exceeding(o, s, 0.8 * t), exceeding(s, o, 0.8 * t)),
        ]
        times = [cost(task) for task in tasks]
        print(f"{vertices:8d} {spans:5d} | {plain:10.2f} | " + " ".join(f"{t:.2f} ms ({t / plain:.2f})" for t in times))


if __name__ == "__main__":
    main()
