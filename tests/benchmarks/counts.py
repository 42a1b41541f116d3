"""How few: arcs, vertices and control points written against the least numbers and against general libraries.

Run from the top of the repository: python -m tests.benchmarks.counts

Prints Markdown: one row a shape and chord error, then what follows from it. Every result, ours and theirs, is held
against the curve by the certified distance. shapely's `simplify` gets a fine polyline of the curve and the largest
tolerance, by bisection, whose result is certified within the chord error; scipy's `splprep` the smoothing that does the
same (see `tests.benchmarks.knots`). Times are processor times on one thread.
"""

import os

os.environ.setdefault("OMP_NUM_THREADS", "1")

import time
from collections.abc import Callable
from dataclasses import dataclass
from functools import partial
from typing import TypeVar

import numpy as np
import shapely

from geometry.arcs import ArcChain
from geometry.bspline import Spline
from geometry.deviation import hausdorff, within
from geometry.economy.arcs import fewest_arcs
from geometry.economy.knots import fewest_knots
from geometry.economy.least import least_arcs, least_control_points, least_vertices
from geometry.economy.lines import fewest_vertices
from geometry.polyline import Polyline
from tests.benchmarks.knots import smoothed
from tests.spline_shapes import SHAPES, made, spline_through

ERRORS = (0.1, 0.01, 0.001)
BISECTIONS = 12
T = TypeVar("T")
FINE = 0.02  # chord error of the polyline that `simplify` gets, in chord errors


@dataclass(frozen=True)
class Count:
    """One way to write one curve."""

    number: int
    least: float
    off: float  # certified distance in chord errors
    seconds: float


def timed(task: Callable[[], T]) -> tuple[T, float]:
    """Return a result and the processor time it took, s."""
    start = time.process_time()
    result = task()
    return result, time.process_time() - start


def parts(curve: Spline | ArcChain | Polyline) -> int:
    """Return how many entities or points a curve is counted by."""
    if isinstance(curve, Spline):
        return len(curve.control)
    return len(curve.bulges if isinstance(curve, ArcChain) else curve.points)


def simplified(spline: Spline, error: float) -> tuple[Polyline, float]:
    """Return the shortest polyline within the chord error that `simplify` gives, and the time of that one call."""
    fine = spline.flatten(FINE * error)
    points = np.vstack([fine.points, fine.points[:1]]) if fine.closed else fine.points
    line = shapely.linestrings(points)
    low, high = 0.5 * error, 1.5 * error
    best, spent = fine, 0.0
    for _ in range(BISECTIONS):
        middle = 0.5 * (low + high)
        short, took = timed(partial(shapely.simplify, line, middle))
        coordinates = np.asarray(short.coords)
        tried = Polyline(coordinates[:-1] if fine.closed else coordinates, fine.closed)
        if within(spline, tried, error).inside:
            low = middle
            if len(tried.points) < len(best.points):
                best, spent = tried, took
        else:
            high = middle
    return best, spent


def counted(spline: Spline, error: float) -> dict[str, Count]:
    """Return all ways to write a spline within a chord error."""
    ways: dict[str, tuple[Callable[[], Spline | ArcChain | Polyline], float]] = {
        "arcs": (lambda: fewest_arcs(spline, error), least_arcs(spline, error)),
        "lines": (lambda: fewest_vertices(spline, error), least_vertices(spline, error)),
        "on curve": (lambda: fewest_vertices(spline, error, True), least_vertices(spline, error, True)),
        "spline": (lambda: fewest_knots(spline, error), least_control_points(spline, error)),
        "splprep": (lambda: smoothed(spline, error) or spline, np.nan),
    }
    out = {}
    for name, (task, least) in ways.items():
        curve, seconds = timed(task)
        out[name] = Count(parts(curve), least, hausdorff(spline, curve, 1e-3 * error).certified / error, seconds)
    curve, seconds = simplified(spline, error)
    off = hausdorff(spline, curve, 1e-3 * error).certified / error
    out["simplify"] = Count(len(curve.points), np.nan, off, seconds)
    return out


def table() -> list[dict[str, Count]]:
    """Print the table, row by row."""
    print("| curve | chord error | arcs (least) | lines (least) | on the curve (least) | simplify | spline | splprep |")
    print("| --- | --- | --- | --- | --- | --- | --- | --- |")
    rows = []
    for name in SHAPES:
        spline = made(name)
        for error in ERRORS:
            row = counted(spline, error)
            cells = [f"{row[form].number} ({row[form].least:.1f})" for form in ("arcs", "lines", "on curve")]
            cells += [str(row["simplify"].number), str(row["spline"].number), str(row["splprep"].number)]
            print(f"| {name} | {error:g} | {' | '.join(cells)} |", flush=True)
            rows.append(row)
    return rows


def summary(rows: list[dict[str, Count]]) -> None:
    """Print what follows from the table."""
    print()
    print("| form | number / least: median, worst | (number - 2) / least: worst | largest certified / chord error |")
    print("| --- | --- | --- | --- |")
    for form, least in (("arcs", "arcs"), ("lines", "lines"), ("on curve", "on curve"), ("simplify", "lines")):
        number = np.array([row[form].number for row in rows])
        bound = np.array([row[least].least for row in rows])
        off = max(row[form].off for row in rows)
        ratio = number / bound
        print(
            f"| {form} | {np.median(ratio):.3f}, {ratio.max():.3f} | {((number - 2.0) / bound).max():.3f} | {off:.4f} |"
        )
    print()
    print("| against | numbers: median, worst | processor time: median |")
    print("| --- | --- | --- |")
    for ours, theirs, what in (
        ("lines", "simplify", "lines / simplify (one call, its tolerance known)"),
        ("on curve", "simplify", "on the curve / simplify (one call, its tolerance known)"),
        ("spline", "splprep", "spline / splprep (with its 16 bisections)"),
    ):
        number = np.array([row[ours].number / row[theirs].number for row in rows])
        spent = np.array([row[ours].seconds / max(row[theirs].seconds, 1e-6) for row in rows])
        print(f"| {what} | {np.median(number):.3f}, {number.max():.3f} | {np.median(spent):.2f} |")


def growth() -> None:
    """Print how time grows with the number written."""
    print()
    print("| growth | number | s | microseconds each |")
    print("| --- | --- | --- | --- |")
    for waves in (10, 40, 160):
        x = np.linspace(0.0, 100.0 * waves, 100 * waves + 1)
        spline = spline_through(np.stack([x, 20.0 * np.sin(0.02 * np.pi * x)], axis=1), x, False)
        chain, spent = timed(partial(fewest_arcs, spline, 0.003))
        print(f"| arcs, {waves} waves | {parts(chain)} | {spent:.2f} | {1e6 * spent / parts(chain):.0f} |")
    spline = made("ellipse")
    for error in (1e-3, 1e-5, 2e-8):
        for on_curve in (False, True):
            line, spent = timed(partial(fewest_vertices, spline, error, on_curve))
            name = "on the curve" if on_curve else "lines"
            print(f"| {name}, {error:g} | {parts(line)} | {spent:.2f} | {1e6 * spent / parts(line):.0f} |")


def main() -> None:
    """Print the tables."""
    summary(table())
    growth()


if __name__ == "__main__":
    main()
