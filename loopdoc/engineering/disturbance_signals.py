"""What disturbances add to the measurements of one level of many columns, a block of steps at a time."""

from collections import defaultdict
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from loopdoc.engineering.process import FloatArray, Process, state_space, transition

IntArray = NDArray[np.intp]


@dataclass(frozen=True, slots=True)
class ArrivingStep:
    """A step that comes through its path to the measurement of one column."""

    column: int
    path: Process
    """From the step to the measurement, without dead time."""
    size_pct: float
    """Size of the step [%]."""
    step_s: float
    """Time step of the column [s]."""


@dataclass(slots=True, eq=False)
class _Members:
    """Steps of equal order, at most one for each column."""

    columns: IntArray
    """(m,) columns."""
    rows: FloatArray
    """(block, order + 1, m) share of each state, and of the step, in the signal of each step of a block."""
    onward: FloatArray
    """(m, order + 1, order + 1) from the states and the step to those a block later."""
    state: FloatArray
    """(order + 1, m) states, and last the step, which stays [%]."""
    through: FloatArray
    """(m,) share of the step that is there at once."""


class DisturbanceSignals:
    """Steps through their lags, advanced by blocks of equal length."""

    def __init__(self, arriving: Sequence[ArrivingStep], block: int) -> None:
        self.block = block
        # A column may have several: they are added up.
        alike: dict[tuple[int, int], list[ArrivingStep]] = defaultdict(list)
        seen: dict[tuple[int, int], int] = defaultdict(int)
        for one in arriving:
            key = (one.path.order, one.column)
            alike[one.path.order, seen[key]].append(one)
            seen[key] += 1
        self._members = [self._prepare(members) for members in alike.values()]
        self._rows = np.zeros((0, 0))
        self._span()

    def _span(self) -> None:
        columns = np.concatenate([members.columns for members in self._members])
        self.columns = slice(int(columns.min()), int(columns.max()) + 1)
        """The columns from the first to the last that is disturbed."""

    def _prepare(self, arriving: Sequence[ArrivingStep]) -> _Members:
        paths = [one.path for one in arriving]
        system = state_space(paths)
        advance, held, _ = transition(system, np.array([one.step_s for one in arriving]))
        size, order = held.shape
        once = np.zeros((size, order + 1, order + 1))
        once[:, :order, :order], once[:, :order, order], once[:, order, order] = advance, held, 1.0
        rows = np.empty((self.block, order + 1, size))
        share = np.concatenate([system.c, system.d[:, None]], axis=1)[:, None, :]
        onward = np.broadcast_to(np.eye(order + 1), once.shape)
        for row in range(self.block):
            share = share @ once
            rows[row] = share[:, 0, :].T
            onward = onward @ once
        state = np.zeros((order + 1, size))
        state[order] = [one.path.gain * one.size_pct for one in arriving]
        return _Members(np.array([one.column for one in arriving]), rows, onward, state, system.d)

    def at_start(self, columns: int) -> FloatArray:
        """(columns,) what is there at time zero already [%]: of paths with as many leads as lags."""
        signal = np.zeros(columns)
        for members in self._members:
            signal[members.columns] += members.through * members.state[-1]
        return signal

    def at(self, step: int) -> FloatArray:
        """(k,) signal of the disturbed ``columns`` at a step [%]; steps are asked for one after the other, from 1."""
        row = (step - 1) % self.block
        if row == 0:
            self._rows = self.next_block()
        found: FloatArray = self._rows[row]
        return found

    def next_block(self) -> FloatArray:
        """(block, k) signal of the next steps [%]."""
        signal = np.zeros((self.block, self.columns.stop - self.columns.start))
        for members in self._members:
            found = np.zeros((self.block, len(members.columns)))
            scratch = np.empty_like(found)
            for shares, value in zip(members.rows.swapaxes(0, 1), members.state, strict=True):
                np.multiply(shares, value, out=scratch)
                np.add(found, scratch, out=found)
            signal[:, members.columns - self.columns.start] += found
            members.state = np.einsum("mij,jm->im", members.onward, members.state)
        return signal

    def take(self, columns: IntArray) -> "DisturbanceSignals | None":
        """Return the signals of some columns, in increasing order, at the end of a block; None if none is disturbed."""
        other = object.__new__(DisturbanceSignals)
        other.block = self.block
        other._members, other._rows = [], np.zeros((0, 0))
        for members in self._members:
            _, new, old = np.intersect1d(columns, members.columns, assume_unique=True, return_indices=True)
            if len(new):
                other._members.append(
                    _Members(
                        new,
                        members.rows[:, :, old],
                        members.onward[old],
                        members.state[:, old],
                        members.through[old],
                    )
                )
        if not other._members:
            return None
        other._span()
        return other


class KnownSignals:
    """Signals that are known for all steps of all columns."""

    def __init__(self, rows: FloatArray) -> None:
        """``rows`` is (steps + 1, n), from time zero on [%]."""
        self.rows = rows
        self.columns = slice(0, rows.shape[1])

    def at_start(self, columns: int) -> FloatArray:
        """(columns,) what is there at time zero [%]."""
        start: FloatArray = self.rows[0]
        return start

    def at(self, step: int) -> FloatArray:
        """(n,) signal at a step [%]."""
        found: FloatArray = self.rows[step]
        return found


def known_throughout(signals: DisturbanceSignals, columns: int, steps: int) -> KnownSignals:
    """Return signals, not yet asked for, with all their steps."""
    rows = np.zeros((steps + 1, columns))
    rows[0] = signals.at_start(columns)
    for first in range(1, steps + 1, signals.block):
        block = rows[first : first + signals.block, signals.columns]
        block += signals.next_block()[: len(block)]
    return KnownSignals(rows)
