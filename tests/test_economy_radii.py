import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from geometry.arcs import ArcChain, full_circle
from geometry.bspline import Spline
from geometry.deviation import hausdorff, within
from geometry.economy.arc_radii import outside_radii
from geometry.economy.arcs import fewest_arcs
from geometry.errors import GeometryError
from tests.spline_shapes import SHAPES, made
from tests.test_economy_arcs import ROUNDED, SLOT, kinks, traced
from tests.test_economy_lines import wild_splines


def radii(chain: ArcChain) -> np.ndarray:
    """The radii of the arcs of a chain."""
    radius = chain.circles()[1]
    return radius[np.isfinite(radius)]


def shaken(true: ArcChain, error: float, seed: int) -> Spline:
    """A closed spline that wobbles about a chain, within 0.8 of an error."""
    spline = traced(true, 1.0)
    control = spline.control.copy()
    control[3:-3] += np.random.default_rng(seed).normal(0.0, 0.15 * error, control[3:-3].shape)
    out = Spline(spline.knots, control, 3, True, True)
    assert within(true, out, 0.8 * error).inside
    return out


def test_arcs_outside_limits_are_named() -> None:
    chain = ArcChain(
        np.array([[0.0, 0.0], [2.0, 0.0], [10.0, 0.0], [10.0, 8.0]]), np.array([-1.0, 0.0, np.tan(np.pi / 8.0)])
    )
    np.testing.assert_allclose(radii(chain), [1.0, 4.0 * np.sqrt(2.0)])
    assert outside_radii(chain, 1.5).tolist() == [0]
    assert outside_radii(chain, None, 5.0).tolist() == [2]
    assert outside_radii(chain, 1.5, 5.0).tolist() == [0, 2]
    assert outside_radii(chain, 1.0 + 1e-9, 5.7).tolist() == []
    assert outside_radii(chain).tolist() == []


@pytest.mark.parametrize("true", [SLOT, ROUNDED], ids=["slot", "rounded"])
@pytest.mark.parametrize("seed", [1, 2, 3])
def test_limits_that_some_chain_keeps_are_kept(true: ArcChain, seed: int) -> None:
    low, high = 0.9999 * radii(true).min(), 1.0001 * radii(true).max()
    spline = shaken(true, 0.1, seed)
    assert outside_radii(fewest_arcs(spline, 0.1), low, high).size  # it takes asking
    chain = fewest_arcs(spline, 0.1, least_radius=low, most_radius=high)
    assert low <= radii(chain).min()
    assert radii(chain).max() <= high
    assert len(chain.bulges) <= len(true.bulges) + 2
    assert within(spline, chain, 0.1).inside
    assert kinks(chain).max() < 1e-9


@pytest.mark.parametrize("name", ["ellipse", "superellipse", "sine", "aerofoil", "random"])
def test_a_bend_that_is_a_little_too_tight_is_blended(name: str) -> None:
    spline = made(name)
    free = fewest_arcs(spline, 0.1)
    least = 1.01 * float(radii(free).min())
    chain = fewest_arcs(spline, 0.1, least_radius=least)
    assert radii(chain).min() >= least
    assert len(chain.bulges) <= len(free.bulges) + 2
    assert within(spline, chain, 0.1).inside
    assert kinks(chain).max() < 1e-9


@pytest.mark.parametrize("name", list(SHAPES))
@pytest.mark.parametrize("share", [0.95, 0.5])
def test_flat_arcs_become_lines_and_short_arcs(name: str, share: float) -> None:
    spline = made(name)
    most = share * float(radii(fewest_arcs(spline, 0.1)).max())
    chain = fewest_arcs(spline, 0.1, most_radius=most)
    assert radii(chain).max() <= most
    assert within(spline, chain, 0.1).inside
    assert kinks(chain).max() < 1e-9


def test_a_circle_over_the_largest_radius_is_lines_and_arcs_at_even_steps() -> None:
    circle = traced(full_circle(np.array([10.0, 5.0]), 30.0))
    chain = fewest_arcs(circle, 0.05, most_radius=20.0)
    # lines and arcs of radius r, repeated every turn p, keep between circles (R - r) (1 / cos(p / 2) - 1) apart
    fewest = np.ceil(np.pi / np.arccos(1.0 / (1.0 + 0.1 / 10.0)))
    assert fewest <= (chain.bulges == 0.0).sum() <= fewest + 3
    assert (chain.bulges != 0.0).sum() == (chain.bulges == 0.0).sum()
    np.testing.assert_allclose(radii(chain), 20.0, rtol=2e-6, atol=0.0)
    assert within(circle, chain, 0.05).inside
    assert kinks(chain).max() < 1e-9


def test_a_circle_just_under_the_least_radius_grows_to_it() -> None:
    circle = traced(full_circle(np.array([10.0, 5.0]), 30.0))
    chain = fewest_arcs(circle, 0.05, least_radius=30.03)
    np.testing.assert_allclose(radii(chain), 30.03, rtol=2e-6, atol=0.0)
    assert radii(chain).min() >= 30.03
    assert within(circle, chain, 0.05).inside


def test_where_the_chord_error_has_no_room_the_tight_arcs_are_named() -> None:
    spline = made("ellipse")  # its least radius is 36, at the ends of the long axis
    chain = fewest_arcs(spline, 0.01, least_radius=60.0)
    assert within(spline, chain, 0.01).inside
    tight = outside_radii(chain, 60.0)
    assert 0 < tight.size < len(chain.bulges)
    assert (np.abs(chain.points[tight, 0]) > 70.0).all()
    others = np.delete(chain.circles()[1], tight)
    assert others.min() >= 60.0


@pytest.mark.parametrize("bow", [0.4, -0.4])
def test_a_side_bowed_inside_the_chord_error_is_a_line_and_no_arc_of_absurd_radius(bow: float) -> None:
    bulges = ROUNDED.bulges.copy()
    bulges[0] = 2.0 * bow * 0.05 / 80.0  # sagitta 0.4 of the chord error: a radius of 40 000
    chain = fewest_arcs(traced(ArcChain(ROUNDED.points, bulges, True)), 0.05)
    assert len(chain.bulges) == 8
    assert radii(chain).max() < 20.0


def test_limits_that_bind_nothing_change_nothing() -> None:
    for name in ("lissajous", "slot", "clothoid"):
        free = fewest_arcs(made(name), 0.1)
        limited = fewest_arcs(made(name), 0.1, least_radius=1e-3, most_radius=1e6)
        np.testing.assert_array_equal(limited.points, free.points)
        np.testing.assert_array_equal(limited.bulges, free.bulges)


@pytest.mark.parametrize("scale", [2.0**-10, 2.0**13])
def test_limits_go_with_the_unit(scale: float) -> None:
    spline = made("random")
    other = Spline(spline.knots * scale, spline.control * scale, 3)
    here = fewest_arcs(spline, 0.05, least_radius=2.0, most_radius=200.0)
    there = fewest_arcs(other, 0.05 * scale, least_radius=2.0 * scale, most_radius=200.0 * scale)
    np.testing.assert_allclose(there.points, here.points * scale, rtol=1e-12, atol=1e-12 * scale)


def test_limits_that_make_no_sense_are_refused() -> None:
    with pytest.raises(GeometryError, match="least radius"):
        fewest_arcs(made("ellipse"), 0.1, least_radius=0.0)
    with pytest.raises(GeometryError, match="largest radius"):
        fewest_arcs(made("ellipse"), 0.1, most_radius=np.nan)
    with pytest.raises(GeometryError, match="over the largest"):
        fewest_arcs(made("ellipse"), 0.1, least_radius=5.0, most_radius=4.0)


@settings(max_examples=20, deadline=None)
@given(wild_splines(), st.sampled_from([0.03, 1.0]), st.sampled_from([(3.0, None), (None, 15.0), (2.0, 40.0)]))
def test_any_spline_is_kept_within_the_chord_error_whatever_the_limits(
    spline: Spline, error: float, limits: tuple[float | None, float | None]
) -> None:
    if np.ptp(spline.control, axis=0).max() == 0.0:
        return
    chain = fewest_arcs(spline, error, False, *limits)
    assert hausdorff(spline, chain, 0.01 * error).measured <= error * (1.0 + 1e-6)
    assert len(outside_radii(chain, *limits)) <= len(outside_radii(fewest_arcs(spline, error), *limits))
