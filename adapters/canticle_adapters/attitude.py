"""Rotations of the vehicle against the world, from whatever a simulator sends.

A `Rotation` is the matrix road-world from body, row by row: its columns are the vehicle's
forward, left and up directions in the world; its last row is the world's up direction in the
vehicle's axes. Angles are those of the frame: yaw about z, then pitch about y (positive nose
down), then roll about x (positive left side up). All in plain floats, as arrays of this size
cost more to make than to use.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TypeAlias

Vector: TypeAlias = tuple[float, float, float]
Rotation: TypeAlias = tuple[Vector, Vector, Vector]

_SMALL = 1e-6


@dataclass(frozen=True, slots=True)
class AxisMap:
    """Which of the simulator's axes are our x, y and z, and with what sign."""

    index: tuple[int, int, int]
    sign: Vector

    @classmethod
    def parse(cls, axes: Sequence[str]) -> AxisMap:
        """Read three names such as ``["z", "-x", "y"]``: our x is their z, our y their −x.

        Raises
        ------
        ValueError
            They do not name x, y and z once each.
        """
        bare = [axis.lstrip("+-") for axis in axes]
        if sorted(bare) != ["x", "y", "z"] or any(len(axis) > 2 for axis in axes):
            raise ValueError(
                f"axes must name x, y and z once each, with '-' where reversed, not {list(axes)}"
            )
        x, y, z = ("xyz".index(axis) for axis in bare)
        sign_x, sign_y, sign_z = (-1.0 if axis[0] == "-" else 1.0 for axis in axes)
        return cls((x, y, z), (sign_x, sign_y, sign_z))

    @property
    def handedness(self) -> float:
        """+1 when the simulator's axes are right-handed as ours are, −1 when left-handed."""
        even = self.index in ((0, 1, 2), (1, 2, 0), (2, 0, 1))
        return math.prod(self.sign) * (1.0 if even else -1.0)

    def map(self, vector: Sequence[float]) -> Vector:
        """Return a vector given in the simulator's axes in ours."""
        (i, j, k), (a, b, c) = self.index, self.sign
        return a * vector[i], b * vector[j], c * vector[k]

    def map_rate(self, rate: Sequence[float]) -> Vector:
        """Return a rotation rate in our axes; its sense turns over with the handedness."""
        x, y, z = self.map(rate)
        sense = self.handedness
        return sense * x, sense * y, sense * z


def from_angles(roll: float, pitch: float, yaw: float) -> Rotation:
    """Return the rotation of the frame's three angles, in rad."""
    sin_r, cos_r = math.sin(roll), math.cos(roll)
    sin_p, cos_p = math.sin(pitch), math.cos(pitch)
    sin_y, cos_y = math.sin(yaw), math.cos(yaw)
    return (
        (
            cos_y * cos_p,
            cos_y * sin_p * sin_r - sin_y * cos_r,
            cos_y * sin_p * cos_r + sin_y * sin_r,
        ),
        (
            sin_y * cos_p,
            sin_y * sin_p * sin_r + cos_y * cos_r,
            sin_y * sin_p * cos_r - cos_y * sin_r,
        ),
        (-sin_p, cos_p * sin_r, cos_p * cos_r),
    )


def from_quaternion(
    quaternion: Sequence[float], world: AxisMap, body: AxisMap, *, inverse: bool = False
) -> Rotation | None:
    """Return the rotation of a quaternion (w, x, y, z) given in the simulator's axes.

    Parameters
    ----------
    quaternion
        Of nearly unit length; it is normalized.
    inverse
        True when it turns world into body instead of body into world.

    Returns
    -------
    The rotation in our axes, or None when the four numbers are no rotation.
    """
    w, x, y, z = quaternion
    square = w * w + x * x + y * y + z * z
    if not 0.25 < square < 4.0:
        return None
    two = 2.0 / square
    if inverse:
        w = -w
    xx, yy, zz = two * x * x, two * y * y, two * z * z
    xy, xz, yz = two * x * y, two * x * z, two * y * z
    wx, wy, wz = two * w * x, two * w * y, two * w * z
    columns = (
        (1.0 - yy - zz, xy + wz, xz - wy),
        (xy - wz, 1.0 - xx - zz, yz + wx),
        (xz + wy, yz - wx, 1.0 - xx - yy),
    )
    (i, j, k), (p, q, r) = body.index, body.sign
    ax, ay, az = world.map(columns[i])
    bx, by, bz = world.map(columns[j])
    cx, cy, cz = world.map(columns[k])
    return (p * ax, q * bx, r * cx), (p * ay, q * by, r * cy), (p * az, q * bz, r * cz)


def from_directions(forward: Vector, side: Vector, *, side_is_up: bool) -> Rotation | None:
    """Return the rotation whose forward direction is given, and its left or up nearly so.

    Parameters
    ----------
    forward, side
        In our world axes, of any length; `side` need not be exactly square to `forward`.

    Returns
    -------
    The rotation, or None when the two are parallel or zero.
    """
    x = _unit(forward)
    other = _unit(side)
    if x is None or other is None:
        return None
    if side_is_up:
        y = _unit(_cross(other, x))
        if y is None:
            return None
        z = _cross(x, y)
    else:
        up = _unit(_cross(x, other))
        if up is None:
            return None
        z, y = up, _cross(up, x)
    return (x[0], y[0], z[0]), (x[1], y[1], z[1]), (x[2], y[2], z[2])


def angles_of(rotation: Rotation) -> Vector:
    """Return roll, pitch and yaw in rad."""
    up = rotation[2]
    pitch = math.asin(min(max(-up[0], -1.0), 1.0))
    yaw = math.atan2(rotation[1][0], rotation[0][0])
    return math.atan2(up[1], up[2]), pitch, yaw


def to_body(rotation: Rotation, vector: Vector) -> Vector:
    """Return a vector of the world in vehicle axes."""
    (a, b, c), (d, e, f), (g, h, i) = rotation
    x, y, z = vector
    return a * x + d * y + g * z, b * x + e * y + h * z, c * x + f * y + i * z


def turn_about_up(before: Rotation, after: Rotation) -> float:
    """Return by how much the vehicle turned about its own z axis, in rad.

    It is the z part of the rotation vector that takes one attitude into the other, seen in
    the vehicle: over a short time, the body yaw rate times that time.
    """
    relative = [to_body(before, column) for column in zip(*after, strict=True)]
    (xx, yx, zx), (xy, yy, zy), (xz, yz, zz) = relative
    twice = (zy - yz, xz - zx, yx - xy)
    sine, cosine = math.hypot(*twice) / 2.0, (xx + yy + zz - 1.0) / 2.0
    if sine < _SMALL:
        return twice[2] / 2.0
    return math.atan2(sine, cosine) / sine * twice[2] / 2.0


def _cross(a: Vector, b: Vector) -> Vector:
    return a[1] * b[2] - a[2] * b[1], a[2] * b[0] - a[0] * b[2], a[0] * b[1] - a[1] * b[0]


def _unit(vector: Vector) -> Vector | None:
    norm = math.hypot(*vector)
    if not _SMALL < norm < math.inf:
        return None
    return vector[0] / norm, vector[1] / norm, vector[2] / norm
