"""SPLINE data as the shared spline type."""

import ezdxf
import numpy as np
import pytest
from ezdxf.math import BSpline

from converter.drawing import read_drawing
from converter.drawing.splines import clamped, flatten_rational, unit_arc_error
from geometry.arrays import FloatArray


def distance_to(points: FloatArray, path: FloatArray) -> FloatArray:
    """Distance of every point to a path by brute force over all segments."""
    start, chord = path[:-1], np.diff(path, axis=0)
    share = np.einsum("nmd,md->nm", points[:, None] - start[None], chord) / np.einsum("md,md->m", chord, chord)
    foot = start + np.clip(share, 0, 1)[..., None] * chord
    return np.linalg.norm(points[:, None] - foot, axis=-1).min(axis=1)


@pytest.mark.parametrize("degree", [1, 2, 3, 4, 5])
@pytest.mark.parametrize("seed", range(3))
def test_clamping_keeps_the_curve(degree, seed):
    rng = np.random.default_rng(seed)
    n = degree + 1 + 2 * seed
    knots, control = np.cumsum(rng.uniform(0.2, 1.0, n + degree + 1)), rng.normal(size=(n, 2))
    new, points = clamped(knots, control, degree)
    assert np.all(new[: degree + 1] == knots[degree])
    assert np.all(new[-degree - 1 :] == knots[n])
    at = np.linspace(knots[degree], knots[n], 40)[1:-1]
    old = np.array([_de_boor(knots, control, degree, u) for u in at])
    np.testing.assert_allclose([_de_boor(new, points, degree, u) for u in at], old, atol=1e-12)


def _de_boor(knots, control, degree, u):
    """A B-spline as the sum of its basis functions (Cox and de Boor's recursion): slow and independent."""

    def basis(i, p):
        if p == 0:
            return float(knots[i] <= u < knots[i + 1])
        left = (u - knots[i]) / (knots[i + p] - knots[i]) * basis(i, p - 1) if knots[i + p] > knots[i] else 0.0
        span = knots[i + p + 1] - knots[i + 1]
        return left + ((knots[i + p + 1] - u) / span * basis(i + 1, p - 1) if span > 0 else 0.0)

    return sum(basis(i, degree) * control[i] for i in range(len(control)))


def test_clamping_leaves_a_clamped_curve_bit_for_bit():
    knots = np.array([0, 0, 0, 0, 1, 1, 2, 2, 2, 2.0])
    control = np.random.default_rng(0).normal(size=(6, 3))
    new, points = clamped(knots, control, 3)
    np.testing.assert_array_equal(new, knots)
    np.testing.assert_array_equal(points, control)


@pytest.mark.parametrize("sweep", [0.05, 0.3, 1.0, np.pi / 2, 2.5])
def test_arc_error_bounds_the_sampled_one_and_is_tight(sweep):
    handle = 4 / 3 * np.tan(sweep / 4)
    c, s = np.cos(sweep), np.sin(sweep)
    b = np.array([[1, 0], [1, handle], [c + handle * s, s - handle * c], [c, s]])
    t = np.linspace(0, 1, 20001)[:, None]
    curve = (1 - t) ** 3 * b[0] + 3 * t * (1 - t) ** 2 * b[1] + 3 * t * t * (1 - t) * b[2] + t**3 * b[3]
    off = np.abs(np.linalg.norm(curve, axis=1) - 1).max()
    assert off <= unit_arc_error(sweep) + 1e-15
    assert unit_arc_error(sweep) <= 1.03 * off + 1e-15


@pytest.mark.parametrize("degree", [2, 3, 5])
@pytest.mark.parametrize("seed", range(4))
def test_rational_curves_are_flattened_within_the_bound(degree, seed):
    rng = np.random.default_rng(seed)
    n = degree + 3
    control, weights = np.cumsum(rng.normal(size=(n, 2)), axis=0), rng.uniform(0.2, 3.0, n)
    knots = np.concatenate([np.zeros(degree), np.linspace(0, 1, n - degree + 1), np.ones(degree)])
    flat = flatten_rational(knots, control, weights, degree, False, 1e-3)
    tool = BSpline(control.tolist(), degree + 1, knots.tolist(), weights.tolist())
    dense = np.array([tuple(p)[:2] for p in tool.points(np.linspace(0, 1, 4001))])
    assert distance_to(dense, flat.points).max() <= 1e-3
    assert distance_to(flat.points, dense).max() <= 1e-5  # vertices lie on the curve
    assert len(flat.points) < 400


def read_back(tmp_path, draw, version="R2010"):
    doc = ezdxf.new(version, units=4)
    draw(doc.modelspace())
    doc.saveas(tmp_path / "in.dxf")
    return read_drawing(tmp_path / "in.dxf")


def test_a_rational_circle_is_flattened_within_the_stated_bound(tmp_path):
    def draw(m):
        spline = m.add_spline(degree=2)
        spline.control_points = [(1, 0), (1, 1), (0, 1), (-1, 1), (-1, 0), (-1, -1), (0, -1), (1, -1), (1, 0)]
        spline.weights = [1, 0.5**0.5] * 4 + [1]
        spline.knots = [0, 0, 0, 1, 1, 2, 2, 3, 3, 4, 4, 4]

    (profile,) = read_back(tmp_path, draw).profiles
    assert profile.closed
    radii = np.linalg.norm(profile.parts[0].points, axis=1)
    np.testing.assert_allclose(radii, 1.0, atol=1e-14)
    assert 0 < profile.approximation <= 3e-6
    middle = 0.5 * (profile.parts[0].points + np.roll(profile.parts[0].points, -1, axis=0))
    assert (1 - np.linalg.norm(middle, axis=1)).max() <= profile.approximation


def test_equal_weights_are_no_rational_spline(tmp_path):
    def draw(m):
        spline = m.add_open_spline([(0, 0), (1, 2), (3, 2), (4, 0)])
        spline.weights = [2, 2, 2, 2]

    (profile,) = read_back(tmp_path, draw).profiles
    assert profile.approximation == 0.0
    assert profile.parts[0].degree == 3


def test_a_periodic_spline_is_exact_closed_and_smooth(tmp_path):
    points = [(0, 0, 0), (4, 0, 0), (5, 3, 0), (2, 5, 0), (-1, 3, 0)]

    def draw(m):
        m.add_spline().set_closed(points)

    drawing = read_back(tmp_path, draw)
    (profile,) = drawing.profiles
    part = profile.parts[0]
    assert profile.closed
    assert part.smooth_seam
    assert profile.approximation == 0.0
    entity = drawing.document.modelspace()[0]
    knots, control = np.array(entity.knots), np.array([tuple(p)[:2] for p in entity.control_points])
    at = np.linspace(part.knots[0], part.knots[-1], 60)[1:-1]
    np.testing.assert_allclose(part.evaluate(at), [_de_boor(knots, control, 3, u) for u in at], atol=1e-12)


def test_a_corner_at_the_seam_is_kept(tmp_path):
    (profile,) = read_back(tmp_path, lambda m: m.add_open_spline([(0, 0), (4, 4), (-4, 4), (0, 0)])).profiles
    assert profile.closed
    assert not profile.parts[0].smooth_seam


def test_fit_points_are_passed_through(tmp_path):
    points = [(0, 0), (3, 1), (4, 4), (8, 2)]
    (profile,) = read_back(tmp_path, lambda m: m.add_spline(points)).profiles
    flat = profile.flatten(1e-6)
    assert profile.vertices_in == 4
    assert distance_to(np.array(points, dtype=float), flat.points).max() < 1e-6


def test_degree_five_is_flattened(tmp_path):
    control = [(0, 0), (1, 3), (2, -3), (3, 3), (4, -3), (5, 0), (6, 2)]
    (profile,) = read_back(tmp_path, lambda m: m.add_open_spline(control, degree=5)).profiles
    assert type(profile.parts[0]).__name__ == "Polyline"
    assert profile.curved
    assert 0 < profile.approximation < 1e-5


@pytest.mark.parametrize(
    ("change", "word"),
    [
        (lambda s: setattr(s, "weights", [1, -1, 1, 1]), "weights"),
        (lambda s: setattr(s, "knots", [0, 0, 0, 0, 1, 0.5, 1, 1]), "increase"),
        (lambda s: setattr(s, "knots", [0, 0, 0, 0, 0, 0, 0, 0]), "increase"),
        (lambda s: setattr(s, "knots", [0, 0, 0, 0, 1, 1, 1, float("nan")]), "finite"),
        (lambda s: s.dxf.set("degree", 7), "too few"),
    ],
)
def test_nonsense_is_skipped_with_its_reason(tmp_path, change, word):
    drawing = read_back(tmp_path, lambda m: change(m.add_open_spline([(0, 0), (1, 2), (3, 2), (4, 0)])))
    assert not drawing.profiles
    assert word in drawing.skipped[0].reason
