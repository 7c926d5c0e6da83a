"""Published tuning rules, and tuning to a given robustness.

Gains are per unit (percent of output per percent of measurement); the sign of a controller gain is that
of the process gain, so that error = setpoint - measurement is driven to zero.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np

from loopdoc.engineering.frequency import LoopStage, analyse_chain, maximum_sensitivities
from loopdoc.engineering.open_loop import level_arrays
from loopdoc.engineering.pid import Controller, SeriesSettings, StandardSettings, standard_from_series
from loopdoc.engineering.process import FloatArray, Process
from loopdoc.engineering.reduction import ReducedModel, reduce_to_first_order, reduce_to_second_order
from loopdoc.register.quantity import display_number

Actions = Literal["P", "PI", "PID"]


@dataclass(frozen=True, slots=True)
class UltimatePoint:
    """Where proportional control alone oscillates steadily."""

    gain: float
    """Ultimate gain Ku [dimensionless, % per %], with the sign of the process gain."""
    period_s: float
    """Ultimate period Pu [s]."""


def ultimate_point(
    process: Process,
    *,
    interval_s: float = 0.0,
    measurement_filter_s: float = 0.0,
    below: Sequence[LoopStage] = (),
) -> UltimatePoint:
    """Ultimate gain and period from the exact frequency response.

    Parameters
    ----------
    process : Process
        The process.
    interval_s : float
        Execution interval of the controller [s].
    measurement_filter_s : float
        Measurement filter of the controller [s].
    below : sequence of LoopStage
        The closed loops between the controller and the process, innermost first; none of a single loop.

    Returns
    -------
    UltimatePoint
        Gain [dimensionless] and period [s].

    Raises
    ------
    ValueError
        No gain makes the loop oscillate: the phase never reaches -180 degrees.

    Source: J. G. Ziegler, N. B. Nichols, "Optimum settings for automatic controllers", Trans. ASME
    64:759-768, 1942.
    """
    delay_s = process.dead_time_s + interval_s + math.fsum(process.lags_s)
    # A loop gain near 1: of an integrating process after the time that its dead time and lags take.
    gain = 1.0 / (process.gain * delay_s) if process.integrating and delay_s > 0.0 else 1.0 / process.gain
    # The margin is sharpest where the loop gain at the phase crossover is near 1.
    for _ in range(8):
        proportional = Controller(gain, interval_s=interval_s, measurement_filter_s=measurement_filter_s)
        margins = analyse_chain([*below, LoopStage(proportional, process)])[-1]
        if not math.isfinite(margins.gain_margin):
            raise ValueError(
                "no gain makes this loop oscillate steadily: its phase never reaches -180 degrees"
            )
        gain *= margins.gain_margin
        if 0.5 < margins.gain_margin < 2.0:
            break
        gain *= 0.7
    return UltimatePoint(gain=gain, period_s=2.0 * math.pi / margins.phase_crossover_rad_per_s)


# --- rules ---------------------------------------------------------------------------------------


def _dead_time(model: ReducedModel) -> float:
    if model.dead_time_s <= 0.0:
        raise ValueError("this rule needs a dead time above zero: without one it asks for infinite gain")
    return model.dead_time_s


def _self_regulating(model: ReducedModel) -> None:
    if model.integrating:
        raise ValueError("this rule is for processes that settle, not for integrating ones")
    if model.lag_s <= 0.0:
        raise ValueError("this rule needs a lag above zero")


def simc_pi(model: ReducedModel, *, closed_loop_s: float) -> StandardSettings:
    """Return the SIMC PI settings for a closed-loop time constant [s].

    Source: S. Skogestad, J. Process Control 13:291-309, 2003, eqs. 23-24 (numbers from memory).
    """
    wanted = closed_loop_s + model.dead_time_s
    if wanted <= 0.0 or model.lag_s <= 0.0:
        raise ValueError(
            "SIMC needs a lag, and a closed-loop time and dead time that are together above zero"
        )
    return StandardSettings(gain=1.0 / (model.slope * wanted), reset_s=min(model.lag_s, 4.0 * wanted))


def simc_pid(model: ReducedModel, *, closed_loop_s: float) -> SeriesSettings:
    """Return the SIMC PID settings, in the series form, for a closed-loop time constant [s].

    Source: S. Skogestad, J. Process Control 13:291-309, 2003, eqs. 23-25 (numbers from memory).
    """
    pi = simc_pi(model, closed_loop_s=closed_loop_s)
    return SeriesSettings(gain=pi.gain, reset_s=pi.reset_s, rate_s=model.second_lag_s)


def lambda_pi(model: ReducedModel, *, lambda_s: float) -> StandardSettings:
    """Return the lambda PI settings for a closed-loop time constant [s]; integrating after Chien and Fruehauf.

    Source: D. E. Seborg and others, Process Dynamics and Control, ch. 12 (direct synthesis; from memory);
    I-L. Chien, P. S. Fruehauf, Chem. Eng. Prog. 86(10):33-41, 1990 (integrating; from memory).
    """
    wanted = lambda_s + model.dead_time_s
    if lambda_s <= 0.0 or model.lag_s <= 0.0:
        raise ValueError("lambda tuning needs a lag and a closed-loop time above zero")
    if model.integrating:
        reset_s = 2.0 * lambda_s + model.dead_time_s
        return StandardSettings(gain=reset_s / (model.gain * wanted**2), reset_s=reset_s)
    return StandardSettings(gain=model.lag_s / (model.gain * wanted), reset_s=model.lag_s)


def imc_pid(model: ReducedModel, *, lambda_s: float) -> StandardSettings:
    """Return the internal model control PID settings for a first-order model with dead time.

    Source: D. E. Rivera, M. Morari, S. Skogestad, Ind. Eng. Chem. Process Des. Dev. 25:252-265, 1986
    (formulas from memory).
    """
    _self_regulating(model)
    if lambda_s <= 0.0:
        raise ValueError("internal model control needs a closed-loop time above zero")
    twice = 2.0 * model.lag_s + model.dead_time_s
    return StandardSettings(
        gain=twice / (model.gain * (2.0 * lambda_s + model.dead_time_s)),
        reset_s=twice / 2.0,
        rate_s=model.lag_s * model.dead_time_s / twice,
    )


def imc_pi(model: ReducedModel, *, lambda_s: float) -> StandardSettings:
    """Return the improved internal model control PI settings for a first-order model with dead time.

    Source: D. E. Rivera, M. Morari, S. Skogestad, Ind. Eng. Chem. Process Des. Dev. 25:252-265, 1986
    (formulas and the least closed-loop time from memory).
    """
    _self_regulating(model)
    if lambda_s <= 1.7 * model.dead_time_s:
        raise ValueError("this rule needs a closed-loop time above 1.7 times the dead time")
    twice = 2.0 * model.lag_s + model.dead_time_s
    return StandardSettings(gain=twice / (2.0 * model.gain * lambda_s), reset_s=twice / 2.0)


def ziegler_nichols_ultimate(point: UltimatePoint, actions: Actions) -> StandardSettings:
    """Return the Ziegler-Nichols settings from the ultimate gain and period.

    Source: J. G. Ziegler, N. B. Nichols, Trans. ASME 64:759-768, 1942.
    """
    if actions == "P":
        return StandardSettings(0.5 * point.gain)
    if actions == "PI":
        return StandardSettings(0.45 * point.gain, point.period_s / 1.2)
    return StandardSettings(0.6 * point.gain, point.period_s / 2.0, point.period_s / 8.0)


def ziegler_nichols_reaction_curve(model: ReducedModel, actions: Actions) -> StandardSettings:
    """Return the Ziegler-Nichols settings from the reaction curve.

    Source: J. G. Ziegler, N. B. Nichols, Trans. ASME 64:759-768, 1942.
    """
    dead_time = _dead_time(model)
    if model.lag_s <= 0.0:
        raise ValueError("the reaction curve rules need a lag above zero")
    unit = 1.0 / (model.slope * dead_time)
    if actions == "P":
        return StandardSettings(unit)
    if actions == "PI":
        return StandardSettings(0.9 * unit, dead_time / 0.3)
    return StandardSettings(1.2 * unit, 2.0 * dead_time, 0.5 * dead_time)


def cohen_coon(model: ReducedModel, actions: Actions | Literal["PD"]) -> StandardSettings:
    """Return the Cohen-Coon settings for a first-order model with dead time.

    Source: G. H. Cohen, G. A. Coon, "Theoretical consideration of retarded control", Trans. ASME
    75:827-834, 1953 (PD, and the reset of PI, from memory).
    """
    _self_regulating(model)
    dead_time = _dead_time(model)
    r = dead_time / model.lag_s
    if actions == "P":
        return StandardSettings((1.0 / r + 1.0 / 3.0) / model.gain)
    if actions == "PI":
        return StandardSettings(
            (0.9 / r + 1.0 / 12.0) / model.gain, dead_time * (30.0 + 3.0 * r) / (9.0 + 20.0 * r)
        )
    if actions == "PD":
        if r >= 3.0:
            raise ValueError("this rule needs a dead time below three lags: beyond it gives no rate")
        return StandardSettings(
            (1.25 / r + 1.0 / 6.0) / model.gain, math.inf, dead_time * (6.0 - 2.0 * r) / (22.0 + 3.0 * r)
        )
    return StandardSettings(
        (4.0 / (3.0 * r) + 0.25) / model.gain,
        dead_time * (32.0 + 6.0 * r) / (13.0 + 8.0 * r),
        dead_time * 4.0 / (11.0 + 2.0 * r),
    )


def itae(
    model: ReducedModel, actions: Literal["PI", "PID"], *, upset: Literal["load", "setpoint"]
) -> StandardSettings:
    """Return the settings of least time-weighted absolute error after a step of the load or of the setpoint.

    Source: A. M. Lopez and others, "Tuning controllers with error-integral criteria", Instrum. Technol.
    14(11):57-62, 1967 (load), and A. A. Rovira and others, "Tuning controllers for setpoint changes", Instrum.
    Control Syst. 42(12):67-69, 1969 (setpoint), both cited from memory; coefficients as in D. E. Seborg and others,
    Process Dynamics and Control, Table 11.3. The range over which they were fitted is from memory.
    """
    _self_regulating(model)
    r = model.dead_time_s / model.lag_s
    if not 0.1 <= r <= 1.0:
        raise ValueError(
            "this rule was fitted to dead times of a tenth of the lag to the whole of it, and this one is "
            f"{display_number(r, 3)} times the lag"
        )
    if upset == "load":
        if actions == "PI":
            return StandardSettings(0.859 * r**-0.977 / model.gain, model.lag_s / (0.674 * r**-0.680))
        reset_s, rate_s = model.lag_s / (0.842 * r**-0.738), 0.381 * model.lag_s * r**0.995
        return StandardSettings(1.357 * r**-0.947 / model.gain, reset_s, rate_s)
    if actions == "PI":
        return StandardSettings(0.586 * r**-0.916 / model.gain, model.lag_s / (1.03 - 0.165 * r))
    reset_s, rate_s = model.lag_s / (0.796 - 0.1465 * r), 0.308 * model.lag_s * r**0.929
    return StandardSettings(0.965 * r**-0.85 / model.gain, reset_s, rate_s)


def amigo(model: ReducedModel, actions: Literal["PI", "PID"]) -> StandardSettings:
    """Return the AMIGO settings for a first-order or integrating model with dead time.

    Source: K. J. Astrom, T. Hagglund, Advanced PID Control, ISA 2006, eqs. 7.5, 7.7, 7.32, 7.33.
    """
    dead_time = _dead_time(model)
    if model.integrating:
        unit = 1.0 / (model.gain * dead_time)
        if actions == "PI":
            return StandardSettings(0.35 * unit, 13.4 * dead_time)
        return StandardSettings(0.45 * unit, 8.0 * dead_time, 0.5 * dead_time)
    # Fitted from dead time alone to integration: no lag is needed.
    lag = model.lag_s
    if actions == "PI":
        weight = 0.35 - dead_time * lag / (dead_time + lag) ** 2
        return StandardSettings(
            (0.15 + weight * lag / dead_time) / model.gain,
            0.35 * dead_time
            + 13.0 * dead_time * lag**2 / (lag**2 + 12.0 * dead_time * lag + 7.0 * dead_time**2),
        )
    return StandardSettings(
        (0.2 + 0.45 * lag / dead_time) / model.gain,
        (0.4 * dead_time + 0.8 * lag) * dead_time / (dead_time + 0.1 * lag),
        0.5 * dead_time * lag / (0.3 * dead_time + lag),
    )


def tyreus_luyben(point: UltimatePoint, actions: Literal["PI", "PID"]) -> StandardSettings:
    """Return the Tyreus-Luyben settings from the ultimate gain and period.

    Source: B. D. Tyreus, W. L. Luyben, Ind. Eng. Chem. Res. 31:2625-2628, 1992.
    """
    if actions == "PI":
        return StandardSettings(point.gain / 3.2, 2.2 * point.period_s)
    return StandardSettings(point.gain / 2.2, 2.2 * point.period_s, point.period_s / 6.3)


# --- tuning to a robustness ----------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class SensitivityTuning:
    """SIMC settings whose closed-loop time was chosen for a given maximum sensitivity."""

    settings: StandardSettings
    closed_loop_s: float
    """Tuning constant of the rule [s]; negative where more is asked than the model's dead time allows."""
    max_sensitivity: float
    """Ms reached, from the exact frequency response of the whole process [dimensionless]."""


class _SimcLoop:
    """One loop as a function of the closed-loop time that SIMC is asked for."""

    def __init__(self, process: Process, interval_s: float, filter_s: float, with_rate: bool) -> None:
        self._model = (reduce_to_second_order if with_rate else reduce_to_first_order)(
            process, interval_s=interval_s
        )
        self.has_lag = self._model.lag_s > 0.0
        # The default of the rule, a closed-loop time equal to the dead time; a tenth of the lag without one.
        lag_s = math.fsum(process.lags_s) + filter_s or 1.0 / abs(process.gain)
        self.usual_wanted_s = 2.0 * self._model.dead_time_s or 0.1 * lag_s

    def settings(self, wanted_s: float) -> StandardSettings:
        """Settings for a closed-loop time plus dead time [s]."""
        closed_loop_s = wanted_s - self._model.dead_time_s
        return standard_from_series(simc_pid(self._model, closed_loop_s=closed_loop_s))

    def tuning(self, wanted_s: float, max_sensitivity: float) -> SensitivityTuning:
        return SensitivityTuning(
            settings=self.settings(wanted_s),
            closed_loop_s=wanted_s - self._model.dead_time_s,
            max_sensitivity=max_sensitivity,
        )


def simc_at_sensitivities(
    processes: Sequence[Process],
    *,
    target_ms: Sequence[float],
    interval_s: Sequence[float],
    measurement_filter_s: Sequence[float] | None = None,
    with_rate: bool = False,
) -> tuple[SensitivityTuning | None, ...]:
    """SIMC settings of many loops, each tuned to its own maximum sensitivity.

    Parameters
    ----------
    processes : sequence of n Process
        From the final element to the measurement.
    target_ms : sequence of n float
        Wanted maximum sensitivity [dimensionless] > 1.
    interval_s : sequence of n float
        Execution interval [s].
    measurement_filter_s : sequence of n float, optional
        Measurement filter [s]; none if left out.
    with_rate : bool
        PID on the second-order model instead of PI on the first-order model.

    Returns
    -------
    tuple of n SensitivityTuning or None
        None where no tuning has that sensitivity: the process has no lag to reset on, or so little
        dead time that no gain disturbs it, or it does not reduce to a model.

    Raises
    ------
    ValueError
        A target is not a finite number above 1.

    Source: S. Skogestad, J. Process Control 13:291-309, 2003 (rule); K. J. Astrom, T. Hagglund,
    Advanced PID Control, ISA 2006, section 4.5 (Ms as the measure of robustness).
    """
    if not all(math.isfinite(target) and target > 1.0 for target in target_ms):
        raise ValueError("a target sensitivity must be a finite number above 1")
    filters = [0.0] * len(processes) if measurement_filter_s is None else measurement_filter_s
    loops: dict[int, _SimcLoop] = {}
    for i, (process, interval, filter_s) in enumerate(zip(processes, interval_s, filters, strict=True)):
        try:
            loop = _SimcLoop(process, interval, filter_s, with_rate)
        except ValueError:
            continue
        if loop.has_lag:
            loops[i] = loop
    found: list[SensitivityTuning | None] = [None] * len(processes)
    rows = list(loops)
    target = np.log(np.asarray(target_ms, dtype=np.float64))

    if not rows:
        return tuple(found)
    # What no candidate changes is laid out once: the loops under a gain of 1.
    place = {i: row for row, i in enumerate(rows)}
    columns = level_arrays(
        [Controller(1.0, interval_s=interval_s[i], measurement_filter_s=filters[i]) for i in rows],
        [processes[i] for i in rows],
    )

    def excess(members: Sequence[int], ln_wanted: FloatArray) -> FloatArray:
        """ln Ms less its target for (k, m) candidates of the closed-loop time plus dead time, at most 3."""
        tried = [
            loops[i].settings(math.exp(candidate))
            for i, candidates in zip(members, ln_wanted, strict=True)
            for candidate in candidates
        ]
        gain, reset_s, rate_s = (
            np.array([getattr(one, field) for one in tried])[:, None] for field in ("gain", "reset_s", "rate_s")
        )
        unit = columns.take(np.repeat([place[i] for i in members], ln_wanted.shape[1]))
        stages = replace(
            unit, gain=gain * unit.gain, repeats_per_s=1.0 / reset_s, rate_s=rate_s,
            smoothing_s=rate_s / Controller(1.0).derivative_filter,
        )  # fmt: skip
        ms = maximum_sensitivities(stages).reshape(ln_wanted.shape)
        limited: FloatArray = np.minimum(np.log(ms) - target[list(members), None], 3.0)
        return limited

    # Ms falls as the closed loop is made slower: first bracket the target, then close in on it.
    low, high = np.zeros(len(processes)), np.zeros(len(processes))
    f_low, f_high = np.zeros(len(processes)), np.zeros(len(processes))
    middle = {i: math.log(loops[i].usual_wanted_s) for i in rows}
    bracketed: list[int] = []
    for _ in range(8):
        if not rows:
            break
        spread = np.array([middle[i] for i in rows])[:, None] + math.log(2.0) * np.array([-1.0, 1.0, 3.0])
        values = excess(rows, spread)
        for i, x, f in zip(list(rows), spread, values, strict=True):
            if f[0] < 0.0 or f[-1] >= 0.0:
                middle[i] += math.log(16.0) * (-1.0 if f[0] < 0.0 else 1.0)
                continue
            last = int(np.nonzero(f >= 0.0)[0][-1])
            low[i], f_low[i], high[i], f_high[i] = x[last], f[last], x[last + 1], f[last + 1]
            bracketed.append(i)
            rows.remove(i)
    at = np.array(bracketed, dtype=np.intp)
    # By inverse quadratic interpolation where the last three points allow it, else by halving (T. R. Chandrupatla,
    # Adv. Eng. Software 28:145-149, 1997, from memory); the first step is a straight line.
    share = f_high[at] / (f_high[at] - f_low[at])
    for _ in range(60):
        if not len(at):
            break
        newest, f_newest, other, f_other = high[at], f_high[at], low[at], f_low[at]
        x = newest + share * (other - newest)
        f = excess(at.tolist(), x[:, None])[:, 0]
        same = f * f_newest > 0.0
        before, f_before = np.where(same, newest, other), np.where(same, f_newest, f_other)
        other, f_other = np.where(same, other, newest), np.where(same, f_other, f_newest)
        high[at], f_high[at], low[at], f_low[at] = x, f, other, f_other
        with np.errstate(divide="ignore", invalid="ignore"):
            xi, phi = (x - other) / (before - other), (f - f_other) / (f_before - f_other)
            bent = (phi**2 < xi) & ((1.0 - phi) ** 2 < 1.0 - xi)
            share = f / (f_other - f) * f_before / (f_other - f_before)
            share += (before - x) / (other - x) * f / (f_before - f) * f_other / (f_before - f_other)
        share = np.where(bent, share, 0.5)
        left = np.abs(f) > 1e-7
        at, share = at[left], share[left]
    for i in bracketed:
        found[i] = loops[i].tuning(math.exp(high[i]), math.exp(target[i] + f_high[i]))
    return tuple(found)
