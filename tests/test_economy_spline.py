from functools import cache

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays

from geometry.bspline import Spline, bezier_evaluate, join
from geometry.corners import corners_by_angle
from geometry.economy.knots import fewest_knots
from geometry.economy.spline_shape import turning_points
from geometry.economy.spline_source import cut, sample, straight, turned_to_corner
from geometry.fairing import fair_outline
from geometry.fairness import fairness
from geometry.polyline import Polyline
from tests.spline_shapes import SHAPES, apart, by_length, helix, made, spline_through

# control points that were reached; fewer is fine, more is a step back
REACHED = {
    ("ellipse", 0.1): 11, ("ellipse", 0.01): 23, ("superellipse", 0.1): 19, ("superellipse", 0.01): 28,
    ("clothoid", 0.1): 10, ("clothoid", 0.01): 12, ("sine", 0.1): 22, ("sine", 0.01): 56,
    ("aerofoil", 0.1): 14, ("aerofoil", 0.01): 22, ("lissajous", 0.1): 33, ("lissajous", 0.01): 70,
    ("random", 0.1): 30, ("random", 0.01): 52, ("slot", 0.1): 24, ("slot", 0.01): 32,
}  # fmt: skip


@cache
def shortened(name: str, chord_error: float) -> Spline:
    return fewest_knots(made(name), chord_error)


def assert_simple_knots(spline: Spline) -> None:
    """Interior knots are simple, or of full multiplicity at corners; the ends are clamped."""
    p = spline.degree
    values, counts = np.unique(spline.knots, return_counts=True)
    assert counts[0] == counts[-1] == p + 1
    assert set(counts[1:-1].tolist()) <= {1, p}
    assert np.all(np.diff(values) > 0.0)


def seam_jumps(spline: Spline) -> list[float]:
    """Jump of position and derivatives below the degree across the seam, over the size of the derivative."""
    b, width = spline.beziers, np.diff(spline.breaks)
    jumps = []
    for order in range(spline.degree):
        start = bezier_evaluate(b[0], np.zeros(()), order) / width[0] ** order
        end = bezier_evaluate(b[-1], np.ones(()), order) / width[-1] ** order
        jumps.append(float(np.linalg.norm(end - start)) / max(float(np.linalg.norm(start)), 1e-3))
    return jumps


@pytest.mark.parametrize("name", SHAPES)
@pytest.mark.parametrize("chord_error", [0.1, 0.01])
def test_cubic_is_near_fair_and_short(name, chord_error):
    source = made(name)
    result = shortened(name, chord_error)
    assert apart(source, result) <= chord_error
    assert_simple_knots(result)
    assert result.closed == source.closed
    assert result.smooth_seam == source.smooth_seam
    assert len(result.control) <= REACHED[name, chord_error]
    before, after = fairness(source, 10.0 * chord_error), fairness(result, 10.0 * chord_error)
    assert after.inflections <= before.inflections


def test_curvature_extrema_stay_as_few_in_nine_cases_of_ten():
    # `fairness` counts by the range over the whole curve, the guard piece by piece at samples of its own
    kept = [
        fairness(shortened(name, e), 10.0 * e).curvature_extrema <= fairness(made(name), 10.0 * e).curvature_extrema
        for name, e in REACHED
    ]
    assert np.mean(kept) >= 0.9


@pytest.mark.parametrize("name", ["ellipse", "clothoid", "aerofoil", "lissajous"])
def test_quadratic_is_near_and_short(name):
    source = made(name, degree=2)
    result = fewest_knots(source, 0.05)
    assert result.degree == 2
    assert apart(source, result) <= 0.05
    assert_simple_knots(result)
    assert 4 * len(result.control) < len(source.control)
    assert fairness(result, 0.5).inflections <= fairness(source, 0.5).inflections


@pytest.mark.parametrize("degree", [2, 3])
@pytest.mark.parametrize("name", ["ellipse", "lissajous"])
def test_closed_curve_without_corner_keeps_a_smooth_seam(name, degree):
    result = fewest_knots(made(name, degree), 0.02)
    assert result.closed
    assert result.smooth_seam
    assert result.control[0].tolist() == result.control[-1].tolist()
    assert max(seam_jumps(result)) < 1e-9


def test_curve_in_space():
    source = spline_through(*by_length(helix), closed=False)
    result = fewest_knots(source, 0.01)
    assert result.dimension == 3
    assert apart(source, result) <= 0.01
    assert 10 * len(result.control) < len(source.control)


def outline_with_corners(degree: int = 3) -> tuple[Spline, np.ndarray]:
    """A D with a notch: two straight edges, an arc, and a wavy edge; the corner points."""
    corners = np.array([[0.0, 0.0], [80.0, 0.0], [80.0, 60.0], [0.0, 60.0]])
    bow = [0.0, 18.0, 0.0, 4.0]
    waves = [1.0, 1.0, 1.0, 2.0]
    pieces = []
    for a, b, height, count in zip(corners, np.roll(corners, -1, axis=0), bow, waves, strict=True):

        def curve(t, a=a, b=b, height=height, count=count):
            along = a + t[:, None] * (b - a)
            across = np.array([b[1] - a[1], a[0] - b[0]]) / np.linalg.norm(b - a)
            return along + (height * np.sin(count * np.pi * t))[:, None] * across

        points, along = by_length(curve)
        pieces.append(spline_through(points, along, closed=False, degree=degree))
    return join(pieces, closed=True), corners


@pytest.mark.parametrize("degree", [2, 3])
def test_corners_stay_where_they_are_and_straight_edges_become_one_span(degree):
    source, corners = outline_with_corners(degree)
    result = fewest_knots(source, 0.05)
    assert apart(source, result) <= 0.05
    found = result.evaluate(result.breaks[result.corner_breaks])
    np.testing.assert_allclose(found, corners[1:], rtol=0.0, atol=1e-12)
    pieces = cut(result)
    assert len(pieces) == 4
    for piece in (pieces[0], pieces[2]):
        assert len(piece.control) == degree + 1
        share = np.linspace(0.0, 1.0, degree + 1)[:, None]
        line = piece.control[0] + share * (piece.control[-1] - piece.control[0])
        np.testing.assert_allclose(piece.control, line, rtol=0.0, atol=1e-12)
    assert len(result.control) <= (20 if degree == 3 else 30)


def test_smooth_seam_of_an_outline_with_corners_is_no_knot_of_the_result():
    source, corners = outline_with_corners()
    pieces = cut(source)
    # begin in the middle of the bowed edge: knot insertion by splitting it into two clamped halves
    middle = pieces[1].breaks[len(pieces[1].spans) // 2]
    first, second = split(pieces[1], middle)
    begun = join([second, pieces[2], pieces[3], pieces[0], first], closed=True)
    begun = Spline(begun.knots, begun.control, 3, closed=True, smooth_seam=True)
    turned = turned_to_corner(begun)
    assert apart(begun, turned) < 1e-3
    assert len(cut(turned)) == 4
    result = fewest_knots(begun, 0.05)
    assert apart(begun, result) <= 0.05
    assert len(cut(result)) == 4
    assert len(result.control) <= len(fewest_knots(source, 0.05).control) + 1
    ends = np.array(sorted(piece.control[0].round(6).tolist() for piece in cut(result)))
    np.testing.assert_allclose(ends, np.array(sorted(corners.tolist())), rtol=0.0, atol=1e-9)


def split(spline: Spline, at: float) -> tuple[Spline, Spline]:
    """Split at an interior knot by inserting it until it is of full multiplicity (Boehm's rule)."""
    p, knots, control = spline.degree, spline.knots, spline.control
    while np.sum(knots == at) < p:
        k = int(np.searchsorted(knots, at, side="right")) - 1
        s = int(np.sum(knots == at))
        new = [*control[: k - p + 1]]
        for i in range(k - p + 1, k - s + 1):
            w = (at - knots[i]) / (knots[i + p] - knots[i])
            new.append((1.0 - w) * control[i - 1] + w * control[i])
        control = np.array([*new, *control[k - s :]])
        knots = np.insert(knots, k + 1, at)
    i = int(np.searchsorted(knots, at))
    left = Spline(np.append(knots[: i + p], at), control[:i], p)
    right = Spline(np.concatenate([[at], knots[i:]]), control[i - 1 :], p)
    return left, right


def test_faired_trace_comes_back_near_and_no_less_fair():
    rng = np.random.default_rng(5)
    t = np.linspace(0.0, 1.0, 700)
    a = np.pi * t
    bow = np.stack([100.0 * np.cos(a), 60.0 * np.sin(a) + 4.0 * np.sin(3.0 * a)], axis=1)
    base = np.stack([np.linspace(-100.0, 100.0, 500)[1:-1], np.zeros(498)], axis=1)
    drawn = np.concatenate([bow, base]) + rng.normal(0.0, 0.1, (1198, 2))
    outline = Polyline(drawn, closed=True)
    faired = fair_outline(outline, corners_by_angle(Polyline(np.concatenate([bow, base]), True), np.radians(40)), 0.6)
    result = fewest_knots(faired.spline, 0.06)
    assert apart(faired.spline, result) <= 0.06
    assert 10 * len(result.control) < len(faired.spline.control)
    assert fairness(result, 0.6).inflections <= fairness(faired.spline, 0.6).inflections


def test_far_from_the_origin_is_as_near_it():
    source = made("ellipse")
    there = np.array([500_000.0, 5_000_000.0])
    here, far = fewest_knots(source, 0.01), fewest_knots(source.moved(there), 0.01)
    assert abs(len(far.control) - len(here.control)) <= 2
    assert apart(source, far.moved(-there)) <= 0.01


def test_what_cannot_be_shortened_comes_back_itself():
    line = Spline(np.array([0.0, 0, 0, 0, 9, 9, 9, 9]), np.array([[0.0, 0], [3, 0], [6, 0], [9, 0]]), 3)
    assert fewest_knots(line, 0.1) is line
    polyline = Spline(np.array([0.0, 0, 1, 2, 2]), np.array([[0.0, 0], [1, 1], [2, 0]]), 1)
    assert fewest_knots(polyline, 0.1) is polyline
    wild = Spline(
        np.concatenate([[0.0] * 3, np.arange(9.0), [8.0] * 3]), np.random.default_rng(0).normal(0, 50, (11, 2)), 3
    )
    assert fewest_knots(wild, 1e-9) is wild


def test_smaller_chord_error_takes_more_knots():
    source = made("random")
    counts = [len(fewest_knots(source, e).control) for e in (1.0, 0.1, 0.01, 0.001)]
    assert counts == sorted(counts)
    assert counts[-1] > 2 * counts[0]


points = st.integers(5, 40).flatmap(
    lambda n: arrays(np.float64, (n, 2), elements=st.integers(-60, 60).map(float))  # coincident points included
)


@settings(max_examples=40, deadline=None)
@given(points, st.sampled_from([2, 3]), st.sampled_from([0.01, 0.3, 5.0]))
def test_any_spline_comes_back_within_its_chord_error(control, degree, chord_error):
    n = len(control)
    knots = np.concatenate([[0.0] * degree, np.linspace(0.0, n, n - degree + 1), [float(n)] * degree])
    source = Spline(knots, control, degree)
    result = fewest_knots(source, chord_error)
    assert len(result.control) <= len(control)
    assert np.all(np.isfinite(result.control))
    if result is not source:
        assert apart(source, result, 0.05) <= chord_error + 0.002
    np.testing.assert_allclose(result.control[[0, -1]], control[[0, -1]], rtol=0.0, atol=1e-9)


def test_turning_points_by_a_threshold():
    values = np.array([0.0, 2.0, 1.9, 3.0, 1.0, 1.05, 0.0, 5.0, 0.0, 1.0])
    turns = turning_points(values, np.array([0, 8, 10]), np.array([0.5, 0.5]), cyclic=False)
    assert turns.at.tolist() == [3, 6]
    assert turns.top.tolist() == [True, False]
    wave = np.sin(np.linspace(0.0, 4.0 * np.pi, 200, endpoint=False) + 0.3)
    assert len(turning_points(wave, np.array([0, 200]), np.array([0.1]), cyclic=True).at) == 4


def test_straight_means_near_the_chord_and_no_step_back():
    x = np.linspace(0.0, 20.0, 24)
    knots = np.concatenate([[0.0] * 3, np.linspace(0.0, 20.0, 22), [20.0] * 3])
    flat = Spline(knots, np.stack([x, 0.01 * np.sin(x)], axis=1), 3)
    assert straight(sample(flat, 4), 0.02).tolist() == [True]
    assert straight(sample(flat, 4), 0.001).tolist() == [False]
    there_and_back = Spline(knots, np.stack([x + 8.0 * np.sin(x / 3.0), 0.0 * x], axis=1), 3)
    assert straight(sample(there_and_back, 4), 0.02).tolist() == [False]
