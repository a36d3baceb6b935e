"""Bank: the roll of the road under the car, with its spread.

Three sources, best first:

1. attitude: road roll = vehicle roll less body roll (the car file's roll gradient);
2. specific force: sin φ = (f_y − v·r − v̇_y)/g;
3. the map alone.

The weak point of the second is v̇_y, the rate of side velocity: 1 m/s² of it reads as 6° of
bank, and a car that is being turned in or corrected has ±3. Where the stream tells v_y it is
taken out, without differentiating noise, by the same lag that smooths the rest. Else, with a
map, the force only corrects the map slowly, and the more slowly the faster yaw rate and side
force change (compare H. E. Tseng's discount of transients, Vehicle System Dynamics 36:307-328,
2001; from memory); without a map it is smoothed, and the spread says what that is worth.

The force is followed only over frames that need it, and the map is trusted anew after a frame
that did not. Body roll and road roll cannot be told apart by one accelerometer (J. Ryu,
J. C. Gerdes, American Control Conference 2004); the split here rests on the car file's roll
gradient.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from canticle_daemon.frame import BoolArray, FloatArray, FrameBlock
from canticle_daemon.physics.car import CarFile
from canticle_daemon.physics.road import GRAVITY_MPS2, normal_from_side_force
from canticle_daemon.stream.filters import Derivative, FirstOrderLag, Stopwatch
from canticle_daemon.stream.locate import Located
from canticle_daemon.track.profile import Track

ATTITUDE_STD_RAD = math.radians(0.3)
MAP_STD_RAD = math.radians(1.0)
SAMPLE_STD_RAD = math.radians(2.0)
"""What one sample of side force says of the bank, before its noise is known."""
LEAST_STD_RAD = math.radians(0.5)
"""What the axes, the roll gradient and the map leave, however long one listens."""
WITH_MAP_TAU_S = 2.0
ALONE_TAU_S = 0.4
NOISE_TAU_S = 2.0
CHANGE_TAU_S = 0.15
CALM_YAW_RADPS2, CALM_SIDE_MPS3 = 0.05, 3.0
"""A corner at racing speed is steady where yaw rate and side force change more slowly."""
WANDER_S = 1.0
"""How long a disturbance that is not sensor noise lasts (a driver's correction)."""


@dataclass(frozen=True, slots=True)
class Bank:
    """Road roll per frame, ISO 8855 (positive left side up), and its standard error.

    `map_roll_rad` is the map's own, NaN without a map.
    """

    roll_rad: FloatArray
    std_rad: FloatArray
    map_roll_rad: FloatArray


class BankStage:
    """Estimates the road's roll.

    Parameters
    ----------
    track
        The track, or None.
    car
        The car file; its roll gradient separates body from road.
    """

    def __init__(self, track: Track | None, car: CarFile) -> None:
        self._track = track
        self._gradient = math.radians(car.roll_gradient_deg_per_g) / GRAVITY_MPS2
        tau_s, start = (ALONE_TAU_S, math.nan) if track is None else (WITH_MAP_TAU_S, 0.0)
        self._correction = FirstOrderLag(tau_s, start, forgets=True)
        self._side_speed = Derivative(tau_s, forgets=True)
        self._turning = Derivative(CHANGE_TAU_S, forgets=True)
        self._pushing = Derivative(CHANGE_TAU_S, forgets=True)
        self._prior_rad = SAMPLE_STD_RAD if track is None else MAP_STD_RAD
        self._smooth = FirstOrderLag(CHANGE_TAU_S, forgets=True)
        self._sliding = Derivative(CHANGE_TAU_S, forgets=True)
        self._wander = FirstOrderLag(NOISE_TAU_S, forgets=True)
        self._rough = FirstOrderLag(NOISE_TAU_S, forgets=True)
        self._listened = Stopwatch()
        self._last_rad = math.nan

    def reset(self) -> None:
        """Forget the past."""
        for lag in (self._correction, self._smooth, self._wander, self._rough):
            lag.reset()
        for rate in (self._side_speed, self._sliding, self._turning, self._pushing):
            rate.reset()
        self._listened.reset()
        self._last_rad = math.nan

    def process(self, block: FrameBlock, located: Located, dt_s: FloatArray) -> Bank:
        """Estimate the roll of the road for a block."""
        mapped = self._mapped(located)
        body = self._gradient * block.accel_y_mps2
        attitude = block.roll_rad - body
        known = np.isfinite(attitude)
        if known.all():
            self.reset()
            return Bank(attitude, np.full_like(attitude, ATTITUDE_STD_RAD), mapped)
        inferred, spread = self._from_force(block, body, mapped, dt_s, ~known)
        roll = np.where(known, attitude, np.where(np.isfinite(inferred), inferred, mapped))
        std = np.where(known, ATTITUDE_STD_RAD, np.where(np.isfinite(spread), spread, MAP_STD_RAD))
        return Bank(roll, np.where(np.isfinite(roll), std, np.nan), mapped)

    def _mapped(self, located: Located) -> FloatArray:
        if self._track is None:
            return np.full_like(located.station_m, np.nan)
        return self._track.roll_rad(located.station_m)

    def _from_force(
        self,
        block: FrameBlock,
        body: FloatArray,
        mapped: FloatArray,
        dt_s: FloatArray,
        wanted: BoolArray,
    ) -> tuple[FloatArray, FloatArray]:
        """Return roll and standard error where they are wanted; elsewhere they mean nothing."""
        base = np.where(np.isfinite(mapped), mapped, 0.0)
        side = self._road_side(block, body, base)
        tilt = (side - block.speed_mps * block.yaw_rate_radps) / GRAVITY_MPS2
        away = np.where(wanted, tilt - np.sin(base), np.nan)
        side_speed = np.where(wanted, block.vel_y_mps / GRAVITY_MPS2, np.nan)
        pace_s = dt_s * self._trust(block, np.where(wanted, side, np.nan), dt_s)
        sliding = self._side_speed.process(side_speed, pace_s)
        correction = self._correction.process(away, pace_s)
        correction = correction - np.where(np.isfinite(sliding), sliding, 0.0)
        sine = np.minimum(np.maximum(np.sin(base) + correction, -1.0), 1.0)
        quick = self._sliding.process(side_speed, dt_s)
        rest = self._smooth.process(away, dt_s) - np.where(np.isfinite(quick), quick, 0.0)
        return np.arcsin(sine), self._spread(away, rest - correction, dt_s, pace_s)

    def _road_side(self, block: FrameBlock, body: FloatArray, base: FloatArray) -> FloatArray:
        """Return the side force in the road's plane."""
        upward = block.accel_z_mps2
        level = normal_from_side_force(block.accel_y_mps2, base + body)
        upward = np.where(np.isfinite(upward), upward, level)
        side: FloatArray = np.cos(body) * block.accel_y_mps2 - np.sin(body) * upward
        return side

    def _trust(self, block: FrameBlock, side: FloatArray, dt_s: FloatArray) -> FloatArray | float:
        """Return how fast the map is corrected: fully in steady motion, hardly in a transient."""
        if self._track is None:
            return 1.0
        turning = self._turning.process(
            np.where(np.isfinite(side), block.yaw_rate_radps, np.nan), dt_s
        )
        pushing = self._pushing.process(side, dt_s)
        haste = (turning / CALM_YAW_RADPS2) ** 2 + (pushing / CALM_SIDE_MPS3) ** 2
        haste = np.where(np.isfinite(block.vel_y_mps), 0.0, haste)
        return 1.0 / (1.0 + haste)

    def _spread(
        self, away: FloatArray, rest: FloatArray, dt_s: FloatArray, pace_s: FloatArray
    ) -> FloatArray:
        """Return the standard error: sensor noise averages out, what wanders hardly does.

        `away` has the noise in it; `rest` is smoothed and less what is known of v̇_y.
        """
        tau_s = self._correction.tau_s
        before = np.concatenate([[self._last_rad], away[:-1]])
        self._last_rad = float(away[-1])
        noise = self._rough.process(0.5 * (away - before) ** 2, dt_s)
        wander = self._wander.process(rest**2, pace_s)
        listened_s = self._listened.process(np.isfinite(away), pace_s)
        spread = self._prior_rad**2 * np.exp(-2.0 * listened_s / tau_s) + LEAST_STD_RAD**2
        spread += np.where(np.isfinite(noise), noise, 0.0) * np.minimum(dt_s / (2.0 * tau_s), 1.0)
        return np.sqrt(spread + wander * min(WANDER_S / (2.0 * tau_s), 1.0))
