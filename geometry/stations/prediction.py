"""Every value of a column predicted from the others, by Gaussian process regression.

A column of a table is taken for a smooth function of its inputs plus a straight line plus rounding. How smooth, how
large and how rough it is, is not assumed: a grid of length scales, sizes and errors is weighed by the likelihood of
the column itself, so that a prediction is as sure of itself as the column allows.
Sources: C. E. Rasmussen, C. K. I. Williams, Gaussian Processes for Machine Learning, MIT Press 2006, section 2.7 (an
explicit line with a vague prior), 4.2.1 (the kernels), 5.4.2 (leaving one out in closed form);
O. Dubrule, "Cross validation of kriging in a unique neighborhood", Mathematical Geology 15 (1983).
"""

from dataclasses import dataclass

import numpy as np

from geometry.arrays import FloatArray

__all__ = ["Predictions", "log_sum", "predictions"]

_LENGTHS, _SIZES, _ERRORS, _ERROR_STEP = 9, 9, 8, 3.0
_ROUNDING = 12.0**-0.5  # standard deviation of rounding to whole units
_LOG_ROOT = 0.5 * float(np.log(2.0 * np.pi))
_DEEP = 15.0  # models less likely than the best one by this many natural units of evidence are left out of mixtures


@dataclass(frozen=True, slots=True, eq=False)
class Predictions:
    """What the grid of models says about a column.

    Attributes:
        evidence: logarithm of the density of the column under every model, shape (g,).
        mean, deviation: every entry as predicted from the others and its standard deviation, shapes (g, n).
        density: logarithm of the density of every entry given the others, shape (g, n).
    """

    evidence: FloatArray
    mean: FloatArray
    deviation: FloatArray
    density: FloatArray

    @property
    def others(self) -> FloatArray:
        """Logarithm of the density of all entries but one, under every model, shape (g, n)."""
        return self.evidence[:, None] - self.density

    def with_values(self, row: int, values: FloatArray) -> FloatArray:
        """Return the logarithm of the density of the column with other values in a row, shape of values."""
        others = self.others[:, row]
        likely = np.flatnonzero(others > others.max() - _DEEP)
        mean, deviation = self.mean[likely, row, None], self.deviation[likely, row, None]
        density = -0.5 * ((values - mean) / deviation) ** 2 - np.log(deviation) - _LOG_ROOT
        return log_sum(others[likely, None] + density)

    def predicted(self, row: int) -> tuple[float, float]:
        """Return mean and standard deviation of an entry given the others, over all models."""
        others = self.others[:, row]
        weight = np.exp(others - log_sum(others[:, None])[0])
        mean = float(weight @ self.mean[:, row])
        variance = float(weight @ (self.deviation[:, row] ** 2 + (self.mean[:, row] - mean) ** 2))
        return mean, float(np.sqrt(variance))


def log_sum(values: FloatArray) -> FloatArray:
    """Return the logarithm of the sum of exponentials over the first axis."""
    top = np.maximum(values.max(axis=0), -1e300)
    return np.asarray(top + np.log(np.exp(values - top).sum(axis=0)))


def predictions(inputs: FloatArray, column: FloatArray, units: list[FloatArray]) -> Predictions:
    """Return the predictions of a column from its inputs.

    Args:
        inputs: strictly increasing, shape (n,), n >= 5.
        column: shape (n,).
        units: ways of rounding: the unit of the last figure of every entry, shapes (n,), above 0.
    """
    span = inputs[-1] - inputs[0]
    distance = np.abs(inputs[:, None] - inputs) / span
    basis = np.stack([np.ones(len(inputs)), (inputs - inputs[0]) / span - 0.5], axis=1)
    level = float(column.mean())
    values = column - level
    rest = values - basis @ np.linalg.lstsq(basis, values, rcond=None)[0]
    size = max(float(np.sqrt(np.mean(rest**2))), 1e-9 * float(np.abs(column).max()), 1e-12)
    scales = np.geomspace(0.7 * float(np.median(np.diff(inputs))) / span, 3.0, _LENGTHS)
    kernels = [kernel(distance / scale) for scale in scales for kernel in (_square_exponential, _matern)]
    parts = [_of_unit(kernels, basis, values, np.maximum(_ROUNDING * unit, 1e-7 * size), size) for unit in units]
    evidence, mean, deviation, density = (np.concatenate(part) for part in zip(*parts, strict=True))
    return Predictions(evidence, mean + level, deviation, density)


def _of_unit(
    kernels: list[FloatArray], basis: FloatArray, values: FloatArray, error: FloatArray, size: float
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Evidence, mean, deviation and density for one way of rounding, over kernels, sizes and errors.

    With C the covariance and B the line, P = C^-1 - C^-1 B (B' C^-1 B)^-1 B' C^-1 = Q (Q' C Q)^-1 Q' for a basis Q of
    what is square to B; an entry less its prediction is (P y)_i / P_ii, of variance 1 / P_ii (Dubrule 1983).
    """
    n = len(values)
    whitened, y = basis / error[:, None], values / error
    q = np.linalg.qr(whitened, mode="complete")[0][:, 2:]
    fixed = -2.0 * np.log(error).sum() - np.linalg.slogdet(whitened.T @ whitened)[1] - 2.0 * (n - 2) * _LOG_ROOT
    covariance = np.stack(kernels) / (error[:, None] * error)
    w, v = np.linalg.eigh(q.T @ covariance @ q)
    directions = q @ v  # (k, n, n - 2)
    z = np.einsum("kij,i->kj", directions, y)
    steps = _ERROR_STEP ** np.arange(-1.0, _ERRORS - 1.0)
    errors = steps[steps <= max(3.0 * size / float(np.median(error)), _ERROR_STEP)]
    sizes = size * np.geomspace(0.03, 300.0, _SIZES)
    # variance of every direction under every model, in units of rounding: (k, sizes, errors, n - 2)
    power = errors[:, None] ** 2 + (sizes[:, None, None] ** 2) * np.maximum(w, 0.0)[:, None, None, :]
    evidence = 0.5 * (fixed - np.log(power).sum(axis=-1) - (z[:, None, None] ** 2 / power).sum(axis=-1))
    inverse = (1.0 / power).reshape(len(kernels), -1, n - 2)
    precision = np.maximum(inverse @ (directions**2).transpose(0, 2, 1), 1e-300).reshape(-1, n)
    pull = ((z[:, None] * inverse) @ directions.transpose(0, 2, 1)).reshape(-1, n)
    deviation = error / np.sqrt(precision)
    residual = error * pull / precision
    density = -0.5 * (residual / deviation) ** 2 - np.log(deviation) - _LOG_ROOT
    return evidence.reshape(-1), values - residual, deviation, density


def _square_exponential(d: FloatArray) -> FloatArray:
    return np.asarray(np.exp(-0.5 * d * d))


def _matern(d: FloatArray) -> FloatArray:
    """Matern kernel of order 5/2."""
    r = np.sqrt(5.0) * d
    return np.asarray((1.0 + r + r * r / 3.0) * np.exp(-r))
