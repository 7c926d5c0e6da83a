"""A process model from a step or bump test: gain, lags and dead time, or integration, with their intervals.

Each form of model is fitted by least squares in the time domain; the residuals of the closest say how probable
white noise is and each shape of correlated noise; the forms are fitted again to the record whitened by the
likeliest, and the Bayesian information criterion chooses among them. A drift of the measurement is always allowed
for: a single step cannot tell it from the process, and an interval that takes it for nought does not hold. What
the record does not support is refused with the reason.
Source: the criterion, G. Schwarz, Annals of Statistics 6:461-464, 1978; that for a start away from rest,
C. M. Hurvich, C.-L. Tsai, Biometrika 76:297-307, 1989; least squares and intervals, L. Ljung, System
Identification, 2nd ed. 1999, ch. 7 and 9 (from memory).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from loopdoc.engineering.confidence import Confidence, Leftover, Model
from loopdoc.engineering.model_fit import Fit, Nuisance, Record, Structure, fit, record
from loopdoc.engineering.noise import SURELY_WHITE, WHITE, NoiseModel, noise_models
from loopdoc.engineering.verdict import SETTLES, cautions, refusals, without_a_fit

FloatArray = NDArray[np.float64]

ONE_LAG, NO_LAG = Structure("one lag", 1), Structure("no lag", 0)
STRUCTURES = (
    ONE_LAG,
    Structure("two equal lags", 2, equal=True),
    Structure("two lags", 2),
    Structure("integrating", 0, integrating=True),
    Structure("integrating with a lag", 1, integrating=True),
    NO_LAG,
)
"""The forms of model, each with a gain and a dead time. The one without a lag is for a response that settles
between two samples; noise that hides a lag is no reason to leave it out."""

MOST_FITTED = 3000
"""Samples fitted; of a longer record each second, third ... sample, which loses little and biases nothing."""


@dataclass(frozen=True, slots=True)
class Candidate:
    """One form of model as fitted, for comparison."""

    name: str
    criterion: float
    """Bayesian information criterion less that of the chosen form [dimensionless]; below zero only where the register
    made the choice."""


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
    """The chosen form, then the others, best first."""
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
    integrates: bool = False,
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
    integrates : bool
        Whether the process is known to integrate, as the register says: an integrating form is then chosen unless
        one that settles is clearly closer.

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
    reasons = tuple(without_a_fit(time_s, moved, measurement))
    if reasons:
        return Identification(None, reasons, (), None, (), time_s - time_s[:1], None)
    whole = record(time_s, moved, measurement)
    step = -(-len(time_s) // MOST_FITTED)
    test = Record(whole.time_s[::step], whole.measurement[::step], whole.held)
    starts = (False, True) if _from_elsewhere(test) else (False,)
    plain = [_fitted(test, structure, WHITE, starts, ()) for structure in structures]
    closest = min((entry for pair in plain for entry in pair), key=lambda entry: entry.squares)
    noises, pairs = SURELY_WHITE, plain
    if not closest.exact:
        noises = noise_models(test.time_s, test.measurement - closest.fitted, closest.jacobian)
    if not noises.best.white:
        pairs = [_fitted(test, form, noises.best, starts, pair) for form, pair in zip(structures, plain, strict=True)]
    fits = sorted((min(pair, key=lambda entry: entry.akaike) for pair in pairs), key=lambda entry: entry.bayes)
    lag_seen = any(entry.structure == ONE_LAG and entry.lags_s[0] > test.interval_s for entry in fits)
    fits = [entry for entry in fits if not (lag_seen and entry.structure == NO_LAG)]
    if integrates:
        fits = _ramp_first(fits)
    chosen = fits[0]
    known = Confidence(test, chosen, noises)
    leftover = known.leftover()
    reasons = tuple(refusals(known, fits[1:], integrates=integrates))
    said: tuple[str, ...] = ()
    if not reasons:
        changed = np.flatnonzero(np.diff(moved))
        unseen_s = float(np.max(np.diff(time_s)[changed]))
        said = tuple(cautions(known, leftover, fits[1:], unseen_s=unseen_s, integrates=integrates))
    if step > 1:
        said += (f"of {len(time_s)} samples each {_ordinal(step)} was fitted",)
    return Identification(
        model=None if reasons else known.model(),
        refusals=reasons,
        cautions=said,
        leftover=leftover,
        candidates=tuple(Candidate(entry.structure.name, entry.bayes - chosen.bayes) for entry in fits),
        time_s=test.time_s,
        fitted=chosen.fitted,
    )


def _ramp_first(fits: list[Fit]) -> list[Fit]:
    """Fits, best first, led by the best that integrates unless one that settles is clearly better."""
    ramp = next((entry for entry in fits if entry.structure.integrating), None)
    if ramp is None or ramp.bayes - fits[0].bayes >= SETTLES:
        return fits
    return [ramp, *(entry for entry in fits if entry is not ramp)]


def _from_elsewhere(test: Record) -> bool:
    """Whether a start away from rest is worth trying: whether it helps the form with one lag.

    Akaike's criterion decides, the readier to keep such a start, whose lack would bias the rest.
    """
    at_rest, away = (fit(test, ONE_LAG, Nuisance(drift=True, start=start), WHITE) for start in (False, True))
    return away.akaike < at_rest.akaike


def _fitted(
    test: Record, structure: Structure, noise: NoiseModel, starts: tuple[bool, ...], near: tuple[Fit, ...]
) -> tuple[Fit, ...]:
    """One structure fitted from rest, and where it has a lag and that is worth trying also from elsewhere."""
    found = []
    for i, start in enumerate(starts if structure.lags else (False,)):
        nuisance = Nuisance(drift=True, start=start)
        found.append(fit(test, structure, nuisance, noise, near=near[i] if near else None))
    return tuple(found)


def _ordinal(number: int) -> str:
    return {2: "second", 3: "third"}.get(number, f"{number}th")
