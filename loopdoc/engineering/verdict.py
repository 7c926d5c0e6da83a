"""What is to be said of a fitted process model: why the record does not support it, and what to know of it.

The thresholds are common practice in the main; each says what it rests on.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray
from scipy.special import stdtrit

from loopdoc.engineering.confidence import Confidence, Leftover
from loopdoc.engineering.held_input import HeldInput, unit_response
from loopdoc.engineering.model_fit import (
    LONGEST_DEAD_TIME,
    LONGEST_LAG,
    Fit,
    Nuisance,
    fit,
    squares_by_lag,
)
from loopdoc.engineering.noise import WHITE, Whitening, effective_samples, noise_models
from loopdoc.register.quantity import display_number

FloatArray = NDArray[np.float64]

FEWEST_SAMPLES = 20
"""Below this a model with a drift, of five to seven parameters, leaves nothing to judge it by."""
FEWEST_AFTER = 8
"""Samples after the first step below which a response has no shape."""
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
UNLIKE = 0.1
"""Part by which the gains of moves up and down must differ to be told."""
UNDECIDED = 2.0
"""Difference of the Bayesian information criterion below which another form fits as well.
Source: R. E. Kass, A. E. Raftery, "Bayes factors", J. American Statistical Association 90:773-795, 1995."""
SETTLES = 6.0
"""Difference of the criterion by which a form that settles must stand before one that ramps: strong evidence, since
the gain hangs on it. Source: as above."""


def without_a_fit(time_s: FloatArray, moved: FloatArray, measurement: FloatArray) -> Iterator[str]:
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


def refusals(known: Confidence, rivals: Sequence[Fit], *, integrates: bool) -> Iterator[str]:
    """Why the record does not support the model: the first cause alone, since others follow from it.

    Of a process that ``integrates`` by the register the record need not tell that it does.
    """
    test, found = known.test, known.fit
    after, time = test.after_s, known.response_time()
    doubt = known.gain().doubt
    ramps = [rival for rival in rivals if rival.structure.integrating and rival.bayes - found.bayes < SETTLES]
    if _null_is_as_good(known):
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
        yield f"the gain is known only to ±{_percent(doubt)}; {_remedy(known, doubt)}"
    elif found.structure.integrating and not integrates and (least := _least_lag_s(known)) < after:
        yield (
            f"the test is too short to tell whether the measurement settles: it lasts {_duration(after)} after the "
            f"first step, and a lag of {_duration(least)} fits as well as a ramp; record longer"
        )
    elif not found.structure.integrating and ramps:
        yield (
            f"the test is too short to tell whether the measurement settles: it lasts {_duration(after)} after the "
            f"first step, and the form `{ramps[0].structure.name}` fits nearly as well; record longer"
        )
    elif not found.structure.integrating and time.doubt > TIME_REFUSED:
        yield (
            f"lags and dead time together are known only to ±{_percent(time.doubt)}; make a "
            "larger step, more steps, or record longer"
        )


def _null_is_as_good(known: Confidence) -> bool:
    """Whether drift and offset alone describe the record as well."""
    columns = np.column_stack((np.ones_like(known.test.time_s), known.test.time_s / known.test.time_s[-1]))
    measured, whitened = known.whitening(known.test.measurement), known.whitening(columns)
    rest = measured - whitened @ np.linalg.lstsq(whitened, measured, rcond=None)[0]
    null = replace(known.fit, squares=float(rest @ rest), jacobian=columns)
    return null.bayes <= known.fit.bayes


def _least_lag_s(known: Confidence) -> float:
    """Shortest lag of a settling process that follows the record as closely as the ramp that was chosen [s].

    As closely: within what its lag and the dead time may be off at 95 %, by the likelihood ratio.
    """
    test, found = known.test, known.fit
    lags = test.after_s * np.geomspace(LONGEST_LAG, 0.05, 60)
    furthest = 3.0 * (found.dead_time_s + sum(found.lags_s)) + 5.0 * test.interval_s
    squares = squares_by_lag(
        test, found.nuisance, known.noise, lags_s=lags, dead_times_s=np.linspace(0.0, furthest, 60)
    )
    allowed = found.squares * (1.0 + known.quantile**2 / (len(test.time_s) - found.parameters))
    apart = np.flatnonzero(squares > allowed)
    return float(lags[apart[0]] if len(apart) else lags[-1])


def _remedy(known: Confidence, relative: float) -> str:
    without = _without_drift(known)
    if without is not None and without < 0.5 * relative:
        return (
            "one step cannot tell the gain from a drift (without a drift it would be "
            f"±{_percent(without)}); move the output back as well, or record longer before and after"
        )
    return "make a larger step, more steps, or record longer"


def _without_drift(known: Confidence) -> float | None:
    """Half width of the gain's interval over the gain were there no drift; None where there clearly is one."""
    drift = known.drift_per_s()
    if known.fit.structure.integrating or not drift.low < 0.0 < drift.high:
        return None
    nuisance = Nuisance(drift=False, start=known.fit.nuisance.start)
    without = fit(known.test, known.fit.structure, nuisance, known.noise)
    return Confidence(known.test, without, known.noises).gain().doubt


def cautions(
    known: Confidence, leftover: Leftover, rivals: Sequence[Fit], *, unseen_s: float, integrates: bool
) -> Iterator[str]:
    """What to know before the model is used."""
    test, found = known.test, known.fit
    relative, time, dead_time = known.gain().doubt, known.response_time(), known.dead_time()
    if GAIN_DOUBTFUL < relative <= GAIN_REFUSED:
        yield f"the gain is known only to ±{_percent(relative)}; {_remedy(known, relative)}"
    if found.structure.integrating:
        least_s = _least_lag_s(known)
        if least_s < test.after_s:
            yield (
                f"that the measurement does not settle is what the register says: the record lasts "
                f"{_duration(test.after_s)} after the first step, and a lag of {_duration(least_s)} fits as well as a "
                "ramp; record longer to see it"
            )
        else:
            yield (
                "the measurement does not settle within the record; if it ever does, its lag is above "
                f"{_duration(least_s)}"
            )
    else:
        ramps = [rival.bayes - found.bayes for rival in rivals if rival.structure.integrating]
        if integrates and ramps:
            yield (
                "the register says that the process integrates, but in the test the measurement settles: the Bayesian "
                f"information criterion of the best ramp is {display_number(min(ramps), 2)} higher, where "
                f"{SETTLES:g} is strong evidence"
            )
        if dead_time.half_width > DEAD_TIME_DOUBTFUL * time.value:
            yield (
                f"the dead time is known only as {_duration(dead_time.low)} to {_duration(dead_time.high)}; "
                "tune for the longer one"
            )
        if known.lag_unseen:
            yield f"the lag is below half the sampling interval ({_duration(test.interval_s)}) and not seen"
    yield from _of_the_residual(known, leftover)
    yield from _of_the_record(known, unseen_s)
    if found.nuisance.start and _clearly_from_elsewhere(known):
        yield "the record starts away from rest; the fit allows for it"
    for rival in rivals:
        if rival.bayes - found.bayes < UNDECIDED:
            lags = " and ".join(_duration(lag) for lag in rival.lags_s)
            lag_or_lags = "a lag" if len(rival.lags_s) == 1 else "lags"
            yield (
                f"the form `{rival.structure.name}` fits as well, with a dead time of {_duration(rival.dead_time_s)}"
                f"{f' and {lag_or_lags} of {lags}' if lags else ''}"
            )


def _clearly_from_elsewhere(known: Confidence) -> bool:
    """Whether the start away from rest is there by the stricter criterion, too."""
    nuisance = Nuisance(drift=True, start=False)
    from_rest = fit(known.test, known.fit.structure, nuisance, known.noise)
    return known.fit.bayes < from_rest.bayes


def _of_the_residual(known: Confidence, leftover: Leftover) -> Iterator[str]:
    if not known.noise.white:
        yield (
            f"the residuals are correlated over about {_duration(known.noise.memory_s)} (Durbin-Watson "
            f"{display_number(leftover.durbin_watson, 2)}): the intervals allow for it, the gain's by a factor of "
            f"{display_number(leftover.widened, 2)}"
        )
    if leftover.white_probability < NOT_WHITE:
        yield "the model leaves a pattern in the residuals that it does not explain; look at the plot"
    whitened = known.whitening(known.residual)
    spread = float(np.median(np.abs(whitened - np.median(whitened)))) / 0.6745
    apart = int(np.sum(np.abs(whitened) > OUTLYING * spread)) if spread > 0.0 else 0
    if apart:
        samples = "1 sample stands" if apart == 1 else f"{apart} samples stand"
        yield f"{samples} more than {OUTLYING:g} standard deviations from the fit; look at the plot"
    ratio = _down_over_up(known)
    if ratio is not None:
        yield (
            f"moves down answer {display_number(ratio, 2)} times as strongly as moves up: a nonlinear process, a "
            "valve that sticks, or a disturbance"
        )


def _of_the_record(known: Confidence, unseen_s: float) -> Iterator[str]:
    if len(known.test.held.time_s) - 1 > CROWDED * len(known.test.time_s):
        yield (
            "what was moved changes in most samples: an output in automatic answers the noise and biases the fit, so "
            "test in manual; of a secondary's measurement the noise counts as moves"
        )
    elif unseen_s > known.of(1):
        yield (
            f"a step may have been made up to {_duration(unseen_s)} before the sample that shows it: the dead time may "
            "be longer by as much, unless the output was recorded when it was moved"
        )


def _down_over_up(known: Confidence) -> float | None:
    """Gain of the moves down over that of the moves up, where they clearly differ."""
    held = known.test.held
    changes = np.diff(held.value)
    if len(changes) > CROWDED / 3.0 * len(known.test.time_s) or not (changes.min() < 0.0 < changes.max()):
        return None
    down = HeldInput(held.time_s, np.concatenate(([0.0], np.cumsum(np.minimum(changes, 0.0)))))
    response = unit_response(
        down,
        lags_s=known.fit.lags_s,
        integrating=known.fit.structure.integrating,
        dead_time_s=known.fit.dead_time_s,
        time_s=known.test.time_s,
    )
    # The other parameters move along: what the second gain explains beyond all of them is what counts. The noise
    # is found anew beside it, or a correlated disturbance would stand for what the two gains explain.
    seen = np.any(known.fit.jacobian != 0.0, axis=0)
    columns = np.column_stack((known.fit.jacobian[:, seen], response.value))
    noise = WHITE if known.fit.exact else noise_models(known.test.time_s, known.residual, columns).best
    whitening = Whitening(noise, known.test.time_s)
    columns, residual = whitening(columns), whitening(known.residual)
    scale = np.linalg.norm(columns, axis=0)
    solved, _, rank, _ = np.linalg.lstsq(columns / scale, residual, rcond=1e-9)
    if rank < columns.shape[1]:
        return None
    coefficients = solved / scale
    left = residual - columns @ coefficients
    freedom = effective_samples(noise, known.test.time_s) - rank
    spread = math.sqrt(float(left @ left) / (len(left) - rank))
    last = float(np.asarray(np.linalg.qr(columns / scale, mode="r"))[-1, -1]) * float(scale[-1])
    if abs(coefficients[-1] * last) < float(stdtrit(max(freedom, 2.0), 1.0 - ASYMMETRIC / 2.0)) * spread:
        return None
    up = known.fit.gain + coefficients[0]
    ratio = float((up + coefficients[-1]) / up)
    return ratio if abs(ratio - 1.0) > UNLIKE else None


def _duration(seconds: float) -> str:
    """A time in the unit an operator would say it in."""
    if seconds < 120.0:
        return f"{display_number(seconds, 2)} s"
    if seconds < 7200.0:
        return f"{display_number(seconds / 60.0, 2)} min"
    return f"{display_number(seconds / 3600.0, 2)} h"


def _percent(share: float) -> str:
    return f"{display_number(100.0 * share, 2)} %"
