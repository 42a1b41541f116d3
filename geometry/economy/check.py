"""Sampled two-sided distance between a track and the chain of lines and arcs laid along it, in linear time.

The chain's joints know where on the track they belong, so every sample is compared with its own neighbourhood only.
Each sample's distance is to a point that is really there (a point of the chain, a point of the curve): the values are
upper bounds at the samples. The samples are dense, and between them peaks are estimated by parabolas. The proven bound
is the business of `geometry.deviation`.
"""

import numpy as np

from geometry.arrays import FloatArray, IntArray
from geometry.economy.track import ComplexArray, Track

__all__ = ["arc_samples", "distance_to_arcs", "nearby_distance", "two_sided"]


FEW = 8  # samples, asked for where lines are many and short, up to which feet are near


def two_sided(
    track: Track,
    start: ComplexArray,
    end: ComplexArray,
    bulges: FloatArray,
    s: FloatArray,
    group: IntArray,
    limit: float,
    samples: int = 16,
    peaks: bool = False,
) -> FloatArray:
    """Return, per line or arc, the largest sampled distance between it and its stretch of the track.

    Args:
        track: the curve.
        start, end: ends of the lines and arcs, complex, shapes (n,).
        bulges: of the lines and arcs, shape (n,).
        s: arc length on the track that belongs to the start and the end of each, shape (n, 2).
        group: chain that each belongs to, shape (n,); only neighbours of the same chain are looked at.
        limit: distance over which a sample is looked at again, of the chain from many places of the track, of the track
            from the neighbouring arcs.
        samples: on every stretch, each way; where all of a chain's are within the limit, the nodes of the track on it
            are looked at besides.
        peaks: whether to estimate peaks between samples; lines through gates need that less.
    """
    largest = _peaks if peaks else _largest
    share = (np.arange(samples) + 0.5) / samples
    along = s[:, :1] + (s[:, 1:] - s[:, :1]) * share
    curve = track.points(along)
    to_chain = distance_to_arcs(curve, start[:, None], end[:, None], bulges[:, None])
    row = np.flatnonzero(largest(to_chain) > limit)
    if row.size:  # near a joint the neighbour may be nearer
        owner = np.repeat(row, samples)
        off = _to_neighbours(curve[row].ravel(), to_chain[row].ravel(), owner, start, end, bulges, group, track.closed)
        to_chain[row] = off.reshape(-1, samples)
    points = arc_samples(start[:, None], end[:, None], bulges[:, None], np.linspace(0.0, 1.0, samples + 1))
    guess = s[:, :1] + (s[:, 1:] - s[:, :1]) * np.linspace(0.0, 1.0, samples + 1)
    reach = s[:, 1:] - s[:, :1]
    low, high = s[:, :1] - reach, s[:, 1:] + reach
    if not track.closed:
        piece = np.searchsorted(track.s[track.first], 0.5 * (s[:, 0] + s[:, 1]), side="right") - 1
        low = np.maximum(low, track.s[track.first][piece][:, None])
        high = np.minimum(high, track.s[track.last][piece][:, None])
    steps = 2 if samples > FEW else 1
    to_curve = largest(nearby_distance(track, points, guess, low, high, steps))
    to_chain = largest(to_chain)
    doubt = np.flatnonzero(to_curve > limit)  # a wrong foot, may be: look again from the nearest of many places
    if doubt.size:
        tried = low[doubt] + (high - low)[doubt] * np.linspace(0.0, 1.0, 4 * samples + 1)
        away = np.abs(points[doubt][:, :, None] - track.points(tried)[:, None, :])
        guess = np.take_along_axis(tried, np.argmin(away, axis=2), axis=1)
        again = largest(nearby_distance(track, points[doubt], guess, low[doubt], high[doubt], 8))
        to_curve[doubt] = np.minimum(to_curve[doubt], again)
    worst = np.maximum(to_chain, to_curve)
    over = np.zeros(int(group.max()) + 1, dtype=np.bool_)
    over[group[worst > limit]] = True
    if over.all():  # too far anyway
        return worst
    node, owner = _nodes_inside(track, s)
    if over.any():
        kept = ~over[group[owner]]
        node, owner = node[kept], owner[kept]
    at = track.node_points[node]
    off = distance_to_arcs(at, start[owner], end[owner], bulges[owner])
    more = np.flatnonzero(off > worst[owner])
    at, off, owner = at[more], off[more], owner[more]
    off = _to_neighbours(at, off, owner, start, end, bulges, group, track.closed)
    np.maximum.at(worst, owner, off)
    return worst


def _largest(values: FloatArray) -> FloatArray:
    return np.asarray(values.max(axis=1))


def _peaks(values: FloatArray) -> FloatArray:
    """Return the largest value of every row of samples, or of the parabola through a sample and its neighbours.

    Parabolas pass the true peak where distances fall off to one side, by half a per cent at the most seen.
    """
    before, at, after = values[:, :-2], values[:, 1:-1], values[:, 2:]
    bend = 2.0 * at - before - after
    top = (at >= before) & (at >= after) & (bend > 0.0)
    rise = np.where(top, (after - before) ** 2 / np.where(top, 8.0 * bend, 1.0), 0.0)
    return np.asarray(np.maximum(values.max(axis=1), (at + rise).max(axis=1)))


def _to_neighbours(
    points: ComplexArray,
    off: FloatArray,
    owner: IntArray,
    start: ComplexArray,
    end: ComplexArray,
    bulges: FloatArray,
    group: IntArray,
    closed: bool,
) -> FloatArray:
    """Return the lesser of distances `off` of points from their own line or arc and those from its two neighbours."""
    n = len(bulges)
    for other in (-1, 1):
        index = np.mod(owner + other, n) if closed else np.minimum(np.maximum(owner + other, 0), n - 1)
        index = np.where(group[index] == group[owner], index, owner)
        off = np.minimum(off, distance_to_arcs(points, start[index], end[index], bulges[index]))
    return off


def _nodes_inside(track: Track, s: FloatArray) -> tuple[IntArray, IntArray]:
    """Return the nodes of the track that lie on given stretches (in order, not overlapping), and which each lies on."""
    along = track.s
    if track.closed:
        along = np.where(along < s[0, 0], along + track.period, along)
    owner = np.clip(np.searchsorted(s[:, 0], along, side="right") - 1, 0, len(s) - 1)
    node = np.flatnonzero((along >= s[owner, 0]) & (along <= s[owner, 1]))
    return node, owner[node]


def nearby_distance(
    track: Track, points: ComplexArray, guess: FloatArray, low: FloatArray, high: FloatArray, steps: int = 2
) -> FloatArray:
    """Return distances from points to points of the track near their feet, by Newton's method held between bounds.

    Never less than the true distance, since it is that to a point of the track.
    """
    s, best = guess, np.full(points.shape, np.inf)
    for _ in range(steps):
        centre, slope, bend = track.motion(s)
        q = points - centre
        best = np.minimum(best, np.abs(q))
        squared = slope.real**2 + slope.imag**2
        down = squared - q.real * bend.real - q.imag * bend.imag
        ahead = q.real * slope.real + q.imag * slope.imag
        s = np.clip(s + ahead / np.maximum(down, 0.2 * squared + 1e-30), low, high)
    return np.minimum(best, np.abs(points - track.points(s)))


def arc_samples(start: ComplexArray, end: ComplexArray, bulge: FloatArray, share: FloatArray) -> ComplexArray:
    """Return points at shares of the sweep of lines and arcs (broadcast)."""
    half = 2.0 * np.arctan(bulge)
    flat = np.abs(half) < 1e-12
    ratio = np.where(flat, share, np.sin(share * half) / np.where(flat, 1.0, np.sin(half)))
    return np.asarray(start + (end - start) * ratio * np.exp(-1j * half * (1.0 - share)))


def distance_to_arcs(points: ComplexArray, start: ComplexArray, end: ComplexArray, bulge: FloatArray) -> FloatArray:
    """Return distances from points to lines and arcs given by ends and bulge (broadcast).

    Beside the sweep the distance is the radial one, written without the radius so that lines need no other formula:
    with K the curvature and v the point seen from the start along the start tangent, A = K |v|^2 - 2 Im v and the
    signed distance is A / (1 + sqrt(1 + K A)). Outside the sweep it is the distance to the nearer end.
    """
    chord = end - start
    length = np.maximum(np.abs(chord), 1e-300)
    half = 2.0 * np.arctan(bulge)
    curvature = 2.0 * np.sin(half) / length
    unit = chord / length
    away = (points - start) * np.conj(unit)
    v = away * np.exp(1j * half)
    a = curvature * (v.real**2 + v.imag**2) - 2.0 * v.imag
    radial = np.abs(a / (1.0 + np.sqrt(np.maximum(1.0 + curvature * a, 0.0))))
    # angle from the chord's middle normal: inside the sweep when the point seen from both ends opens on the arc's side
    turned = np.arctan2(v.real * curvature, 1.0 - v.imag * curvature)
    sweep = 2.0 * half
    ahead = turned * np.sign(sweep)
    inside_arc = np.where(ahead < 0.0, ahead + 2.0 * np.pi, ahead) <= np.abs(sweep)
    inside_line = (away.real >= 0.0) & (away.real <= length) & (np.abs(chord) > 0.0)
    inside = np.where(np.abs(half) < 1e-9, inside_line, inside_arc)
    ends = np.minimum(np.abs(points - start), np.abs(points - end))
    return np.where(inside, radial, ends)
