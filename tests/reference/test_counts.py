"""Counts of chords and arcs against closed forms."""

import numpy as np
import pytest

from geometry.economy.arcs import fewest_arcs
from geometry.economy.least import least_arcs, least_vertices
from geometry.economy.lines import fewest_vertices
from tests.spline_shapes import made, spline_through


def circle(radius: float):
    t = np.linspace(0.0, 2.0 * np.pi, 721)
    return spline_through(radius * np.stack([np.cos(t), np.sin(t)], axis=1), radius * t, True)


@pytest.mark.parametrize(("radius", "error"), [(50.0, 0.1), (50.0, 0.01), (50.0, 0.001), (7.0, 0.013), (400.0, 0.05)])
def test_chords_of_a_circle_by_the_sagitta_formula(radius: float, error: float) -> None:
    # sagitta h = r (1 - cos(a / 2)) of a chord over the angle a: at most a = 2 acos(1 - e / r), and for vertices off
    # the curve, r + e outside and r - e inside, at most a = 2 acos((r - e) / (r + e))
    on_curve = np.ceil(np.pi / np.arccos(1.0 - error / radius))
    free = np.ceil(np.pi / np.arccos((radius - error) / (radius + error)))
    assert on_curve <= len(fewest_vertices(circle(radius), error, on_curve=True).points) <= on_curve + 1
    assert free <= len(fewest_vertices(circle(radius), error).points) <= free + 1


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


def test_the_arcs_of_an_ellipse_beat_biarcs() -> None:
    # biarcs through end points and tangents at their best take 34.1 for the same curve and error
    assert len(fewest_arcs(made("ellipse"), 0.01).bulges) <= 26
