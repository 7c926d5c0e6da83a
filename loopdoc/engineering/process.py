"""Linear process models on per-unit numbers: lags, leads, dead time, integration.

A `Process` says what one measurement does when the thing that is commanded (the final element, or
the secondary measurement of a cascade) rises by one percent.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]


@dataclass(frozen=True, slots=True)
class Process:
    """Gain, lags, leads and dead time between a command and a measurement, both in percent of span."""

    gain: float
    """Steady-state gain [dimensionless, % per %]; when integrating, the slope [1/s, %/s per %]."""
    lags_s: tuple[float, ...] = ()
    """First-order lags [s], each at least 0; the order does not matter."""
    dead_time_s: float = 0.0
    """Dead time [s], at least 0."""
    leads_s: tuple[float, ...] = ()
    """Numerator time constants [s]; a negative one is an inverse response."""
    integrating: bool = False
    """True where the measurement ramps instead of settling."""

    def __post_init__(self) -> None:
        if not math.isfinite(self.gain) or self.gain == 0.0:
            raise ValueError("the process gain must be a finite number other than zero")
        for lag in self.lags_s:
            if not 0.0 <= lag < math.inf:
                raise ValueError("every lag must be a finite time of zero or more")
        if not math.isfinite(self.dead_time_s) or self.dead_time_s < 0.0:
            raise ValueError("the dead time must be a finite time of zero or more")
        for lead in self.leads_s:
            if not math.isfinite(lead):
                raise ValueError("every lead must be a finite time")
        if self.leads_s and sum(lead != 0.0 for lead in self.leads_s) > self.order:
            raise ValueError("a process cannot have more leads than lags (an integration counts as one)")

    @property
    def order(self) -> int:
        """Number of states: the lags that are not zero, and the integration."""
        return len([lag for lag in self.lags_s if lag > 0.0]) + self.integrating

    @property
    def lag_sum_s(self) -> float:
        """Sum of the lags less the positive leads, at least zero [s]."""
        return max(0.0, math.fsum(self.lags_s) - math.fsum(lead for lead in self.leads_s if lead > 0.0))


def in_series(first: Process, second: Process) -> Process:
    """Return the process from the command of the first to the measurement of the second."""
    if first.integrating and second.integrating:
        raise ValueError("two integrating processes in series are outside the process model")
    return Process(
        gain=first.gain * second.gain,
        lags_s=first.lags_s + second.lags_s,
        dead_time_s=first.dead_time_s + second.dead_time_s,
        leads_s=first.leads_s + second.leads_s,
        integrating=first.integrating or second.integrating,
    )


def frequency_response(process: Process, w_rad_per_s: FloatArray) -> ComplexArray:
    """Response of a process at real frequencies, the dead time as exp(-jwL) without approximation.

    Parameters
    ----------
    process : Process
        The process.
    w_rad_per_s : (n,) float array
        Frequencies [rad/s] > 0.

    Returns
    -------
    (n,) complex array
        Measurement over command [dimensionless].

    Source: K. J. Astrom, T. Hagglund, Advanced PID Control, ISA 2006, ch. 2 (process models).
    """
    s = 1j * np.asarray(w_rad_per_s, dtype=np.float64)
    response: ComplexArray = np.exp(-process.dead_time_s * s) * process.gain
    for lead in process.leads_s:
        response = response * (1.0 + lead * s)
    for lag in process.lags_s:
        response = response / (1.0 + lag * s)
    return response / s if process.integrating else response


@dataclass(frozen=True, slots=True, eq=False)
class StateSpace:
    """Lags, leads and integration of n processes of equal order m, per unit gain, without dead time."""

    a: FloatArray
    """(n, m, m) state matrix [1/s], lower triangular."""
    b: FloatArray
    """(n, m) input vector [1/s]."""
    c: FloatArray
    """(n, m) output vector [dimensionless]."""
    d: FloatArray
    """(n,) direct feedthrough [dimensionless]."""

    def take(self, rows: NDArray[np.intp]) -> "StateSpace":
        """Return the processes of the given rows."""
        return StateSpace(self.a[rows], self.b[rows], self.c[rows], self.d[rows])


def state_space(processes: Sequence[Process]) -> StateSpace:
    """Return processes of equal order as first-order sections in series, the integration last.

    Each section is (1 + T s)/(1 + tau s), or (1 + T s)/s for the integration, so that the output of
    a section is its state times a factor plus a share of its input.
    """
    n, order = len(processes), processes[0].order
    a, b = np.zeros((n, order, order)), np.zeros((n, order))
    c, d = np.zeros((n, order)), np.ones(n)
    for row, process in enumerate(processes):
        if process.order != order:
            raise ValueError("processes of different order cannot share one state-space array")
        lags = sorted((lag for lag in process.lags_s if lag > 0.0), reverse=True)
        leads = sorted((lead for lead in process.leads_s if lead != 0.0), key=abs, reverse=True)
        for i in range(order):
            lead = leads[i] if i < len(leads) else 0.0
            if i < len(lags):
                rate, decay, through = 1.0 / lags[i], -1.0 / lags[i], lead / lags[i]
                share = 1.0 - through
            else:
                rate, decay, through, share = 1.0, 0.0, lead, 1.0
            a[row, i, :i] = rate * c[row, :i]
            a[row, i, i] = decay
            b[row, i] = rate * d[row]
            c[row, :i] *= through
            c[row, i] = share
            d[row] *= through
    return StateSpace(a, b, c, d)


def _matrix_exponential(matrices: FloatArray) -> FloatArray:
    """Exponential of each matrix of a (n, m, m) array by scaling and squaring of the Taylor series.

    Source: C. Moler, C. Van Loan, "Nineteen dubious ways to compute the exponential of a matrix",
    SIAM Review 45:3-49, 2003, method 3.
    """
    norm = float(np.abs(matrices).sum(axis=-1).max(initial=0.0))
    squarings = max(0, math.ceil(math.log2(norm / 0.25))) if norm > 0.0 else 0
    scaled = matrices / 2.0**squarings
    result = np.broadcast_to(np.eye(matrices.shape[-1]), matrices.shape).copy()
    term = result.copy()
    # 0.25**14/14! is below 1e-19: more terms change nothing in double precision.
    for power in range(1, 14):
        term = term @ scaled / power
        result += term
    for _ in range(squarings):
        result = result @ result
    return result


def transition(system: StateSpace, time_s: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Exact change of state over a time during which the input is held or ramps.

    Parameters
    ----------
    system : StateSpace
        n systems of order m.
    time_s : (n,) float array
        Duration [s] >= 0.

    Returns
    -------
    (n, m, m), (n, m), (n, m) float arrays
        State matrix, response to an input held at 1, and response to an input that ramps from 0 to 1
        within the time [dimensionless].

    Source: G. F. Franklin, J. D. Powell, M. Workman, Digital Control of Dynamic Systems, 3rd ed. 1998
    (zero-order and first-order hold; section from memory).
    """
    n, order = system.b.shape
    block = np.zeros((n, order + 2, order + 2))
    block[:, :order, :order] = system.a * time_s[:, None, None]
    block[:, :order, order] = system.b * time_s[:, None]
    block[:, order, order + 1] = 1.0
    exponential = _matrix_exponential(block)
    return (
        exponential[:, :order, :order],
        exponential[:, :order, order],
        exponential[:, :order, order + 1],
    )
