"""Stand-in: the vertical accelerometer that a stream lacks, from the map and the car's place.

The vertical balance gives f_z from f_y once the roll and the vertical acceleration z̈ are known
(`normal_from_side_force`). z̈ is that of a car riding on a surface which turns under it, so it
needs the car's offset n from the axis and its motion across the road. Nothing here is a late
copy of the truth, because what is late biases early turn-ins against late ones:

* the road's roll rates are the map's own slope and bend times the speed;
* n̈ comes from the forces: n̈ − nφ̇² = f_y − g·sin φ − κ·ṡ·v·cos φ in the road's plane;
* ṅ is the derivative of the offset where that is slow and the integral of n̈ where it is
  quick, and n̈ is in its turn corrected by the slow changes of ṅ, so that a wrong curvature of
  the map does little (complementary filters). Without an offset the forces alone are
  integrated, and soon forgotten, since the errors grow.
"""

from __future__ import annotations

import math

import numpy as np

from canticle_daemon.frame import BoolArray, FloatArray, FrameBlock
from canticle_daemon.physics.car import CarFile
from canticle_daemon.physics.road import (
    GRAVITY_MPS2,
    normal_from_side_force,
    surface_rise_mps2,
)
from canticle_daemon.stream.filters import Derivative, FirstOrderLag
from canticle_daemon.stream.locate import Located
from canticle_daemon.track.profile import Track

RATE_TAU_S, BEND_TAU_S = 0.3, 0.6
"""Beyond these times the car's place tells ṅ and n̈, within them the forces do."""
FORGET_TAU_S = 1.0
"""How long forces alone are integrated where the place across the road is not known."""
GRID_M = 1.0
LEAST_WINDOW_M, MOST_WINDOW_M = 6.0, 40.0
"""The map's roll is smoothed over two rows of its profile, within these limits."""
LEAST_ADVANCE = 0.2
MOST_ROLL_RAD = 1.3
"""A car that lies on its side has no normal force to speak of."""


class RollTable:
    """Slope and bend of the road's roll round the lap, from the rows of a track file.

    The rows are joined by straight lines, whose bend is zero or infinite; three running means
    over `window_m` make a quadratic spline of them.

    Parameters
    ----------
    track
        The track.
    """

    def __init__(self, track: Track) -> None:
        rows = np.diff([row[0] for row in track.file.profile])
        window_m = min(max(2.0 * float(np.median(rows)), LEAST_WINDOW_M), MOST_WINDOW_M)
        count = math.ceil(track.length_m / GRID_M)
        step_m = track.length_m / count
        half = max(round(0.5 * window_m / step_m), 1)
        self._station = np.linspace(0.0, track.length_m, count + 1)
        roll = track.roll_rad(self._station[:-1])
        for _ in range(3):
            roll = _round_mean(roll, half)
        after, before = np.roll(roll, -1), np.roll(roll, 1)
        self._slope = _closed((after - before) / (2.0 * step_m))
        self._bend = _closed((after - 2.0 * roll + before) / step_m**2)

    def at(self, station_m: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Return dφ/ds in rad/m and d²φ/ds² in rad/m² at stations on the lap, shape (n,)."""
        return (
            np.interp(station_m, self._station, self._slope),
            np.interp(station_m, self._station, self._bend),
        )


class StandIn:
    """Gives the vertical specific force in the car's own axes where the stream has none.

    Parameters
    ----------
    car
        The car file; its roll gradient separates body from road.
    track
        The track.
    """

    def __init__(self, car: CarFile, track: Track) -> None:
        self._gradient = math.radians(car.roll_gradient_deg_per_g) / GRAVITY_MPS2
        self._track = track
        self._table = RollTable(track)
        self._place_rate = Derivative(RATE_TAU_S, forgets=True)
        self._quick_rate = FirstOrderLag(RATE_TAU_S, 0.0, forgets=True)
        self._slow_bend = Derivative(BEND_TAU_S, forgets=True)
        self._forces_bend = FirstOrderLag(BEND_TAU_S, forgets=True)
        self._alone_rate = FirstOrderLag(FORGET_TAU_S, 0.0, forgets=True)

    def reset(self) -> None:
        """Forget the past."""
        for part in (self._place_rate, self._slow_bend):
            part.reset()
        for lag in (self._quick_rate, self._forces_bend, self._alone_rate):
            lag.reset()

    def process(
        self,
        block: FrameBlock,
        located: Located,
        road_rad: FloatArray,
        dt_s: FloatArray,
        missing: BoolArray,
    ) -> FloatArray:
        """Return the specific force along the car's z axis.

        Parameters
        ----------
        block, located, dt_s
            The frames, their place, and the time since the frame before.
        road_rad
            Shape (n,): the map's roll of the road, ISO 8855.
        missing
            Shape (n,): where it is wanted; elsewhere the result means nothing.
        """
        body = self._gradient * block.accel_y_mps2
        roll = np.where(np.isfinite(block.roll_rad), block.roll_rad, road_rad + body)
        roll = np.minimum(np.maximum(roll, -MOST_ROLL_RAD), MOST_ROLL_RAD)
        level = normal_from_side_force(block.accel_y_mps2, roll)
        side = np.cos(body) * block.accel_y_mps2 - np.sin(body) * level
        return normal_from_side_force(
            block.accel_y_mps2,
            roll,
            self._rise_mps2(block, located, road_rad, side, dt_s, missing),
        )

    def _rise_mps2(
        self,
        block: FrameBlock,
        located: Located,
        road: FloatArray,
        side: FloatArray,
        dt_s: FloatArray,
        missing: BoolArray,
    ) -> FloatArray:
        """Return z̈; the speed's own change adds under 0.1 m/s² to it and is left out."""
        speed, curvature = block.speed_mps, self._track.curvature_1pm(located.station_m)
        lateral = np.where(missing, located.lateral_m, np.nan)
        known = np.isfinite(lateral)
        lateral_or_line = np.where(known, lateral, 0.0)
        advance = np.maximum(1.0 - lateral_or_line * curvature * np.cos(road), LEAST_ADVANCE)
        along = speed / advance
        slope, bend = self._table.at(located.station_m)
        roll_rate = slope * along
        pulled = GRAVITY_MPS2 * np.sin(road) + curvature * along * speed * np.cos(road)
        offset = lateral_or_line - self._track.file.bank_axis_offset_m
        felt = np.where(missing, side - pulled + offset * roll_rate**2, np.nan)
        return surface_rise_mps2(
            road, roll_rate, bend * along**2, offset, *self._crossing(lateral, felt, dt_s)
        )

    def _crossing(
        self, lateral: FloatArray, felt: FloatArray, dt_s: FloatArray
    ) -> tuple[FloatArray, FloatArray]:
        """Return ṅ and n̈ from the place where that is slow and the forces where it is quick."""
        rate = self._place_rate.process(lateral, dt_s)
        rate = rate + RATE_TAU_S * self._quick_rate.process(felt, dt_s)
        slow = self._slow_bend.process(rate, dt_s) - self._forces_bend.process(felt, dt_s)
        alone = FORGET_TAU_S * self._alone_rate.process(felt, dt_s)
        placed = np.isfinite(rate)
        return np.where(placed, rate, alone), felt + np.where(placed, slow, 0.0)


def _round_mean(values: FloatArray, half: int) -> FloatArray:
    """Return the running mean over 2·half + 1 values of a closed lap."""
    padded = np.concatenate([values[-half - 1 :], values, values[:half]])
    sums = np.cumsum(padded)
    width = 2 * half + 1
    mean: FloatArray = (sums[width:] - sums[:-width]) / width
    return mean


def _closed(values: FloatArray) -> FloatArray:
    return np.append(values, values[0])
