import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from geometry.bspline import Spline, bezier_chord_error, bezier_evaluate, join
from geometry.errors import GeometryError


def spline(seed, degree=3, d=2, spans=7, corner=True):
    """Random clamped spline with uneven knots, one of them of full multiplicity when asked."""
    rng = np.random.default_rng(seed)
    inner = np.cumsum(rng.uniform(0.1, 2.0, spans))
    inside = np.sort(np.concatenate([inner[:-1], np.repeat(inner[spans // 2], degree - 1)])) if corner else inner[:-1]
    knots = np.concatenate([[0.0] * (degree + 1), inside, [inner[-1]] * (degree + 1)])
    return Spline(knots, rng.normal(size=(len(knots) - degree - 1, d)) * 10.0, degree)


splines = st.builds(spline, st.integers(0, 10_000), st.sampled_from([1, 2, 3]), st.sampled_from([2, 3]))
planar = st.builds(spline, st.integers(0, 10_000), st.sampled_from([1, 2, 3]), st.just(2))


def test_numbers_that_do_not_fit_are_refused():
    with pytest.raises(GeometryError, match="8 knots do not fit 5 control points of degree 3"):
        Spline(np.zeros(8), np.zeros((5, 2)), 3)


def test_spans_breaks_and_corners():
    curve = Spline(np.array([0.0, 0, 0, 1, 2, 2, 3, 3, 3]), np.zeros((6, 2)), 2)
    np.testing.assert_array_equal(curve.breaks, [0, 1, 2, 3])
    np.testing.assert_array_equal(curve.spans, [2, 3, 5])
    np.testing.assert_array_equal(curve.corner_breaks, [2])
    line = Spline(np.array([0.0, 0, 1, 2, 2]), np.zeros((3, 2)), 1)
    np.testing.assert_array_equal(line.corner_breaks, [1])
    piece, t = curve.locate(np.array([0.0, 1.0, 2.5, 3.0]))
    np.testing.assert_array_equal(piece, [0, 1, 2, 2])
    np.testing.assert_allclose(t, [0.0, 0.0, 0.5, 1.0])


@given(splines)
def test_the_curve_runs_from_first_to_last_control_point(curve):
    ends = curve.evaluate(curve.knots[[0, -1]])
    np.testing.assert_allclose(ends, curve.control[[0, -1]], atol=1e-9)
    assert curve.evaluate(np.zeros((4, 5))).shape == (4, 5, curve.dimension)


@given(splines)
def test_derivatives_agree_with_differences_of_the_curve(curve):
    low, high = curve.breaks[:-1], curve.breaks[1:]
    u, step = 0.5 * (low + high), 1e-4 * (high - low)
    for order in range(1, curve.degree + 2):
        before, after = curve.evaluate(u - step, order - 1), curve.evaluate(u + step, order - 1)
        slope = (after - before) / (2.0 * step)[:, None]
        size = np.abs(curve.evaluate(u, order - 1)).max(axis=1, keepdims=True) / (high - low)[:, None]
        assert (np.abs(slope - curve.evaluate(u, order)) <= 1e-6 * (np.abs(slope).max() + size + 1.0)).all()


@given(splines)
def test_bezier_pieces_meet(curve):
    np.testing.assert_allclose(curve.beziers[1:, 0], curve.beziers[:-1, -1], atol=1e-9)


@given(splines, st.sampled_from([1.0, 0.1, 1e-3]))
def test_flattening_keeps_its_bound(curve, delta):
    flat = curve.flatten(delta)
    b = curve.beziers
    parts = np.maximum(1, np.ceil(np.sqrt(bezier_chord_error(b) / delta))).astype(int)
    assert len(flat.points) == parts.sum() + 1
    begin = 0
    for piece, count in zip(b, parts, strict=True):
        chord = flat.points[begin : begin + count + 1]
        t = np.linspace(0.0, 1.0, 8 * count + 1)
        on_curve = bezier_evaluate(piece[None], t, 0)
        f = (t * count)[:, None]
        i = np.minimum(f.astype(int), count - 1)
        on_chord = chord[i[:, 0]] + (f - i) * (chord[i[:, 0] + 1] - chord[i[:, 0]])
        assert np.linalg.norm(on_curve - on_chord, axis=1).max() <= delta * (1.0 + 1e-9)
        begin += count


@given(splines)
def test_length_and_bounds_against_a_fine_polyline(curve):
    flat = curve.flatten(1e-5)
    assert curve.length() == pytest.approx(flat.length(), rel=1e-5)
    low, high = curve.bounds()
    np.testing.assert_allclose([flat.points.min(axis=0), flat.points.max(axis=0)], [low, high], atol=1e-4)
    assert (flat.points >= low - 1e-9).all()
    assert (flat.points <= high + 1e-9).all()


@given(planar)
def test_area_of_a_closed_spline(curve):
    control = curve.control.copy()
    control[-1] = control[0]
    closed = Spline(curve.knots, control, curve.degree, True)
    flat = closed.flatten(1e-6)
    assert closed.area() == pytest.approx(flat.area(), abs=2e-6 * flat.length() + 1e-9)
    assert closed.reversed().area() == pytest.approx(-closed.area(), abs=1e-9 * flat.length() ** 2)
    assert curve.area() == 0.0


@given(splines)
def test_reversing_and_moving(curve):
    u = np.linspace(curve.knots[0], curve.knots[-1], 41)
    back = curve.reversed()
    np.testing.assert_allclose(back.evaluate(u[0] + u[-1] - u), curve.evaluate(u), atol=1e-9)
    shift = np.arange(1.0, curve.dimension + 1.0)
    np.testing.assert_allclose(curve.moved(shift).evaluate(u), curve.evaluate(u) + shift, atol=1e-9)


@given(st.integers(0, 10_000), st.sampled_from([1, 2, 3]))
def test_joined_pieces_are_the_pieces(seed, degree):
    first, second, third = (spline(seed + k, degree, corner=False) for k in range(3))
    second, third = second.moved(first.control[-1] - second.control[0]), third
    third = third.moved(second.control[-1] - third.control[0])
    whole = join([first, second, third], closed=False)
    assert len(whole.spans) == 21
    if degree > 1:
        np.testing.assert_array_equal(whole.corner_breaks, [7, 14])
    begin = 0.0
    for piece in (first, second, third):
        inside = np.linspace(piece.knots[0], piece.knots[-1], 50)[1:-1]
        for order in range(degree + 1):
            found = whole.evaluate(inside - piece.knots[0] + begin, order)
            scale = max(1.0, np.abs(found).max())
            np.testing.assert_allclose(found, piece.evaluate(inside, order), rtol=0.0, atol=1e-7 * scale)
        begin += piece.knots[-1] - piece.knots[0]


def test_length_and_area_of_known_curves():
    parabola = Spline(np.array([0.0, 0, 0, 1, 1, 1]), np.array([[0.0, 0.0], [0.5, 0.0], [1.0, 1.0]]), 2)  # y = x^2
    assert parabola.length() == pytest.approx(np.sqrt(5.0) / 2.0 + np.arcsinh(2.0) / 4.0, rel=1e-9)
    # a cusp: (t^2, t^3) from -1 to 1 has the length 2 (13^1.5 - 8) / 27
    cusp = np.array([[1.0, -1.0], [-1.0 / 3.0, 1.0], [-1.0 / 3.0, -1.0], [1.0, 1.0]])
    cubic = Spline(np.array([-1.0] * 4 + [1.0] * 4), cusp, 3)
    assert cubic.length() == pytest.approx(2.0 * (13.0**1.5 - 8.0) / 27.0, rel=1e-10)
    knots = np.array([0.0, 0, 0, 1, 1, 2, 2, 2])
    control = np.array([[0.0, 0.0], [0.5, 0.0], [1.0, 1.0], [0.5, 0.5], [0.0, 0.0]])  # ... and back along y = x
    assert Spline(knots, control, 2, True).area() == pytest.approx(0.5 - 1.0 / 3.0, rel=1e-14)
