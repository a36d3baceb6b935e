"""The car file and the quasi-static loads of its wheels.

Source of the load-transfer relations: W. F. Milliken, D. L. Milliken, Race Car Vehicle
Dynamics, SAE 1995, chapter 18 (from memory), reduced to a roll-stiffness share; on a bank
the road-plane specific forces take the places of lateral acceleration and gravity.
"""

from __future__ import annotations

from pathlib import Path
from typing import Literal

import numpy as np
from pydantic import Field

from canticle_daemon.config import Section, load_toml
from canticle_daemon.frame import FloatArray


class TireFile(Section):
    """The ``[tire]`` table of a car file."""

    peak_friction: float = Field(1.30, gt=0.1, le=5)
    reference_load_n: float = Field(4000.0, gt=0)
    load_sensitivity: float = Field(-0.10, ge=-1, le=1)
    cornering_stiffness_per_load: float = Field(18.0, gt=0)


class CarFile(Section):
    """A car file; the defaults are a stock-type oval car (common practice, no source)."""

    name: str = "stock-type oval car"
    mass_kg: float = Field(1540.0, gt=50, le=50_000)
    wheelbase_m: float = Field(2.79, gt=0.5, le=20)
    front_weight_share: float = Field(0.51, gt=0, lt=1)
    left_weight_share: float = Field(0.50, gt=0, lt=1)
    cg_height_m: float = Field(0.45, ge=0, le=3)
    track_front_m: float = Field(1.63, gt=0.3, le=5)
    track_rear_m: float = Field(1.60, gt=0.3, le=5)
    yaw_inertia_kgm2: float = Field(2600.0, gt=0)
    roll_stiffness_front_share: float = Field(0.62, ge=0, le=1)
    roll_gradient_deg_per_g: float = Field(1.0, ge=-10, le=20)
    downforce_front_n_per_mps2: float = Field(0.35, ge=-5, le=20)
    downforce_rear_n_per_mps2: float = Field(0.45, ge=-5, le=20)
    drag_n_per_mps2: float = Field(0.55, ge=0, le=20)
    drive: Literal["front", "rear", "all"] = "rear"
    brake_front_share: float = Field(0.62, ge=0, le=1)
    steering_ratio: float = Field(12.0, gt=0)
    length_m: float = Field(5.0, gt=0)
    tire: TireFile = TireFile()

    @classmethod
    def load(cls, path: Path | None) -> CarFile:
        """Read a car file, or take the defaults; ConfigError where it cannot be right."""
        return cls() if path is None else load_toml(path, cls)


def wheel_loads(
    car: CarFile,
    normal_n: FloatArray,
    side_n: FloatArray,
    forward_n: FloatArray,
    downforce_front_n: FloatArray,
    downforce_rear_n: FloatArray,
) -> FloatArray:
    """Share the car's normal force among its wheels.

    Parameters
    ----------
    car
        The car file.
    normal_n, side_n, forward_n
        Shape (n,): forces of all tires together in the road's frame, up, left and forward
        positive; `normal_n` includes the downforce.
    downforce_front_n, downforce_rear_n
        Shape (n,): aerodynamic load of each axle, positive down.

    Returns
    -------
    array, shape (4, n)
        Loads of front left, front right, rear left, rear right, never negative; they add up to
        the normal force. A wheel that would lift carries nothing and the other wheel of its
        axle carries the axle; an axle that would lift leaves the car to the other.
    """
    height = car.cg_height_m
    body_n = normal_n - downforce_front_n - downforce_rear_n
    shift_n = forward_n * height / car.wheelbase_m
    whole_n = np.maximum(normal_n, 0.0)
    front_n = car.front_weight_share * body_n + downforce_front_n - shift_n
    front_n = np.minimum(np.maximum(front_n, 0.0), whole_n)
    rear_n = whole_n - front_n
    moment_nm = side_n * height
    front_share = car.roll_stiffness_front_share
    front_transfer_n = front_share * moment_nm / car.track_front_m
    rear_transfer_n = (1.0 - front_share) * moment_nm / car.track_rear_m
    left = car.left_weight_share - 0.5
    front_left = front_n * 0.5 + left * (front_n - downforce_front_n) - front_transfer_n
    rear_left = rear_n * 0.5 + left * (rear_n - downforce_rear_n) - rear_transfer_n
    loads = np.empty((4, *normal_n.shape))
    loads[0] = np.minimum(np.maximum(front_left, 0.0), front_n)
    loads[2] = np.minimum(np.maximum(rear_left, 0.0), rear_n)
    np.subtract(front_n, loads[0], out=loads[1])
    np.subtract(rear_n, loads[2], out=loads[3])
    return loads


def axle_side_forces(
    car: CarFile, side_n: FloatArray, yaw_acceleration_radps2: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Split the side force between front and rear axle by the balance of yaw moments.

    F_front = (b·F + I·r')/L and F_rear = (a·F − I·r')/L with a, b the distances of the axles
    from the center of gravity; positive left.
    """
    moment = car.yaw_inertia_kgm2 * yaw_acceleration_radps2 / car.wheelbase_m
    return (
        car.front_weight_share * side_n + moment,
        (1.0 - car.front_weight_share) * side_n - moment,
    )
