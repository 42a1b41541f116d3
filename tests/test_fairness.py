import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from geometry.arcs import ArcChain, full_circle
from geometry.bspline import Spline, join
from geometry.errors import GeometryError
from geometry.fairness import curvature_comb, fairness
from geometry.polyline import Polyline
from geometry.turning import trace_of


def hermite_spline(u, points, slopes, closed=False):
    """Cubic spline of Bezier pieces through points with given derivatives."""
    h = np.diff(u)[:, None]
    inner = np.stack([points[:-1] + h * slopes[:-1] / 3, points[1:] - h * slopes[1:] / 3, points[1:]], axis=1)
    knots = np.concatenate([u[:1], np.repeat(u, 3), u[-1:]])
    return Spline(knots, np.vstack([points[:1], inner.reshape(-1, points.shape[1])]), 3, closed, closed)


def ellipse(n, a=100.0, b=60.0):
    u = np.linspace(0.0, 2.0 * np.pi, n + 1)
    points = np.stack([a * np.cos(u), b * np.sin(u)], axis=1)
    points[-1] = points[0]
    return hermite_spline(u, points, np.stack([-a * np.sin(u), b * np.cos(u)], axis=1), True)


def sine(n, waves=3.0, height=5.0, length=100.0):
    x = np.linspace(0.0, length, n + 1)
    w = 2.0 * np.pi * waves / length
    points = np.stack([x, height * np.sin(w * x)], axis=1)
    return hermite_spline(x, points, np.stack([np.ones_like(x), height * w * np.cos(w * x)], axis=1))


@pytest.mark.parametrize("n", [24, 60, 500])
def test_an_ellipse_has_four_vertices_whatever_the_number_of_spans(n):
    # curvature of an ellipse: largest a / b^2 at the long ends; energy by the integral over the angle
    v = (np.arange(4000) + 0.5) * 2.0 * np.pi / 4000  # midpoint rule, exponentially accurate on a period
    energy = ((6000.0**2) / ((100.0 * np.sin(v)) ** 2 + (60.0 * np.cos(v)) ** 2) ** 2.5).mean() * 2.0 * np.pi
    found = fairness(ellipse(n), scale=0.1)
    assert (found.inflections, found.curvature_extrema, found.corners) == (0, 4, 0)
    assert found.least_radius == pytest.approx(36.0, rel=4.0 / n**2)
    assert found.strain_energy == pytest.approx(energy, rel=20.0 / n**3)


@pytest.mark.parametrize("delta", [1.0, 0.1, 0.01, 0.001])
def test_a_polyline_of_a_smooth_curve_is_judged_like_the_curve(delta):
    for curve, wanted in ((ellipse(100), (0, 4)), (sine(90), (5, 6))):
        found = fairness(curve.flatten(delta), scale=0.05)
        assert (found.inflections, found.curvature_extrema, found.corners) == (*wanted, 0)
        assert found.least_radius == pytest.approx(fairness(curve, 0.05).least_radius, rel=0.05)


def test_a_sine_has_an_inflection_at_every_inner_zero():
    found = fairness(sine(64), scale=0.05)
    assert (found.inflections, found.curvature_extrema) == (5, 6)
    assert found.least_radius == pytest.approx(1.0 / (5.0 * (0.06 * np.pi) ** 2), rel=1e-2)


def test_lissajous_counts_agree_with_a_dense_evaluation_of_the_formula():
    def derivatives(u):
        first = np.stack([200.0 * np.cos(2 * u), 180.0 * np.cos(3 * u + 0.5)], axis=1)
        second = np.stack([-400.0 * np.sin(2 * u), -540.0 * np.sin(3 * u + 0.5)], axis=1)
        return first, second

    u = np.linspace(0.0, 2.0 * np.pi, 100_001)[:-1]
    first, second = derivatives(u)
    k = (first[:, 0] * second[:, 1] - first[:, 1] * second[:, 0]) / np.linalg.norm(first, axis=1) ** 3
    signs = np.sign(k)
    v = np.linspace(0.0, 2.0 * np.pi, 301)
    points = np.stack([100.0 * np.sin(2 * v), 60.0 * np.sin(3 * v + 0.5)], axis=1)
    points[-1] = points[0]
    found = fairness(hermite_spline(v, points, derivatives(v)[0], True), scale=0.1)
    assert found.inflections == np.sum(signs != np.roll(signs, 1)) > 0
    assert found.least_radius == pytest.approx(1.0 / np.abs(k).max(), rel=1e-3)


def test_a_circle_is_without_extrema():
    found = fairness(full_circle(np.array([500_000.0, 5_000_000.0]), 10.0), scale=0.1)
    assert (found.inflections, found.curvature_extrema, found.corners) == (0, 0, 0)
    assert found.least_radius == pytest.approx(10.0, rel=1e-9)
    assert found.strain_energy == pytest.approx(2.0 * np.pi / 10.0, rel=1e-9)


def slot():
    b = np.tan(np.pi / 8.0)
    points = np.array([[10, 0], [90, 0], [100, 10], [100, 40], [90, 50], [10, 50], [0, 40], [0, 10.0]])
    return ArcChain(points, np.array([0, b] * 4, dtype=float), True)


def test_a_rounded_rectangle_has_a_maximum_a_corner_and_a_minimum_a_side():
    for curve in (slot(), slot().reversed(), slot().flatten(0.01)):
        found = fairness(curve, scale=0.1)
        assert (found.inflections, found.curvature_extrema, found.corners) == (0, 8, 0)
        assert found.least_radius == pytest.approx(10.0, rel=1e-2)


def test_more_joints_on_the_same_arcs_change_nothing():
    b = np.tan(np.pi / 16.0)
    once = ArcChain(np.array([[0.0, 0.0], [10.0, 10.0], [20.0, 20.0]]), np.array([1.0, -1.0]) * np.tan(np.pi / 8))
    angle = np.array([0.0, np.pi / 4])
    left = np.stack([10.0 * np.sin(angle), 10.0 - 10.0 * np.cos(angle)], axis=1)
    right = np.stack([20.0 - 10.0 * np.cos(angle), 10.0 + 10.0 * np.sin(angle)], axis=1)
    more = ArcChain(np.vstack([left, right, [[20.0, 20.0]]]), np.array([b, b, -b, -b]))
    first, second = fairness(once, 0.1), fairness(more, 0.1)
    assert (first.inflections, first.curvature_extrema) == (second.inflections, second.curvature_extrema) == (1, 0)
    assert second.strain_energy == pytest.approx(first.strain_energy, rel=1e-12)


def test_corners_are_counted_and_left_out():
    rectangle = np.array([[0.0, 0.0], [100.0, 0.0], [100.0, 50.0], [0.0, 50.0]])
    for curve in (Polyline(rectangle, True), ArcChain(rectangle, np.zeros(4), True)):
        assert fairness(curve, 0.1).record() == {
            "inflections": 0, "curvature_extrema": 0, "least_radius": None, "strain_energy": 0.0, "corners": 4,
        }  # fmt: skip
    two = join([sine(40), Spline(np.array([0.0, 0, 0, 0, 1, 1, 1, 1]),
                                 np.array([[100.0, 0.0], [100, -10], [100, -20], [100, -30]]), 3)], False)  # fmt: skip
    found = fairness(two, 0.05)
    assert (found.corners, found.inflections, found.curvature_extrema) == (1, 5, 6)


def test_named_corners_of_a_polyline_are_kept_out():
    jagged = np.array([[0.0, 0.0], [1.0, 0.1], [2.0, 0.0], [3.0, 0.1], [4.0, 0.0], [4.0, 1.0], [4.1, 2.0], [4.0, 3.0]])
    line = Polyline(jagged)
    named = fairness(line, 1.0, corners=line.alongs()[[4]])
    plain = fairness(line, 1.0, corners=np.zeros(0))
    assert (named.corners, plain.corners) == (1, 0)
    assert named.inflections == 3  # turns -, +, - before the corner, -, + behind it
    assert named.least_radius > plain.least_radius


def test_wiggles_under_the_scale_do_not_count_and_over_it_do():
    # waves 0.4 degrees steep at most and 0.01 high from crest to middle: each lobe stands 0.01 off its chord
    wave = sine(200, waves=10.0, height=0.01)
    assert fairness(wave, scale=1.0).inflections == 0
    assert fairness(wave, scale=1.0).curvature_extrema == 0
    assert fairness(wave, scale=0.15).inflections == 19
    assert fairness(wave, scale=0.0).inflections == 19


def test_an_insignificant_dent_in_an_arc_is_no_pair_of_inflections_but_a_deep_one_is():
    angle = np.linspace(0.0, np.pi, 721)
    for depth, wanted in ((0.002, 0), (0.5, 2)):
        radius = 100.0 - depth * np.exp(-(((angle - 1.5) / 0.02) ** 2))
        line = Polyline(np.stack([radius * np.cos(angle), radius * np.sin(angle)], axis=1))
        assert fairness(line, scale=1.0).inflections == wanted


def test_a_staircase_is_jagged_at_every_step():
    steps = np.repeat(np.arange(51.0), 2)
    stairs = Polyline(np.stack([steps[1:], steps[:-1]], axis=1))  # 100 segments, 99 turns left and right in turn
    assert fairness(stairs, scale=1.0).inflections == 98
    assert fairness(stairs, scale=1.0).least_radius == pytest.approx(2.0 / np.pi)  # 90 degrees over a length of 1


def test_a_straight_spline_is_straight_even_with_spans_that_begin_at_rest():
    control = np.array([[0.0, 0.0], [0.0, 0.0], [1.0, 2.0], [3.0, 6.0], [3.0, 6.0]])
    found = fairness(Spline(np.array([0.0, 0, 0, 0, 1, 2, 2, 2, 2]), control, 3), 0.1)
    assert (found.inflections, found.curvature_extrema, found.corners) == (0, 0, 0)
    assert found.least_radius == np.inf
    assert found.strain_energy == pytest.approx(0.0, abs=1e-12)


def test_a_parabola_of_degree_two():
    control = np.array([[-1.0, 1.0], [0.0, -1.0], [1.0, 1.0]])  # y = x^2
    found = fairness(Spline(np.array([0.0, 0, 0, 1, 1, 1]), control, 2), 0.01)
    assert (found.inflections, found.curvature_extrema, found.corners) == (0, 1, 0)
    assert found.least_radius == pytest.approx(0.5, rel=1e-9)
    x = (np.arange(100_000) + 0.5) / 50_000 - 1.0
    assert found.strain_energy == pytest.approx((4.0 / (1.0 + 4.0 * x * x) ** 2.5).mean() * 2.0, rel=2e-3)


def test_a_spline_of_degree_one_is_all_corners():
    control = np.array([[0.0, 0.0], [1.0, 0.0], [1.0, 1.0], [3.0, 2.0]])
    found = fairness(Spline(np.array([0.0, 0, 1, 2, 3, 3]), control, 1), 0.01)
    assert (found.inflections, found.curvature_extrema, found.corners, found.least_radius) == (0, 0, 2, np.inf)


def test_a_helix_has_constant_curvature_and_no_inflections():
    u = np.linspace(0.0, 10.0, 201)
    points = np.stack([3.0 * np.cos(u), 3.0 * np.sin(u), 4.0 * u], axis=1)
    slopes = np.stack([-3.0 * np.sin(u), 3.0 * np.cos(u), np.full_like(u, 4.0)], axis=1)
    spline = hermite_spline(u, points, slopes)
    for curve in (spline, spline.flatten(1e-3)):
        found = fairness(curve, 0.01)
        assert (found.inflections, found.curvature_extrema) == (0, 0)
        assert found.least_radius == pytest.approx(25.0 / 3.0, rel=1e-2)  # (r^2 + c^2) / r


@settings(max_examples=60, deadline=None)
@given(
    seed=st.integers(0, 10_000),
    angle=st.floats(0.0, 6.3),
    factor=st.sampled_from([1e-3, 0.5, 25.4]),
    flip=st.booleans(),
)
def test_turning_scaling_mirroring_and_reversing_leave_the_measures_alone(seed, angle, factor, flip):
    rng = np.random.default_rng(seed)
    control = np.cumsum(rng.normal(size=(12, 2)) + np.array([1.0, 0.0]), axis=0)
    knots = np.concatenate([[0.0] * 3, np.arange(10.0), [9.0] * 3])
    c, s = np.cos(angle), np.sin(angle)
    turned = control @ np.array([[c, s], [-s, c]]) * factor * (np.array([1.0, -1.0]) if flip else 1.0)
    before = fairness(Spline(knots, control, 3), 0.1)
    same = Spline(knots, turned, 3)
    for curve in (same, same.reversed(), same.moved(np.array([3.0, -4.0]) * factor)):
        after = fairness(curve, 0.1 * factor)
        assert (after.inflections, after.curvature_extrema) == (before.inflections, before.curvature_extrema)
        assert after.least_radius == pytest.approx(before.least_radius * factor, rel=1e-4)
        assert after.strain_energy * factor == pytest.approx(before.strain_energy, rel=1e-6)


@settings(max_examples=40, deadline=None)
@given(seed=st.integers(0, 10_000), shift=st.integers(0, 200))
def test_where_a_closed_polyline_begins_does_not_matter(seed, shift):
    rng = np.random.default_rng(seed)
    u = np.linspace(0.0, 2.0 * np.pi, 201)[:-1]
    radius = 10.0 + sum(rng.normal() * np.cos(k * u + rng.uniform(0, 6)) for k in range(2, 6))
    points = np.stack([radius * np.cos(u), radius * np.sin(u)], axis=1)
    before = fairness(Polyline(points, True), 0.05)
    after = fairness(Polyline(np.roll(points, shift, axis=0), True), 0.05)
    assert before.inflections % 2 == 0
    assert (after.inflections, after.curvature_extrema) == (before.inflections, before.curvature_extrema)
    assert after.strain_energy == pytest.approx(before.strain_energy, rel=1e-9)


def test_total_turning_of_a_closed_curve_is_one_turn():
    triangle = Polyline(np.array([[0.0, 0.0], [9.0, 0.0], [4.0, 7.0]]), True)
    for curve in (ellipse(50), slot(), ellipse(50).flatten(0.1), triangle):
        trace = trace_of(curve, 0.01)
        missing = 0.0 if trace.cyclic else _seam_turn(trace)
        assert trace.turns.sum() + missing == pytest.approx(2.0 * np.pi, abs=1e-9)


def _seam_turn(trace):
    a, b = trace.tangents[-1], trace.tangents[0]
    return np.arctan2(a[0] * b[1] - a[1] * b[0], a @ b)


def test_comb_teeth_stand_outside_and_in_proportion():
    comb = curvature_comb(ellipse(200), height=5.0)
    lengths = np.linalg.norm(comb.tips - comb.points, axis=1)
    x, y = comb.points.T
    curvature = 6000.0 / ((100.0 * y / 60.0) ** 2 + (60.0 * x / 100.0) ** 2) ** 1.5
    np.testing.assert_allclose(lengths, 5.0 * curvature / (100.0 / 3600.0), rtol=1e-3)
    assert (np.einsum("ij,ij->i", comb.tips - comb.points, comb.points) > 0.0).all()  # away from the middle
    assert list(comb.starts) == [0]
    assert len(comb.points) <= 700


def test_comb_of_pieces_and_its_refusal_in_space():
    triangle = Polyline(np.array([[0.0, 0.0], [9.0, 0.0], [4.0, 7.0]]), True)
    comb = curvature_comb(triangle, height=1.0)
    assert len(comb.starts) == 3
    np.testing.assert_array_equal(comb.tips, comb.points)  # straight: no teeth
    with pytest.raises(GeometryError, match="planar"):
        curvature_comb(Polyline(np.array([[0.0, 0.0, 0.0], [1.0, 1.0, 1.0]])), 1.0)


@pytest.mark.parametrize("scale", [-1.0, np.nan, np.inf])
def test_a_bad_scale_is_refused(scale):
    with pytest.raises(GeometryError, match="scale"):
        fairness(slot(), scale)
