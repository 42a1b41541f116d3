import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from geometry.bspline import Spline, join
from geometry.deviation import hausdorff, within
from geometry.economy.least import least_vertices
from geometry.economy.lines import fewest_vertices
from geometry.errors import GeometryError
from geometry.polyline import Polyline
from tests.spline_shapes import SHAPES, dense, helix, made, one_way, spline_through


def straight(start, end, degree=3) -> Spline:
    control = np.linspace(start, end, degree + 1)
    return Spline(np.repeat([0.0, 1.0], degree + 1), control, degree)


def rounded_corner_outline() -> Spline:
    """A closed outline of two straight sides and a bulging one, corners between them."""
    side = np.array([[100.0, 0.0], [130.0, 40.0], [60.0, 90.0], [0.0, 80.0]])
    bulging = Spline(np.repeat([0.0, 1.0], 4), side, 3)
    return join([straight([0.0, 0.0], [100.0, 0.0]), bulging, straight([0.0, 80.0], [0.0, 0.0])], True)


def turns(line: Polyline) -> np.ndarray:
    edge = np.diff(line.path(), axis=0)
    angle = np.arctan2(edge[:, 1], edge[:, 0])
    step = np.diff(np.append(angle, angle[0])) if line.closed else np.diff(angle)
    return np.abs(np.remainder(step + np.pi, 2.0 * np.pi) - np.pi)


@pytest.mark.parametrize("name", SHAPES)
@pytest.mark.parametrize("error", [0.1, 0.01, 0.001])
def test_free_vertices_stay_near_the_least_number_and_within_the_chord_error(name: str, error: float) -> None:
    spline = made(name)
    line = fewest_vertices(spline, error)
    assert line.closed == spline.closed
    assert len(line.points) <= 1.04 * least_vertices(spline, error) + 2.0
    assert within(spline, line, error).inside


@pytest.mark.parametrize("name", SHAPES)
@pytest.mark.parametrize("error", [0.1, 0.01, 0.001])
def test_vertices_on_the_curve_stay_near_the_least_number_and_on_it(name: str, error: float) -> None:
    spline = made(name)
    line = fewest_vertices(spline, error, on_curve=True)
    assert len(line.points) <= 1.01 * least_vertices(spline, error, on_curve=True) + 2.0
    assert within(spline, line, error).inside
    assert one_way(line.points, dense(spline, 500)) <= 1e-6  # the oracle's own chords are about 1e-7 off


def test_corners_and_ends_are_vertices_and_straight_sides_one_segment() -> None:
    spline = rounded_corner_outline()
    line = fewest_vertices(spline, 0.05)
    for corner in ([0.0, 0.0], [100.0, 0.0], [0.0, 80.0]):
        assert np.abs(line.points - corner).sum(axis=1).min() <= 1e-12
    edges = line.edge_lengths()
    assert np.isclose(edges, 100.0).sum() == 1
    assert np.isclose(edges, 80.0).sum() == 1
    opened = fewest_vertices(made("clothoid"), 0.05)
    np.testing.assert_allclose(opened.points[[0, -1]], made("clothoid").control[[0, -1]], rtol=0.0, atol=1e-12)


@pytest.mark.parametrize("degree", [1, 2, 3])
def test_a_straight_spline_is_one_segment(degree: int) -> None:
    line = fewest_vertices(straight([3.0, 4.0], [50.0, -7.0], degree), 1e-3)
    np.testing.assert_allclose(line.points, [[3.0, 4.0], [50.0, -7.0]], rtol=0.0, atol=1e-13)


def test_a_polygon_of_degree_1_comes_back_vertex_for_vertex() -> None:
    corners = np.array([[0.0, 0.0], [40.0, 0.0], [40.0, 30.0], [10.0, 55.0], [0.0, 0.0]])
    knots = np.concatenate([[0.0], np.arange(5.0), [4.0]])
    line = fewest_vertices(Spline(knots, corners, 1, True), 0.1)
    np.testing.assert_allclose(line.points, corners[:-1], rtol=0.0, atol=1e-13)


@pytest.mark.parametrize("name", ["ellipse", "clothoid", "lissajous", "random"])
@pytest.mark.parametrize("on_curve", [False, True])
def test_caps_on_step_and_turn_hold_at_a_small_price(name: str, on_curve: bool) -> None:
    spline, error = made(name), 0.05
    turn, step = np.radians(4.0), 5.0
    line = fewest_vertices(spline, error, on_curve, max_step=step, max_turn=turn)
    assert line.edge_lengths().max() <= step + 1e-9
    assert turns(line).max() <= turn * (1.0 + 1e-9)
    assert within(spline, line, error).inside
    # what the caps ask for: a density never under 1 / step, k / turn, and the chord error's own
    points = spline.flatten(1e-4).points
    bend = np.abs(np.diff(np.unwrap(np.arctan2(*np.diff(points, axis=0).T[::-1]))))
    length = np.linalg.norm(np.diff(points, axis=0), axis=1)
    k = np.append(bend, bend[-1]) / length
    own = np.sqrt(k / ((8.0 if on_curve else 16.0) * error))
    asked = float((np.maximum(np.maximum(1.0 / step, k / turn), own) * length).sum())
    assert len(line.points) <= 1.12 * asked + 3.0


def test_a_turn_cap_leaves_true_corners_alone() -> None:
    line = fewest_vertices(rounded_corner_outline(), 0.05, max_turn=np.radians(5.0))
    assert (turns(line) > np.radians(5.0) * (1.0 + 1e-9)).sum() == 3


def test_a_helix_in_space_is_within_the_chord_error_with_vertices_on_it() -> None:
    t = np.linspace(0.0, 1.0, 601)
    points = helix(t)
    along = np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(points, axis=0), axis=1))])
    spline = spline_through(points, along, False)
    line = fewest_vertices(spline, 0.01)
    assert line.dimension == 3
    assert len(line.points) <= 1.06 * least_vertices(spline, 0.01, on_curve=True) + 2.0
    assert within(spline, line, 0.01).inside
    capped = fewest_vertices(spline, 0.01, max_step=1.5, max_turn=np.radians(2.0))
    assert capped.edge_lengths().max() <= 1.5
    assert within(spline, capped, 0.01).inside


def test_far_from_the_origin_the_count_is_the_same() -> None:
    spline = made("random")
    far = fewest_vertices(spline.moved(np.array([5e5, 5e6])), 0.01)
    assert abs(len(far.points) - len(fewest_vertices(spline, 0.01).points)) <= 1
    assert within(spline.moved(np.array([5e5, 5e6])), far, 0.01).inside


def test_a_loop_smaller_than_the_chord_error_keeps_an_inside() -> None:
    small = made("ellipse")
    small = Spline(small.knots, small.control * 1e-3, 3, True, True)
    line = fewest_vertices(small, 1.0)
    assert len(line.points) >= 3
    assert within(small, line, 1.0).inside


@pytest.mark.parametrize("error", [0.0, -1.0, np.nan, np.inf])
def test_a_chord_error_that_is_no_length_is_refused(error: float) -> None:
    with pytest.raises(GeometryError, match="chord error"):
        fewest_vertices(made("ellipse"), error)


def test_a_spline_without_length_is_refused() -> None:
    with pytest.raises(GeometryError, match="no length"):
        fewest_vertices(Spline(np.repeat([0.0, 1.0], 4), np.ones((4, 2)), 3), 0.1)


@st.composite
def wild_splines(draw) -> Spline:
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    degree, count = draw(st.integers(1, 3)), draw(st.integers(5, 25))
    points = rng.uniform(-50.0, 50.0, (count, 2))
    if draw(st.booleans()):
        points = np.round(points / 40.0) * 40.0  # repeated points, cusps, doubling back
    if draw(st.booleans()):
        points[-1] = points[0]
    inner = rng.uniform(0.0, 1.0, count - degree - 1)
    if draw(st.booleans()) and len(inner) >= 2 * degree:
        inner[:degree] = 0.5  # a corner
    knots = np.concatenate([np.zeros(degree + 1), np.sort(inner), np.ones(degree + 1)])
    return Spline(knots, points, degree, bool((points[0] == points[-1]).all()))


@settings(max_examples=40, deadline=None)
@given(wild_splines(), st.sampled_from([0.01, 0.3, 5.0]), st.booleans())
def test_any_spline_is_kept_within_the_chord_error(spline: Spline, error: float, on_curve: bool) -> None:
    if np.ptp(spline.control, axis=0).max() == 0.0:
        return
    line = fewest_vertices(spline, error, on_curve)
    assert hausdorff(spline, line, 0.01 * error).measured <= error * (1.0 + 1e-6)
