import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from geometry.arcs import ArcChain, arc_part_counts, bulge_points, full_circle
from geometry.polyline import polygon_area


def chain(seed, closed, n=9):
    rng = np.random.default_rng(seed)
    bulges = rng.uniform(-1.8, 1.8, n if closed else n - 1) * (rng.random(n if closed else n - 1) < 0.8)
    return ArcChain(rng.normal(size=(n, 2)) * 10.0, bulges, closed)


chains = st.builds(chain, st.integers(0, 10_000), st.booleans())


def test_a_circle():
    circle = full_circle(np.array([3.0, -2.0]), 5.0)
    assert circle.length() == pytest.approx(10.0 * np.pi, rel=1e-15)
    assert circle.area() == pytest.approx(25.0 * np.pi, rel=1e-14)
    assert circle.reversed().area() == pytest.approx(-25.0 * np.pi, rel=1e-14)
    np.testing.assert_allclose(circle.bounds(), [[-2.0, -7.0], [8.0, 3.0]], atol=1e-14)
    centre, radius = circle.circles()
    np.testing.assert_allclose(centre, [[3.0, -2.0]] * 2, atol=1e-14)
    np.testing.assert_allclose(radius, 5.0)
    np.testing.assert_allclose(circle.curvatures(), 0.2)


def test_headings_and_sweep_of_a_right_turn():
    arc = ArcChain(np.array([[0.0, 0.0], [1.0, 1.0]]), np.array([-np.tan(np.pi / 8.0)]))  # a quarter of a circle
    start, end = arc.headings()
    assert start[0] == pytest.approx(np.pi / 2.0)
    assert end[0] == pytest.approx(0.0, abs=1e-15)
    assert arc.sweeps()[0] == pytest.approx(-np.pi / 2.0)
    np.testing.assert_allclose(arc.circles()[0], [[1.0, 0.0]], atol=1e-15)


def test_lines_have_no_circle():
    line = ArcChain(np.array([[0.0, 0.0], [3.0, 4.0]]), np.zeros(1))
    centre, radius = line.circles()
    assert np.isnan(centre).all()
    assert radius[0] == np.inf
    assert (line.length(), line.curvatures()[0], line.area(), line.dimension) == (5.0, 0.0, 0.0, 2)
    np.testing.assert_array_equal(line.flatten(1e-6).points, line.points)


@given(chains)
def test_flattened_vertices_lie_on_the_circles_and_sagittas_within_the_bound(arcs):
    delta = 0.01
    centre, radius = arcs.circles()
    flat = arcs.flatten(delta).path()
    parts = arc_part_counts(arcs.chord_lengths(), arcs.bulges, delta)
    piece = np.repeat(np.arange(len(parts)), parts)
    bent = arcs.bulges[piece] != 0.0
    away = np.linalg.norm(flat[:-1] - centre[piece], axis=1)[bent]
    np.testing.assert_allclose(away, radius[piece][bent], rtol=1e-9)
    middle = 0.5 * (flat[:-1] + flat[1:])[bent]
    sagitta = radius[piece][bent] - np.linalg.norm(middle - centre[piece][bent], axis=1)
    assert sagitta.max(initial=0.0) <= delta * (1.0 + 1e-6)
    ends = np.concatenate([[0], np.cumsum(parts)])
    np.testing.assert_allclose(flat[ends], arcs.path(), atol=1e-12)


@given(chains)
def test_length_and_area_are_the_limits_of_the_flattened_ones(arcs):
    flat = arcs.flatten(1e-5)
    assert flat.length() == pytest.approx(arcs.length(), rel=1e-4)
    assert flat.length() <= arcs.length() * (1.0 + 1e-12)
    assert flat.area() == pytest.approx(arcs.area(), abs=2e-5 * arcs.length())


@given(chains)
def test_bounds_hold_the_curve_tightly(arcs):
    low, high = arcs.bounds()
    flat = arcs.flatten(1e-4).points
    assert (flat >= low - 1e-9).all()
    assert (flat <= high + 1e-9).all()
    np.testing.assert_allclose([flat.min(axis=0), flat.max(axis=0)], [low, high], atol=2e-4)


@given(chains, st.floats(0.0, 6.3), st.floats(0.01, 100.0))
def test_placing_and_mirroring(arcs, angle, factor):
    c, s = np.cos(angle), np.sin(angle)
    turned = ArcChain(factor * arcs.points @ np.array([[c, s], [-s, c]]), arcs.bulges, arcs.closed)
    assert turned.length() == pytest.approx(factor * arcs.length(), rel=1e-9)
    assert turned.area() == pytest.approx(factor**2 * arcs.area(), abs=1e-9 * (factor * arcs.length()) ** 2)
    np.testing.assert_allclose(turned.curvatures() * factor, arcs.curvatures(), rtol=1e-9, atol=1e-12)
    mirrored = ArcChain(arcs.points * np.array([1.0, -1.0]), -arcs.bulges, arcs.closed)
    assert mirrored.area() == pytest.approx(-arcs.area(), abs=1e-9 * arcs.length() ** 2)


@given(chains)
def test_reversing(arcs):
    back = arcs.reversed()
    assert back.length() == pytest.approx(arcs.length(), rel=1e-12)
    assert back.area() == pytest.approx(-arcs.area(), abs=1e-9 * arcs.length() ** 2)
    np.testing.assert_allclose(back.bounds(), arcs.bounds(), atol=1e-9)
    again = back.reversed()
    np.testing.assert_array_equal(again.points, arcs.points)
    np.testing.assert_array_equal(again.bulges, arcs.bulges)
    start, end = arcs.headings()
    other_start, _ = back.headings()
    # travelled backwards a piece starts in the direction opposite to its end
    np.testing.assert_allclose(np.cos(other_start - end[::-1]), -1.0, atol=1e-12)
    assert len(start) == len(end)


@given(st.floats(1e-12, 1e-2), st.booleans())
def test_flat_arcs_are_without_a_jump_to_lines(bulge, left):
    sign = 1.0 if left else -1.0
    points = np.array([[0.0, 0.0], [1.0, 0.0], [0.5, 1.0]])
    arcs = ArcChain(points, np.array([sign * bulge, 0.0, 0.0]), True)
    # a segment of height bulge / 2 over a chord of 1 has an area near 2/3 of its box; its arc is longer by 8/3 h^2
    assert arcs.area() - polygon_area(points) == pytest.approx(sign * bulge / 3.0, rel=1e-3, abs=1e-15)
    grown = arcs.length() - ArcChain(points, np.zeros(3), True).length()
    assert grown == pytest.approx(2.0 / 3.0 * bulge**2, rel=1e-3, abs=1e-15)
    middle = bulge_points(points[:1], points[1:2], np.array([sign * bulge]), np.array([0.5]))
    np.testing.assert_allclose(middle, [[0.5, -0.5 * sign * bulge]], rtol=0.0, atol=1e-15)
