"""Pieces of a fit as clamped splines of their own."""

import numpy as np

from geometry.arrays import FloatArray
from geometry.bspline import Spline
from geometry.economy.spline_fit import Fit

__all__ = ["at_home", "clamped", "line", "piece_of"]


def at_home(piece: Spline, home: Spline) -> Spline:
    """Return a piece moved to where its source stands, with exactly the same ends."""
    control = piece.control + (home.control[0] - piece.control[0])
    control[0], control[-1] = home.control[0], home.control[-1]
    return Spline(piece.knots, control, piece.degree)


def line(piece: Spline, length: float) -> Spline:
    """Return the straight line between the ends as one span."""
    p = piece.degree
    share = np.linspace(0.0, 1.0, p + 1)[:, None]
    control = piece.control[0] + share * (piece.control[-1] - piece.control[0])
    control[-1] = piece.control[-1]
    return Spline(np.repeat([0.0, length], p + 1), control, p)


def piece_of(fit: Fit, index: int) -> Spline:
    """Return one piece of a fit as a clamped spline."""
    basis, p = fit.basis, fit.basis.ids.shape[1] - 1
    low, high = basis.low[index], basis.high[index]
    inner = basis.inner[(basis.inner > low) & (basis.inner < high)] - low
    knots = np.concatenate([np.zeros(p + 1), inner, np.full(p + 1, high - low)])
    first, last = basis.fixed[2 * index : 2 * index + 2]
    return Spline(knots, fit.control[first : last + 1], p)


def clamped(fit: Fit, period: float) -> Spline:
    """Return a periodic fit as a clamped closed spline over one period, by knot insertion at its first break.

    Control point j of the fit is the blossom at breaks j - p + 1 .. j, so those from p - 1 to n stay.
    """
    breaks, p = fit.basis.inner, fit.basis.ids.shape[1] - 1
    n = len(breaks)
    start, end = breaks[0], breaks[0] + period
    full = np.concatenate([[start] * (p + 1), breaks[1:], [end] * (p + 1)])
    control = np.empty((n + p, fit.control.shape[1]))
    control[p - 1 : n + 1] = fit.control[np.arange(p - 1, n + 1) % n]
    for j in range(p - 1):
        control[j] = _periodic_blossom(fit, period, 0, full[j + 1 : j + p + 1])
        control[n + 1 + j] = _periodic_blossom(fit, period, n - 1, full[n + 2 + j : n + 2 + j + p])
    control[-1] = control[0]
    return Spline(full - start, control, p, closed=True, smooth_seam=True)


def _periodic_blossom(fit: Fit, period: float, span: int, arguments: FloatArray) -> FloatArray:
    """Return the blossom of the polynomial on one span of a periodic fit, shape (d,)."""
    breaks, p = fit.basis.inner, len(arguments)
    n = len(breaks)
    window = np.arange(span - p, span + p + 1)
    knots = breaks[window % n] + period * (window // n)  # knots[p] is the start of the span
    points = [fit.control[(span + j) % n] for j in range(p + 1)]
    for r, u in enumerate(arguments.tolist(), start=1):
        for j in range(p, r - 1, -1):
            left, right = knots[j], knots[p + 1 + j - r]
            w = (u - left) / (right - left)
            points[j] = (1.0 - w) * points[j - 1] + w * points[j]
    return points[p]
