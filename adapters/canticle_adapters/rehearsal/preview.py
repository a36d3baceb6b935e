"""How the driver steers: linear-quadratic control with preview of the path's curvature.

A driver who sees the road ahead turns the wheel before the road bends. The rate of the wheel
is the linear-quadratic optimum of a plain single-track model against place error, direction
error and steering effort, with the path's curvature ahead as a known disturbance (the idea:
R. S. Sharp, V. Valtetsiotis, Optimal preview car steering control, 2001; from memory).
Computed once at start; the simulated car itself is another, fuller model.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from canticle_adapters.rehearsal.car import GRAVITY_MPS2, CarData

PLACE_WEIGHT = 1.0
COURSE_WEIGHT = 400.0
EFFORT_WEIGHT = 250.0
STIFFNESS_SHARE = 0.8
NORMAL_G = 1.1
REACH_M = 80
HORIZON_STEPS = 800

Array = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Preview:
    """Gains of the road-wheel rate, and the weights of the curvature one meter apart ahead."""

    place: float
    heading: float
    side_speed: float
    yaw_rate: float
    wheel: float
    curvature: tuple[float, ...]
    side_pull: tuple[float, ...]


def preview(data: CarData, speed_mps: float) -> Preview:
    """Return the driver's gains for a car and a usual speed."""
    step = 1.0 / speed_mps
    move, push, bend, pull = _single_track(data, speed_mps)
    a = np.eye(5) + step * move + 0.5 * step**2 * move @ move
    b = step * push + 0.5 * step**2 * move @ push
    q = np.diag([PLACE_WEIGHT, COURSE_WEIGHT, 0.0, 0.0, 0.0]) * step
    r = EFFORT_WEIGHT * step
    p = q.copy()
    for _ in range(HORIZON_STEPS):
        inverse = 1.0 / (r + b @ p @ b)
        gain = inverse * (b @ p @ a)
        p = q + a.T @ p @ (a - np.outer(b, gain))
    closed = a - np.outer(b, gain)
    place, heading, side_speed, yaw_rate, wheel = (-gain).tolist()
    return Preview(
        place,
        heading,
        side_speed,
        yaw_rate,
        wheel,
        *(_kernel(closed, -inverse * b, p @ (step * known)) for known in (bend, pull)),
    )


def _kernel(closed: Array, answer: Array, costate: Array) -> tuple[float, ...]:
    """Return how strongly the wheel's rate answers a disturbance known so many meters ahead."""
    weights = []
    for _ in range(REACH_M):
        weights.append(float(answer @ costate))
        costate = closed.T @ costate
    return tuple(weights)


def _single_track(data: CarData, v: float) -> tuple[Array, Array, Array, Array]:
    """States: place, heading error, side speed, yaw rate, road wheel; input its rate."""
    normal = data.mass_kg * GRAVITY_MPS2 * NORMAL_G
    stiffness = STIFFNESS_SHARE * data.cornering_stiffness_per_load * normal
    a = data.wheelbase_m * (1.0 - data.front_weight_share)
    b = data.wheelbase_m - a
    front, rear = data.front_weight_share * stiffness, (1.0 - data.front_weight_share) * stiffness
    m, inertia = data.mass_kg, data.yaw_inertia_kgm2
    move = np.zeros((5, 5))
    move[0, 1:3] = (v, 1.0)
    move[1, 3] = 1.0
    move[2, 2:] = (-(front + rear) / (m * v), (rear * b - front * a) / (m * v) - v, front / m)
    move[3, 2:] = (
        (rear * b - front * a) / (inertia * v),
        -(rear * b * b + front * a * a) / (inertia * v),
        front * a / inertia,
    )
    push = np.array([0.0, 0.0, 0.0, 0.0, 1.0])
    bend = np.array([0.0, -v, 0.0, 0.0, 0.0])
    pull = np.array([0.0, 0.0, 1.0, 0.0, 0.0])
    return move, push, bend, pull
