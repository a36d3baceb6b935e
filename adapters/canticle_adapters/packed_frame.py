"""From the values of a packed stream to a frame, with what must be derived.

Gravity. The frame wants specific force, which is acceleration less gravity: with the world's
up direction in vehicle axes u (the last row of the rotation), f = a + g·u.
"""

from __future__ import annotations

import math
from collections.abc import Callable

from canticle_adapters.attitude import (
    AxisMap,
    Rotation,
    Vector,
    angles_of,
    from_angles,
    from_directions,
    from_quaternion,
    to_body,
    turn_about_up,
)
from canticle_adapters.json_datagram import OVERSHOOT, REQUIRED, SHARES
from canticle_adapters.packed_layout import LayoutFile, has_attitude
from canticle_adapters.packed_reader import Values
from canticle_daemon.errors import DecodeError
from canticle_daemon.frame import Frame

MAX_STEP_S = 0.5
"""Over a longer gap no yaw rate is derived from two attitudes."""
_ANGLES = ("roll_rad", "pitch_rad", "yaw_rad")
_ACCELERATIONS = ("accel_x_mps2", "accel_y_mps2", "accel_z_mps2")


class FrameBuilder:
    """Derives what the layout's targets leave open and builds the frame."""

    def __init__(self, layout: LayoutFile) -> None:
        self._layout = layout
        self._targets = layout.targets
        self._world = AxisMap.parse(layout.axes.world)
        self._body = AxisMap.parse(layout.axes.body)
        self._oriented = has_attitude(self._targets)
        self._previous: tuple[float, Rotation, float | None] | None = None
        self._derives_yaw_rate = not self._targets.keys() & {"yaw_rate_radps", "rotation_rate"}
        self._steps = self._steps_needed()

    @property
    def provides(self) -> frozenset[str]:
        """Names of the frame fields that the layout's targets give, derived ones included."""
        names = set(self._targets.keys() & set(Frame.__struct_fields__))
        names |= {"time_s", "speed_mps", "yaw_rate_radps", "accel_y_mps2"}
        if self._oriented:
            names |= set(_ANGLES)
        if "position" in self._targets:
            names |= {"pos_x_m", "pos_y_m", "pos_z_m"}
        if "lap_fraction" in self._targets:
            names.add("station_m")
        if "velocity" in self._targets and self._velocity_is_usable:
            names |= {"vel_x_mps", "vel_y_mps"}
        if "acceleration" in self._targets:
            names |= set(_ACCELERATIONS)
        if self._lacks_gravity:
            names.discard("accel_z_mps2")
        return frozenset(names)

    @property
    def notes(self) -> tuple[str, ...]:
        """What the user should know about the layout's limits."""
        notes = []
        if self._lacks_gravity:
            notes.append(
                "The accelerations come without gravity and the stream has no attitude from "
                "which to add it: on a bank neither the bank nor the demand can be trusted, "
                "and the vertical acceleration is left out."
            )
        if self._derives_yaw_rate:
            notes.append(
                "The yaw rate is derived from successive attitudes; it lags by half a frame."
            )
        if "velocity" in self._targets and not self._velocity_is_usable:
            notes.append("The velocity is in world axes and there is no attitude: only speed.")
        return tuple(notes)

    def build(self, values: Values, bad: list[str]) -> Frame | None:
        """Return the frame, or None while a yaw rate cannot be derived yet.

        Raises
        ------
        DecodeError
            A required field is missing or not finite.
        """
        rotation = self._rotation(values, bad) if self._oriented else None
        for step in self._steps:
            step(values, rotation)
        if self._derives_yaw_rate and not self._derive_yaw_rate(values, rotation):
            return None
        _keep_in_range(values, bad)
        _check_required(values)
        return Frame(**values)

    def reset(self) -> None:
        """Forget the last attitude."""
        self._previous = None

    @property
    def _lacks_gravity(self) -> bool:
        return not (self._layout.accelerations_include_gravity or self._oriented)

    @property
    def _velocity_is_usable(self) -> bool:
        return self._oriented or self._targets["velocity"].frame == "body"

    def _steps_needed(self) -> list[Callable[[Values, Rotation | None], None]]:
        has = self._targets.keys()
        steps = {
            self._set_place: bool(has & {"position", "lap_fraction"}),
            self._set_velocity: "velocity" in has,
            self._set_speed: "speed_mps" not in has,
            self._set_acceleration: "acceleration" in has,
            self._add_gravity: not self._layout.accelerations_include_gravity,
            self._set_yaw_rate: "rotation_rate" in has,
        }
        return [step for step, needed in steps.items() if needed]

    def _rotation(self, values: Values, bad: list[str]) -> Rotation | None:
        """Take the attitude out of the values; put in its angles where they are not there."""
        rotation = None
        if "quaternion" in self._targets:
            four = values.pop("quaternion", None)
            if four is not None:
                inverse = self._targets["quaternion"].inverse
                rotation = from_quaternion(four, self._world, self._body, inverse=inverse)
                if rotation is None:
                    bad.append("quaternion")
        elif "forward" in self._targets:
            rotation = self._rotation_of_directions(values, bad)
        else:
            angles = [values[name] for name in _ANGLES if name in values]
            return from_angles(*angles) if len(angles) == 3 else None
        if rotation is not None:
            for name, angle in zip(_ANGLES, angles_of(rotation), strict=True):
                values.setdefault(name, angle)
        return rotation

    def _rotation_of_directions(self, values: Values, bad: list[str]) -> Rotation | None:
        given = {
            name: self._world.map(values.pop(name))
            for name in ("forward", "up", "left", "right")
            if name in values
        }
        forward, side = given.get("forward"), given.get("up")
        side_is_up = side is not None
        if side is None:
            side = given.get("left") or _opposite(given.get("right"))
        if forward is None or side is None:
            return None
        rotation = from_directions(forward, side, side_is_up=side_is_up)
        if rotation is None:
            bad.append("forward")
        return rotation

    def _set_place(self, values: Values, rotation: Rotation | None) -> None:
        position = values.pop("position", None)
        if position is not None:
            values["pos_x_m"], values["pos_y_m"], values["pos_z_m"] = self._world.map(position)
        fraction = values.pop("lap_fraction", None)
        if fraction is not None and self._layout.lap_length_m is not None:
            values.setdefault("station_m", fraction * self._layout.lap_length_m)

    def _set_velocity(self, values: Values, rotation: Rotation | None) -> None:
        velocity = values.pop("velocity", None)
        if velocity is None:
            return
        values.setdefault("speed_mps", math.hypot(*velocity))
        ours = self._in_body("velocity", velocity, rotation)
        if ours is not None:
            values.setdefault("vel_x_mps", ours[0])
            values.setdefault("vel_y_mps", ours[1])

    def _set_speed(self, values: Values, rotation: Rotation | None) -> None:
        if "speed_mps" not in values and "vel_x_mps" in values:
            values["speed_mps"] = math.hypot(values["vel_x_mps"], values.get("vel_y_mps", 0.0))

    def _set_acceleration(self, values: Values, rotation: Rotation | None) -> None:
        acceleration = values.pop("acceleration", None)
        if acceleration is None:
            return
        ours = self._in_body("acceleration", acceleration, rotation)
        if ours is not None:
            values.update(zip(_ACCELERATIONS, ours, strict=True))

    def _add_gravity(self, values: Values, rotation: Rotation | None) -> None:
        if not self._oriented:
            values.pop("accel_z_mps2", None)
            return
        if rotation is None:
            raise DecodeError("has no attitude, so gravity cannot be added to its accelerations")
        for name, share in zip(_ACCELERATIONS, rotation[2], strict=True):
            if name in values:
                values[name] += self._layout.gravity_mps2 * share

    def _set_yaw_rate(self, values: Values, rotation: Rotation | None) -> None:
        rate = values.pop("rotation_rate", None)
        if rate is None or "yaw_rate_radps" in values:
            return
        if self._targets["rotation_rate"].frame == "body":
            values["yaw_rate_radps"] = self._body.map_rate(rate)[2]
        elif rotation is not None:
            values["yaw_rate_radps"] = to_body(rotation, self._world.map_rate(rate))[2]

    def _in_body(self, name: str, vector: Vector, rotation: Rotation | None) -> Vector | None:
        if self._targets[name].frame == "body":
            return self._body.map(vector)
        return None if rotation is None else to_body(rotation, self._world.map(vector))

    def _derive_yaw_rate(self, values: Values, rotation: Rotation | None) -> bool:
        time_s = values.get("time_s")
        if rotation is None or time_s is None:
            self._previous = None
            raise DecodeError("has no attitude or no time, so no yaw rate can be derived")
        rate = self._rate_since_previous(time_s, rotation)
        self._previous = (time_s, rotation, rate)
        if rate is None:
            return False
        values["yaw_rate_radps"] = rate
        return True

    def _rate_since_previous(self, time_s: float, rotation: Rotation) -> float | None:
        if self._previous is None:
            return None
        before_s, before, rate = self._previous
        step_s = time_s - before_s
        if step_s == 0.0:
            return rate  # the same instant sent again, as in a pause
        if not 0.0 < step_s <= MAX_STEP_S:
            return None
        return turn_about_up(before, rotation) / step_s


def _opposite(vector: Vector | None) -> Vector | None:
    return None if vector is None else (-vector[0], -vector[1], -vector[2])


def _keep_in_range(values: Values, bad: list[str]) -> None:
    """Hold shares to 0…1 and the lap to whole numbers, by the rules of the native datagram."""
    for name in SHARES:
        share = values.get(name)
        if share is not None and not 0.0 <= share <= 1.0:
            _clamp(name, (share,), values, bad)
            if name in values:
                values[name] = values[name][0]
    tread = values.get("tire_tread")
    if tread is not None and not all(0.0 <= one <= 1.0 for one in tread):
        _clamp("tire_tread", tread, values, bad)
    lap = values.get("lap")
    if lap is not None and not (lap >= 0.0 and lap == lap // 1.0):
        del values["lap"]
        bad.append("lap")


def _clamp(name: str, shares: tuple[float, ...], values: Values, bad: list[str]) -> None:
    if all(-OVERSHOOT <= one <= 1.0 + OVERSHOOT for one in shares):
        values[name] = tuple(min(max(one, 0.0), 1.0) for one in shares)
    else:
        del values[name]
        bad.append(name)


def _check_required(values: Values) -> None:
    for name in REQUIRED:
        number = values.get(name)
        if number is None or not math.isfinite(number):
            raise DecodeError(f"{name!r} is missing or not a finite number")
    if "station_m" not in values and not ("pos_x_m" in values and "pos_y_m" in values):
        raise DecodeError("'station_m' (or the position) is missing or not a finite number")
