"""Least squares in the time domain of one form of process model to a step test.

Gain, offset, drift and a start away from rest enter linearly and are solved inside; dead time and lags are
sought outside, from several starts, because the sum of squares has several minima in the dead time.
Source: G. H. Golub, V. Pereyra, "The differentiation of pseudo-inverses and nonlinear least squares problems
whose variables separate", SIAM J. Numerical Analysis 10:413-432, 1973; the Jacobian is the shorter one of
L. Kaufman, BIT 15:49-57, 1975 (from memory).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import least_squares

from loopdoc.engineering.held_input import HeldInput, held_input, start_terms, unit_response
from loopdoc.engineering.noise import NoiseModel, Whitening

FloatArray = NDArray[np.float64]

LONGEST_LAG = 10.0
"""Longest lag sought, in lengths of the test: beyond it the response is a ramp."""
LONGEST_DEAD_TIME = 0.8
"""Longest dead time sought, in lengths of the test: beyond it too little of the response is left."""
SHORTEST_LAG = 0.05
"""Shortest lag sought, in sampling intervals: below it nothing is seen of it."""
_SEARCHED_SAMPLES = 400  # as many as locate a minimum; all samples then refine it
_SEARCHED_LAGS = 14
_DEAD_TIME_RATIO = 1.25  # between neighbours of the search
_LAG_RATIOS = (0.5, 0.15)  # second lag over first in the search
_STARTS = 2
_ROUGHLY, _CLOSELY = 1e-4, 1e-9  # relative change of the sum of squares at which a refinement ends
_ROUNDING = 1e-6  # of the measurement's movement: no record is written or followed more closely
_LOG_STEP = 1e-4  # of a lag's logarithm, for its derivative by central difference


@dataclass(frozen=True, slots=True)
class Structure:
    """A form of process model; each has a gain and a dead time."""

    name: str
    lags: int
    """Number of first-order lags: none, one or two."""
    equal: bool = False
    """Whether two lags are equal, and so one unknown."""
    integrating: bool = False

    @property
    def unknown_lags(self) -> int:
        """Number of lags to be found."""
        return 1 if self.equal else self.lags


@dataclass(frozen=True, slots=True)
class Nuisance:
    """What else moves the measurement, and is solved for beside the process."""

    drift: bool
    """A steady drift; in an integrating process the imbalance before the first step."""
    start: bool
    """A start away from rest."""


@dataclass(frozen=True, slots=True, eq=False)
class Record:
    """A step test: n samples and the changes of what was moved."""

    time_s: FloatArray
    """(n,) strictly increasing times from 0 on [s]."""
    measurement: FloatArray
    """(n,) in the measurement's units."""
    held: HeldInput
    """What was moved; it changes at least once."""

    @property
    def interval_s(self) -> float:
        """Median time between samples [s]."""
        return float(np.median(np.diff(self.time_s)))

    @property
    def after_s(self) -> float:
        """Time from the first change to the end [s]: the length of the test."""
        return float(self.time_s[-1] - self.held.time_s[1])


def record(time_s: FloatArray, moved: FloatArray, measurement: FloatArray) -> Record:
    """Return arrays as a record.

    Parameters
    ----------
    time_s : (n,) float array
        Strictly increasing times [s].
    moved : (n,) float array
        What was moved, held from each sample to the next, in its own units.
    measurement : (n,) float array
        In its own units.

    Returns
    -------
    Record
        With times counted from the first sample.

    Raises
    ------
    ValueError
        The times do not increase, or what was moved never changes.
    """
    if not np.all(np.diff(time_s) > 0.0):
        raise ValueError("the times of a record must increase")
    held = held_input(time_s - time_s[0], moved)
    if len(held.time_s) < 2:
        raise ValueError("what was moved never changes")
    return Record(time_s - time_s[0], measurement, held)


@dataclass(frozen=True, slots=True, eq=False)
class Fit:
    """One structure fitted to a record."""

    structure: Structure
    nuisance: Nuisance
    gain: float
    """Units of the measurement per unit moved; when integrating, the same per second."""
    lags_s: tuple[float, ...]
    """Longest first [s]."""
    dead_time_s: float
    drift: float
    """Over the whole record, in the measurement's units; 0 where not sought."""
    fitted: FloatArray
    """(n,) the fitted measurement."""
    jacobian: FloatArray
    """(n, p) change of the fitted measurement with gain, dead time, the logarithm of each unknown lag (longest
    first), then with the nuisance terms, of which the drift is the second."""
    squares: float
    """Sum of squares of the whitened residual, in the measurement's units squared; not below rounding."""
    exact: bool
    """Whether nothing but rounding is left over, as of a simulated record."""

    @property
    def parameters(self) -> int:
        """Number of parameters fitted."""
        return int(self.jacobian.shape[1])

    @property
    def bayes(self) -> float:
        """Bayesian information criterion [dimensionless]; comparable among fits by one noise model.

        Source: G. Schwarz, "Estimating the dimension of a model", Annals of Statistics 6:461-464, 1978.
        """
        n = len(self.fitted)
        return n * math.log(self.squares / n) + self.parameters * math.log(n)

    @property
    def akaike(self) -> float:
        """Akaike's criterion corrected for few samples [dimensionless]; comparable as `bayes`.

        Source: C. M. Hurvich, C.-L. Tsai, "Regression and time series model selection in small samples",
        Biometrika 76:297-307, 1989.
        """
        n, k = len(self.fitted), self.parameters
        return n * math.log(self.squares / n) + 2.0 * k + 2.0 * k * (k + 1.0) / (n - k - 1.0)


def fit(record: Record, structure: Structure, nuisance: Nuisance, noise: NoiseModel, *, near: Fit | None = None) -> Fit:
    """Return the least-squares fit of one structure, the record whitened by a noise model.

    Parameters
    ----------
    record : Record
        n samples, more than the structure has parameters.
    structure : Structure
        The form of model.
    nuisance : Nuisance
        What else moves the measurement.
    noise : NoiseModel
        Shape of the noise.
    near : Fit, optional
        A fit of the same structure from which to start, in place of the search.

    Returns
    -------
    Fit
        The best minimum found.

    Source: see the module.
    """
    problem = _Problem(record, structure, nuisance, noise)
    step = -(-len(record.time_s) // _SEARCHED_SAMPLES)
    coarse = problem
    if step > 1:
        few = Record(record.time_s[::step], record.measurement[::step], record.held)
        coarse = _Problem(few, structure, nuisance, noise)
    if near is not None:
        best = np.array([near.dead_time_s, *(math.log(lag) for lag in near.lags_s[: structure.unknown_lags])])
    else:
        best = min((coarse.refined(start, _ROUGHLY) for start in coarse.searched()), key=coarse.squares)
    best = problem.refined(best, _CLOSELY)
    # The sum of squares has a kink wherever the dead time carries a step past a sample: look beside the minimum.
    beside = best[0] + record.interval_s * np.arange(-3.0 * step, 3.0 * step + 0.01, 0.25)
    beside = beside[(beside >= 0.0) & (beside <= problem.longest_dead_time)]
    along = problem.squares_along(best[1:], beside)
    if len(beside) and along.min() < problem.squares(best) * (1.0 - 1e-9):
        other = problem.refined(np.concatenate(([beside[int(along.argmin())]], best[1:])), _CLOSELY)
        best = min(best, other, key=problem.squares)
    return problem.fit_at(best)


def squares_by_lag(
    record: Record, nuisance: Nuisance, noise: NoiseModel, *, lags_s: FloatArray, dead_times_s: FloatArray
) -> FloatArray:
    """Return how closely a process of one given lag can follow a record.

    Parameters
    ----------
    record : Record
        n samples.
    nuisance : Nuisance
        What else moves the measurement.
    noise : NoiseModel
        Shape of the noise.
    lags_s : (k,) float array
        Lags to try [s] > 0.
    dead_times_s : (m,) float array
        Dead times among which the best is taken for each lag [s] >= 0.

    Returns
    -------
    (k,) float array
        Sum of squares of the whitened residual, in the measurement's units squared.

    Source: as for `fit`.
    """
    problem = _Problem(record, Structure("one lag", 1), nuisance, noise)
    return np.array([problem.squares_along(np.log([lag]), dead_times_s).min() for lag in lags_s])


class _Problem:
    """The outer problem: a point is the dead time [s] and the logarithm of each unknown lag."""

    def __init__(self, record: Record, structure: Structure, nuisance: Nuisance, noise: NoiseModel) -> None:
        self.record, self.structure, self.nuisance = record, structure, nuisance
        self.whitening = Whitening(noise, record.time_s)
        self.measured = self.whitening(record.measurement)
        self.longest_dead_time = LONGEST_DEAD_TIME * record.after_s
        self.shortest = math.log(SHORTEST_LAG * record.interval_s)
        self.longest = math.log(LONGEST_LAG * record.after_s)
        level = np.ones(len(record.time_s))
        slope = record.time_s / record.time_s[-1] - 0.5
        self.steady = np.column_stack((level, slope) if nuisance.drift else (level,))
        self._last: tuple[bytes, tuple[FloatArray, FloatArray, FloatArray, FloatArray]] | None = None

    def lags(self, logs: FloatArray) -> tuple[float, ...]:
        lags = tuple(math.exp(min(max(log, self.shortest), self.longest)) for log in logs.tolist())
        return lags * 2 if self.structure.equal else lags

    def response(self, logs: FloatArray, dead_time_s: float | FloatArray) -> tuple[FloatArray, FloatArray]:
        found = unit_response(
            self.record.held,
            lags_s=self.lags(logs),
            integrating=self.structure.integrating,
            dead_time_s=dead_time_s,
            time_s=self.record.time_s,
        )
        return found.value, found.rate

    def beside(self, logs: FloatArray) -> FloatArray:
        """Columns of the nuisance terms."""
        if not self.nuisance.start:
            return self.steady
        return np.column_stack((self.steady, start_terms(self.record.time_s, self.lags(logs))))

    def solved(self, point: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
        """Columns, their orthonormal basis whitened, the coefficients, and the whitened residual."""
        # The optimiser asks at one point for the residual and then for its Jacobian.
        key = point.tobytes()
        if self._last is None or self._last[0] != key:
            self._last = key, self._solved(point)
        return self._last[1]

    def _solved(self, point: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
        value, _ = self.response(point[1:], float(point[0]))
        columns = np.column_stack((value, self.beside(point[1:])))
        whitened = self.whitening(columns)
        scale = np.linalg.norm(whitened, axis=0)
        scale[scale == 0.0] = 1.0
        basis, factor = np.linalg.qr(whitened / scale)
        if np.abs(np.diag(factor)).min() > 1e-10:
            coefficients = np.linalg.solve(factor, basis.T @ self.measured) / scale
        else:  # a response outside the record, or one that a nuisance term repeats
            coefficients = np.linalg.lstsq(whitened / scale, self.measured, rcond=1e-10)[0] / scale
        return columns, basis, coefficients, self.measured - whitened @ coefficients

    def residual(self, point: FloatArray) -> FloatArray:
        return self.solved(point)[3]

    def squares(self, point: FloatArray) -> float:
        residual = self.residual(point)
        return float(residual @ residual)

    def directions(self, point: FloatArray, coefficients: FloatArray) -> FloatArray:
        """How the fitted measurement moves with the dead time and with the logarithm of each unknown lag."""
        _, rate = self.response(point[1:], float(point[0]))
        found = [-coefficients[0] * rate]
        for i in range(1, len(point)):
            ends = []
            for step in (_LOG_STEP, -_LOG_STEP):
                logs = point[1:].copy()
                logs[i - 1] += step
                value, _ = self.response(logs, float(point[0]))
                ends.append(np.column_stack((value, self.beside(logs))) @ coefficients)
            found.append((ends[0] - ends[1]) / (2.0 * _LOG_STEP))
        return np.column_stack(found)

    def jacobian(self, point: FloatArray) -> FloatArray:
        """Of the residual, the coefficients following the point."""
        _, basis, coefficients, _ = self.solved(point)
        moved = self.whitening(self.directions(point, coefficients))
        rest: FloatArray = basis @ (basis.T @ moved) - moved
        return rest

    def refined(self, start: FloatArray, tolerance: float) -> FloatArray:
        """The minimum to which a start leads; the dead time does not go below zero."""
        found = self._minimum(start, tolerance, fixed=0)
        if found[0] < 0.0:
            found = self._minimum(np.concatenate(([0.0], start[1:])), tolerance, fixed=1)
        found[0] = min(found[0], self.longest_dead_time)
        return found

    def _minimum(self, start: FloatArray, tolerance: float, *, fixed: int) -> FloatArray:
        held, free = start[:fixed], start[fixed:]
        if not len(free):
            return start
        found = least_squares(
            lambda point: self.residual(np.concatenate((held, point))),
            free,
            jac=lambda point: self.jacobian(np.concatenate((held, point)))[:, fixed:],
            method="lm",
            x_scale="jac",
            ftol=tolerance,
            xtol=1e-8,
            gtol=1e-12,
            max_nfev=60,
        )
        return np.concatenate((held, found.x))

    def searched(self) -> list[FloatArray]:
        """The best points of a grid, each with other lags."""
        lags = np.geomspace(self.record.interval_s / 2.0, 3.0 * self.record.after_s, _SEARCHED_LAGS)
        longest = self.longest_dead_time
        shortest = min(self.record.interval_s / 2.0, longest / 2.0)
        count = 2 + math.ceil(math.log(longest / shortest) / math.log(_DEAD_TIME_RATIO))
        dead_times = np.concatenate(([0.0], np.geomspace(shortest, longest, count)))
        if self.structure.unknown_lags == 0:
            # Without a lag nothing leads from one dead time to the next: all of them are tried.
            dead_times = np.arange(0.0, longest, self.record.interval_s / 2.0)
            order = np.argsort(self.squares_along(np.zeros(0), dead_times))
            return [np.array([dead_times[i]]) for i in order[:_STARTS]]
        choices = [np.array([math.log(lag)]) for lag in lags]
        if self.structure.unknown_lags == 2:
            choices = [np.append(choice, choice + math.log(ratio)) for choice in choices for ratio in _LAG_RATIOS]
        found = []
        for choice in choices:
            along = self.squares_along(choice, dead_times)
            found.append((float(along.min()), np.append(dead_times[int(along.argmin())], choice)))
        return [point for _, point in sorted(found, key=lambda entry: entry[0])[:_STARTS]]

    def squares_along(self, logs: FloatArray, dead_times_s: FloatArray) -> FloatArray:
        """Sum of squares at each of several dead times."""
        value, _ = self.response(logs, dead_times_s)
        basis, _ = np.linalg.qr(self.whitening(self.beside(logs)))
        response = self.whitening(np.ascontiguousarray(value.T))
        response = response - basis @ (basis.T @ response)
        rest = self.measured - basis @ (basis.T @ self.measured)
        power = np.einsum("ij,ij->j", response, response)
        seen = power > 1e-12 * power.max(initial=0.0)
        explained = (rest @ response) ** 2 / np.where(seen, power, 1.0)
        left: FloatArray = float(rest @ rest) - np.where(seen, explained, 0.0)
        return left

    def fit_at(self, point: FloatArray) -> Fit:
        columns, _, coefficients, residual = self.solved(point)
        squares = float(residual @ residual)
        rounding = len(residual) * (_ROUNDING * float(np.ptp(self.measured))) ** 2
        lags = self.lags(point[1:])
        order = np.argsort(-np.array(lags[: len(point) - 1]), kind="stable")
        directions = self.directions(point, coefficients)
        directions = directions[:, np.concatenate(([0], 1 + order))]
        return Fit(
            structure=self.structure,
            nuisance=self.nuisance,
            gain=float(coefficients[0]),
            lags_s=tuple(sorted(lags, reverse=True)),
            dead_time_s=float(point[0]),
            drift=float(coefficients[2]) if self.nuisance.drift else 0.0,
            fitted=columns @ coefficients,
            jacobian=np.column_stack((columns[:, 0], directions, columns[:, 1:])),
            squares=max(squares, rounding),
            exact=squares <= rounding,
        )
