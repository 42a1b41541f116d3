"""Time the comparison of two outlines: python -m tests.benchmarks.compare [number of vertices].

Prints processor time in milliseconds of the full interval (certified distance both ways, to 1/200 of the tolerance),
and as ratios to it of: the decision with a tolerance of twice and of half the distance; the signed course with its
statistics; zones both ways; order of travel; and the search for the rigid move that lays one outline on the other.
"""

import os
import sys

os.environ.setdefault("OMP_NUM_THREADS", "1")

import numpy as np

from geometry.deviation import hausdorff, within
from geometry.polyline import Polyline
from geometry.registration import Move, moved_curve, rigid_move
from geometry.signed import course_along
from geometry.travel import travel_order
from geometry.zones import missed_zones, zones
from tests.benchmarks.deviation import cost


def smooth(count, phase=0.0, size=100.0):
    """Points evenly in angle round a wavy closed curve about `size` across."""
    angle = 2.0 * np.pi * (np.arange(count) + phase) / count
    radius = size / 2.0 * (1.0 + 0.15 * np.cos(3.0 * angle + 1.0) + 0.05 * np.cos(7.0 * angle))
    return radius[:, None] * np.stack([np.cos(angle), np.sin(angle)], axis=1)


def stairs(count, shift=0.0):
    """About `count` corners of a walk along the pixels nearest to a wavy curve."""
    points = np.rint(smooth(8 * count, size=count / 3.0) + shift)
    points = points[np.concatenate([[True], (points[1:] != points[:-1]).any(axis=1)])]
    step = np.diff(points, axis=0)
    slant = np.flatnonzero(np.abs(step).sum(axis=1) == 2.0)
    walk = np.insert(points, slant + 1, np.stack([points[slant + 1, 0], points[slant, 1]], axis=1), axis=0)
    turn = (np.diff(walk, axis=0)[1:] != np.diff(walk, axis=0)[:-1]).any(axis=1)
    return walk[1:-1][turn]


def bumped(points, height, share=0.001):
    """The same points, but for a share of them pushed out along the radius."""
    out, count = points.copy(), max(3, int(share * len(points)))
    rows = slice(len(points) // 3, len(points) // 3 + count)
    away = points[rows] / np.linalg.norm(points[rows], axis=1)[:, None]
    out[rows] += height * np.sin(np.pi * (np.arange(count) + 1.0) / (count + 1.0))[:, None] * away
    return out


def pairs(count):
    """Name, old, new and the tolerance of each comparison."""
    rng = np.random.default_rng(1)
    plain, steps = smooth(count), stairs(count)
    again = smooth(count, 0.4) + rng.normal(0.0, 0.01, (count, 2))
    return [
        ("smooth, one place edited", plain, bumped(plain, 0.3), 0.1),
        ("smooth, sampled anew", plain, again, 0.1),
        ("smooth, anew and edited", plain, bumped(again, 0.3), 0.1),
        ("stairs, one place edited", steps, bumped(steps, 6.0), 2.0),
        ("stairs, traced anew", steps, stairs(count, np.array([0.3, 0.4])), 2.0),
        ("stairs, anew and edited", steps, bumped(stairs(count, np.array([0.3, 0.4])), 6.0), 2.0),
    ]


def main() -> None:
    """Print the table."""
    count = int(sys.argv[1]) if len(sys.argv) > 1 else 100_000
    print("outlines                    old    new | interval ms | yes, no | course, zones, missed, order | move")
    for name, old_points, new_points, tolerance in pairs(count):
        old, new = Polyline(old_points, True), Polyline(new_points, True)
        exact = hausdorff(new, old, tolerance / 200.0)
        moved = moved_curve(Move(0.3 * tolerance, -2.0 * tolerance, 0.4), new)
        yes, no = within(new, old, 2.0 * exact.certified), within(new, old, 0.5 * exact.measured)
        if yes.inside is not True or no.inside is not False:
            raise SystemExit(f"{name}: wrong decision")
        full = cost(lambda a=new, b=old, t=tolerance: hausdorff(a, b, t / 200.0))
        found = zones(new, old, tolerance, tolerance)
        tasks = [
            lambda a=new, b=old, t=exact: within(a, b, 2.0 * t.certified),
            lambda a=new, b=old, t=exact: within(a, b, 0.5 * t.measured),
            lambda a=new, b=old, t=tolerance: course_along(a, b, t).statistics(),
            lambda a=new, b=old, t=tolerance: zones(a, b, t, t),
            lambda a=new, b=old, t=tolerance, k=found: missed_zones(a, b, t, k),
            lambda a=new, b=old, t=tolerance: travel_order(a, b, t),
            lambda a=moved, b=old: rigid_move([b], [a]),
        ]
        ratios = [f"{cost(task) / full:.2f}" for task in tasks]
        print(
            f"{name:25s} {len(old.points):6d} {len(new.points):6d} | {full:8.0f} | {', '.join(ratios[:2])} | "
            f"{', '.join(ratios[2:6])} | {ratios[6]}"
        )


if __name__ == "__main__":
    main()
