"""Order of travel: against the exact discrete bound, and on strands that a distance between sets cannot tell apart."""

import numpy as np
import pytest

from geometry.arcs import full_circle
from geometry.arrays import FloatArray
from geometry.bspline import Spline
from geometry.deviation import hausdorff
from geometry.errors import GeometryError
from geometry.polyline import Polyline
from geometry.travel import travel_order


def polyline(*points: tuple[float, ...], closed: bool = False) -> Polyline:
    return Polyline(np.array(points, dtype=np.float64), closed)


def discrete_frechet(p: FloatArray, q: FloatArray) -> float:
    """Coupling distance of two point rows by dynamic programming: at most one step longer than the Frechet distance.

    T. Eiter, H. Mannila, "Computing discrete Frechet distance", Technical University of Vienna, 1994 (from memory).
    """
    apart = np.linalg.norm(p[:, None] - q[None], axis=2)
    best = np.full_like(apart, np.inf)
    for i in range(len(p)):
        for j in range(len(q)):
            before = [best[i - 1, j]] if i else []
            before += [best[i, j - 1]] if j else []
            before += [best[i - 1, j - 1]] if i and j else []
            best[i, j] = max(apart[i, j], min(before)) if before else apart[i, j]
    return float(best[-1, -1])


@pytest.mark.parametrize("seed", range(12))
def test_bounds_enclose_the_distance_of_random_paths(seed: int) -> None:
    rng = np.random.default_rng(seed)
    shape = rng.uniform(0.0, 10.0, (int(rng.integers(2, 8)), 2 + seed % 2))
    a = Polyline(shape)
    x = np.sort(np.concatenate([[0.0, 1.0], rng.uniform(0.0, 1.0, 6)]))
    copy = a.at(x * a.length())
    b = Polyline(copy + rng.normal(0.0, (0.1, 3.0)[seed % 4 // 2], copy.shape))
    found = travel_order(a, b, 1e-3)
    step = [curve.length() / 120 for curve in (a, b)]
    dense = [
        curve.at(np.unique(np.concatenate([np.linspace(0.0, curve.length(), 121), curve.alongs()]))) for curve in (a, b)
    ]
    ends = [np.sum((a.points[[0, -1]] - b.points[[i, -1 - i]]) ** 2) for i in (0, -1)]
    exact = discrete_frechet(dense[0], dense[1] if ends[0] <= ends[1] else dense[1][::-1])
    assert found.certified >= exact - max(step) - 1e-9
    assert found.at_least <= exact + 1e-9
    assert found.certified >= hausdorff(a, b, 1e-6).measured - 1e-9
    assert found.at_least <= found.certified


@pytest.mark.parametrize("origin", [0.0, 5e6])
@pytest.mark.parametrize("reverse", [False, True])
def test_a_jagged_outline_is_in_the_order_of_its_curve(origin: float, reverse: bool) -> None:
    rng = np.random.default_rng(2)
    angle = np.linspace(0.0, 2.0 * np.pi, 400, endpoint=False)
    wave = 60.0 + 5.0 * np.cos(3.0 * angle)
    points = origin + wave[:, None] * np.stack([np.cos(angle), np.sin(angle)], axis=1)
    control = np.vstack([points[::4], points[:1]])
    inner = np.linspace(0.0, 1.0, len(control) - 2)[1:-1]
    spline = Spline(np.concatenate([[0.0] * 4, inner, [1.0] * 4]), control, 3, True)
    outline = Polyline(spline.evaluate(np.linspace(0.0, 1.0, 500)[:-1]) + rng.uniform(-0.4, 0.4, (499, 2)), True)
    outline = Polyline(np.roll(outline.points, 123, axis=0), True)
    found = travel_order(outline.reversed() if reverse else outline, spline, 1.0)
    plain = hausdorff(outline, spline, 1e-4).measured
    assert plain <= found.certified <= plain + 0.25
    assert found.dropped < 0.05
    assert found.stretches == ()


def test_swapped_strands_are_seen_though_no_point_is_far() -> None:
    # down and up again 0.2 apart, and the same with both strands crossed: sets 0.2 apart, orders 100 apart
    hair = polyline((0.0, 0.0), (100.0, 0.0), (100.0, 0.2), (0.0, 0.2), (0.0, 50.0))
    back = polyline((0.0, 0.0), (100.0, 0.0), (0.0, 0.2), (100.0, 0.2), (0.0, 0.1), (0.0, 50.0))
    assert hausdorff(hair, back, 1e-6).certified < 0.21
    found = travel_order(hair, back, 0.5)
    assert found.certified >= 40.0
    assert found.dropped > 0.0
    low, high = found.stretches[0]
    assert 0.0 <= low <= high <= hair.length() + 1e-9
    same = travel_order(hair, hair.moved(np.array([0.03, 0.04])), 0.5)
    assert same.certified == pytest.approx(0.05, abs=1e-9)
    assert same.at_least == 0.0
    assert same.stretches == ()


def test_spokes_visited_in_another_order_are_proven_broken() -> None:
    east_first = polyline((0.0, 0.0), (40.0, 0.0), (0.0, 0.0), (0.0, 40.0), (0.0, 0.0))
    north_first = polyline((0.0, 0.0), (0.0, 40.0), (0.0, 0.0), (40.0, 0.0), (0.0, 0.0))
    assert hausdorff(east_first, north_first, 1e-6).certified <= 1e-6
    found = travel_order(east_first, north_first, 0.5)
    # a traveller at (40, 0) has a partner before that of (0, 40): within 40 of both there is only the hub
    assert 39.5 <= found.at_least <= 40.0 <= found.certified
    assert max(high - low for low, high in found.stretches) > 10.0


def test_a_crossed_neck_of_a_closed_dumbbell_is_seen() -> None:
    angle = np.linspace(0.1, 2.0 * np.pi - 0.1, 60)
    right = np.stack([40.0 - 30.0 * np.cos(angle), -30.0 * np.sin(angle)], axis=1)
    left = -right
    plain, crossed = Polyline(np.vstack([right, left]), True), Polyline(np.vstack([right, left[::-1]]), True)
    assert travel_order(plain, plain.reversed(), 0.1).certified <= 1e-9
    assert travel_order(plain, crossed, 0.1).certified > 30.0


def test_stretches_of_a_closed_curve_are_told_along_the_curve_as_given() -> None:
    square = polyline((0.0, 0.0), (20.0, 0.0), (20.0, 20.0), (0.0, 20.0), closed=True)
    bumped = polyline(
        (0.0, 0.0), (20.0, 0.0), (20.0, 20.0), (11.0, 20.0), (10.0, 25.0), (9.0, 20.0), (0.0, 20.0), closed=True
    )
    for start in range(4):
        turned = Polyline(np.roll(square.points, -start, axis=0), True)
        found = travel_order(turned, bumped, 1.0)
        assert found.certified == pytest.approx(5.0, abs=1e-9)
        assert len(found.stretches) == 1
        low, high = found.stretches[0]
        assert low <= (50.0 - 20.0 * start) % 80.0 <= high <= low + 20.0


def test_circles_and_three_dimensions() -> None:
    found = travel_order(full_circle(np.zeros(2), 10.0), full_circle(np.zeros(2), 10.5), 0.6)
    assert 0.5 <= found.certified <= 0.52
    t = np.linspace(0.0, 6.0, 200)
    helix = np.stack([np.cos(t), np.sin(t), 0.1 * t], axis=1)
    found = travel_order(Polyline(helix), Polyline(helix[::-1]).moved(np.array([0.0, 0.0, 0.05])), 0.1)
    assert 0.04 <= found.certified <= 0.05 + 1e-9
    tilted = Polyline(helix[:, [2, 0, 1]], True)
    assert travel_order(tilted, tilted.reversed(), 0.1).certified <= 1e-9


def test_unusable_input_is_refused() -> None:
    line = polyline((0.0, 0.0), (1.0, 0.0), (1.0, 1.0))
    with pytest.raises(GeometryError, match="open or two closed"):
        travel_order(line, Polyline(line.points, True), 0.1)
    with pytest.raises(GeometryError, match="tolerance"):
        travel_order(line, line, 0.0)
