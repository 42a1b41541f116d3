"""Dense points: the limits by an independent measure, the number against a greedy walk, lengths, headings and radii."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from geometry.bspline import Spline, join
from geometry.dense import dense_points
from geometry.errors import GeometryError
from geometry.interpolate import spline_through


def ellipse(d=2):
    t = np.linspace(0.0, 2.0 * np.pi, 60, endpoint=False)
    points = np.stack([100.0 * np.cos(t), 60.0 * np.sin(t), 10.0 * np.sin(3.0 * t)], axis=1)
    return spline_through(points[:, :d], ends="periodic")


def spiral():
    t = np.linspace(0.0, 12.0, 200)
    return spline_through(np.exp(0.35 * t)[:, None] * np.stack([np.cos(t), np.sin(t)], axis=1))


def wave(degree=3):
    x = np.linspace(0.0, 30.0, 80)
    return spline_through(np.stack([x, 3.0 * np.sin(x)], axis=1), degree)


def cornered():
    half = spline_through(np.array([[0.0, 0.0], [4.0, 3.0], [9.0, 2.0], [12.0, 0.0]]))
    back = spline_through(np.array([[12.0, 0.0], [8.0, -3.0], [2.0, -2.0], [0.0, 0.0]]))
    return join([half, back], closed=True)


def wild(seed, d):
    rng = np.random.default_rng(seed)
    return spline_through(rng.normal(size=(9, d)) * 10.0)


SHAPES = {
    "ellipse": ellipse(),
    "ellipse in space": ellipse(3),
    "spiral": spiral(),
    "wave": wave(),
    "wave of degree 2": wave(2),
    "corners": cornered(),
    "wild": wild(1, 2),
    "wild in space": wild(2, 3),
}
LIMITS = {
    "fine": (1e-3, None, None),
    "coarse": (0.2, None, None),
    "step": (None, 0.7, None),
    "turn": (None, None, 0.1),
    "all": (1e-2, 1.0, 0.15),
}


def to_segment(points, a, b):
    """Distances of points (..., d) to segments by the textbook projection."""
    chord = b - a
    share = np.clip(((points - a) * chord).sum(-1) / np.maximum((chord * chord).sum(-1), 1e-300), 0.0, 1.0)
    return np.linalg.norm(points - a - share[..., None] * chord, axis=-1)


def measured(spline, dense, samples=400):
    """Largest sampled chord error and step, and the turn at every inner vertex."""
    u, p = dense.parameter, dense.points
    at = u[:-1, None] + np.diff(u)[:, None] * np.linspace(0.0, 1.0, samples)
    error = to_segment(spline.evaluate(at), p[:-1, None], p[1:, None]).max()
    edges = np.diff(p, axis=0)
    length = np.linalg.norm(edges, axis=1)
    cosine = (edges[1:] * edges[:-1]).sum(axis=1) / (length[1:] * length[:-1])
    return error, length.max(), np.arccos(np.clip(cosine, -1.0, 1.0))


def greedy_count(spline, chord_error, max_step, per_chord=2000):
    """Chords of a walk that takes the farthest sample each time: the least number where limits are monotone."""
    u = np.linspace(spline.knots[0], spline.knots[-1], 60_000)
    u = np.unique(np.concatenate([u, spline.breaks]))
    p = spline.evaluate(u)
    stops = np.searchsorted(u, np.append(spline.breaks[spline.corner_breaks], spline.knots[-1]))
    count = at = 0

    def fits(first, last):
        if max_step is not None and np.linalg.norm(p[last] - p[first]) > max_step:
            return False
        inner = p[first : last + 1 : max(1, (last - first) // 300)]
        return chord_error is None or to_segment(inner, p[first], p[last]).max() <= chord_error

    for stop in stops:
        while at < stop:
            good, step = at + 1, 64
            while good < stop and fits(at, min(at + step, stop)):
                good, step = min(at + step, stop), 2 * step
            bad = min(at + step, stop + 1)
            while bad - good > 1:
                middle = (good + bad) // 2
                good, bad = (middle, bad) if fits(at, middle) else (good, middle)
            at, count = good, count + 1
    return count


@pytest.mark.parametrize("limits", LIMITS)
@pytest.mark.parametrize("shape", SHAPES)
def test_limits_are_kept(shape, limits):
    spline, (chord_error, max_step, max_turn) = SHAPES[shape], LIMITS[limits]
    dense = dense_points(spline, chord_error, max_step, max_turn)
    error, step, turns = measured(spline, dense)
    assert chord_error is None or error <= chord_error
    assert max_step is None or step <= max_step
    if max_turn is not None:
        corner = np.isin(dense.parameter[1:-1], spline.breaks[spline.corner_breaks])
        assert turns[~corner].max() <= max_turn * (1.0 + 1e-7)  # the arc cosine rounds
    np.testing.assert_allclose(dense.points, spline.evaluate(dense.parameter), rtol=0.0, atol=1e-12)


@pytest.mark.parametrize("limits", ["fine", "coarse", "step"])
@pytest.mark.parametrize("shape", SHAPES)
def test_number_is_near_the_least(shape, limits):
    spline, (chord_error, max_step, _) = SHAPES[shape], LIMITS[limits]
    count = len(dense_points(spline, chord_error, max_step).points) - 1
    assert count <= 1.05 * greedy_count(spline, chord_error, max_step) + 2


@pytest.mark.parametrize("shape", ["ellipse", "spiral", "wave", "wild"])
def test_number_for_a_turn_is_near_the_whole_turn_over_it(shape):
    spline = SHAPES[shape]
    fine = spline.evaluate(np.linspace(spline.knots[0], spline.knots[-1], 200_001))
    slope = np.unwrap(np.arctan2(*np.diff(fine, axis=0).T[::-1]))
    whole = np.abs(np.diff(slope)).sum()
    assert len(dense_points(spline, max_turn=0.05).points) - 1 <= 1.05 * whole / 0.05 + 2


def test_circle_has_its_length_headings_and_radii():
    t = np.linspace(0.0, 2.0 * np.pi, 400, endpoint=False)
    dense = dense_points(spline_through(5.0 * np.stack([np.cos(t), np.sin(t)], axis=1), ends="periodic"), max_step=0.1)
    angle = dense.along / 5.0
    assert dense.closed
    assert dense.along[-1] == pytest.approx(10.0 * np.pi, rel=1e-8)
    np.testing.assert_allclose(dense.points[:, 0], 5.0 * np.cos(angle), atol=1e-6)
    np.testing.assert_allclose(np.unwrap(dense.heading), angle + 0.5 * np.pi, atol=1e-6)
    np.testing.assert_allclose(dense.radius, 5.0, rtol=1e-3)
    np.testing.assert_array_equal(dense.points[0], dense.points[-1])
    assert dense.polyline().closed
    assert len(dense.polyline().points) == len(dense.points) - 1
    right = dense_points(ellipse().reversed(), max_step=1.0)
    assert (right.radius < 0.0).all()


def test_a_straight_line_has_no_radius():
    dense = dense_points(spline_through(np.array([[0.0, 0.0], [1.0, 1.0], [2.5, 2.5], [7.0, 7.0]])), max_step=1.0)
    assert np.isinf(dense.radius).all()
    np.testing.assert_allclose(dense.heading, 0.25 * np.pi)
    assert len(dense.points) == 11
    assert len(dense_points(spline_through(np.array([[0.0, 0.0], [9.0, 3.0]])), 1e-6).points) == 2


def test_corners_and_kept_parameters_are_vertices():
    spline = cornered()
    keep = spline.knots[0] + np.array([0.11, 0.3, 0.77]) * np.ptp(spline.knots)
    dense = dense_points(spline, 1e-3, keep=keep)
    assert np.isin(np.concatenate([keep, spline.breaks[spline.corner_breaks]]), dense.parameter).all()
    assert len(dense.points) <= len(dense_points(spline, 1e-3).points) + 3
    np.testing.assert_array_equal(dense.points[np.searchsorted(dense.parameter, spline.knots[-1])], spline.control[-1])


def test_degree_1_is_cut_by_the_step_alone():
    spline = spline_through(np.array([[0.0, 0.0], [3.0, 0.0], [3.0, 0.5]]), 1)
    dense = dense_points(spline, 1e-9, 1.0, 0.01)
    expected = [[0.0, 0.0], [0.75, 0.0], [1.5, 0.0], [2.25, 0.0], [3.0, 0.0], [3.0, 0.5]]
    np.testing.assert_allclose(dense.points, expected)


def test_the_seam_of_a_smooth_closed_spline_keeps_the_turn():
    dense = dense_points(ellipse(), max_turn=0.2)
    edges = np.diff(dense.points, axis=0)
    turn = np.angle(complex(*edges[0]) / complex(*edges[-1]))
    assert 0.0 < turn <= 0.2


def test_far_from_the_origin_limits_are_kept():
    away = np.array([4.0e6, -7.0e6])
    dense = dense_points(wave().moved(away), 1e-3)
    near = dense_points(wave(), 1e-3)
    assert abs(len(dense.points) - len(near.points)) <= 1
    assert measured(wave(), near)[0] <= 1e-3
    assert measured(wave().moved(away), dense)[0] <= 1e-3 + 4e-9


@pytest.mark.parametrize("limits", [(None, None, None), (0.0, None, None), (None, -1.0, None), (None, None, np.nan)])
def test_unusable_limits_are_refused(limits):
    with pytest.raises(GeometryError, match=r"positive|need a chord error"):
        dense_points(wave(), *limits)


def test_too_many_points_are_refused():
    with pytest.raises(GeometryError, match="state larger limits"):
        dense_points(wave(), max_step=1e-9)


def test_a_cusp_is_refused_for_a_turn_and_taken_for_a_chord_error():
    cusp = Spline(np.repeat([0.0, 1.0], 4), np.array([[0.0, 0.0], [1.0, 1.0], [0.0, 1.0], [1.0, 0.0]]), 3)
    with pytest.raises(GeometryError, match="turns on the spot"):
        dense_points(cusp, max_turn=0.1)
    assert measured(cusp, dense_points(cusp, 1e-3))[0] <= 1e-3


def test_a_closed_curve_keeps_three_vertices_whatever_is_allowed():
    assert len(dense_points(ellipse(), 1e6).polyline().points) == 3
    assert len(dense_points(cornered(), 1e6).polyline().points) >= 3


def test_a_parameter_beyond_the_ends_is_refused():
    with pytest.raises(GeometryError, match="beyond the ends"):
        dense_points(wave(), 0.1, keep=np.array([-1.0]))


@settings(max_examples=60, deadline=None)
@given(st.integers(0, 10**6), st.sampled_from([2, 3]), st.sampled_from([2, 3]), st.floats(1e-3, 10.0))
def test_a_chord_error_holds_on_any_curve(seed, d, degree, chord_error):
    rng = np.random.default_rng(seed)
    spline = spline_through(rng.normal(size=(int(rng.integers(4, 12)), d)) * 10.0, degree)
    dense = dense_points(spline, chord_error)
    assert measured(spline, dense, 120)[0] <= chord_error
