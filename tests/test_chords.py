"""Chords of curves: errors that hold, order of travel, cutting."""

import numpy as np
import pytest

from geometry.arcs import ArcChain, full_circle
from geometry.bspline import Spline, bezier_evaluate
from geometry.chords import Chords, even_delta, whole_chords
from geometry.errors import GeometryError
from geometry.polyline import Polyline


def random_spline(seed: int, degree: int, dimension: int) -> Spline:
    rng = np.random.default_rng(seed)
    control = rng.uniform(-10.0, 10.0, (9, dimension))
    inner = np.sort(rng.uniform(0.0, 1.0, 8 - degree))
    return Spline(np.concatenate([[0.0] * (degree + 1), inner, [1.0] * (degree + 1)]), control, degree)


def largest_gap(chords: Chords, count: int = 41) -> tuple[np.ndarray, np.ndarray]:
    """Distance between curve and chord at equal local parameters, and the same across the chord only, per chord."""
    x = np.linspace(0.0, 1.0, count)
    gap, across = np.zeros(len(chords)), np.zeros(len(chords))
    along = chords.end - chords.start
    for share in x:
        t = chords.low + share * (chords.high - chords.low)
        away = chords.elements.at(chords.element, t) - (chords.start + share * along)
        gap = np.maximum(gap, np.linalg.norm(away, axis=1))
        unit = along / np.linalg.norm(along, axis=1)[:, None]
        across = np.maximum(across, np.linalg.norm(away - (away * unit).sum(axis=1)[:, None] * unit, axis=1))
    return gap, across


@pytest.mark.parametrize("degree", [1, 2, 3])
@pytest.mark.parametrize("dimension", [2, 3])
@pytest.mark.parametrize("delta", [np.inf, 0.5, 1e-3])
def test_spline_errors_hold_at_equal_parameters(degree: int, dimension: int, delta: float) -> None:
    spline = random_spline(degree * 10 + dimension, degree, dimension)
    chords = whole_chords(spline).split(delta)
    gap, across = largest_gap(chords)
    assert (across <= chords.error + 1e-12).all()
    assert (chords.error <= delta).all()
    along = chords.end - chords.start
    x = np.linspace(0.0, 1.0, 200)[:, None]
    points = chords.elements.at(
        np.tile(chords.element, 200), (chords.low + x * (chords.high - chords.low)).reshape(-1)
    ).reshape(200, len(chords), dimension)
    foot = ((points - chords.start) * along).sum(axis=2)
    back = (np.diff(foot, axis=0) < 0.0).any(axis=0) | (foot < 0.0).any(axis=0)
    assert (gap[back] <= chords.error[back] + 1e-12).all()  # a piece that turns back is paired at equal parameters
    if degree == 2:  # there the largest distance is reached half way
        np.testing.assert_allclose(
            np.where(chords.error > 1.001 * across, gap, across), chords.error, rtol=1e-3, atol=1e-9
        )
    u = spline.breaks[chords.element] + chords.low * np.diff(spline.breaks)[chords.element]
    np.testing.assert_allclose(chords.start, spline.evaluate(u), atol=1e-12)


def test_a_straight_piece_has_no_error_whatever_its_speed() -> None:
    control = np.outer([0.0, 2.0, 5.0, 9.0], [0.6, 0.8])
    spline = Spline(np.array([0.0] * 4 + [1.0] * 4), control, 3)
    assert whole_chords(spline).error.max() <= 1e-12
    backwards = Spline(spline.knots, np.outer([0.0, 12.0, -3.0, 9.0], [0.6, 0.8]), 3)
    chords = whole_chords(backwards)
    gap, _ = largest_gap(chords)
    assert gap.max() > 0.1  # it turns back on itself, and the error covers that
    assert (gap <= chords.error + 1e-12).all()


@pytest.mark.parametrize("bulge", [1e-200, 1e-9, 0.1, -0.4, 1.0, -2.5, 40.0, 1e6])
@pytest.mark.parametrize("delta", [np.inf, 0.05])
def test_arc_errors_hold_and_points_lie_on_the_circle(bulge: float, delta: float) -> None:
    chord = 10.0 if abs(bulge) < 5.0 else 10.0 / abs(bulge)
    chain = ArcChain(np.array([[1.0, 2.0], [1.0 + chord, 2.0]]), np.array([bulge]))
    chords = whole_chords(chain).split(delta)
    assert (chords.error <= delta).all()
    centre, radius = chain.circles()
    _, across = largest_gap(chords)
    assert (across <= chords.error * (1.0 + 1e-9) + 1e-12).all()
    assert across.max() >= 0.99 * chords.error.max() - 1e-12
    if radius[0] < 1e6:
        middle = chords.elements.at(chords.element, 0.5 * (chords.low + chords.high))
        np.testing.assert_allclose(np.linalg.norm(middle - centre[0], axis=1), radius[0], rtol=1e-12)
        turned = (chords.high - chords.low) * np.abs(chain.sweeps()[0])
        assert turned.max() <= 0.5 * np.pi * (1.0 + 1e-12)


def test_chords_follow_each_other_without_a_gap() -> None:
    curves = [
        random_spline(1, 3, 2),
        full_circle(np.zeros(2), 5.0),
        Polyline(np.random.default_rng(1).uniform(size=(9, 3)), True),
    ]
    for curve in curves:
        chords = whole_chords(curve).split(1e-2).split(1e-4)
        assert (chords.start[1:] == chords.end[:-1]).all()
        same = chords.element[1:] == chords.element[:-1]
        assert (chords.low[1:][same] == chords.high[:-1][same]).all()
        if curve.closed:
            np.testing.assert_allclose(chords.end[-1], chords.start[0], atol=1e-12)


def test_cutting_a_selection_keeps_its_ends_and_elements() -> None:
    spline = random_spline(4, 3, 2)
    chosen = whole_chords(spline).split(0.1).take(np.array([3, 7]))
    finer = chosen.split(1e-5)
    assert len(finer) > len(chosen)
    assert set(finer.element) == set(chosen.element)
    assert finer.start[0].tolist() == chosen.start[0].tolist()
    assert finer.end[-1].tolist() == chosen.end[-1].tolist()
    np.testing.assert_allclose(
        finer.start, bezier_evaluate(spline.beziers[finer.element], finer.low, 0), rtol=0.0, atol=1e-13
    )


def test_the_even_error_about_doubles_the_number_at_most() -> None:
    for seed in range(5):
        whole = whole_chords(random_spline(seed, 3, 2))
        assert len(whole.split(even_delta(whole, 0))) <= 3 * len(whole)
    assert even_delta(whole_chords(Polyline(np.eye(2)))) == 0.0


def test_an_unknown_kind_of_curve_is_refused() -> None:
    with pytest.raises(GeometryError, match="type str"):
        whole_chords("curve")  # type: ignore[arg-type]
