"""The normalized telemetry frame, its axes, and blocks of frames.

Axes and signs are ISO 8855:2011, everything in SI units::

        z up                    yaw rate, steering, y:  positive to the left
        |   x forward           roll:   positive left side up
        |  /                    pitch:  positive nose down
        | /                     bank:   the track file's sign (see track/profile.py)
        |/_______ y is to the left of x (out of the page's left)

Lists of four are front left, front right, rear left, rear right.
A number that the stream does not carry is NaN here; a text or list is None.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, TypeAlias, overload

import msgspec
import numpy as np
from numpy.typing import NDArray

FloatArray: TypeAlias = NDArray[np.float64]
IntArray: TypeAlias = NDArray[np.int64]
BoolArray: TypeAlias = NDArray[np.bool_]
Wheels: TypeAlias = tuple[float, float, float, float]

NAN = float("nan")


class Frame(msgspec.Struct, frozen=True, gc=False, omit_defaults=True):
    """One instant of telemetry. Field names carry the unit; the module tells axes and signs.

    The first three are always finite; `station_m`, or `pos_x_m` with `pos_y_m`, is too.
    """

    time_s: float
    speed_mps: float
    yaw_rate_radps: float
    accel_y_mps2: float = NAN
    accel_x_mps2: float = NAN
    accel_z_mps2: float = NAN
    station_m: float = NAN
    lap: float = NAN
    steer_rad: float = NAN
    throttle: float = NAN
    brake: float = NAN
    pos_x_m: float = NAN
    pos_y_m: float = NAN
    pos_z_m: float = NAN
    roll_rad: float = NAN
    pitch_rad: float = NAN
    yaw_rad: float = NAN
    vel_x_mps: float = NAN
    vel_y_mps: float = NAN
    lateral_m: float = NAN
    fuel_kg: float = NAN
    gap_ahead_s: float = NAN
    wheel_load_n: Wheels | None = None
    wheel_slip_angle_rad: Wheels | None = None
    wheel_slip_ratio: Wheels | None = None
    tire_tread: Wheels | None = None
    in_car: bool | None = None
    on_pit_road: bool | None = None
    car_left: bool | None = None
    car_right: bool | None = None
    caution: bool | None = None
    tire_set: str | None = None
    driver: str | None = None
    car_name: str | None = None
    track_name: str | None = None


SCALARS: tuple[str, ...] = Frame.__struct_fields__[:22]
WHEEL_FIELDS: tuple[str, ...] = Frame.__struct_fields__[22:26]
FLAGS: tuple[str, ...] = Frame.__struct_fields__[26:31]
_NO_WHEELS: Wheels = (NAN, NAN, NAN, NAN)


class _Column:
    """A named row of the block's array of scalars, as an attribute."""

    def __set_name__(self, owner: type, name: str) -> None:
        self._row = SCALARS.index(name)

    @overload
    def __get__(self, block: None, owner: type) -> _Column: ...
    @overload
    def __get__(self, block: FrameBlock, owner: type) -> FloatArray: ...
    def __get__(self, block: FrameBlock | None, owner: type) -> _Column | FloatArray:
        if block is None:
            return self
        column: FloatArray = block.scalars[self._row]
        return column


@dataclass(frozen=True, slots=True)
class FrameBlock:
    """Consecutive frames as columns; what one wake of the socket brought.

    Parameters
    ----------
    frames
        The frames themselves, for texts and flags.
    scalars
        Shape (len(SCALARS), n), C-contiguous, so that every column is contiguous too:
        the vector and the scalar code of numpy then agree to the bit.
    received_ns
        Shape (n,), `time.perf_counter_ns` at the receipt of each datagram.
    """

    frames: Sequence[Frame]
    scalars: FloatArray
    received_ns: IntArray

    time_s = _Column()
    speed_mps = _Column()
    yaw_rate_radps = _Column()
    accel_x_mps2 = _Column()
    accel_y_mps2 = _Column()
    accel_z_mps2 = _Column()
    station_m = _Column()
    lap = _Column()
    steer_rad = _Column()
    throttle = _Column()
    brake = _Column()
    pos_x_m = _Column()
    pos_y_m = _Column()
    pos_z_m = _Column()
    roll_rad = _Column()
    pitch_rad = _Column()
    yaw_rad = _Column()
    vel_x_mps = _Column()
    vel_y_mps = _Column()
    lateral_m = _Column()
    fuel_kg = _Column()
    gap_ahead_s = _Column()

    @classmethod
    def from_frames(
        cls, frames: Sequence[Frame], received_ns: Sequence[int] | None = None
    ) -> FrameBlock:
        """Lay frames out as columns; without receive times they are zero."""
        rows = [_scalars_of(frame) for frame in frames]
        scalars = np.array(rows, dtype=np.float64).reshape(-1, len(SCALARS)).T
        times = np.zeros(len(frames), np.int64) if received_ns is None else received_ns
        return cls(frames, np.ascontiguousarray(scalars), np.asarray(times, dtype=np.int64))

    def __len__(self) -> int:
        return len(self.frames)

    def wheels(self, name: str) -> FloatArray:
        """Return a list-of-four field as an array of shape (4, n), NaN where absent."""
        rows = [getattr(frame, name) or _NO_WHEELS for frame in self.frames]
        return np.ascontiguousarray(np.array(rows, dtype=np.float64).reshape(-1, 4).T)

    def cut(self, start: int, stop: int) -> FrameBlock:
        """Return frames start to stop as a block of their own."""
        if start == 0 and stop == len(self):
            return self
        return FrameBlock(
            self.frames[start:stop],
            np.ascontiguousarray(self.scalars[:, start:stop]),
            self.received_ns[start:stop],
        )


def _scalars_of(frame: Frame) -> tuple[Any, ...]:
    return msgspec.structs.astuple(frame)[: len(SCALARS)]
