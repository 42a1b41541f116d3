"""Chains of lines and arcs with their jumps of curvature eased, for curves whose curvature is continuous to follow."""

from dataclasses import dataclass

import numpy as np

from geometry.arrays import FloatArray
from geometry.fairing.tangent_chain import ComplexArray, Ends, Fitted, TangentChain, fit_chain

__all__ = ["Eased", "eased"]

_ASIDE = 0.03  # how far an eased joint may lie beside the sharp one, tolerances
_NARROWEST, _WIDEST, _SHARE = 4.0, 6.0, 0.8  # knots, knots, and of the shorter segment
_STEP = 0.05
_REFITS, _ROUNDS = 2, 12


@dataclass(frozen=True, slots=True)
class Eased:
    """A chain with eased joints, as points close enough to be joined by chords.

    Attributes:
        along: arc length, shape (m,).
        points: shape (m,).
    """

    along: FloatArray
    points: ComplexArray

    @property
    def length(self) -> float:
        """Arc length of the chain."""
        return float(self.along[-1])

    def at(self, along: FloatArray) -> FloatArray:
        """Return points at arc lengths, shape of `along` with 2 appended."""
        x, y = (np.interp(along, self.along, part) for part in (self.points.real, self.points.imag))
        return np.stack([x, y], axis=-1)


def eased(fitted: Fitted, points: ComplexArray, ends: Ends, settled: float, knot: float) -> tuple[Eased, FloatArray]:
    """Return a chain with its curvature changing smoothly about every joint, and where along it the points lie.

    That moves the chain a little to one side behind each joint; the chain is fitted again to points moved as much the
    other way, so that the eased curve lies where the sharp one lay.

    Args:
        fitted: the chain.
        points: that it was fitted to, shape (n,).
        ends: conditions that the eased curve meets exactly.
        settled: as for `fit_chain`.
        knot: distance of the knots of the curve that is to follow.
    """
    chain, segment = fitted.chain, fitted.segment
    for _ in range(_REFITS):
        curve, aside, heading = _ease(chain, ends, knot)
        at = chain.feet(points, segment)
        shift = np.interp(at, curve.along, aside)
        left = 1j * np.exp(1j * np.interp(at, curve.along, heading))
        again = fit_chain(chain, segment, points - shift * left, ends, settled, _ROUNDS, near=True)
        if again is None:
            break
        chain, segment = again.chain, again.segment
    return _ease(chain, ends, knot)[0], chain.feet(points, segment)


def _ease(chain: TangentChain, ends: Ends, knot: float) -> tuple[Eased, FloatArray, FloatArray]:
    """Return the eased chain, how far it lies left of the sharp one, and the heading, at the same arc lengths."""
    joints, headings = chain.joints()
    stops = np.concatenate([[0.0], np.cumsum(chain.lengths)])
    count = max(2, int(np.ceil(stops[-1] / _STEP)) + 1)
    along = np.linspace(0.0, stops[-1], count)
    middle = 0.5 * (along[1:] + along[:-1])
    closed = ends.pins is None
    heading = _heading(chain, headings, stops, along, closed, knot)
    direction, between = np.exp(1j * heading), np.exp(1j * _heading(chain, headings, stops, middle, closed, knot))
    step = along[1] - along[0]
    run = np.cumsum((direction[:-1] + 4.0 * between + direction[1:]) * (step / 6.0))  # Simpson's rule
    points = joints[0] + np.concatenate([[0.0], run])
    share = along / stops[-1]
    if ends.pins is None:
        points = points - (points[-1] - points[0]) * share
    else:
        first, last = ends.pins
        points = points + (first - points[0]) * (1.0 - share) + (last - points[-1]) * share
    segment = np.clip(np.searchsorted(stops, along, side="right") - 1, 0, len(chain) - 1)
    return Eased(along, points), chain.offsets(points, segment) * -1.0, heading


def _heading(
    chain: TangentChain, headings: FloatArray, stops: FloatArray, along: FloatArray, closed: bool, knot: float
) -> FloatArray:
    """Return the heading at arc lengths: of the chain, and beside joints the integral of a ramp 3 u^2 - 2 u^3."""
    segment = np.clip(np.searchsorted(stops, along, side="right") - 1, 0, len(chain) - 1)
    out = headings[segment] + chain.curvatures[segment] * (along - stops[segment])
    before, after = chain.curvatures, np.roll(chain.curvatures, -1)
    room = _SHARE * np.minimum(chain.lengths, np.roll(chain.lengths, -1))
    jump = after - before
    width = np.sqrt(40.0 * _ASIDE / np.maximum(np.abs(jump), 1e-9))
    width = np.minimum(np.clip(width, _NARROWEST * knot, _WIDEST * knot), room)
    for k in range(len(chain) if closed else len(chain) - 1):
        for centre in (stops[k + 1], 0.0) if k == len(chain) - 1 else (stops[k + 1],):
            near = slice(*np.searchsorted(along, [centre - 0.5 * width[k], centre + 0.5 * width[k]]))
            away = np.maximum(0.5 - np.abs(along[near] - centre) / width[k], 0.0)
            out[near] += jump[k] * width[k] * away**3 * (1.0 - 0.5 * away)
    return out
