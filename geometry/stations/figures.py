"""Written figures: how finely the entries of a column were rounded, and the slips that turn one number into another."""

from decimal import Decimal
from itertools import combinations, product

import numpy as np

from geometry.arrays import FloatArray

__all__ = ["resolutions", "slips"]

_MOST_FIGURES = 8  # numbers with more come from a computation: nobody types them
_FINEST = 1e-7  # of the largest entry: rounding finer than this is not told apart


def resolutions(column: FloatArray) -> list[FloatArray]:
    """Return the ways in which a column may have been rounded: the unit of the last figure of every entry.

    One way is a common number of decimals, the other a common number of figures; both are read off the shortest
    decimal form of the entries, of which nine in ten are believed (a slip adds figures to one).

    Args:
        column: finite, shape (n,).

    Returns:
        One array of shape (n,), or two where they differ; all above 0.
    """
    size = float(np.abs(column).max())
    if size == 0.0:
        return [np.ones(len(column))]
    least = _FINEST * size
    parts = [_figures(float(value)) for value in column]
    decimals = np.array([-exponent for _, exponent in parts])
    counts = np.array([len(digits) for digits, _ in parts])
    common = np.full(len(column), max(10.0 ** -float(np.quantile(decimals, 0.9, method="lower")), least))
    figures = int(np.quantile(counts, 0.9, method="lower"))
    top = np.floor(np.log10(np.maximum(np.abs(column), least)))
    own = np.maximum(10.0 ** (top - figures + 1), least)
    return [common] if np.array_equal(common, own) else [common, own]


def slips(value: float, gross: bool = False) -> FloatArray:
    """Return the numbers that a slip of the pen turns into `value`: what may have been meant, without repeats.

    Slips: two different figures swapped, the sign lost or added, the point shifted by one place, and, unless only gross
    ones are asked for, one figure wrong.
    """
    digits, exponent = _figures(value)
    if value == 0.0 or len(digits) > _MOST_FIGURES:
        return np.array([-value, 10.0 * value, 0.1 * value]) if value else np.zeros(0)
    sign, meant = "-" if value < 0.0 else "", set()
    for lead, trail in product(range(3), repeat=2):  # 8.1 may have been 80.1, written 08.1; 18.0 may have been 10.8
        form, power = "0" * lead + digits + "0" * trail, exponent - trail
        for i, j in combinations(range(len(form)), 2):
            swapped = list(form)
            swapped[i], swapped[j] = swapped[j], swapped[i]
            meant.add(float(f"{sign}{''.join(swapped)}e{power}"))
        if lead == 0 and trail < 2 and not gross:
            for i in range(len(form)):
                meant.update(float(f"{sign}{form[:i]}{figure}{form[i + 1 :]}e{power}") for figure in "0123456789")
    meant.update(float(f"{sign}{digits}e{exponent + shift}") for shift in (-1, 1))
    meant.add(-value)
    meant.discard(value)
    return np.array(sorted(meant))


def _figures(value: float) -> tuple[str, int]:
    """Return the significant figures and the exponent of the last one: 0.0120 gives "12" and -3; 0 gives "0" and 0."""
    _, digits, exponent = Decimal(repr(float(value))).as_tuple()
    text = "".join(map(str, digits))
    kept = text.rstrip("0")
    return (kept, int(exponent) + len(text) - len(kept)) if kept else ("0", 0)
