"""How well a fitted model is known: intervals from the Jacobian, and what the fit leaves over.

The intervals are those of least squares on the record whitened by its noise, averaged over the shapes of noise
that the residuals allow; correlated noise leaves fewer independent samples, and with them a wider quantile.
Source: L. Ljung, System Identification, 2nd ed. 1999, ch. 9 (covariance from the Jacobian, from memory); J. A.
Hoeting, D. Madigan, A. E. Raftery, C. T. Volinsky, "Bayesian model averaging", Statistical Science 14:382-417,
1999 (mean and variance of an average over models).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import stdtrit

from loopdoc.engineering.model_fit import Fit, Record
from loopdoc.engineering.noise import (
    WHITE,
    NoiseModels,
    Whitening,
    durbin_watson,
    effective_samples,
    ljung_box,
)

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Estimate:
    """A fitted value with its interval of 95 % confidence."""

    value: float
    low: float
    high: float

    @property
    def half_width(self) -> float:
        """Half the width of the interval, in the unit of the value."""
        return (self.high - self.low) / 2.0

    @property
    def doubt(self) -> float:
        """Half the width of the interval over the value [dimensionless]."""
        return self.half_width / abs(self.value) if self.value else math.inf


@dataclass(frozen=True, slots=True)
class Model:
    """The process model that a record supports."""

    name: str
    """Name of its structure."""
    gain: Estimate
    """Units of the measurement per unit moved; when integrating, the same per second."""
    lags_s: tuple[Estimate, ...]
    """Longest first [s]; none for an integrating process without lag."""
    dead_time_s: Estimate
    """[s], not below 0."""
    integrating: bool
    """True where the measurement ramps instead of settling."""
    drift_per_s: Estimate
    """Drift of the measurement [units/s]; when integrating, its slope before the first step."""
    from_rest: bool
    """Whether the record starts at rest."""


@dataclass(frozen=True, slots=True)
class Leftover:
    """What the fit leaves over."""

    noise: float
    """Standard deviation of the white part, in the measurement's units."""
    disturbance: float
    """Standard deviation of the correlated part, in the measurement's units; 0 where there is none."""
    memory_s: float
    """Time in which the correlated part is forgotten [s]; 0 where there is none."""
    durbin_watson: float
    """Of the residuals as they are [dimensionless]."""
    white_probability: float
    """Ljung-Box probability of the whitened residuals [dimensionless]."""
    widened: float
    """Interval of the gain over the one that white residuals would have given [dimensionless]."""


class Confidence:
    """A fit with the covariance of its parameters."""

    def __init__(self, test: Record, fit: Fit, noises: NoiseModels) -> None:
        """The fit is one by the best of the noise models."""
        self.test, self.fit, self.noises, self.noise = test, fit, noises, noises.best
        self.whitening = Whitening(self.noise, test.time_s)
        n = len(test.time_s)
        independent = sum(weight * effective_samples(noise, test.time_s) for noise, weight in noises.weighted)
        self.quantile = float(stdtrit(max(min(independent - 1.0, n - fit.parameters), 2.0), 0.975))
        self.covariance = np.zeros((fit.parameters, fit.parameters))
        for noise, weight in noises.weighted:
            shift, own = _by(Whitening(noise, test.time_s), fit, self.residual)
            self.covariance += weight * (own + np.outer(shift, shift))

    @property
    def residual(self) -> FloatArray:
        """(n,) in the measurement's units; nought where only rounding is left."""
        left = self.test.measurement - self.fit.fitted
        return np.zeros_like(left) if self.fit.exact else left

    # -- the model

    def half_width(self, direction: FloatArray) -> float:
        """Of the interval of a linear combination of the parameters."""
        return self.quantile * math.sqrt(max(float(direction @ self.covariance @ direction), 0.0))

    def of(self, index: int) -> float:
        """Half width of the interval of one parameter."""
        return self.half_width(np.eye(self.fit.parameters)[index])

    def gain(self) -> Estimate:
        """Units of the measurement per unit moved; when integrating, the same per second."""
        width = self.of(0)
        return Estimate(self.fit.gain, self.fit.gain - width, self.fit.gain + width)

    @property
    def lag_unseen(self) -> bool:
        """Whether the process settles between two samples: what is known of its lag is only that."""
        structure = self.fit.structure
        return not structure.integrating and sum(self.fit.lags_s) < self.test.interval_s / 2.0

    def dead_time(self) -> Estimate:
        """[s], not below 0."""
        value, width = self.fit.dead_time_s, self.of(1)
        if self.lag_unseen:
            width = self.test.interval_s
        return Estimate(value, max(value - width, 0.0), value + width)

    def lags(self) -> tuple[Estimate, ...]:
        """Longest first [s]; the interval is that of the logarithm, since a lag is known to a factor."""
        if self.lag_unseen:
            return tuple(Estimate(lag, 0.0, self.test.interval_s) for lag in self.fit.lags_s)
        found = []
        for i, value in enumerate(self.fit.lags_s):
            factor = math.exp(min(self.of(2 if self.fit.structure.equal else 2 + i), 50.0))
            found.append(Estimate(value, value / factor, value * factor))
        return tuple(found)

    def response_time(self) -> Estimate:
        """Lags and dead time together [s]."""
        direction = np.zeros(self.fit.parameters)
        direction[1] = 1.0
        for i, lag in enumerate(self.fit.lags_s):
            direction[2 if self.fit.structure.equal else 2 + i] += lag
        value, width = self.fit.dead_time_s + sum(self.fit.lags_s), self.half_width(direction)
        if self.lag_unseen:
            width = self.test.interval_s
        return Estimate(value, value - width, value + width)

    def drift_per_s(self) -> Estimate:
        """Of the measurement, in its units a second."""
        length = float(self.test.time_s[-1])
        value, width = self.fit.drift / length, self.of(3 + self.fit.structure.unknown_lags) / length
        return Estimate(value, value - width, value + width)

    def model(self) -> Model:
        """All of it."""
        return Model(
            name=self.fit.structure.name,
            gain=self.gain(),
            lags_s=self.lags(),
            dead_time_s=self.dead_time(),
            integrating=self.fit.structure.integrating,
            drift_per_s=self.drift_per_s(),
            from_rest=not self.fit.nuisance.start,
        )

    # -- the residuals

    def leftover(self) -> Leftover:
        """What the fit leaves over."""
        residual = self.residual
        variance = self.fit.squares / (len(residual) - self.fit.parameters)
        whitened = self.whitening(residual)
        _, plain = _by(Whitening(WHITE, self.test.time_s), self.fit, residual)
        return Leftover(
            noise=math.sqrt(variance * (1.0 - self.noise.share)),
            disturbance=math.sqrt(variance * self.noise.share),
            memory_s=self.noise.memory_s,
            durbin_watson=durbin_watson(residual),
            white_probability=ljung_box(whitened, lags=max(5, min(20, len(residual) // 10))),
            widened=math.sqrt(self.covariance[0, 0] / plain[0, 0]) if plain[0, 0] > 0.0 else 1.0,
        )


def _by(whitening: Whitening, fit: Fit, residual: FloatArray) -> tuple[FloatArray, FloatArray]:
    """(p,) shift of the parameters and (p, p) their covariance, were the noise of one shape."""
    columns, left = whitening(fit.jacobian), whitening(residual)
    scale = np.linalg.norm(columns, axis=0)
    scale[scale == 0.0] = 1.0
    directions, singular, rows = np.linalg.svd(columns / scale, full_matrices=False)
    explained = directions.T @ left
    # A direction that the record does not see has no bound: its tiny singular value must not be dropped.
    inverse = rows.T / np.maximum(singular, 1e-12)
    seen = singular > 1e-9 * singular[0]
    shift = (rows.T[:, seen] / singular[seen]) @ explained[seen]
    squares = fit.squares if fit.exact else max(float(left @ left) - float(explained @ explained), 0.0)
    spread = squares / (len(left) - fit.parameters)
    return shift / scale, spread * (inverse @ inverse.T) / np.outer(scale, scale)
