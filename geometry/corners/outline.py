"""Even samples of an outline by the arc length of a smoothed copy, and derivatives of smoothed copies.

A staircase is up to 1.41 times longer than the shape it traces, by an amount that changes with its heading. Its own
length is therefore no good parameter; the length of a smoothed copy is. The smoothing is the periodic filter
1 / (1 + (l f)^6), f the angular frequency, which equals a smoothing spline with a third-derivative penalty on even
samples. Open paths are mirrored oddly at both ends, which keeps end points and end directions.

Source: P. H. C. Eilers, B. D. Marx, "Flexible smoothing with B-splines and penalties", Statistical Science 11 (1996),
for the penalty; the filter is its transfer function on an infinite even grid.
"""

from dataclasses import dataclass

import numpy as np
from scipy.fft import next_fast_len

from geometry.arrays import FloatArray
from geometry.polyline import Polyline, points_at

__all__ = ["EvenOutline", "even_outline"]

_PARAMETER_LENGTH = 1.73  # smoothing length of the copy that gives the parameter, in steps of `scale`
_PER_SCALE = 4  # samples in one `scale`


@dataclass(frozen=True, slots=True)
class EvenOutline:
    """A polyline sampled evenly along its smoothed copy.

    Attributes:
        points: samples of the polyline itself, shape (n, d); for open paths both ends are included.
        own: arc length of the polyline at every sample, shape (n,).
        step: arc length of the smoothed copy between samples.
        closed: whether the samples wrap round.
    """

    points: FloatArray
    own: FloatArray
    step: float
    closed: bool

    @property
    def length(self) -> float:
        """Arc length of the smoothed copy."""
        return self.step * (len(self.points) - (0 if self.closed else 1))

    def smoothed(self, length: float, derivatives: int) -> list[FloatArray]:
        """Return a smoothed copy and its derivatives by arc length, each of shape (n, d).

        Args:
            length: smoothing length l of the filter, drawing units.
            derivatives: number of derivatives wanted after the copy itself.
        """
        origin = self.points.mean(axis=0)
        extended = _extended(self.points - origin, self.closed)
        frequency = 2.0 * np.pi * np.fft.rfftfreq(len(extended), self.step)
        spectrum = np.fft.rfft(extended, axis=0) / (1.0 + (length * frequency) ** 6)[:, None]
        # an open path stands behind its mirror image, its last point being the mirror image's first
        taken = np.mod(np.arange(len(self.points)) + (0 if self.closed else len(self.points) - 1), len(extended))
        out = []
        for order in range(derivatives + 1):
            values = np.fft.irfft(spectrum * ((1j * frequency) ** order)[:, None], len(extended), axis=0)
            out.append(values[taken])
        if not self.closed:
            _restore_line(out, self.points - origin, self.step)
        out[0] += origin
        return out


def _extended(points: FloatArray, closed: bool) -> FloatArray:
    """Return a periodic sequence: the closed outline itself, or an open one less its chord, mirrored oddly."""
    if closed:
        return points
    n = len(points)
    straight = points[0] + np.linspace(0.0, 1.0, n)[:, None] * (points[-1] - points[0])
    rest = points - straight  # zero at both ends, so the odd mirror image is continuous and smooth
    return np.concatenate([-rest[:0:-1], rest[:-1]])


def _restore_line(copies: list[FloatArray], points: FloatArray, step: float) -> None:
    n = len(points)
    chord = points[-1] - points[0]
    copies[0] += points[0] + np.linspace(0.0, 1.0, n)[:, None] * chord
    if len(copies) > 1:
        copies[1] += chord / (step * (n - 1))


def even_outline(polyline: Polyline, scale: float) -> EvenOutline:
    """Sample a polyline every quarter of `scale` along its smoothed copy.

    Args:
        polyline: cleaned; longer than `scale`.
        scale: size of the jaggedness, drawing units.
    """
    path, alongs = polyline.path(), polyline.alongs()
    total, closed = float(alongs[-1]), polyline.closed

    def grid(length: float) -> int:
        return int(next_fast_len(max(16, round(length / scale * _PER_SCALE)), real=True))

    count = grid(total)
    own = np.linspace(0.0, total, count + 1)
    first = own[:-1] if closed else own
    raw = EvenOutline(points_at(path, alongs, first, closed), first, total / count, closed)
    (copy,) = raw.smoothed(_PARAMETER_LENGTH * scale, 0)
    along = Polyline(copy, closed).alongs()
    count = grid(float(along[-1]))
    wanted = np.linspace(0.0, along[-1], count + 1)
    own = np.interp(wanted, along, own)
    own = own[:-1] if closed else own
    return EvenOutline(points_at(path, alongs, own, closed), own, float(along[-1]) / count, closed)
