"""Fewest arcs: the chain of lines and circular arcs of least count within a chord error, tangent continuous."""

from collections.abc import Generator
from dataclasses import replace

import numpy as np

from geometry.arcs import ArcChain, full_circle
from geometry.arrays import BoolArray, FloatArray
from geometry.bspline import Spline
from geometry.economy.arc_batch import chain_bulges
from geometry.economy.arc_moves import FIRM, Driver, Trial, bends, fits, weak_joints, with_more, without
from geometry.economy.arc_newton import Polished, measure_chains, polish
from geometry.economy.arc_radii import Radii, within_radii
from geometry.economy.arc_start import Chain, arc_demand, start_chain
from geometry.economy.biarcs import biarc_chain
from geometry.economy.check import distance_to_arcs
from geometry.economy.cuts import cut_at, sharp_nodes
from geometry.economy.track import ComplexArray, Track, track_of
from geometry.errors import GeometryError

__all__ = ["fewest_arcs"]

LENGTH = 100.0  # size that a curve is brought near before arcs are laid
GROW_ROUNDS = 12
EXACT = 0.02  # share of the chord error at which polishing stops where true lines and arcs may be found
ROUND = 2.5  # arcs asked for under which a closed curve may be a circle
SHARP = 1e-3  # radius, in chord errors, under which a bend is a corner


def fewest_arcs(
    spline: Spline,
    chord_error: float,
    thorough: bool = False,
    least_radius: float | None = None,
    most_radius: float | None = None,
) -> ArcChain:
    """Return a chain of few lines and arcs within a chord error of a planar spline, both ways.

    Between corners the chain is tangent continuous, its joints need not lie on the curve; a closed spline without a
    corner gives a closed chain that is tangent continuous at the seam too. A smooth piece within the chord error of
    its chord becomes one line. A circle comes back as two semicircles (`full_circle`). A bend of 0.3 radians or more
    with a radius under a thousandth of the chord error counts as a corner.

    Args:
        spline: degree 1 to 3, planar.
        chord_error: largest distance allowed between spline and chain, drawing units.
        thorough: whether to spend more time on a smaller count.
        least_radius: arcs shall be no tighter, drawing units; corners have no radius.
        most_radius: arcs shall be no flatter, drawing units; lines have no radius.

    Returns:
        The chain, closed when the spline is, checked on dense samples. Where the sparse method finds nothing within the
        chord error, biarcs are halved until they are. The chord error goes before the limits of radius: where a limit
        cannot be had within it, arcs pass the limit, and `arc_radii.outside_radii` tells which.

    Raises:
        GeometryError: the spline is not planar or has no length, the chord error or a limit is not positive, or the
            least radius is over the largest.
    """
    for name, value in (("chord error", chord_error), ("least radius", least_radius), ("largest radius", most_radius)):
        if value is not None and not (value > 0.0 and np.isfinite(value)):
            raise GeometryError(f"{name} {value:g} is not a positive number")
    if least_radius is not None and most_radius is not None and least_radius > most_radius:
        raise GeometryError(f"the least radius {least_radius:g} is over the largest, {most_radius:g}")
    # in lengths near a common one, so that the count does not depend on the unit; by a power of two: nothing rounds
    size = float(np.abs(spline.control - spline.control[0]).max())
    unit = 2.0 ** round(np.log2(LENGTH / size)) if size > 0.0 else 1.0
    local = Spline(
        spline.knots, (spline.control - spline.control[0]) * unit, spline.degree, spline.closed, spline.smooth_seam
    )
    track, error = track_of(local), chord_error * unit
    track = cut_at(track, sharp_nodes(track, SHARP * error))
    radii = Radii(0.0 if least_radius is None else least_radius * unit, (most_radius or np.inf) * unit)
    out = _chain_of(track, error, thorough, radii)
    while track.chained and len(out.bulges) < 2:  # a loop smaller than the chord error must not fold to nothing
        error *= 0.25
        out = _chain_of(track, error, thorough, radii)
    return ArcChain(out.points / unit + spline.control[0], out.bulges, out.closed)


def _chain_of(track: Track, chord_error: float, thorough: bool, radii: Radii) -> ArcChain:
    straight = _straight_pieces(track, chord_error)
    chains: list[Chain | None] = [None] * len(track.first)
    drivers: dict[int, Driver] = {}
    for piece in np.flatnonzero(~straight).tolist():
        drivers[piece] = _drive(track, piece, chord_error, thorough, radii)
    waiting = {piece: next(driver) for piece, driver in drivers.items()}
    while waiting:
        pieces = list(waiting)
        for piece, result in zip(pieces, _polished(track, chord_error, list(waiting.values())), strict=True):
            try:
                waiting[piece] = drivers[piece].send(result)
            except StopIteration as stop:
                chains[piece] = stop.value
                del waiting[piece]
    return _assembled(track, chains)


def _polished(track: Track, chord_error: float, trials: list[Trial]) -> list[Polished]:
    return polish(track, chord_error, [trial[0] for trial in trials], [trial[1] for trial in trials])


def _straight_pieces(track: Track, chord_error: float) -> BoolArray:
    """Return which open pieces lie within the chord error of their chord."""
    if track.closed:
        return np.zeros(1, dtype=np.bool_)
    node = np.arange(len(track.s))
    piece = np.searchsorted(track.first, node, side="right") - 1
    points = track.points(track.s)
    start, end = points[track.first][piece], points[track.last][piece]
    off = distance_to_arcs(points, start, end, np.zeros(len(points)))
    return np.asarray(np.maximum.reduceat(off, track.first) <= 0.99 * chord_error)


def _drive(track: Track, piece: int, chord_error: float, thorough: bool, radii: Radii) -> Driver:
    """Find the chain of one piece: grow until it fits, shrink while it fits, make lines, heed the limits of radius."""
    demand = arc_demand(track, piece, chord_error)
    accepted = yield from _grown(track, piece, demand, chord_error, thorough)
    if accepted is None:
        accepted = _by_biarcs(track, piece, demand, chord_error)
    for _ in range(3):  # what has settled into true lines and arcs may shrink again
        accepted = yield from _shrunk(accepted, chord_error, thorough)
        count = accepted.chain.count
        accepted = yield from _with_lines(accepted, chord_error, thorough)
        if not len(weak_joints(accepted.chain, np.zeros(count + 1, dtype=np.bool_), chord_error, chord_error)):
            break
    accepted = yield from within_radii(track, accepted, chord_error, radii)
    return accepted.chain


def _grown(
    track: Track, piece: int, demand: tuple[FloatArray, FloatArray], chord_error: float, thorough: bool
) -> Generator[Trial, Polished, Polished | None]:
    """Start from the demand and add joints where the error is, until the chain fits; None when it never does."""
    ends = track.node_points[[track.first[piece], track.last[piece]]]
    least = 4 if track.closed else 1 if abs(ends[1] - ends[0]) > 4.0 * chord_error else 2
    estimate = float(demand[1][-1])
    if track.closed and estimate < ROUND:
        result = yield start_chain(track, piece, demand, 2, 0.25), FIRM
        if fits(result, chord_error):
            return result
    count = max(least, int(np.ceil(estimate) if thorough else np.ceil(1.03 * estimate + 0.5)))
    restarts = 0
    chain = start_chain(track, piece, demand, count, 0.25)
    for turn in range(GROW_ROUNDS):
        result = yield chain, FIRM
        if fits(result, chord_error):
            return result
        lost = not np.isfinite(result.worst) or (turn > 3 and turn % 3 == 0 and result.worst > 8.0 * chord_error)
        if lost:
            restarts += 1
            if restarts > 3:
                return None
            count = int(np.ceil(1.04 * count + 1.0))
            chain = start_chain(track, piece, demand, count, 0.25 + 0.37 * restarts)
            continue
        chain = with_more(track, result, chord_error, thorough)
        count = chain.count
    return None


def _by_biarcs(track: Track, piece: int, demand: tuple[FloatArray, FloatArray], chord_error: float) -> Polished:
    count = max(4, int(np.ceil(0.5 * demand[1][-1])))
    chain = start_chain(track, piece, demand, count, 0.0)
    s = np.append(chain.s, chain.s[0] + track.period) if track.closed else chain.s
    return measure_chains(track, [biarc_chain(track, piece, s, chord_error)], chord_error)[0]


def _shrunk(accepted: Polished, chord_error: float, thorough: bool) -> Generator[Trial, Polished, Polished]:
    """Take out the weakest joints while the chain still fits."""
    barred = np.zeros(len(accepted.chain.joint), dtype=np.bool_)
    failures, share = 0, 1.0
    while failures < (3 if thorough else 2):
        weak = weak_joints(accepted.chain, barred, (14.0 if thorough else 8.0) * chord_error, chord_error)
        if not len(weak):
            break
        weak = weak[: max(1, int(np.ceil(share * len(weak))))]
        result = yield without(accepted.chain, weak), FIRM
        if fits(result, chord_error):
            accepted, share = result, 1.0
            barred = np.delete(barred, weak)
        else:
            failures += len(weak) == 1
            barred[weak[0]] = len(weak) == 1
            share = 1.0 / 3.0 if len(weak) > 1 and share == 1.0 else 0.0
    return accepted


def _with_lines(accepted: Polished, chord_error: float, thorough: bool) -> Generator[Trial, Polished, Polished]:
    """Hold nearly straight arcs straight where the chain still fits, the boldest choice first."""
    for share in (3.0, 1.0, 0.25, 0.02) if thorough else (3.0, 0.25, 0.02):
        chain = accepted.chain
        joints = np.append(chain.joint, chain.joint[0]) if chain.closed else chain.joint
        chord = np.abs(np.diff(joints))
        half = np.arcsin(np.clip(0.5 * chord * bends(chain, joints), -1.0, 1.0))
        sagitta = 0.25 * chord * np.abs(half)
        line = chain.line.copy()
        for index in np.argsort(sagitta).tolist():
            if sagitta[index] >= share * chord_error:
                break
            neighbours = [index - 1, (index + 1) % chain.count] if chain.closed else [index - 1, index + 1]
            if not any(0 <= k < chain.count and line[k] for k in neighbours) and not (chain.closed and line[index - 1]):
                line[index] = True
        if np.array_equal(line, chain.line):
            continue
        result = yield replace(chain, held=np.where(line, 0.0, np.nan)), FIRM
        if fits(result, chord_error):
            return result
        if share == 3.0:  # settle: true lines then stand out from slight arcs
            settled = yield chain, EXACT
            if fits(settled, chord_error):
                accepted = settled
    return accepted


def _assembled(track: Track, chains: list[Chain | None]) -> ArcChain:
    """Return the chains of all pieces as one; a piece without a chain is a line."""
    points: list[ComplexArray] = []
    bulges: list[FloatArray] = []
    ends = track.node_points
    for piece, chain in enumerate(chains):
        if chain is None:
            points.append(ends[track.first[piece]][None])
            bulges.append(np.zeros(1))
            continue
        joints, bent = chain_bulges(track, chain)
        points.append(joints[:-1])
        bulges.append(bent)
    path, bent = np.concatenate([*points, ends[track.last[-1:]]]), np.concatenate(bulges)
    if track.chained:
        path[-1] = path[0]
    # what a standstill or a cusp leaves behind: no line or arc of no length is written
    solid = np.abs(np.diff(path)) > 1e-10 * LENGTH
    if solid.sum() > 1 and not solid.all():
        begin = path[0]
        path, bent = np.append(path[:-1][solid], path[-1]), bent[solid]
        path[0] = begin
    out = ArcChain(track.to_xy(path[:-1] if track.chained else path), bent, track.chained)
    if track.closed and len(out.bulges) == 2:
        centre, radius = out.circles()
        if abs(radius[0] - radius[1]) <= 1e-9 * radius[0]:
            circle = full_circle(centre.mean(axis=0), float(radius.mean()))
            return circle if out.bulges[0] > 0.0 else circle.reversed()
    return out
