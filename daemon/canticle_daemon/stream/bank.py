"""Bank: the roll of the road under the car, with its spread.

Three sources, best first:

1. attitude: road roll = vehicle roll less body roll (the car file's roll gradient);
2. specific force: sin φ = (f_y − v·r)/g, noisy, so it only corrects slowly what the map says,
   or is smoothed where there is no map;
3. the map alone.

The second is followed only over frames that need it, and trusts the map anew after a frame
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
from canticle_daemon.physics.road import bank_from_side_force
from canticle_daemon.stream.filters import FirstOrderLag, Stopwatch
from canticle_daemon.stream.locate import Located
from canticle_daemon.track.profile import Track

GRAVITY_MPS2 = 9.81
ATTITUDE_STD_RAD = math.radians(0.3)
MAP_STD_RAD = math.radians(1.0)
SAMPLE_STD_RAD = math.radians(2.0)
"""What one sample of side force says of the bank, before its noise is known."""
LEAST_STD_RAD = math.radians(0.2)
WITH_MAP_TAU_S = 2.0
ALONE_TAU_S = 0.4
NOISE_TAU_S = 2.0


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
        self._prior_rad = SAMPLE_STD_RAD if track is None else MAP_STD_RAD
        self._scatter = FirstOrderLag(NOISE_TAU_S, forgets=True)
        self._listened = Stopwatch()

    def reset(self) -> None:
        """Forget the past."""
        self._correction.reset()
        self._scatter.reset()
        self._listened.reset()

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
        side = np.cos(body) * block.accel_y_mps2
        side -= np.sin(body) * np.where(
            np.isfinite(block.accel_z_mps2), block.accel_z_mps2, GRAVITY_MPS2
        )
        raw = bank_from_side_force(side, block.speed_mps, block.yaw_rate_radps)
        base = np.where(np.isfinite(mapped), mapped, 0.0)
        away = np.where(wanted, raw - base, np.nan)
        correction = self._correction.process(away, dt_s)
        scatter = self._scatter.process((away - correction) ** 2, dt_s)
        listened_s = self._listened.process(np.isfinite(away), dt_s)
        tau_s = self._correction.tau_s
        share = np.minimum(dt_s / (2.0 * tau_s), 1.0)
        prior = self._prior_rad**2 * np.exp(-2.0 * listened_s / tau_s)
        spread = np.sqrt(prior + scatter * share + LEAST_STD_RAD**2)
        return base + correction, spread
