import numpy as np
import pytest

from geometry.jaggedness import estimate, is_clean_polygon
from geometry.polyline import Polyline, merge_collinear
from tests.tracing import circle, dense, noisy, staircase, turned

ELL = [(0, 0), (90, 0), (90, 25), (35, 25), (35, 70), (0, 70)]


def chamfered(points):
    """Staircase with every unit step cut at its middle, as a contour of a black and white image has it."""
    return 0.5 * (points + np.roll(points, -1, axis=0))


@pytest.mark.parametrize("pitch", [0.1, 1.0, 25.4])
@pytest.mark.parametrize("degrees", [0, 17, 30])
def test_the_pitch_of_a_staircase_is_read_whatever_its_heading(pitch, degrees):
    steps = Polyline(turned(staircase(circle(30.0, (0.2, 0.6))) * pitch, degrees), True)
    found = estimate(steps)
    assert found.kind == "staircase"
    assert found.size == pytest.approx(pitch, rel=1e-6)
    assert found.tolerance == pytest.approx(0.85 * pitch, rel=1e-6)
    assert estimate(merge_collinear(steps)[0]).size == pytest.approx(pitch, rel=1e-6)


def test_the_pitch_of_a_chamfered_trace_is_the_pixel():
    # halfway points of unit steps are 1 apart along a run and sqrt(1/2) apart round a step
    found = estimate(Polyline(chamfered(staircase(circle(30.0, (0.2, 0.6)))), True))
    assert found.kind == "chamfered"
    assert found.size == pytest.approx(1.0, rel=1e-6)


@pytest.mark.parametrize("sigma", [0.1, 0.15, 0.3])
@pytest.mark.parametrize("seed", range(3))
def test_the_noise_of_a_digitised_outline_is_read(sigma, seed):
    found = estimate(Polyline(noisy(circle(60.0), 2.0, sigma, seed), True))
    assert found.kind == "noise"
    assert found.size == pytest.approx(sigma, rel=0.3)
    assert found.tolerance == pytest.approx(4.1 * found.size)


@pytest.mark.parametrize("seed", range(3))
def test_corners_are_no_scatter(seed):
    star = np.array([[np.cos(a), np.sin(a)] for a in np.arange(16) * np.pi / 8.0]) * np.array([[60.0], [25.0]] * 8)
    found = estimate(Polyline(noisy(dense(star), 2.0, 0.4, seed), True))
    assert found.kind == "noise"
    assert found.size == pytest.approx(0.4, rel=0.15)


@pytest.mark.parametrize("count", [500, 5000])
def test_a_dense_clean_curve_needs_nothing(count):
    assert estimate(Polyline(circle(50.0, count=count), True)).kind == "none"


@pytest.mark.parametrize("count", [12, 24, 60])
def test_sparse_points_of_a_smooth_curve_are_stations(count):
    found = estimate(Polyline(circle(50.0, count=count), True))
    assert found.kind == "stations"
    assert found.tolerance == 0.0


def test_a_drawn_polygon_is_clean_and_a_traced_one_is_not():
    assert is_clean_polygon(Polyline(np.array(ELL, dtype=float), True), 1.0)
    assert estimate(Polyline(np.array(ELL, dtype=float), True)).kind == "none"
    assert not is_clean_polygon(Polyline(staircase(turned(dense(ELL), 10)), True), 1.0)
    assert not is_clean_polygon(Polyline(dense(ELL, 2.0), True), 1.0)  # sides in many pieces
    assert not is_clean_polygon(Polyline(circle(50.0, count=40), True), 1.0)  # gentle turns
