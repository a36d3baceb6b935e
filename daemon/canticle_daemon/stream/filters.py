"""Small recursive filters that keep the law of blocks.

They run frame by frame in plain floats: the sampling interval may vary, and any way of
cutting the stream gives the same bits. One pass costs about 0.1 µs a frame.
"""

from __future__ import annotations

import math

import numpy as np

from canticle_daemon.frame import BoolArray, FloatArray


class FirstOrderLag:
    """A low-pass filter of first order, τ·y' + y = x, backward Euler.

    Parameters
    ----------
    tau_s
        Time constant, s, positive.
    start
        The state before any input; NaN (the default) takes the first finite input, so that
        there is no transient from 0.

    Notes
    -----
    A NaN input holds the state and gives the held value; with `forgets` it gives `start` and
    begins again there.
    """

    def __init__(self, tau_s: float, start: float = math.nan, *, forgets: bool = False) -> None:
        if not tau_s > 0.0:
            raise ValueError("tau_s must be positive")
        self.tau_s = tau_s
        self._forgets = forgets
        self._start = self._state = start

    def reset(self) -> None:
        """Forget the past."""
        self._state = self._start

    def process(self, values: FloatArray, dt_s: FloatArray) -> FloatArray:
        """Filter a block; `dt_s` is the time since the frame before, shape of `values`."""
        state, tau = self._state, self.tau_s
        out = []
        for value, dt in zip(values.tolist(), dt_s.tolist(), strict=True):
            if value == value:  # not NaN
                state = state + (value - state) * dt / (tau + dt) if state == state else value
            elif self._forgets:
                state = self._start
            out.append(state)
        self._state = state
        return np.array(out, dtype=np.float64)


class Derivative:
    """The rate of change of a noisy signal: d/dt behind a first-order lag.

    Parameters
    ----------
    tau_s
        Time constant, s, positive; noise falls and delay grows with it.
    forgets
        Whether a missing value drops the past; else the lagged signal is held over it.
    """

    def __init__(self, tau_s: float, *, forgets: bool = False) -> None:
        self._lag = FirstOrderLag(tau_s, forgets=forgets)

    def reset(self) -> None:
        """Forget the past."""
        self._lag.reset()

    def process(self, values: FloatArray, dt_s: FloatArray) -> FloatArray:
        """Differentiate a block: (x − lagged x)/τ, the exact derivative of the lagged signal."""
        lagged = self._lag.process(values, dt_s)
        rate: FloatArray = (values - lagged) / self._lag.tau_s
        return rate


class Hold:
    """Fills missing values with the last one known, or with `start` before there is one."""

    def __init__(self, start: float) -> None:
        self._start = start
        self._last = start

    def reset(self) -> None:
        """Forget the past."""
        self._last = self._start

    def process(self, values: FloatArray) -> FloatArray:
        """Return the block with every NaN replaced."""
        known = np.isfinite(values)
        if known.all():
            self._last = float(values[-1])
            return values
        index = np.maximum.accumulate(np.where(known, np.arange(values.size), -1))
        filled = np.where(index < 0, self._last, values[index])
        self._last = float(filled[-1])
        return filled


class Stopwatch:
    """The time for which something has been so without a break."""

    def __init__(self) -> None:
        self._elapsed_s = 0.0

    def reset(self) -> None:
        """Start again from zero."""
        self._elapsed_s = 0.0

    def process(self, runs: BoolArray, dt_s: FloatArray) -> FloatArray:
        """Return the time at each frame; where it does not run it is back at zero."""
        elapsed = self._elapsed_s
        out = []
        for running, dt in zip(runs.tolist(), dt_s.tolist(), strict=True):
            elapsed = elapsed + dt if running else 0.0
            out.append(elapsed)
        self._elapsed_s = elapsed
        return np.array(out, dtype=np.float64)


class RunningSum:
    """A sum along the stream; the carry goes into the first element, so bits never depend on cuts.

    Works on the last axis of arrays of any shape.
    """

    def __init__(self) -> None:
        self._carry: FloatArray | float = 0.0

    def reset(self) -> None:
        """Start again from zero."""
        self._carry = 0.0

    def process(self, steps: FloatArray) -> FloatArray:
        """Return the running sum after each step."""
        steps = steps.copy()
        steps[..., 0] += self._carry
        total: FloatArray = np.add.accumulate(steps, axis=-1)
        self._carry = total[..., -1].copy()
        return total
