"""A process model from a step or bump test: gain, lags and dead time, or integration, with their intervals.

Each form of model is fitted by least squares in the time domain; the residuals of the closest give the noise,
white or correlated; the forms are fitted again to the record whitened by it, and the Bayesian information
criterion chooses among them. A drift of the measurement is always allowed for: a single step cannot tell it
from the process, and an interval that takes it for nought does not hold. What the record does not support is
refused with the reason.
Source: the criterion, G. Schwarz, Annals of Statistics 6:461-464, 1978; that for a start away from rest,
C. M. Hurvich, C.-L. Tsai, Biometrika 76:297-307, 1989; least squares and intervals, L. Ljung, System
Identification, 2nd ed. 1999, ch. 7 and 9 (from memory).
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.special import stdtrit

from loopdoc.engineering.held_input import HeldInput, unit_response
from loopdoc.engineering.model_fit import (
    LONGEST_DEAD_TIME,
    LONGEST_LAG,
    Fit,
    Nuisance,
    Record,
    Structure,
    fit,
    record,
    squares_by_lag,
)
from loopdoc.engineering.noise import (
    WHITE,
    NoiseModel,
    Whitening,
    durbin_watson,
    effective_samples,
    ljung_box,
    noise_model,
)
from loopdoc.register.quantity import display_number

FloatArray = NDArray[np.float64]

FIRST_ORDER = Structure("one lag", 1)
STRUCTURES = (
    FIRST_ORDER,
    Structure("two equal lags", 2, equal=True),
    Structure("two lags", 2),
    Structure("integrating", 0, integrating=True),
    Structure("integrating with a lag", 1, integrating=True),
)
"""The forms of model, each with a gain and a dead time."""

FEWEST_SAMPLES = 20
"""Below this a model with a drift, of five to seven parameters, leaves nothing to judge it by."""
FEWEST_AFTER = 8
"""Samples after the first step below which a response has no shape."""
MOST_FITTED = 3000
"""Samples fitted; of a longer record each second, third ... sample, which loses little and biases nothing."""
GAIN_REFUSED = 0.5
"""Half width of the gain's interval over the gain at which a fit is refused: its ends differ by three, the gain
margin of a sound tuning."""
GAIN_DOUBTFUL = 0.2
"""The same at which it is told."""
TIME_REFUSED = 0.5
"""Half width of the interval of lags and dead time together, over them, at which a fit is refused."""
DEAD_TIME_DOUBTFUL = 0.25
"""Half width of the dead time's interval over lags and dead time together at which it is told."""
NOT_WHITE = 0.001
"""Probability of the whitened residuals below which they are told not to be white."""
ASYMMETRIC = 0.01
"""Probability of unlike gains of moves up and down below which they are told."""
OUTLYING = 6.0
"""Robust standard deviations at which a sample is told to stand apart."""
CROWDED = 1.0 / 3.0
"""Share of the samples with a new output above which the loop seems to be in automatic."""


@dataclass(frozen=True, slots=True)
class Estimate:
    """A fitted value with its interval of 95 % confidence."""

    value: float
    low: float
    high: float

    @property
    def half_width(self) -> float:
        return (self.high - self.low) / 2.0


@dataclass(frozen=True, slots=True)
class Model:
    """The process model that a record supports."""

    name: str
    """Which of `STRUCTURES`."""
    gain: Estimate
    """Units of the measurement per unit moved; when integrating, the same per second."""
    lags_s: tuple[Estimate, ...]
    """Longest first [s]; none for an integrating process without lag."""
    dead_time_s: Estimate
    """[s], not below 0."""
    integrating: bool
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


@dataclass(frozen=True, slots=True)
class Candidate:
    """One form of model as fitted, for comparison."""

    name: str
    criterion: float
    """Bayesian information criterion less that of the chosen form [dimensionless]."""


@dataclass(frozen=True, slots=True, eq=False)
class Identification:
    """What a record says of the process."""

    model: Model | None
    """None where refused."""
    refusals: tuple[str, ...]
    """Why the record does not support a model; empty where it does."""
    cautions: tuple[str, ...]
    """What to know before the model is used."""
    leftover: Leftover | None
    """None where nothing could be fitted."""
    candidates: tuple[Candidate, ...]
    """Best first."""
    time_s: FloatArray
    """(n,) times of the samples fitted [s]."""
    fitted: FloatArray | None
    """(n,) the closest fit, shown even where it is refused; None where nothing could be fitted."""


def identify(
    time_s: FloatArray,
    moved: FloatArray,
    measurement: FloatArray,
    *,
    structures: tuple[Structure, ...] = STRUCTURES,
) -> Identification:
    """Return the process model that a step or bump test supports, or why it supports none.

    Parameters
    ----------
    time_s : (n,) float array
        Strictly increasing sample times [s], at any intervals.
    moved : (n,) float array
        What was moved, in its units, held from each sample to the next.
    measurement : (n,) float array
        In its units.
    structures : tuple of Structure
        Forms of model that may be chosen.

    Returns
    -------
    Identification
        The model or the refusals, with cautions.

    Raises
    ------
    ValueError
        The times do not increase, or the arrays differ in length.

    Source: see the module.
    """
    if not len(time_s) == len(moved) == len(measurement):
        raise ValueError("time, output and measurement differ in length")
    refusals = tuple(_without_a_fit(time_s, moved, measurement))
    if refusals:
        return Identification(None, refusals, (), None, (), time_s - time_s[:1], None)
    whole = record(time_s, moved, measurement)
    step = -(-len(time_s) // MOST_FITTED)
    test = Record(whole.time_s[::step], whole.measurement[::step], whole.held)
    plain = [_closest(test, structure, WHITE, ()) for structure in structures]
    closest = min((entry for pair in plain for entry in pair), key=lambda entry: entry.squares)
    noise = noise_model(test.time_s, test.measurement - closest.fitted, closest.jacobian)
    pairs = plain if noise.white else [
        _closest(test, structure, noise, pair) for structure, pair in zip(structures, plain, strict=True)
    ]
    fits = sorted((min(pair, key=lambda entry: _akaike(test, entry)) for pair in pairs), key=lambda f: _bayes(test, f))
    chosen = fits[0]
    judged = _Judged(test, chosen, noise)
    leftover = judged.leftover()
    refusals = tuple(judged.refusals())
    cautions = () if refusals else tuple(judged.cautions(leftover))
    if step > 1:
        cautions += (f"of {len(time_s)} samples each {_ordinal(step)} was fitted",)
    best = _bayes(test, chosen)
    return Identification(
        model=None if refusals else judged.model(),
        refusals=refusals,
        cautions=cautions,
        leftover=leftover,
        candidates=tuple(Candidate(entry.structure.name, _bayes(test, entry) - best) for entry in fits),
        time_s=test.time_s,
        fitted=chosen.fitted,
    )


def _without_a_fit(time_s: FloatArray, moved: FloatArray, measurement: FloatArray) -> Iterator[str]:
    """Reasons to refuse a record before anything is fitted."""
    n = len(time_s)
    if n < FEWEST_SAMPLES:
        yield f"the record has {n} samples; a fit with a residual check needs {FEWEST_SAMPLES} or more"
        return
    changes = np.flatnonzero(np.diff(moved))
    if not len(changes):
        yield "the output never moves; record a step or a bump"
        return
    after = n - 1 - int(changes[0])
    if after < FEWEST_AFTER:
        yield f"the record ends {after} samples after the first step; {FEWEST_AFTER} or more must follow it"
    if np.ptp(measurement) == 0.0:
        yield "the measurement never changes; the signal may be frozen, or the step too small for its resolution"


def _closest(
    test: Record, structure: Structure, noise: NoiseModel, near: tuple[Fit, ...]
) -> tuple[Fit, ...]:
    """One structure fitted from rest, and where it has a lag also from a start away from rest."""
    found = []
    for i, start in enumerate((False, True) if structure.lags else (False,)):
        nuisance = Nuisance(drift=True, start=start)
        found.append(fit(test, structure, nuisance, noise, near=near[i] if near else None))
    return tuple(found)


def _bayes(test: Record, entry: Fit) -> float:
    """Bayesian information criterion; the record is whitened alike for all structures."""
    n = len(test.time_s)
    return n * math.log(entry.squares / n) + entry.parameters * math.log(n)


def _akaike(test: Record, entry: Fit) -> float:
    """Akaike's criterion corrected for few samples: it keeps a term whose lack would bias the others."""
    n, k = len(test.time_s), entry.parameters
    return n * math.log(entry.squares / n) + 2.0 * k + 2.0 * k * (k + 1.0) / (n - k - 1.0)


class _Judged:
    """A fit with its covariance, and what is to be said of it."""

    def __init__(self, test: Record, chosen: Fit, noise: NoiseModel) -> None:
        self.test, self.fit, self.noise = test, chosen, noise
        self.whitening = Whitening(noise, test.time_s)
        self.freedom = max(effective_samples(noise, test.time_s) - chosen.parameters, 2.0)
        self.quantile = float(stdtrit(self.freedom, 0.975))
        self.covariance = _covariance(test, chosen, self.whitening)

    # -- the model

    def half_width(self, direction: FloatArray) -> float:
        """Of the interval of a linear combination of the parameters."""
        return self.quantile * math.sqrt(max(float(direction @ self.covariance @ direction), 0.0))

    def _of(self, index: int) -> float:
        return self.half_width(np.eye(self.fit.parameters)[index])

    def gain(self) -> Estimate:
        width = self._of(0)
        return Estimate(self.fit.gain, self.fit.gain - width, self.fit.gain + width)

    def dead_time(self) -> Estimate:
        value, width = self.fit.dead_time_s, self._of(1)
        return Estimate(value, max(value - width, 0.0), value + width)

    def lags(self) -> tuple[Estimate, ...]:
        """The interval is that of the logarithm: a lag is known to a factor."""
        found = []
        for i, value in enumerate(self.fit.lags_s):
            factor = math.exp(min(self._of(2 if self.fit.structure.equal else 2 + i), 50.0))
            found.append(Estimate(value, value / factor, value * factor))
        return tuple(found)

    def response_time(self) -> Estimate:
        """Lags and dead time together [s]."""
        direction = np.zeros(self.fit.parameters)
        direction[1] = 1.0
        for i, lag in enumerate(self.fit.lags_s):
            direction[2 if self.fit.structure.equal else 2 + i] += lag
        value, width = self.fit.dead_time_s + sum(self.fit.lags_s), self.half_width(direction)
        return Estimate(value, value - width, value + width)

    def drift_per_s(self) -> Estimate:
        length = float(self.test.time_s[-1])
        value, width = self.fit.drift / length, self._of(3 + self.fit.structure.unknown_lags) / length
        return Estimate(value, value - width, value + width)

    def model(self) -> Model:
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
        residual = self.test.measurement - self.fit.fitted
        variance = self.fit.squares / (len(residual) - self.fit.parameters)
        whitened = self.whitening(residual)
        plain = _covariance(self.test, self.fit, Whitening(WHITE, self.test.time_s))
        plain = plain * float(residual @ residual) / self.fit.squares
        return Leftover(
            noise=math.sqrt(variance * (1.0 - self.noise.share)),
            disturbance=math.sqrt(variance * self.noise.share),
            memory_s=self.noise.memory_s,
            durbin_watson=durbin_watson(residual),
            white_probability=ljung_box(whitened, lags=max(5, min(20, len(residual) // 10))),
            widened=math.sqrt(self.covariance[0, 0] / plain[0, 0]) if plain[0, 0] > 0.0 else 1.0,
        )

    # -- refusals

    def refusals(self) -> Iterator[str]:
        """Why the record does not support the model: the first cause alone, since others follow from it."""
        test, found = self.test, self.fit
        after, time = test.after_s, self.response_time()
        gain = self.gain()
        doubt = gain.half_width / abs(gain.value)
        if self._null_is_as_good():
            yield (
                "the measurement does not answer the output by more than its noise and drift; make a larger step, "
                "or see whether the loop was in manual and the final element moved"
            )
        elif found.dead_time_s > 0.99 * LONGEST_DEAD_TIME * after:
            yield f"the measurement answers only at the end of the record; record longer than {_duration(after)}"
        elif found.lags_s and found.lags_s[0] > after:
            yield (
                f"the test is shorter than the dynamics: it lasts {_duration(after)} after the first step and the lag "
                f"would be {_duration(found.lags_s[0])}, so that the gain is not seen; record longer"
            )
        elif not found.structure.integrating and time.value < test.interval_s:
            yield (
                f"the measurement settles within one sampling interval ({_duration(test.interval_s)}): only the gain "
                "is seen, no dynamics; record faster"
            )
        elif doubt > GAIN_REFUSED:
            yield f"the gain is known only to ±{_percent(doubt)}; {self._remedy(doubt)}"
        elif found.structure.integrating and (least := self.least_lag_s()) < after:
            yield (
                f"the test is too short to tell whether the measurement settles: it lasts {_duration(after)} after the "
                f"first step, and a lag of {_duration(least)} fits as well as a ramp; record longer"
            )
        elif not found.structure.integrating and time.half_width > TIME_REFUSED * time.value:
            yield (
                f"lags and dead time together are known only to ±{_percent(time.half_width / time.value)}; make a "
                "larger step, more steps, or record longer"
            )

    def _null_is_as_good(self) -> bool:
        """Whether drift and offset alone describe the record as well."""
        columns = np.column_stack((np.ones_like(self.test.time_s), self.test.time_s / self.test.time_s[-1]))
        measured, whitened = self.whitening(self.test.measurement), self.whitening(columns)
        rest = measured - whitened @ np.linalg.lstsq(whitened, measured, rcond=None)[0]
        null = replace(self.fit, squares=float(rest @ rest), jacobian=columns)
        return _bayes(self.test, null) <= _bayes(self.test, self.fit)

    def least_lag_s(self) -> float:
        """Shortest lag of a settling process that follows the record as closely as the ramp that was chosen [s].

        As closely: within what its lag and the dead time may be off at 95 %, by the likelihood ratio.
        """
        test, found = self.test, self.fit
        lags = test.after_s * np.geomspace(LONGEST_LAG, 0.05, 60)
        furthest = 3.0 * (found.dead_time_s + sum(found.lags_s)) + 5.0 * test.interval_s
        squares = squares_by_lag(
            test, found.nuisance, self.noise, lags_s=lags, dead_times_s=np.linspace(0.0, furthest, 60)
        )
        allowed = found.squares * (1.0 + self.quantile**2 / (len(test.time_s) - found.parameters))
        apart = np.flatnonzero(squares > allowed)
        return float(lags[apart[0]] if len(apart) else lags[-1])

    def _remedy(self, relative: float) -> str:
        without = self._without_drift()
        if without is not None and without < 0.5 * relative:
            return (
                "one step cannot tell the gain from a drift (without a drift it would be "
                f"±{_percent(without)}); move the output back as well, or record longer before and after"
            )
        return "make a larger step, more steps, or record longer"

    def _without_drift(self) -> float | None:
        """Half width of the gain's interval over the gain were there no drift; None where there clearly is one."""
        drift = self.drift_per_s()
        if self.fit.structure.integrating or not drift.low < 0.0 < drift.high:
            return None
        nuisance = Nuisance(drift=False, start=self.fit.nuisance.start)
        judged = _Judged(self.test, fit(self.test, self.fit.structure, nuisance, self.noise), self.noise)
        gain = judged.gain()
        return gain.half_width / abs(gain.value) if gain.value else None

    # -- cautions

    def cautions(self, leftover: Leftover) -> Iterator[str]:
        """What to know before the model is used."""
        test, found = self.test, self.fit
        gain, time, dead_time = self.gain(), self.response_time(), self.dead_time()
        relative = gain.half_width / abs(gain.value)
        if GAIN_DOUBTFUL < relative <= GAIN_REFUSED:
            yield f"the gain is known only to ±{_percent(relative)}; {self._remedy(relative)}"
        if found.structure.integrating:
            least = _duration(self.least_lag_s())
            yield f"the measurement does not settle within the record; if it ever does, its lag is above {least}"
        else:
            if dead_time.half_width > DEAD_TIME_DOUBTFUL * time.value:
                yield (
                    f"the dead time is known only as {_duration(dead_time.low)} to {_duration(dead_time.high)}; "
                    "tune for the longer one"
                )
            if found.lags_s[0] < test.interval_s / 2.0:
                yield f"the lag is below half the sampling interval ({_duration(test.interval_s)}) and hardly seen"
        yield from self._of_the_residual(leftover)
        yield from self._of_the_record()
        if found.nuisance.start and self._clearly_from_elsewhere():
            yield "the record starts away from rest; the fit allows for it"

    def _clearly_from_elsewhere(self) -> bool:
        """Whether the start away from rest is there by the stricter criterion, too."""
        nuisance = Nuisance(drift=True, start=False)
        from_rest = fit(self.test, self.fit.structure, nuisance, self.noise)
        return _bayes(self.test, self.fit) < _bayes(self.test, from_rest)

    def _of_the_residual(self, leftover: Leftover) -> Iterator[str]:
        if not self.noise.white:
            yield (
                f"the residuals are correlated over about {_duration(self.noise.memory_s)} (Durbin-Watson "
                f"{display_number(leftover.durbin_watson, 2)}): the intervals allow for it, the gain's by a factor of "
                f"{display_number(leftover.widened, 2)}"
            )
        if leftover.white_probability < NOT_WHITE:
            yield "the model leaves a pattern in the residuals that it does not explain; look at the plot"
        whitened = self.whitening(self.test.measurement - self.fit.fitted)
        spread = float(np.median(np.abs(whitened - np.median(whitened)))) / 0.6745
        apart = int(np.sum(np.abs(whitened) > OUTLYING * spread)) if spread > 0.0 else 0
        if apart:
            samples = "1 sample stands" if apart == 1 else f"{apart} samples stand"
            yield f"{samples} more than {OUTLYING:g} standard deviations from the fit; look at the plot"
        ratio = self._down_over_up()
        if ratio is not None:
            yield (
                f"moves down answer {display_number(ratio, 2)} times as strongly as moves up: a nonlinear process, a "
                "valve that sticks, or a disturbance"
            )

    def _of_the_record(self) -> Iterator[str]:
        test = self.test
        changes = test.held.time_s[1:]
        if len(changes) > CROWDED * len(test.time_s):
            yield (
                "the output moves in most samples, as in automatic: a controller that answers the noise biases the "
                "fit; test in manual"
            )
            return
        before = test.time_s[np.searchsorted(test.time_s, changes) - 1]
        doubt = float(np.max(changes - before))
        if doubt > self._of(1):
            yield (
                f"a step is known to have been made within the {_duration(doubt)} before the sample that shows it: the "
                "dead time may be longer by as much, unless the output was recorded when it was moved"
            )

    def _down_over_up(self) -> float | None:
        """Gain of the moves down over that of the moves up, where they clearly differ."""
        held = self.test.held
        changes = np.diff(held.value)
        if len(changes) > CROWDED / 3.0 * len(self.test.time_s) or not (changes.min() < 0.0 < changes.max()):
            return None
        parts = []
        for kept in (np.maximum(changes, 0.0), np.minimum(changes, 0.0)):
            part = HeldInput(held.time_s, np.concatenate(([0.0], np.cumsum(kept))))
            parts.append(
                unit_response(
                    part,
                    lags_s=self.fit.lags_s,
                    integrating=self.fit.structure.integrating,
                    dead_time_s=self.fit.dead_time_s,
                    time_s=self.test.time_s,
                ).value
            )
        # The other parameters move along: what the second gain explains beyond all of them is what counts.
        columns = self.whitening(np.column_stack((self.fit.jacobian, parts[1])))
        scale = np.linalg.norm(columns, axis=0)
        residual = self.whitening(self.test.measurement - self.fit.fitted)
        solved, _, rank, _ = np.linalg.lstsq(columns / scale, residual, rcond=1e-9)
        if rank < columns.shape[1]:
            return None
        coefficients = solved / scale
        left = residual - columns @ coefficients
        spread = float(left @ left) / max(len(left) - rank, 1)
        last = float(np.asarray(np.linalg.qr(columns / scale, mode="r"))[-1, -1]) * float(scale[-1])
        if abs(coefficients[-1] * last) < float(stdtrit(self.freedom, 1.0 - ASYMMETRIC / 2.0)) * math.sqrt(spread):
            return None
        up = self.fit.gain + coefficients[0]
        ratio = float((up + coefficients[-1]) / up)
        return ratio if abs(math.log(abs(ratio))) > math.log(1.1) else None


def _covariance(test: Record, entry: Fit, whitening: Whitening) -> FloatArray:
    """(p, p) covariance of the parameters, from the whitened Jacobian."""
    columns = whitening(entry.jacobian)
    scale = np.linalg.norm(columns, axis=0)
    scale[scale == 0.0] = 1.0
    _, singular, rows = np.linalg.svd(columns / scale, full_matrices=False)
    # A direction that the record does not see has no bound: its tiny singular value must not be dropped.
    inverse = rows.T / np.maximum(singular, 1e-12)
    spread = entry.squares / (len(test.time_s) - entry.parameters)
    covariance: FloatArray = spread * (inverse @ inverse.T) / np.outer(scale, scale)
    return covariance


def _duration(seconds: float) -> str:
    """A time in the unit an operator would say it in."""
    if seconds < 120.0:
        return f"{display_number(seconds, 2)} s"
    if seconds < 7200.0:
        return f"{display_number(seconds / 60.0, 2)} min"
    return f"{display_number(seconds / 3600.0, 2)} h"


def _percent(share: float) -> str:
    return f"{display_number(100.0 * share, 2)} %"


def _ordinal(number: int) -> str:
    return {2: "second", 3: "third"}.get(number, f"{number}th")
