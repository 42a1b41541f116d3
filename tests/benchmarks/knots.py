"""Control points, fairness and time of the fewest-knots spline against scipy's smoothing spline at equal distance.

Run from the top of the repository: python -m tests.benchmarks.knots
splprep gets the points of the source, its arc length as parameter, and the smoothing for which its largest distance
from the source (sampled, foot points) is just the chord error, by bisection; both results are clamped splines and
are counted alike. Times are processor time.
"""

import time
import warnings

import numpy as np
from scipy.interpolate import BSpline, splev, splprep

from geometry.bspline import Spline
from geometry.economy.knots import fewest_knots
from geometry.fairness import fairness
from tests.spline_shapes import SHAPES, apart, dense, made, one_way, spline_through


def smoothed(source: Spline, chord_error: float) -> Spline | None:
    """Return splprep's shortest spline within the chord error that bisection finds."""
    points = dense(source, 4)
    along = np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(points, axis=0), axis=1))])
    fine = dense(source, 16)
    low, high = 1e-6 * len(points) * chord_error**2, 4.0 * len(points) * chord_error**2
    best: Spline | None = None
    for _ in range(16):
        middle = np.sqrt(low * high)
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            (knots, control, _), _ = splprep(points.T, u=along, s=middle, per=int(source.smooth_seam))
        curve = np.array(splev(np.linspace(0.0, along[-1], 8 * len(points)), (knots, control, 3))).T
        if one_way(fine, curve) <= chord_error:
            low = middle
            count = len(knots) - 4
            if best is None or count < len(best.control):
                best = clamped(knots, np.array(control).T, bool(source.smooth_seam))
        else:
            high = middle
    return best


def clamped(knots: np.ndarray, control: np.ndarray, closed: bool) -> Spline:
    """Return scipy's spline as ours; a periodic one is clamped by interpolating it in its own space."""
    if not closed:
        return Spline(knots, control, 3)
    inner = knots[3:-3]
    ours = np.concatenate([[inner[0]] * 3, inner, [inner[-1]] * 3])
    middle = (ours[1:-3] + ours[2:-2] + ours[3:-1]) / 3.0  # Greville points determine it
    values = BSpline(knots, control, 3)(middle)
    matrix = BSpline.design_matrix(middle, ours, 3).toarray()
    points = np.linalg.solve(matrix, values)
    return Spline(ours, np.concatenate([points[:-1], points[:1]]), 3, closed=True, smooth_seam=True)


def main() -> None:
    """Print the table and its medians."""
    print(
        f"{'shape':14}{'error':>7}{'ours':>6}{'splprep':>8}{'ratio':>7}  of error   extrema: given, ours, splprep   ms"
    )
    ratios, fair, theirs_fair = [], [], []
    for name in SHAPES:
        source = made(name)
        for e in (0.1, 0.01, 0.001):
            start = time.process_time()
            ours = fewest_knots(source, e)
            spent = time.process_time() - start
            theirs = smoothed(source, e)
            extrema = [fairness(s, 10.0 * e).curvature_extrema if s is not None else -1 for s in (source, ours, theirs)]
            ratio = len(ours.control) / len(theirs.control) if theirs is not None else np.nan
            ratios.append(ratio)
            fair.append(extrema[1] <= extrema[0])
            theirs_fair.append(extrema[2] <= extrema[0])
            print(
                f"{name:14}{e:7}{len(ours.control):6}{len(theirs.control) if theirs is not None else 0:8}{ratio:7.2f}"
                f"{apart(source, ours) / e:10.3f}  {extrema[0]:16}{extrema[1]:6}{extrema[2]:9}{1e3 * spent:7.0f}"
            )
    print(
        f"ratio: median {np.nanmedian(ratios):.3f}, worst {np.nanmax(ratios):.3f}; no extrema added: ours "
        f"{np.mean(fair):.0%}, splprep {np.mean(theirs_fair):.0%}"
    )
    for waves in (10, 100, 1000):

        def wave(t: np.ndarray, waves: int = waves) -> np.ndarray:
            return np.stack([60.0 * waves * t, 8.0 * np.sin(2.0 * np.pi * waves * t)], axis=1)

        length = 70.0 * waves
        x = np.linspace(0.0, 1.0, round(length))
        long = spline_through(wave(x), x * length, closed=False)
        start = time.process_time()
        ours = fewest_knots(long, 0.1)
        spent = time.process_time() - start
        print(
            f"{len(long.spans):7} spans to {len(ours.control):6} control points: "
            f"{1e6 * spent / len(long.spans):6.1f} us a span"
        )


if __name__ == "__main__":
    main()
