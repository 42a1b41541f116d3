"""Runs of chords: their errors against distances that are certified, and the decisions of long curves they lead to."""

import numpy as np
import pytest

from geometry.bspline import Spline
from geometry.chords import whole_chords
from geometry.deviation import hausdorff, within
from geometry.polyline import Polyline
from geometry.runs import RUN, runs


def wavy(count, noise, seed, dimension=2):
    """A closed outline about 100 across, of 3,000 vertices and more."""
    rng = np.random.default_rng(seed)
    angle = 2.0 * np.pi * np.arange(count) / count
    radius = 50.0 + 5.0 * np.cos(3.0 * angle) + rng.normal(0.0, noise, count)
    columns = [radius * np.cos(angle), radius * np.sin(angle), 3.0 * np.sin(angle)]
    return np.stack(columns[:dimension], axis=1)


@pytest.mark.parametrize("dimension", [2, 3])
def test_every_run_is_within_its_error_both_ways(dimension):
    points = wavy(3_000, 0.02, 1, dimension)
    points[500] += 2.0  # a spike: its run is not taken as one
    chords = whole_chords(Polyline(points))
    found = runs(chords, 0.1, 1e-12)
    sizes = np.diff(found.first)
    assert set(sizes.tolist()) == {1, RUN}
    assert found.first[-1] == len(chords)
    assert (found.chords.error <= 0.1).all()
    for k in np.flatnonzero(sizes == RUN)[::9].tolist():
        rows = found.members(np.array([k]))
        run = Polyline(np.vstack([chords.start[rows], chords.end[rows[-1:]]]))
        chord = Polyline(np.stack([found.chords.start[k], found.chords.end[k]]))
        exact = hausdorff(run, chord, 1e-9)
        assert exact.measured <= found.chords.error[k] <= exact.forward.certified + 1e-9
    spiked = np.flatnonzero((found.first[:-1] >= 496) & (found.first[:-1] < 512))
    assert (sizes[spiked] == 1).all()


def test_gaps_are_not_bridged():
    chords = whole_chords(Polyline(wavy(3_200, 0.0, 1)))
    kept = chords.take(np.delete(np.arange(len(chords)), 40))
    found = runs(kept, 1.0, 1e-12)
    assert (np.diff(found.first)[:31] == [RUN] * 2 + [1] * RUN + [RUN] * 13).all()
    assert found.members(np.array([0, 1, 2, 19])).tolist() == [*range(33), *range(64, 80)]


def test_a_run_that_returns_to_its_start_has_its_reach_for_an_error():
    angle = 2.0 * np.pi * np.arange(RUN + 1) / RUN
    ring = np.stack([np.cos(angle), np.sin(angle)], axis=1)
    ring[-1] = ring[0]
    found = runs(whole_chords(Polyline(ring)), 5.0, 0.0)
    assert found.chords.error == pytest.approx([2.0])


@pytest.mark.parametrize("seed", range(16))
def test_decisions_on_long_outlines_agree_with_the_interval(seed):
    """Noise that runs can swallow and noise they cannot, with and without a spike, open and closed, 2-D and 3-D."""
    dimension, closed, noise = 2 + seed % 2, bool(seed & 2), (0.002, 0.05)[seed // 4 % 2]
    new = wavy(4_000, noise, seed, dimension)
    if seed & 8:
        new[1_234] *= 1.01
    a, b = Polyline(new, closed), Polyline(wavy(3_500, 0.0, seed, dimension), closed)
    exact = hausdorff(a, b, 1e-9)
    for factor in (0.2, 0.5, 0.999999, 1.000001, 2.0, 5.0):
        found = within(a, b, factor * exact.certified)
        assert found.inside is (factor > 1.0)
        for one, true in ((found.forward, exact.forward), (found.backward, exact.backward)):
            assert one is None or one.measured <= true.certified
            assert one is None or one.certified >= true.measured
        assert found.backward is not None or not found.inside


@pytest.mark.parametrize("factor", [0.5, 0.99, 1.01, 3.0])
def test_splines_of_many_spans_are_decided_as_well(factor):
    control = wavy(3_000, 0.003, 5)
    knots = np.concatenate([[0.0] * 3, np.linspace(0.0, 1.0, len(control) - 2), [1.0] * 3])
    a, b = Spline(knots, control, 3), Polyline(wavy(3_000, 0.0, 5))
    exact = hausdorff(a, b, 1e-8)
    found = within(a, b, factor * exact.certified)
    assert found.inside is (factor > 1.0)
