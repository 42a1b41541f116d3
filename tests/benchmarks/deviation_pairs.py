"""Hold certified distances of random pairs against dense sampling: python -m tests.benchmarks.deviation_pairs [pairs].

Polylines, arc chains and splines of degree 1 to 3, open and closed, 2-D and 3-D, near the origin and far from it. The
sampling is the tests' own: points of every piece from its definition, every segment compared. Prints how many bounds
dense samples contradict, how many intervals are wider than was asked for, how tight they are, and the pairs' numbers
where either happens.
"""

import os
import sys

os.environ.setdefault("OMP_NUM_THREADS", "1")

import numpy as np

from geometry.deviation import hausdorff, within
from tests.test_deviation import dense, distances, random_curve


def main() -> None:
    """Print the counts; exit code 1 where a bound is broken."""
    count = int(sys.argv[1]) if len(sys.argv) > 1 else 2_000
    above, below, wide, wrong = [], [], [], []
    shares, slack = [], []
    kinds: dict[str, int] = {}
    for seed in range(count):
        rng = np.random.default_rng(10_000 + seed)
        dimension, origin = (2, 3)[seed % 2], (0.0, 0.0, 5e6)[seed % 3]
        a, b = random_curve(rng, dimension, origin), random_curve(rng, dimension, origin)
        width = 10.0 ** rng.uniform(-6.0, -1.0)
        found = hausdorff(a, b, width)
        near_origin = [dense(curve.moved(np.full(dimension, -origin)), 1_000) for curve in (a, b)]
        slip = 1e-8 if origin else 1e-12  # of the shift back to the origin, in which the samples are taken
        for (p, bow), (q, gap), one in zip(
            near_origin, near_origin[::-1], (found.forward, found.backward), strict=True
        ):
            far = float(distances(p, q).max())
            step = 0.5 * float(np.linalg.norm(np.diff(p, axis=0), axis=1).max()) + float(bow)
            spread = one.certified - one.measured
            bad = far - gap - slip > one.certified, one.measured > far + step + gap + slip, spread > width
            for rows, broken in zip((above, below, wide), bad, strict=True):
                if broken:
                    rows.append(seed)
            shares.append(spread / width)
            slack.append((one.certified - far) / (step + gap + width + slip))
        yes, no = within(a, b, found.certified + 1e-3), within(a, b, max(found.measured - 1e-3, 1e-9))
        if yes.inside is not True or no.inside is not False:
            wrong.append(seed)
        kind = " and ".join(sorted((type(a).__name__, type(b).__name__)))
        kinds[f"{kind}, {dimension}-D"] = kinds.get(f"{kind}, {dimension}-D", 0) + 1
    print(f"{count} pairs, both directions: " + "; ".join(f"{kinds[kind]} {kind}" for kind in sorted(kinds)))
    print(f"samples above the certified bound: {len(above)}; measured above what sampling leaves open: {len(below)}")
    print(f"intervals wider than asked: {len(wide)}; median share of the width used: {np.median(shares):.3f}")
    print(f"certified above the samples, in units of what sampling leaves open: median {np.median(slack):.2f}")
    print(f"decisions 0.001 beside the distance that are wrong or left open: {len(wrong)}")
    if broken_pairs := sorted({*above, *below, *wide, *wrong}):
        print(f"pairs {broken_pairs}")
        raise SystemExit(1)


if __name__ == "__main__":
    main()
