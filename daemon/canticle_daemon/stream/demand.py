"""Demand: the friction each tire is asked for, from what an accelerometer reads.

Specific force in the road's frame times mass, with drag and downforce taken out, is what the
tires carry; the bank angle is not needed. Where the stream has no vertical acceleration the
map stands in for it: the normal specific force follows from the road's roll, its rates, and
the car's motion across the road. These rates are followed only over frames that need them, so
that a stream that has all it needs pays nothing for them.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from canticle_daemon.frame import BoolArray, FloatArray, FrameBlock
from canticle_daemon.physics.car import CarFile, axle_side_forces, wheel_loads
from canticle_daemon.physics.road import normal_specific_force
from canticle_daemon.physics.tire import MAX_UTILIZATION, peak_friction
from canticle_daemon.stream.bank import GRAVITY_MPS2, Bank
from canticle_daemon.stream.filters import Derivative
from canticle_daemon.stream.locate import Located
from canticle_daemon.track.profile import Track

MIN_SPEED_MPS = 5.0
MIN_LOAD_SHARE = 0.2
"""Below this share of the weight a ratio to the normal force says nothing."""
RATE_TAU_S = 0.08


@dataclass(frozen=True, slots=True)
class Demand:
    """Friction asked for. Whole-car and axle figures have shape (n,), tires (4, n).

    `side` is positive to the left; `force_n` are magnitudes; `friction` is the peak;
    all are NaN where not defined.
    """

    demand: FloatArray
    side: FloatArray
    utilization: FloatArray
    saturated: BoolArray
    front_utilization: FloatArray
    rear_utilization: FloatArray
    load_n: FloatArray
    force_n: FloatArray
    friction: FloatArray


class DemandStage:
    """Computes the demand of the whole car, its axles and its tires.

    Parameters
    ----------
    car
        The car file.
    track
        The track, which stands in for missing vertical or longitudinal acceleration, or None.
    """

    def __init__(self, car: CarFile, track: Track | None) -> None:
        self._car = car
        self._stand_in = track is not None
        self._axis_m = 0.0 if track is None else track.file.bank_axis_offset_m
        self._gradient = math.radians(car.roll_gradient_deg_per_g) / GRAVITY_MPS2
        self._yaw_acceleration = Derivative(RATE_TAU_S)
        self._speed_rate = Derivative(RATE_TAU_S, forgets=True)
        self._motion = [Derivative(RATE_TAU_S, forgets=True) for _ in range(4)]

    def reset(self) -> None:
        """Forget the past."""
        for rate in (self._yaw_acceleration, self._speed_rate, *self._motion):
            rate.reset()

    def process(self, block: FrameBlock, located: Located, bank: Bank, dt_s: FloatArray) -> Demand:
        """Compute the demand for a block."""
        car = self._car
        forward, side, normal = self._specific_force(block, located, bank, dt_s)
        speed2 = block.speed_mps**2
        mass = car.mass_kg + np.fmax(block.fuel_kg, 0.0)
        down_front = car.downforce_front_n_per_mps2 * speed2
        down_rear = car.downforce_rear_n_per_mps2 * speed2
        normal_n = mass * normal + down_front + down_rear
        defined = (block.speed_mps >= MIN_SPEED_MPS) & (
            normal_n >= MIN_LOAD_SHARE * mass * GRAVITY_MPS2
        )
        normal_n = np.where(defined, normal_n, np.nan)
        side_n = mass * side
        forward_n = mass * forward + car.drag_n_per_mps2 * speed2
        yaw_acceleration = self._yaw_acceleration.process(block.yaw_rate_radps, dt_s)
        modeled = wheel_loads(car, normal_n, side_n, forward_n, down_front, down_rear)
        load = self._streamed_loads(block, modeled, defined)
        axles = self._axle_forces(side_n, forward_n, yaw_acceleration)
        return _demand(normal_n, side_n, forward_n, load, axles, car)

    def _specific_force(
        self, block: FrameBlock, located: Located, bank: Bank, dt_s: FloatArray
    ) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Turn the body's specific force into the road's frame, filling what is missing."""
        body = self._gradient * block.accel_y_mps2
        cos, sin = np.cos(body), np.sin(body)
        side = cos * block.accel_y_mps2 - sin * block.accel_z_mps2
        normal = sin * block.accel_y_mps2 + cos * block.accel_z_mps2
        forward = block.accel_x_mps2
        if not self._stand_in:
            return forward, side, normal
        missing = np.isnan(forward)
        if missing.any():
            speed = np.where(missing, block.speed_mps, np.nan)
            forward = np.where(missing, self._speed_rate.process(speed, dt_s), forward)
        else:
            self._speed_rate.reset()
        missing = np.isnan(normal)
        if missing.any():
            mapped = self._mapped_normal(block, located, bank, dt_s, missing)
            normal = np.where(missing, mapped, normal)
            side = np.where(missing, (block.accel_y_mps2 - sin * mapped) / cos, side)
        else:
            for rate in self._motion:
                rate.reset()
        return forward, side, normal

    def _mapped_normal(
        self,
        block: FrameBlock,
        located: Located,
        bank: Bank,
        dt_s: FloatArray,
        missing: BoolArray,
    ) -> FloatArray:
        """Return the normal specific force where it is missing; elsewhere it is not defined."""
        known = np.where(np.isfinite(located.lateral_m), located.lateral_m, 0.0)
        offset = np.where(missing, known - self._axis_m, np.nan)
        roll_rate = self._motion[0].process(np.where(missing, bank.map_roll_rad, np.nan), dt_s)
        roll_acceleration = self._motion[1].process(roll_rate, dt_s)
        offset_rate = self._motion[2].process(offset, dt_s)
        offset_acceleration = self._motion[3].process(offset_rate, dt_s)
        heading_rate = block.yaw_rate_radps / np.cos(bank.map_roll_rad)
        return normal_specific_force(
            bank.map_roll_rad, roll_rate, roll_acceleration,
            offset, offset_rate, offset_acceleration, block.speed_mps, heading_rate,
        )  # fmt: skip

    def _streamed_loads(
        self, block: FrameBlock, modeled: FloatArray, defined: BoolArray
    ) -> FloatArray:
        for frame in block.frames:
            if frame.wheel_load_n is not None:
                break
        else:
            return modeled
        streamed = np.maximum(block.wheels("wheel_load_n"), 0.0)
        total = streamed[0] + streamed[1] + streamed[2] + streamed[3]
        usable = defined & (total > 0.0)
        return np.where(usable, streamed, modeled)

    def _axle_forces(
        self, side_n: FloatArray, forward_n: FloatArray, yaw_acceleration: FloatArray
    ) -> tuple[FloatArray, FloatArray]:
        """Return |force| of front and rear axle."""
        car = self._car
        front_side, rear_side = axle_side_forces(car, side_n, yaw_acceleration)
        drive_front = {"front": 1.0, "rear": 0.0, "all": 0.5}[car.drive]
        share = np.where(forward_n >= 0.0, drive_front, car.brake_front_share)
        front = np.hypot(front_side, share * forward_n)
        rear = np.hypot(rear_side, (1.0 - share) * forward_n)
        return front, rear


def _demand(
    normal_n: FloatArray,
    side_n: FloatArray,
    forward_n: FloatArray,
    load: FloatArray,
    axles: tuple[FloatArray, FloatArray],
    car: CarFile,
) -> Demand:
    demand = np.hypot(forward_n, side_n) / normal_n
    friction = peak_friction(car.tire, load)
    grip = friction * load
    grip_front, grip_rear = grip[0] + grip[1], grip[2] + grip[3]
    load_front, load_rear = load[0] + load[1], load[2] + load[3]
    asked = demand * (load_front + load_rear) / (grip_front + grip_rear)
    front, rear = axles
    force = np.empty_like(load)
    np.multiply(front, load[:2], out=force[:2])
    np.multiply(rear, load[2:], out=force[2:])
    force[:2] /= np.maximum(load_front, 1.0)
    force[2:] /= np.maximum(load_rear, 1.0)
    return Demand(
        demand=demand,
        side=side_n / normal_n,
        utilization=np.minimum(asked, MAX_UTILIZATION),
        saturated=asked > MAX_UTILIZATION,
        front_utilization=np.minimum(front / np.maximum(grip_front, 1.0), MAX_UTILIZATION),
        rear_utilization=np.minimum(rear / np.maximum(grip_rear, 1.0), MAX_UTILIZATION),
        load_n=load,
        force_n=force,
        friction=friction,
    )
