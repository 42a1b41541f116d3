"""Parameters for interpolation: a strictly increasing number for every node of a curve."""

from typing import Literal

import numpy as np

from geometry.arrays import FloatArray
from geometry.errors import CoincidentNodesError, GeometryError, NotFiniteError, TooFewPointsError

__all__ = [
    "ParameterKind",
    "centripetal_parameters",
    "chord_length_parameters",
    "node_parameters",
    "uniform_parameters",
]

ParameterKind = Literal["chord", "centripetal", "uniform"]


def chord_length_parameters(nodes: FloatArray, closed: bool = False) -> FloatArray:
    """Return the chord length from the first node to every node.

    Not scaled to [0, 1], so derivatives stay near unit tangents and tolerances keep their unit.

    Args:
        nodes: points the curve passes through, finite, shape (n, d), d = 2 or 3, n >= 2, drawing units.
        closed: whether the curve returns to the first node, which is not repeated; then n >= 3.

    Returns:
        Strictly increasing parameters, drawing units; the first is 0. Shape (n,), or (n + 1,) when closed: the
        last one is that of the return to the first node.

    Raises:
        CoincidentNodesError: a node adds no length, so it cannot be given a parameter.
        NotFiniteError: a coordinate is NaN or infinite.
        TooFewPointsError: fewer than 2 nodes, or 3 when closed.

    Source: M. S. Floater, T. Surazhsky, "Parameterization for curve interpolation", in Topics in
        Multivariate Approximation and Interpolation, Elsevier 2005, p. 101 (chordal case).
    """
    return _summed(nodes, closed, 1.0)


def centripetal_parameters(nodes: FloatArray, closed: bool = False) -> FloatArray:
    """Return the sum of square roots of chords from the first node to every node.

    Between chord length and uniform: it overshoots less where short chords follow long ones.

    Args, Returns, Raises: as `chord_length_parameters`; the unit is the square root of the drawing's.

    Source: E. T. Y. Lee, "Choosing nodes in parametric curve interpolation", Computer-Aided Design 21 (1989), p. 363.
    """
    return _summed(nodes, closed, 0.5)


def uniform_parameters(nodes: FloatArray, closed: bool = False) -> FloatArray:
    """Return 0, 1, 2, ... for the nodes; coincident nodes are refused as in the other kinds.

    Args, Returns, Raises: as `chord_length_parameters`, without a unit.
    """
    return _summed(nodes, closed, 0.0)


def node_parameters(nodes: FloatArray, kind: ParameterKind = "chord", closed: bool = False) -> FloatArray:
    """Return the parameters of a named kind.

    Raises:
        GeometryError: no such kind; else as `chord_length_parameters`.
    """
    exponents: dict[str, float] = {"chord": 1.0, "centripetal": 0.5, "uniform": 0.0}
    if kind not in exponents:
        raise GeometryError(f"there is no parameter kind {kind!r}; use chord, centripetal or uniform")
    return _summed(nodes, closed, exponents[kind])


def _summed(nodes: FloatArray, closed: bool, exponent: float) -> FloatArray:
    nodes = np.asarray(nodes, dtype=np.float64)
    bad = np.flatnonzero(~np.isfinite(nodes).all(axis=1))
    if bad.size:
        raise NotFiniteError(int(bad[0]))
    if len(nodes) < (3 if closed else 2):
        raise TooFewPointsError(len(nodes), 3 if closed else 2)
    path = np.vstack([nodes, nodes[:1]]) if closed else nodes
    chords = np.linalg.norm(np.diff(path, axis=0), axis=1)
    sums = np.concatenate([[0.0], np.cumsum(chords**exponent)])
    stalled = np.flatnonzero((chords <= 0.0) | (np.diff(sums) <= 0.0))  # checks what is promised, rounding included
    if stalled.size:
        raise CoincidentNodesError(int(stalled[0]), *nodes[stalled[0]].tolist())
    return sums
