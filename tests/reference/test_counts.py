"""Counts of chords and arcs against closed forms."""

import numpy as np
import pytest

from geometry.arcs import full_circle
from geometry.bspline import Spline
from geometry.deviation import hausdorff
from geometry.economy.arcs import fewest_arcs
from geometry.economy.least import least_arcs, least_control_points, least_vertices
from geometry.economy.lines import fewest_vertices
from tests.spline_shapes import made, spline_through


def circle(radius: float):
    t = np.linspace(0.0, 2.0 * np.pi, 721)
    return spline_through(radius * np.stack([np.cos(t), np.sin(t)], axis=1), radius * t, True)


@pytest.mark.parametrize(
    ("radius", "error"), [(50.0, 0.1), (50.0, 0.01), (50.0, 0.001), (7.0, 0.013), (400.0, 0.05), (20.0, 1.0)]
)
def test_chords_of_a_circle_by_the_sagitta_formula(radius: float, error: float) -> None:
    # sagitta h = r (1 - cos(a / 2)) of a chord over the angle a: at most a = 2 acos(1 - e / r), and for vertices off
    # the curve, r + e outside and r - e inside, at most a = 2 acos((r - e) / (r + e))
    on_curve = np.ceil(np.pi / np.arccos(1.0 - error / radius))
    free = np.ceil(np.pi / np.arccos((radius - error) / (radius + error)))
    assert len(fewest_vertices(circle(radius), error, on_curve=True).points) == on_curve
    assert len(fewest_vertices(circle(radius), error).points) == free


@pytest.mark.parametrize("radius", [1.0, 50.0])
def test_least_number_of_vertices_of_a_circle(radius: float) -> None:
    # 2 pi r sqrt(1 / (8 e r)): the limit of pi / acos(1 - e / r) for small e
    error = 1e-7 * radius
    expected = np.pi / np.arccos(1.0 - error / radius)
    assert least_vertices(circle(radius), error, on_curve=True) == pytest.approx(expected, rel=1e-5)
    assert least_vertices(circle(radius), error) == pytest.approx(expected / np.sqrt(2.0), rel=1e-5)


def test_least_numbers_of_an_ellipse() -> None:
    # semi-axes 100 and 60, e = 0.01: integrals of sqrt(k / (8 e)), sqrt(k / (16 e)) and 0.2002 (|k'| / e)^(1/3) over
    # arc length by adaptive quadrature of the closed forms of k and dk/ds
    spline = made("ellipse")
    assert least_vertices(spline, 0.01, on_curve=True) == pytest.approx(193.2, abs=0.05)
    assert least_vertices(spline, 0.01) == pytest.approx(136.6, abs=0.05)
    assert least_arcs(spline, 0.01) == pytest.approx(23.4, abs=0.05)


@pytest.mark.parametrize(("error", "spans"), [(0.1, 7.909), (0.01, 14.064), (0.001, 25.011)])
def test_yardstick_for_control_points_of_an_ellipse(error: float, spans: float) -> None:
    # semi-axes 100 and 60: (768 e)^(-1/4) times the integral of |k'' - k^3|^(1/4) over arc length, by quadrature of the
    # closed form; 1 / 768 is the range of B4 / 4! halved, (1/30 + 7/240) / 48 (DLMF 24.2 for the polynomial)
    assert least_control_points(made("ellipse"), error) == pytest.approx(spans + 3.0, rel=0.01)


def test_yardstick_for_a_circle() -> None:
    # k'' = 0: 2 pi r k^(3/4) / (768 e)^(1/4) spans
    for radius, error in ((50.0, 0.001), (7.0, 1e-5)):
        spans = 2.0 * np.pi * (radius / (768.0 * error)) ** 0.25
        assert least_control_points(circle(radius), error) == pytest.approx(spans + 3.0, rel=2e-3)


def test_yardstick_for_quadratics_is_that_of_arcs() -> None:
    # both err by h^3 |k'| / 124.7; a quadratic has two control points more than spans
    for error in (0.01, 0.001):
        spline = made("ellipse")
        assert least_control_points(spline, error, 2) == pytest.approx(least_arcs(spline, error) + 2.0, rel=0.04)


@pytest.mark.parametrize(("arm", "error", "rel"), [(0.5522847498, 2.7253e-4, 1e-4), (0.5519150244, 1.9608e-4, 1e-4)])
def test_a_circle_by_four_cubic_pieces(arm: float, error: float, rel: float) -> None:
    # 2.7253e-4 r where the middle of every piece is on the circle, 1.9608e-4 r at the best arm with ends on the circle;
    # M. Goldapp, "Approximation of circular arcs by cubic polynomials", Computer Aided Geometric Design 8 (1991), for
    # the subject (from memory); the figures by computation
    radius = 30.0
    quarter = np.array([[1.0, 0.0], [1.0, arm], [arm, 1.0], [0.0, 1.0]])
    turn = np.array([[0.0, 1.0], [-1.0, 0.0]])
    pieces = [quarter @ np.linalg.matrix_power(turn, n) for n in range(4)]
    control = radius * np.concatenate([pieces[0], *(piece[1:] for piece in pieces[1:])])
    control[-1] = control[0]
    knots = np.repeat([0.0, 1.0, 2.0, 3.0, 4.0], [4, 3, 3, 3, 4])
    off = hausdorff(Spline(knots, control, 3, True, True), full_circle(np.zeros(2), radius), 1e-6 * radius * error)
    assert off.measured == pytest.approx(error * radius, rel=rel)
    assert off.certified == pytest.approx(error * radius, rel=rel)


def test_the_arcs_of_an_ellipse_beat_biarcs() -> None:
    # biarcs through end points and tangents at their best take 34.1 for the same curve and error
    assert len(fewest_arcs(made("ellipse"), 0.01).bulges) <= 26
