"""A car in steady motion on a constant bank, from vectors alone, for tests.

The tires' and the air's force on a unit mass is the centripetal acceleration, level and toward
the turn, plus gravity taken back, upward; an accelerometer reads it in axes rolled with the body.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from typing import Any

import numpy as np

from canticle_daemon.frame import Frame, FrameBlock
from canticle_daemon.physics.car import CarFile
from canticle_daemon.stream.pipeline import Estimates, Pipeline
from canticle_daemon.track.profile import Track, TrackFile

NAN = float("nan")


def bare_car(**changes: Any) -> CarFile:
    """A car with no aerodynamic force and no body roll, unless told."""
    plain: dict[str, Any] = {
        "downforce_front_n_per_mps2": 0.0,
        "downforce_rear_n_per_mps2": 0.0,
        "drag_n_per_mps2": 0.0,
        "roll_gradient_deg_per_g": 0.0,
    }
    return CarFile.model_validate(plain | changes)


def ring(radius_m: float, bank_deg: float, *, side: float = 1.0, **changes: Any) -> Track:
    """A track that is one circle of constant bank, without a corner to judge."""
    length = 2.0 * math.pi * radius_m
    rows = [(0.0, bank_deg, side / radius_m), (length / 2, bank_deg, side / radius_m)]
    data = {
        "name": "Ring",
        "length_m": length,
        "direction": "left" if side > 0 else "right",
        "profile": rows,
    }
    return Track(TrackFile.model_validate(data | changes))


def steady(
    speed_mps: float,
    radius_m: float,
    bank_deg: float,
    *,
    side: float = 1.0,
    seconds: float = 3.0,
    rate_hz: float = 60.0,
    gravity: float = 9.81,
    gradient_deg_per_g: float = 0.0,
    forward_mps2: float = 0.0,
    attitude: bool = False,
    noise_mps2: float = 0.0,
    seed: int = 1,
    **fixed: Any,
) -> list[Frame]:
    """Frames of a car that turns to the left (side 1) or right (−1) on a helpful bank."""
    road = -side * math.radians(bank_deg)
    inward = side * speed_mps**2 / radius_m
    level, upward = np.array([inward, gravity])
    body = 0.0
    for _ in range(60):  # the body rolls by what its own accelerometer reads
        roll = road + body
        y_axis, z_axis = (math.cos(roll), math.sin(roll)), (-math.sin(roll), math.cos(roll))
        f_y = level * y_axis[0] + upward * y_axis[1]
        f_z = level * z_axis[0] + upward * z_axis[1]
        body = math.radians(gradient_deg_per_g) * f_y / 9.81
    rng = np.random.default_rng(seed)
    count = int(seconds * rate_hz)
    frames = []
    for index, jitter in enumerate(rng.normal(0.0, 1.0, count) * noise_mps2):
        time = index / rate_hz
        values: dict[str, Any] = {
            "time_s": 50.0 + time,
            "speed_mps": speed_mps,
            "yaw_rate_radps": side * speed_mps / radius_m * math.cos(road),
            "accel_x_mps2": forward_mps2,
            "accel_y_mps2": f_y + jitter,
            "accel_z_mps2": f_z,
            "station_m": (10.0 + speed_mps * time) % (2.0 * math.pi * radius_m),
            "roll_rad": road + body if attitude else NAN,
        }
        frames.append(Frame(**values | fixed))
    return frames


def estimates(
    frames: Iterable[Frame], track: Track | None = None, car: CarFile | None = None
) -> Estimates:
    """Run frames through a fresh pipeline in one block."""
    block = FrameBlock.from_frames(list(frames))
    found = Pipeline(track, car or bare_car()).process(block).estimates
    assert found is not None
    return found
