"""What a fit leaves over: whether it is white, and a model of it where it is not.

The model is white measurement noise with a first-order correlated disturbance on top, which is what a
transmitter and a plant behind it make: corr(s, t) = share e^(-|s - t|/memory) for two different times. It
whitens a record at irregular times in one pass, so that least squares on the whitened record is the best
linear estimate and its intervals hold.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import cholesky_banded, solve_banded
from scipy.special import chdtrc

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class NoiseModel:
    """Shape of the noise; its size comes from the residuals."""

    share: float
    """Share of the variance that is correlated [dimensionless], 0 for white noise, below 1."""
    memory_s: float
    """Time in which the correlation falls to 1/e [s]; 0 for white noise."""

    @property
    def white(self) -> bool:
        return self.share == 0.0


WHITE = NoiseModel(0.0, 0.0)


def durbin_watson(residual: FloatArray) -> float:
    """Return the Durbin-Watson statistic: near 2 for white residuals, near 0 for slowly varying ones.

    Parameters
    ----------
    residual : (n,) float array
        Residuals in order of time, in any unit.

    Returns
    -------
    float
        Sum of the squared steps over the sum of squares [dimensionless]; 2 where there are no residuals.

    Source: J. Durbin, G. S. Watson, "Testing for serial correlation in least squares regression",
    Biometrika 37:409-428, 1950.
    """
    power = float(np.sum(residual**2))
    return float(np.sum(np.diff(residual) ** 2)) / power if power else 2.0


def ljung_box(residual: FloatArray, *, lags: int) -> float:
    """Return the probability of residuals at least so correlated, were they white.

    Parameters
    ----------
    residual : (n,) float array
        Residuals in order of time, in any unit.
    lags : int
        Number of sample lags that count, below n.

    Returns
    -------
    float
        Tail probability of the statistic [dimensionless]; 1 where there are no residuals.

    Source: G. M. Ljung, G. E. P. Box, "On a measure of lack of fit in time series models", Biometrika
    65:297-303, 1978.
    """
    n = len(residual)
    centred = residual - residual.mean()
    power = float(centred @ centred)
    if not power:
        return 1.0
    correlations = np.array([float(centred[lag:] @ centred[:-lag]) / power for lag in range(1, lags + 1)])
    statistic = n * (n + 2.0) * float(np.sum(correlations**2 / (n - np.arange(1, lags + 1))))
    return float(chdtrc(lags, statistic))


class Whitening:
    """The linear map that makes noise of a given shape white and of equal variance.

    With B the whitening of the correlated part alone, B (share R + (1 - share) I) B' is tridiagonal; with C its
    Cholesky factor, the map is C^-1 B, lower triangular and applied in time proportional to the record.
    Source: elementary; for the idea, A. C. Harvey, Forecasting, Structural Time Series Models and the Kalman
    Filter, Cambridge 1989, ch. 3 (prediction error decomposition, from memory).
    """

    def __init__(self, noise: NoiseModel, time_s: FloatArray) -> None:
        self.noise = noise
        self.log_determinant = 0.0
        """Logarithm of the determinant of the correlation matrix [dimensionless]."""
        if noise.white:
            return
        apart = np.diff(time_s) / noise.memory_s
        self._carry = np.exp(-apart)
        self._fresh = np.sqrt(-np.expm1(-2.0 * apart))
        own = np.concatenate(([1.0], (1.0 + self._carry**2) / self._fresh**2))
        beside = -self._carry / (self._fresh * np.concatenate(([1.0], self._fresh[:-1])))
        banded = np.zeros((2, len(time_s)))
        banded[0] = noise.share + (1.0 - noise.share) * own
        banded[1, :-1] = (1.0 - noise.share) * beside
        self._factor = cholesky_banded(banded, lower=True, check_finite=False)
        self.log_determinant = 2.0 * float(np.log(self._factor[0]).sum() + np.log(self._fresh).sum())

    def __call__(self, columns: FloatArray) -> FloatArray:
        """The whitened record; ``columns`` is (n,) or (n, m) in order of time."""
        if self.noise.white:
            return columns
        inner = columns.copy()
        scale = self._fresh if columns.ndim == 1 else self._fresh[:, None]
        carry = self._carry if columns.ndim == 1 else self._carry[:, None]
        inner[1:] = (columns[1:] - carry * columns[:-1]) / scale
        whitened: FloatArray = solve_banded((1, 0), self._factor, inner, check_finite=False)
        return whitened


_SHARES = (0.15, 0.3, 0.45, 0.6, 0.75, 0.87, 0.95, 0.99)
_MEMORIES = 12
_WHITE_ODDS = 0.5  # before the residuals are seen: white or correlated, and every correlated shape alike
_NEGLIGIBLE = 1e-3


@dataclass(frozen=True, slots=True)
class NoiseModels:
    """The shapes of the noise that residuals allow, each with its probability.

    Residuals of one test tell little of a slow disturbance; a single shape taken for certain makes intervals
    that do not hold.
    """

    weighted: tuple[tuple[NoiseModel, float], ...]
    """Most probable first; the probabilities add up to 1."""

    @property
    def best(self) -> NoiseModel:
        """White where that is at least as probable as all correlated shapes together, else the likeliest of these."""
        white = sum(weight for noise, weight in self.weighted if noise.white)
        return WHITE if white >= 0.5 else next(noise for noise, _ in self.weighted if not noise.white)


SURELY_WHITE = NoiseModels(((WHITE, 1.0),))


def noise_models(time_s: FloatArray, residual: FloatArray, regressors: FloatArray) -> NoiseModels:
    """Return how probable each shape of the noise is, by its restricted likelihood on a grid.

    The restricted likelihood allows for what the fit itself took out of the residuals.

    Parameters
    ----------
    time_s : (n,) float array
        Strictly increasing sample times [s].
    residual : (n,) float array
        Residuals of a fit, in any unit.
    regressors : (n, p) float array
        The directions in which that fit could move: its Jacobian.

    Returns
    -------
    NoiseModels
        White noise, and correlated noise of all shares and of memories from a sample to the whole record.

    Source: H. D. Patterson, R. Thompson, "Recovery of inter-block information when block sizes are
    unequal", Biometrika 58:545-554, 1971; D. A. Harville, Biometrika 61:383-385, 1974 (its Bayesian reading).
    """
    scale = np.linalg.norm(regressors, axis=0)
    directions, singular, _ = np.linalg.svd(regressors / np.where(scale > 0.0, scale, 1.0), full_matrices=False)
    basis = directions[:, singular > 1e-9 * singular[0]]
    columns = np.column_stack((basis, residual))
    freedom = len(time_s) - int(basis.shape[1])

    def deviance(noise: NoiseModel) -> float:
        whitening = Whitening(noise, time_s)
        whitened = whitening(columns)
        products = whitened.T @ whitened
        fitted = float(np.linalg.slogdet(products[:-1, :-1])[1])
        # The determinant with the residual over the one without it is the sum of squares that is left.
        left = float(np.linalg.slogdet(products)[1]) - fitted
        return freedom * left + whitening.log_determinant + fitted

    memories = np.geomspace(np.median(np.diff(time_s)), time_s[-1] - time_s[0], _MEMORIES).tolist()
    shapes = [WHITE, *(NoiseModel(share, memory) for share in _SHARES for memory in memories)]
    odds = np.array([_WHITE_ODDS] + [(1.0 - _WHITE_ODDS) / (len(shapes) - 1)] * (len(shapes) - 1))
    deviances = np.array([deviance(shape) for shape in shapes])
    weights = odds * np.exp(-(deviances - deviances.min()) / 2.0)
    weights /= weights.sum()
    kept = [(shape, float(weight)) for shape, weight in zip(shapes, weights, strict=True) if weight > _NEGLIGIBLE]
    total = sum(weight for _, weight in kept)
    kept.sort(key=lambda entry: -entry[1])
    return NoiseModels(tuple((shape, weight / total) for shape, weight in kept))


def effective_samples(noise: NoiseModel, time_s: FloatArray) -> float:
    """Return how many independent samples tell as much about a mean as a correlated record does.

    Parameters
    ----------
    noise : NoiseModel
        Shape of the noise.
    time_s : (n,) float array
        Strictly increasing sample times [s].

    Returns
    -------
    float
        Between 1 and n [dimensionless].

    Source: G. E. P. Box, G. M. Jenkins, G. C. Reinsel, Time Series Analysis, 4th ed. 2008, ch. 2 (variance of
    a mean, from memory), in the limit of samples close together.
    """
    n = len(time_s)
    if noise.white:
        return float(n)
    independent = min(max(float(time_s[-1] - time_s[0]) / (2.0 * noise.memory_s), 1.0), float(n))
    return 1.0 / ((1.0 - noise.share) / n + noise.share / independent)
