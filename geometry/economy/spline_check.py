"""Whether pieces of a fit are near enough to a spline and as fair, at samples denser than those it was found with."""

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from geometry.arrays import BoolArray, FloatArray
from geometry.bspline import Spline
from geometry.economy.spline_fit import Fit, measure
from geometry.economy.spline_knots import State
from geometry.economy.spline_shape import Guard, Verdict
from geometry.economy.spline_source import Source, sample

__all__ = ["Checked", "Checker"]

_LEAST, _MOST = 4, 16  # samples a span of the source, more where there are few spans
_SAMPLES = 1024  # samples that every source has at least, as long as a span has no more than the most
_FINE_TURN = 0.03  # radians that the source may turn from one sample to the next where it matters
_BOOLE = [(0.0, 7 / 90), (0.25, 32 / 90), (0.5, 12 / 90), (0.75, 32 / 90), (1.0 - 1e-9, 7 / 90)]  # Boole's rule
_PASS = 0.995  # share of the chord error within which a piece is accepted
_HOPELESS = 4.0  # share of the chord error from which on a piece is not worth mending
_SLACK = 1.1  # on what counts as a turning point, for rounding and other samples than the fit was held to


@dataclass(frozen=True, eq=False)
class Checked:
    """What a check has found.

    Attributes:
        near: pieces within the chord error, shape (pieces,).
        hopeful: pieces that are not far from it, shape (pieces,).
        verdict: how fair they are.
        u: parameters on the fit that belong to the samples of the source, shape (n,).
    """

    near: BoolArray
    hopeful: BoolArray
    verdict: Verdict
    u: FloatArray


class Checker:
    """Compares fits with a spline.

    Attributes:
        source: samples of the spline, for finding fits and for checking them.
    """

    def __init__(self, spline: Spline, chord_error: float) -> None:
        self._spline, self.chord_error = spline, chord_error
        self.source = sample(spline, int(np.clip(_SAMPLES // len(spline.spans), _LEAST, _MOST)))

    @cached_property
    def _fine(self) -> Source:
        return sample(self._spline, _MOST, _FINE_TURN)

    def check(self, tried: BoolArray, used: Source, state: State) -> Checked:
        """Tell which pieces are near enough and how fair they are.

        Args:
            tried: pieces that the fit is of.
            used: samples that it was made with.
            state: the fit.
        """
        source = self.source.only(tried)
        u, sure, bound = self._distances(source, used, state.u, state.fit)
        limit = _PASS * self.chord_error
        near = bound <= limit
        doubtful = ~near & (sure <= limit)
        if doubtful.any():
            near |= doubtful & (self._distances(self._fine.only(tried), source, u, state.fit)[2] <= limit)
        verdict = Guard(source, self.chord_error, _SLACK).check(state.fit, u)
        return Checked(near, sure <= _HOPELESS * self.chord_error, verdict, u)

    def _distances(
        self, source: Source, used: Source, u: FloatArray, fit: Fit
    ) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Return parameters of the samples, and for every piece the largest distance there, and an estimate all along.

        A point of the fit between two samples is at most half their distance along the fit away from one of them; so
        where that is a good deal more than along the source, half of the surplus is added to the distances. What the
        curves part and meet again between two samples is estimated from their curvatures.
        """
        u = carried(used, source, u)
        distance = np.zeros(len(u))
        for _ in range(2):
            u, distance = measure(source, fit, u)
        inside = source.piece[1:] == source.piece[:-1]
        step = np.where(inside, np.diff(source.along), 0.0)
        ahead = np.where(inside, np.diff(u), 0.0)
        speed = [weight * _speed(fit, u[:-1] + share * ahead) for share, weight in _BOOLE]
        run = ahead * np.sum(speed, axis=0)
        surplus = 0.5 * np.maximum(run - 1.25 * step, 0.0)
        bend = np.abs(source.curvature - fit.curvature(u))
        bow = 0.0625 * step**2 * (bend[1:] + bend[:-1])
        between = np.append(np.where(inside, np.maximum(distance[1:], distance[:-1]) + surplus + bow, 0.0), 0.0)
        starts = source.first[:-1]
        largest = np.maximum.reduceat(distance, starts)
        return u, largest, np.maximum(largest, np.maximum.reduceat(between, starts))


def _speed(fit: Fit, u: FloatArray) -> FloatArray:
    slope = fit.at(*fit.basis.locate(u), 1)[1]
    return np.sqrt((slope * slope).sum(axis=0))


def carried(used: Source, dense: Source, u: FloatArray) -> FloatArray:
    """Return start parameters for other samples of the same curve.

    Args:
        used: the samples that parameters are given for.
        dense: the others, of pieces in the same order.
        u: parameters of the samples used.
    """
    share = (dense.along - dense.low[dense.piece]) * (used.lengths / dense.lengths)[dense.piece]
    at = used.low[dense.piece] + share
    if used.periodic:
        period = used.high[0]
        return np.interp(at, np.append(used.along, period), np.append(u, u[0] + period))
    return np.interp(at, used.along, u)
