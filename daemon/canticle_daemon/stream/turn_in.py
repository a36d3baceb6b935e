"""Turn-in, live: an alarm when the steering that takes the corner begins.

Theory of operation
-------------------
The signal (`steering.py`) is a level plus the driver's corrections plus noise; at the turn-in a
ramp begins. The detector is a generalized likelihood ratio for a ramp of the driver's own slope
whose onset is unknown (M. Basseville, I. V. Nikiforov, Detection of Abrupt Changes, 1993; from
memory):

    S = max over onsets j of  dt·[ g·Σ τ·(y − b_j) − g²/2·Σ τ² ],     τ = t − t_j,

with b_j the level held just before j. A bell-shaped correction does not keep up with the ramp
and scores near zero. S is compared with a threshold calibrated on this driver's own straights
(`Calibration`), so that a steady hand is judged sooner than a busy one.

After the alarm the onset is dated by the knot of level and ramp (`knots.py`).
"""

from __future__ import annotations

import math
from collections import deque
from dataclasses import dataclass

import numpy as np

from canticle_daemon.frame import FloatArray, IntArray
from canticle_daemon.stream.filters import RunningSum

LAGS_S = tuple(np.geomspace(0.03, 0.8, 15).tolist())
LEVEL_S = 0.8
LONG_LEVEL_S = 1.6
"""The level is taken over this long once so much has been seen: corrections then weigh less."""
SHORT_S = 0.15
CLOCK_FRAMES = 9
"""So many time steps tell the sampling interval; their median survives a lost packet."""
FLOOR_RAMP_S = 0.04
PRIOR_EXCURSION_RAD = math.radians(3.3)
"""Corrections at the wheel are smaller than this (common practice, no source)."""
FALSE_ALARM_PER_WINDOW = 3e-4
WINDOW_S = 0.5
ENOUGH_WINDOWS = 60
EARLY_SPARE = 1.2


@dataclass(frozen=True, slots=True)
class Ramps:
    """The detector's output per frame, in the corner's own sense (positive into the corner).

    `score` is S and `onset_s` the time of the onset it was reached for; `level_rad` is the level
    held before the longest lag, `now_rad` the mean of the last moments. NaN until a second of
    straight has been seen.
    """

    score: FloatArray
    onset_s: FloatArray
    level_rad: FloatArray
    now_rad: FloatArray


class RampStage:
    """Scores at every frame whether a steering ramp is under way."""

    def __init__(self) -> None:
        self.reset()

    def reset(self) -> None:
        """Forget the past."""
        self.dt_s = math.nan
        self._steps: list[float] = []
        self._lags: IntArray = np.empty(0, np.int64)
        self._sums = RunningSum()
        self._count = 0
        self._past: FloatArray = np.empty((4, 0))

    def process(
        self,
        time_s: FloatArray,
        dt_s: FloatArray,
        beyond_rad: FloatArray,
        side: FloatArray,
        rest_rad: FloatArray,
        slope_radps: float,
    ) -> Ramps:
        """Score a block.

        Parameters
        ----------
        time_s, dt_s, beyond_rad
            Stream clock, time since the frame before, and the signal, shape (n,).
        side
            +1 or −1, the sense of the corner that each frame approaches.
        rest_rad
            The level this driver usually holds there, in the corner's sense; NaN: not known.
        slope_radps
            Slope g of the ramp that is looked for.
        """  # fmt: skip
        waiting = self._learn_clock(dt_s)
        silent = np.full(waiting, np.nan)
        if waiting == time_s.size:
            return Ramps(silent, silent, silent, silent)
        rows = self._accumulate(time_s[waiting:], beyond_rad[waiting:])
        parts = self._score(rows, side[waiting:], rest_rad[waiting:], slope_radps)
        self._past = rows[:, -self._past.shape[1] :].copy()
        if not waiting:
            return Ramps(*parts)
        return Ramps(*(np.concatenate([silent, part]) for part in parts))

    def _learn_clock(self, dt_s: FloatArray) -> int:
        """Return how many frames pass before the sampling interval is known."""
        if self._lags.size:
            return 0
        for index, step in enumerate(dt_s.tolist()):
            if step > 0.0:
                self._steps.append(step)
            if len(self._steps) == CLOCK_FRAMES:
                self.dt_s = float(np.median(self._steps))
                lags = np.rint(np.array(LAGS_S) / self.dt_s).astype(np.int64)
                self._lags = np.unique(np.maximum(lags, 1))
                self._level = max(round(LEVEL_S / self.dt_s), 4)
                self._long = max(round(LONG_LEVEL_S / self.dt_s), 8)
                self._short = max(round(SHORT_S / self.dt_s), 2)
                column = self._lags[:, None]
                self._ones = column * (column + 1) / 2
                self._squares = column * (column + 1) * (2 * column + 1) / 6
                self._past = np.full((4, int(self._lags[-1]) + self._long + 1), np.nan)
                return index + 1
        return int(dt_s.size)

    def _accumulate(self, time_s: FloatArray, signal: FloatArray) -> FloatArray:
        count = np.arange(self._count + 1, self._count + 1 + signal.size, dtype=np.float64)
        self._count += int(signal.size)
        sums = self._sums.process(np.stack([signal, count * signal]))
        return np.concatenate([self._past, np.stack([time_s, count, *sums])], axis=1)

    def _score(
        self, rows: FloatArray, side: FloatArray, rest: FloatArray, slope: float
    ) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
        time, count, total, moment = rows
        lags = self._lags[:, None]
        here = np.arange(self._past.shape[1], rows.shape[1])
        onset = here - lags
        total_j = total[onset]
        mean = side * (total_j - total[onset - self._level]) / self._level
        long = side * (total_j - total[onset - self._long]) / self._long
        short = side * (total_j - total[onset - self._short]) / self._short
        long = np.where(np.isfinite(rest), np.where(long == long, long, mean), np.fmin(long, mean))
        # While the last corner's steering unwinds the level is not yet what it will be.
        level = np.where(short < long, np.fmin(long, np.maximum(short, rest)), long)
        rise = total[here] - total_j
        first = side * (moment[here] - moment[onset] - count[onset] * rise)
        first -= level * self._ones
        began = time[onset]
        step = (time[here] - began) / lags
        score = step * (slope * step * first - 0.5 * slope**2 * step**2 * self._squares)
        best = np.argmax(np.where(score == score, score, -np.inf), axis=0)
        column = np.arange(best.size)
        now = side * (total[here] - total[here - self._short]) / self._short
        return score[best, column], began[best, column], long[-1], now


class Calibration:
    """The threshold on S from this driver's own calm stretches.

    Maxima of S over windows of half a second are collected where no corner was taken. S grows
    with the third power of an excursion, so its cube root is what has a plain tail: the upper
    tenth is taken for exponential (peaks over a threshold) and extrapolated to
    `FALSE_ALARM_PER_WINDOW`. Before enough is known, a cautious default holds.
    """

    def __init__(self) -> None:
        self._maxima: deque[float] = deque(maxlen=3000)

    def add(self, maximum: float) -> None:
        """Take in the largest S of one calm window."""
        if math.isfinite(maximum):
            self._maxima.append(math.cbrt(max(maximum, 0.0)))

    def threshold(self, slope_radps: float, quantum_rad: float) -> float:
        """Return the threshold for a ramp slope and a step of the steering's resolution."""
        floor = max(_ramp_score(slope_radps, FLOOR_RAMP_S), _step_score(slope_radps, quantum_rad))
        if len(self._maxima) < ENOUGH_WINDOWS:
            seen = EARLY_SPARE * max(self._maxima, default=0.0)
            prior = _ramp_score(slope_radps, PRIOR_EXCURSION_RAD / slope_radps)
            return max(floor, prior, seen**3)
        values = np.sort(np.array(self._maxima))
        upper = values[int(0.9 * values.size) :]
        excess = float(np.mean(upper - upper[0]))
        # The mean excess of k maxima is known to about 1/√k of itself.
        excess *= 1.0 + 1.5 / math.sqrt(upper.size)
        tail = float(upper[0]) + excess * math.log(0.1 / FALSE_ALARM_PER_WINDOW)
        return max(floor, tail**3)


def _step_score(slope: float, step: float) -> float:
    """Return the most a lasting step scores, max over T of g·q·T²/2 − g²·T³/6, and a fifth."""
    return 0.8 * step**3 / slope


def _ramp_score(slope: float, duration_s: float) -> float:
    """Return the S that a clean ramp of this slope reaches after a time."""
    return slope**2 * duration_s**3 / 6.0
