"""Demand: the friction each tire is asked for, from what an accelerometer reads.

Specific force in the road's frame times mass, with drag and downforce taken out, is what the
tires carry; the bank angle is not needed. Where the stream has no vertical acceleration the
map and the car's place stand in for it (`stand_in.py`), and the change of speed for a missing
longitudinal one, each only over frames that need it, so that a stream that has all it needs
pays nothing.

Among the tires of an axle the side force goes by load, as they have one slip angle and a
stiffness in proportion to load; drive and braking go half and half, as an open differential
and a brake line give both wheels the same torque. An axle's side force follows from the balance
of yaw moments.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from canticle_daemon.frame import BoolArray, FloatArray, FrameBlock
from canticle_daemon.physics.car import CarFile, axle_side_forces, wheel_loads
from canticle_daemon.physics.road import GRAVITY_MPS2
from canticle_daemon.physics.tire import MAX_UTILIZATION, friction_exponent, peak_friction
from canticle_daemon.stream.bank import Bank
from canticle_daemon.stream.filters import Derivative
from canticle_daemon.stream.locate import Located
from canticle_daemon.stream.stand_in import StandIn
from canticle_daemon.track.profile import Track

MIN_SPEED_MPS = 5.0
MIN_LOAD_SHARE = 0.2
"""Below this share of the weight a ratio to the normal force says nothing."""
RATE_TAU_S = 0.08
PEDAL_REST = 0.02
"""A brake pedal below this is not pressed: what then slows the car is the engine."""


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
        self._stand_in = None if track is None else StandIn(car, track)
        self._gradient = math.radians(car.roll_gradient_deg_per_g) / GRAVITY_MPS2
        self._yaw_acceleration = Derivative(RATE_TAU_S)
        self._speed_rate = Derivative(RATE_TAU_S, forgets=True)

    def reset(self) -> None:
        """Forget the past."""
        self._yaw_acceleration.reset()
        self._speed_rate.reset()
        if self._stand_in is not None:
            self._stand_in.reset()

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
        axle_side = np.empty((2, side_n.size))
        axle_side[0], axle_side[1] = axle_side_forces(car, side_n, yaw_acceleration)
        axle_forward = self._axle_forward(forward_n, axle_side[0], block)
        return _demand(normal_n, side_n, forward_n, load, axle_side, axle_forward, car)

    def _specific_force(
        self, block: FrameBlock, located: Located, bank: Bank, dt_s: FloatArray
    ) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Turn the body's specific force into the road's frame, filling what is missing."""
        forward, upward = block.accel_x_mps2, block.accel_z_mps2
        if self._stand_in is not None:
            missing = np.isnan(forward)
            if missing.any():
                speed = np.where(missing, block.speed_mps, np.nan)
                forward = np.where(missing, self._speed_rate.process(speed, dt_s), forward)
            else:
                self._speed_rate.reset()
            missing = np.isnan(upward)
            if missing.any():
                mapped = self._stand_in.process(block, located, bank.map_roll_rad, dt_s, missing)
                upward = np.where(missing, mapped, upward)
            else:
                self._stand_in.reset()
        body = self._gradient * block.accel_y_mps2
        cos, sin = np.cos(body), np.sin(body)
        side = cos * block.accel_y_mps2 - sin * upward
        return forward, side, sin * block.accel_y_mps2 + cos * upward

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

    def _axle_forward(
        self, forward_n: FloatArray, front_side_n: FloatArray, block: FrameBlock
    ) -> FloatArray:
        """Return the forward force of front and rear axle, shape (2, n).

        Steered front tires lean their side force back, and the driven axle makes up for it.
        Drive and engine braking come through the driven axle; the car file shares the brakes.
        """
        car, steer = self._car, block.steer_rad
        drag_n = front_side_n * np.where(steer == steer, steer / car.steering_ratio, 0.0)
        torque_n = forward_n + drag_n
        driven = {"front": 1.0, "rear": 0.0, "all": 0.5}[car.drive]
        braking = (torque_n < 0.0) & ~(block.brake < PEDAL_REST)
        axles = np.empty((2, forward_n.size))
        axles[0] = np.where(braking, car.brake_front_share, driven) * torque_n - drag_n
        np.subtract(forward_n, axles[0], out=axles[1])
        return axles


def _demand(
    normal_n: FloatArray,
    side_n: FloatArray,
    forward_n: FloatArray,
    load: FloatArray,
    axle_side: FloatArray,
    axle_forward: FloatArray,
    car: CarFile,
) -> Demand:
    demand = np.hypot(forward_n, side_n) / normal_n
    friction = peak_friction(car.tire, load)
    grip = friction * load
    axle_load, axle_grip = load[::2] + load[1::2], grip[::2] + grip[1::2]
    asked = demand * (axle_load[0] + axle_load[1]) / (axle_grip[0] + axle_grip[1])
    used = np.hypot(axle_side, axle_forward) / np.maximum(axle_grip, 1.0)
    used = np.minimum(used, MAX_UTILIZATION)
    return Demand(
        demand=demand,
        side=side_n / normal_n,
        utilization=np.minimum(asked, MAX_UTILIZATION),
        saturated=asked > MAX_UTILIZATION,
        front_utilization=used[0],
        rear_utilization=used[1],
        load_n=load,
        force_n=_tire_forces(axle_side, axle_forward, used, load, friction),
        friction=friction,
    )


def _tire_forces(
    axle_side: FloatArray,
    axle_forward: FloatArray,
    used: FloatArray,
    load: FloatArray,
    friction: FloatArray,
) -> FloatArray:
    """Return the magnitude of each tire's force, shape (4, n), from the axles', shape (2, n).

    A wheel passes on no more drive or braking than it grips; its neighbor takes the rest.
    """
    load, friction = load.reshape(2, 2, -1), friction.reshape(2, 2, -1)
    grip = friction * load
    axle_friction = (grip[:, 0] + grip[:, 1]) / np.maximum(load[:, 0] + load[:, 1], 1.0)
    follows = friction_exponent(used)
    # The force at one slip, by load where little is used and by grip where all is.
    share = load * ((1.0 - follows)[:, None] * axle_friction[:, None] + follows[:, None] * friction)
    side = share * (axle_side / np.maximum(share[:, 0] + share[:, 1], 1.0))[:, None]
    half = 0.5 * axle_forward[:, None]
    gripped = np.minimum(np.maximum(half, -grip), grip)
    force: FloatArray = np.hypot(side, gripped + (half - gripped)[:, ::-1])
    return force.reshape(4, -1)
