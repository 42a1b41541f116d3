from itertools import pairwise
from pathlib import Path

import ezdxf
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from geometry.arcs import ArcChain, bulge_points, full_circle
from geometry.bspline import Spline, join
from geometry.deviation import hausdorff, within
from geometry.economy.arc_batch import chain_bulges
from geometry.economy.arcs import fewest_arcs
from geometry.economy.biarcs import biarc_chain
from geometry.economy.least import least_arcs
from geometry.economy.track import track_of
from geometry.errors import GeometryError
from tests.spline_shapes import SHAPES, by_length, made, spline_through
from tests.test_economy_lines import rounded_corner_outline, wild_splines

QUARTER = np.tan(np.pi / 8.0)


def kinks(chain: ArcChain) -> np.ndarray:
    """Angles between pieces at the joints, radians; the seam of a closed chain comes first."""
    begin, end = chain.headings()
    step = begin - np.roll(end, 1)
    step = np.abs(np.remainder(step + np.pi, 2.0 * np.pi) - np.pi)
    return step if chain.closed else step[1:]


def traced(chain: ArcChain, step: float = 0.1) -> Spline:
    """An interpolating spline through close points of a chain of arcs."""
    fine = chain.flatten(1e-7)
    along = np.linspace(0.0, fine.length(), round(fine.length() / step) + 1)
    return spline_through(fine.at(along), along, chain.closed)


@pytest.mark.parametrize("name", [name for name in SHAPES if name != "slot"])
@pytest.mark.parametrize("error", [0.1, 0.01, 0.001])
def test_arcs_stay_near_the_least_number_within_the_chord_error_and_smooth(name: str, error: float) -> None:
    spline = made(name)
    chain = fewest_arcs(spline, error)
    assert chain.closed == spline.closed
    assert len(chain.bulges) <= 1.10 * least_arcs(spline, error) + 2.0
    assert within(spline, chain, error).inside
    assert kinks(chain).max() < 1e-9


@pytest.mark.parametrize("name", ["ellipse", "superellipse", "clothoid"])
def test_taking_more_time_saves_arcs(name: str) -> None:
    spline = made(name)
    quick, thorough = fewest_arcs(spline, 0.01), fewest_arcs(spline, 0.01, thorough=True)
    assert len(thorough.bulges) <= len(quick.bulges)
    assert len(thorough.bulges) <= least_arcs(spline, 0.01) + 2.0
    assert within(spline, thorough, 0.01).inside


SLOT = ArcChain(
    np.array([[-50.0, -25.0], [50.0, -25.0], [50.0, 25.0], [-50.0, 25.0]]), np.array([0.0, 1.0, 0.0, 1.0]), True
)
ROUNDED = ArcChain(
    np.array(
        [
            [-40.0, -30.0],
            [40.0, -30.0],
            [50.0, -20.0],
            [50.0, 20.0],
            [40.0, 30.0],
            [-40.0, 30.0],
            [-50.0, 20.0],
            [-50.0, -20.0],
        ]
    ),
    np.array([0.0, QUARTER] * 4),
    True,
)
SIDES = ArcChain(
    np.array([[0.0, 0.0], [50.0, 0.0], [60.0, 10.0], [60.0, 40.0], [70.0, 50.0], [100.0, 50.0]]),
    np.array([0.0, QUARTER, 0.0, -QUARTER, 0.0]),
)


def exactly(chain: ArcChain, per_turn: int) -> Spline:
    """Lines and arcs as cubic pieces joined smoothly; every arc is cut into `per_turn` pieces a whole turn."""
    path, (begin, _), sweeps = chain.path(), chain.headings(), chain.sweeps()
    pieces = []
    for i, (start, end) in enumerate(pairwise(path)):
        if sweeps[i] == 0.0:
            pieces.append(np.linspace(start, end, 4))
            continue
        count = int(np.ceil(abs(sweeps[i]) / (2.0 * np.pi) * per_turn))
        step = sweeps[i] / count
        points = bulge_points(
            np.tile(start, (count + 1, 1)),
            np.tile(end - start, (count + 1, 1)),
            np.full(count + 1, chain.bulges[i]),
            np.linspace(0.0, 1.0, count + 1),
        )
        angle = begin[i] + step * np.arange(count + 1)
        arm = 4.0 / 3.0 * np.tan(0.25 * abs(step)) * chain.circles()[1][i]
        tangent = arm * np.stack([np.cos(angle), np.sin(angle)], axis=1)
        for k in range(count):
            pieces.append(np.stack([points[k], points[k] + tangent[k], points[k + 1] - tangent[k + 1], points[k + 1]]))
    control = np.concatenate([pieces[0][:1], *(piece[1:] for piece in pieces)])
    if chain.closed:
        control[-1] = control[0]
    knots = np.concatenate([[0.0], np.repeat(np.arange(len(pieces) + 1.0), 3), [len(pieces)]])
    return Spline(knots, control, 3, chain.closed, chain.closed)


@pytest.mark.parametrize("true", [SLOT, SLOT.reversed(), ROUNDED, SIDES], ids=["slot", "mirrored", "rounded", "sides"])
@pytest.mark.parametrize("error", [0.1, 0.01, 0.001])
@pytest.mark.parametrize("per_turn", [16, 32])
def test_an_exact_slot_is_four_and_a_rounded_rectangle_eight(true: ArcChain, error: float, per_turn: int) -> None:
    chain = fewest_arcs(exactly(true, per_turn), error)
    assert len(chain.bulges) == len(true.bulges)
    assert (chain.bulges == 0.0).sum() == (true.bulges == 0.0).sum()
    assert within(true, chain, 1.001 * error).inside
    assert kinks(chain).max() < 1e-9


@pytest.mark.parametrize("true", [SLOT, SLOT.reversed(), ROUNDED, SIDES], ids=["slot", "mirrored", "rounded", "sides"])
@pytest.mark.parametrize("error", [0.1, 0.01])
def test_lines_and_true_arcs_come_back_one_for_one(true: ArcChain, error: float) -> None:
    spline = traced(true)
    chain = fewest_arcs(spline, error)
    assert len(chain.bulges) == len(true.bulges)
    assert (chain.bulges == 0.0).sum() == (true.bulges == 0.0).sum()
    assert within(true, chain, 1.001 * error).inside
    assert kinks(chain).max() < 1e-9


@pytest.mark.parametrize("turn", [1.0, -1.0])
def test_a_circle_comes_back_as_two_equal_semicircles(turn: float) -> None:
    circle = full_circle(np.array([10.0, 5.0]), 30.0)
    chain = fewest_arcs(traced(circle if turn > 0.0 else circle.reversed()), 0.01)
    np.testing.assert_allclose(chain.bulges, [turn, turn], rtol=0.0, atol=1e-12)
    centre, radius = chain.circles()
    np.testing.assert_allclose(centre, [[10.0, 5.0]] * 2, rtol=0.0, atol=1e-3)
    np.testing.assert_allclose(radius, 30.0, rtol=0.0, atol=1e-3)


def test_one_arc_and_one_line_come_back_as_one() -> None:
    arc = fewest_arcs(traced(ArcChain(np.array([[0.0, 0.0], [50.0, 10.0]]), np.array([0.5]))), 0.01)
    np.testing.assert_allclose(arc.bulges, [0.5], rtol=0.0, atol=1e-4)
    line = fewest_arcs(Spline(np.repeat([0.0, 1.0], 4), np.linspace([0.0, 0.0], [50.0, 10.0], 4), 3), 0.01)
    np.testing.assert_array_equal(line.bulges, [0.0])
    np.testing.assert_allclose(line.points, [[0.0, 0.0], [50.0, 10.0]], rtol=0.0, atol=1e-13)


def test_corners_stay_sharp_and_everything_between_them_is_smooth() -> None:
    spline = rounded_corner_outline()
    chain = fewest_arcs(spline, 0.02)
    bent = kinks(chain) > 1e-9
    assert bent.sum() == 3
    np.testing.assert_allclose(
        sorted(chain.points[bent].tolist()), [[0.0, 0.0], [0.0, 80.0], [100.0, 0.0]], rtol=0.0, atol=1e-12
    )
    assert (chain.bulges == 0.0).sum() >= 2  # both straight sides
    assert within(spline, chain, 0.02).inside


def test_a_loop_with_a_single_corner_is_closed() -> None:
    control = np.array([[0.0, 0.0], [80.0, -60.0], [80.0, 60.0], [0.0, 0.0]])
    drop = Spline(np.repeat([0.0, 1.0], 4), control, 3, True)
    chain = fewest_arcs(drop, 0.05)
    assert chain.closed
    assert (kinks(chain) > 1e-9).tolist() == [True] + [False] * (len(chain.bulges) - 1)
    assert within(drop, chain, 0.05).inside


def test_no_arc_is_so_slight_that_it_should_be_a_line() -> None:
    for name in SHAPES:
        chain = fewest_arcs(made(name), 0.01)
        bent = chain.bulges != 0.0
        sagitta = 0.5 * np.abs(chain.bulges) * chain.chord_lengths()
        assert sagitta[bent].min() > 0.01 * 0.01, name


@pytest.mark.parametrize("name", list(SHAPES))
def test_bulges_survive_a_file(name: str, tmp_path: Path) -> None:
    chain = fewest_arcs(made(name).moved(np.array([1e5, -2e5])), 0.01)
    document = ezdxf.new("R2010")
    rows = np.column_stack([chain.points, np.append(chain.bulges, np.zeros(len(chain.points) - len(chain.bulges)))])
    document.modelspace().add_lwpolyline(rows, format="xyb", close=chain.closed)
    document.saveas(tmp_path / "arcs.dxf")
    polyline = ezdxf.readfile(tmp_path / "arcs.dxf").modelspace()[0]
    read = np.array(polyline.get_points("xyb"))
    back = ArcChain(read[:, :2], read[: len(chain.bulges), 2], bool(polyline.closed))
    extent = np.ptp(chain.points, axis=0).max()
    assert hausdorff(chain, back, 1e-10 * extent).certified <= 1e-9 * extent
    assert kinks(back).max() < 1e-6


def test_a_wobble_inside_the_chord_error_asks_for_no_more_arcs() -> None:
    rng = np.random.default_rng(5)
    spline = spline_through(*by_length(SHAPES["ellipse"][0], 2.0), True)
    noise = rng.normal(0.0, 0.003, (len(spline.control) - 1, 2))
    wobbling = Spline(spline.knots, spline.control + np.concatenate([noise, noise[:1]]), 3, True, False)
    chain = fewest_arcs(wobbling, 0.1)
    assert len(chain.bulges) <= len(fewest_arcs(spline, 0.1).bulges) + 3
    assert within(wobbling, chain, 0.1).inside


@pytest.mark.parametrize("scale", [2.0**-10, 2.0**13])
def test_the_count_does_not_depend_on_the_unit(scale: float) -> None:
    spline = made("random")
    other = Spline(spline.knots * scale, spline.control * scale, 3)
    here, there = fewest_arcs(spline, 0.05), fewest_arcs(other, 0.05 * scale)
    np.testing.assert_allclose(there.points, here.points * scale, rtol=1e-12, atol=1e-12 * scale)
    np.testing.assert_allclose(there.bulges, here.bulges, rtol=1e-12, atol=1e-14)


def test_reversed_and_moved_curves_take_about_as_many_arcs() -> None:
    spline = made("superellipse")
    count = len(fewest_arcs(spline, 0.01).bulges)
    assert abs(len(fewest_arcs(spline.reversed(), 0.01).bulges) - count) <= 2
    far = fewest_arcs(spline.moved(np.array([5e5, 5e6])), 0.01)
    assert abs(len(far.bulges) - count) <= 2
    assert kinks(far).max() < 1e-6


def test_joined_pieces_cost_no_more_than_apart() -> None:
    a, b = made("clothoid"), made("random")
    b = b.moved(a.control[-1] - b.control[0])
    both = fewest_arcs(join([a, b], False), 0.01)
    apart = len(fewest_arcs(a, 0.01).bulges) + len(fewest_arcs(b, 0.01).bulges)
    assert abs(len(both.bulges) - apart) <= 1


def test_a_spline_in_space_and_a_chord_error_that_is_no_length_are_refused() -> None:
    with pytest.raises(GeometryError, match="coordinates"):
        fewest_arcs(Spline(np.repeat([0.0, 1.0], 4), np.eye(4, 3), 3), 0.1)
    with pytest.raises(GeometryError, match="chord error"):
        fewest_arcs(made("ellipse"), -0.1)


@pytest.mark.parametrize("middle", [(40.0, 0.0), (40.0, 10.0)])
def test_biarcs_down_to_a_cusp_hold_no_arc_that_turns_right_round(middle: tuple[float, float]) -> None:
    track = track_of(Spline(np.array([0.0, 0.0, 0.0, 1.0, 1.0, 1.0]), np.array([(0.0, 0.0), middle, (0.0, 0.0)]), 2))
    chain = biarc_chain(track, 0, track.s[[0, -1]], 0.01)
    _, bulges = chain_bulges(track, chain)
    assert np.abs(bulges).max() < 1.0  # under a half turn; one of a whole turn would reach as far as its bulge is large


def test_a_standstill_leaves_nothing_of_no_length() -> None:
    corners = [(1, 1), (1, 1), (1, 0), (-1, 0), (1, 0), (1, 0), (0, 0), (0, 1), (0, 0), (0, -1), (-1, 0)]
    control = 40.0 * np.array(corners, dtype=np.float64)
    inner = [0.05356552, 0.34843554, 0.43065513, 0.64417723, 0.68309814, 0.71440535, 0.83014564]
    knots = np.concatenate([np.zeros(4), inner, np.ones(4)])
    chain = fewest_arcs(Spline(knots, control, 3), 0.03)
    assert chain.chord_lengths().min() > 1e-9
    np.testing.assert_array_equal(chain.points[[0, -1]], control[[0, -1]])


@settings(max_examples=25, deadline=None)
@given(wild_splines(), st.sampled_from([0.01, 0.3, 5.0]))
def test_any_spline_is_kept_within_the_chord_error(spline: Spline, error: float) -> None:
    if np.ptp(spline.control, axis=0).max() == 0.0:
        return
    chain = fewest_arcs(spline, error)
    assert hausdorff(spline, chain, 0.01 * error).measured <= error * (1.0 + 1e-6)
