"""Driver: what is learned of how this driver turns in, and how still the wheel is held before.

Until enough has been seen, the road and the car file tell what a driver may do.
"""

from __future__ import annotations

import math
from collections import deque
from dataclasses import dataclass, field
from itertools import pairwise

import numpy as np

from canticle_daemon.frame import FloatArray
from canticle_daemon.physics.car import CarFile
from canticle_daemon.physics.road import neutral_speed_mps
from canticle_daemon.stream.knots import Knot
from canticle_daemon.stream.passes import Pass
from canticle_daemon.stream.steering import corner_curvature
from canticle_daemon.stream.trace import SPEED, TIME, WAY
from canticle_daemon.stream.turn_in import WINDOW_S, Calibration
from canticle_daemon.track.profile import CornerPlan, Track

RAMP_TIME_S = 1.2
"""A driver's steering ramp before one was learned (common practice, no source)."""
SLOPE_SHARE = 0.85
"""The detector's slope over the driver's median: a slower hand is then still seen in time."""
SETTLE_S = 1.0
"""After a corner's exit the steering still unwinds for about so long."""
FALSE_S = 0.3
"""An alarm sooner than this before its onset was a false one."""
FEWEST_MISSES = 3
LEAST_SPEED_MPS = 10.0


@dataclass(frozen=True, slots=True)
class Habits:
    """The last turn-ins into one corner.

    Heights and slopes (per second) of the ramps, median speeds of the passes, errors of the
    live onsets, and the levels held before.
    """

    heights_rad: deque[float] = field(default_factory=lambda: deque(maxlen=12))
    slopes_radps: deque[float] = field(default_factory=lambda: deque(maxlen=12))
    speeds_mps: deque[float] = field(default_factory=lambda: deque(maxlen=12))
    misses_m: deque[float] = field(default_factory=lambda: deque(maxlen=12))
    rests_rad: deque[float] = field(default_factory=lambda: deque(maxlen=3))


class Driver:
    """The driver's habits in every corner, and the detector's settings that follow.

    Parameters
    ----------
    track
        The track, with at least one corner.
    car
        The car file, for the first guess of steering ramps.

    Attributes
    ----------
    slope_radps, threshold
        Slope of the ramp that is looked for, and the score that is an alarm.
    rests_rad
        The level usually held before each corner, in its own sense; NaN while not known.
    coarse_rad
        Standard deviation of what the steering's resolution hides.
    """

    def __init__(self, track: Track, car: CarFile) -> None:
        self._habits = [Habits() for _ in track.corners]
        self._calibration = Calibration()
        self._calm = CalmWindows()
        gain = car.steering_ratio * car.wheelbase_m
        self._guess_rad = [1.3 * gain * corner_curvature(track, corner) for corner in track.corners]
        self._neutral_mps = [_neutral_speed_mps(track, corner) for corner in track.corners]
        self.aim(0.0)

    def reset(self) -> None:
        """Drop what is not yet settled; what was learned stays."""
        self._calm.reset()

    def aim(self, quantum_rad: float) -> None:
        """Set the detector for the next pass; `quantum_rad` is the steering's resolution."""
        known = [_median(habits.slopes_radps, math.nan) for habits in self._habits]
        guesses = [guess / RAMP_TIME_S for guess in self._guess_rad]
        slopes = [k if math.isfinite(k) else g for k, g in zip(known, guesses, strict=True)]
        self.slope_radps = SLOPE_SHARE * min(slopes)
        self.rests_rad = np.array([self.rest_rad(corner) for corner in range(len(self._habits))])
        self.threshold = self._calibration.threshold(self.slope_radps, quantum_rad)
        self.coarse_rad = quantum_rad / math.sqrt(12.0)

    def height_rad(self, corner: int) -> float:
        """Return the usual height of the first ramp into a corner."""
        return _median(self._habits[corner].heights_rad, self._guess_rad[corner])

    def rest_rad(self, corner: int) -> float:
        """Return the level usually held before a corner, NaN while not known."""
        return _median(self._habits[corner].rests_rad, math.nan)

    def usual_mps(self, corner: int) -> float:
        """Return the usual speed in a corner; before one was driven, what its bank carries."""
        return _median(self._habits[corner].speeds_mps, self._neutral_mps[corner])

    def slope_prior(self, corner: int) -> tuple[float, float]:
        """Return the usual slope of the ramp into a corner and its spread, rad/s."""
        slopes = self._habits[corner].slopes_radps
        slope = _median(slopes, self.slope_radps / SLOPE_SHARE)
        return slope, (1.0, 0.5, 0.5, 0.25)[min(len(slopes), 3)] * slope

    def live_error_m(self, corner: int) -> tuple[float, float]:
        """Return by how much live onsets lie beyond the refined ones here: bias and scatter.

        The bias counts only as far as it stands out from twice its own standard error (after
        James and Stein): a busy hand's few misses say nothing of what the next will be.
        """
        misses = np.array(self._habits[corner].misses_m)
        if misses.size < FEWEST_MISSES:
            return 0.0, math.sqrt(float(np.mean(misses**2))) if misses.size else 0.0
        middle = float(np.median(misses))
        variance = float(np.mean((misses - middle) ** 2))
        doubt = 0.5 * math.pi * variance / misses.size  # of a median, normal law
        bias = middle * max(0.0, 1.0 - 4.0 * doubt / middle**2) if middle else 0.0
        return bias, math.sqrt(variance + (middle - bias) ** 2 + doubt)

    def watch(
        self, time_s: FloatArray, score: FloatArray, level_rad: FloatArray, corner: int
    ) -> None:
        """Take in frames on the way to a corner; a score that must not count is infinite."""
        self._calm.watch(time_s, score, level_rad, corner)

    def left_corner(self, time_s: float) -> None:
        """Note that a corner's exit was passed."""
        self._calm.quiet_until_s = time_s + SETTLE_S

    def learn(
        self, here: Pass, found: tuple[Knot, float] | None, trace: FloatArray, slow: bool
    ) -> None:
        """Let a finished entry teach: `found` is its knot and the height of its ramp."""
        habits = self._habits[here.corner]
        if not slow:
            habits.speeds_mps.append(float(np.median(trace[SPEED])))
        if found is None:
            if here.alarm is not None:
                self._calibration.add(here.alarm_score)
            self._calm.drop()
            return
        knot, height = found
        onset_s = float(np.interp(knot.x, trace[WAY], trace[TIME]))
        habits.heights_rad.append(height)
        habits.slopes_radps.append(knot.slope * float(np.interp(knot.x, trace[WAY], trace[SPEED])))
        if here.alarm is not None:
            if here.alarm.time_s < onset_s - FALSE_S:
                self._calibration.add(here.alarm_score)
            else:
                habits.misses_m.append(here.alarm_way_m - knot.x)
        self._settle(onset_s - 0.1)

    def _settle(self, until_s: float) -> None:
        """Commit the calm windows that ended before a turn-in; drop the others."""
        for window in self._calm.drop():
            if window.end_s < until_s:
                self._calibration.add(window.top)
                if window.end_s > until_s - 3.0 * WINDOW_S and math.isfinite(window.level_rad):
                    self._habits[window.corner].rests_rad.append(window.level_rad)


@dataclass(slots=True)
class Window:
    """Half a second: its largest score, the level at its end, and the corner ahead."""

    number: int = -1
    top: float = -math.inf
    level_rad: float = math.nan
    corner: int = 0
    end_s: float = math.nan


class CalmWindows:
    """Half seconds without a corner, kept until it is known whether they were calm.

    Attributes
    ----------
    quiet_until_s
        Windows that begin before are left out.
    """

    def __init__(self) -> None:
        self.reset()

    def reset(self) -> None:
        """Forget everything."""
        self.quiet_until_s = -math.inf
        self._open = Window()
        self._closed: list[Window] = []

    def watch(
        self, time_s: FloatArray, score: FloatArray, level_rad: FloatArray, corner: int
    ) -> None:
        """Take in frames; windows are half seconds of the stream's own clock."""
        number = np.floor(time_s / WINDOW_S).astype(np.int64)
        starts = np.flatnonzero(np.diff(number, prepend=self._open.number)).tolist()
        edges = [*starts, number.size] if 0 in starts else [0, *starts, number.size]
        for begin, stop in pairwise(edges):
            top = float(np.maximum.reduce(score[begin:stop]))
            if int(number[begin]) == self._open.number:
                top = max(top, self._open.top)
            else:
                self._close(float(time_s[begin]))
            self._open = Window(int(number[begin]), top, float(level_rad[stop - 1]), corner)

    def drop(self) -> list[Window]:
        """Give the closed windows away."""
        closed, self._closed = self._closed, []
        return closed

    def _close(self, end_s: float) -> None:
        if math.isfinite(self._open.top) and end_s - WINDOW_S > self.quiet_until_s:
            self._open.end_s = end_s
            self._closed.append(self._open)


def _neutral_speed_mps(track: Track, corner: CornerPlan) -> float:
    """Return the speed at which the corner's bank alone would carry a car, with a least."""
    bank = max(float(track.bank_rad(np.array([corner.apex_m]))[0]), 0.0)
    radius = 1.0 / corner_curvature(track, corner)
    return max(float(neutral_speed_mps(radius, bank)), LEAST_SPEED_MPS)


def _median(values: deque[float], default: float) -> float:
    return float(np.median(values)) if values else default
