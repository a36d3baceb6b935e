"""What the car would tell: native datagrams and, apart from them, the truth.

`Rehearsal` drives the car and yields frames without any socket; the sender, the tests and the
benches all use it. The motion, the noise and the driver's whims have random numbers of their
own, so noise does not change the driving.
"""

from __future__ import annotations

import math
import random
from collections.abc import Iterator
from dataclasses import dataclass, field
from typing import Any, Literal

import msgspec

from canticle_adapters.rehearsal.car import GRAVITY_MPS2, STEP_S, Car, CarData
from canticle_adapters.rehearsal.driver import Driver, Style, TurnIn
from canticle_adapters.rehearsal.evening import Evening, Script
from canticle_adapters.rehearsal.evening_driver import EveningCar, EveningDriver
from canticle_adapters.rehearsal.oval import greenwold, track_name

Keys = Literal["full", "basic"]
Values = dict[str, Any]

RUN_OUT_M = 120.0
"""How far beyond the last finish line the car is driven, so that every lap is seen to end."""
ACCELERATION_NOISE_MPS2 = 0.15
YAW_RATE_NOISE_RADPS = 0.002
ATTITUDE_NOISE_RAD = 0.0005
STEER_STEP_RAD = math.radians(0.05)
DRIVER_NAME = "Rehearsal"
GHOST_MPS = 57.0

_ACCELERATIONS = ("accel_x_mps2", "accel_y_mps2", "accel_z_mps2")
_ATTITUDE = ("roll_rad", "pitch_rad", "yaw_rad")
_LEFTWARD = (
    *("yaw_rate_radps", "accel_y_mps2", "steer_rad", "lateral_m", "pos_y_m"),
    *("vel_y_mps", "roll_rad", "yaw_rad"),
)
_SWAP = (1, 0, 3, 2)
_encode = msgspec.json.Encoder().encode


@dataclass(frozen=True, slots=True)
class Options:
    """What to drive and how to tell it.

    Parameters
    ----------
    laps
        How many; None drives on for ever.
    seed
        The same seed gives the same bytes.
    rate_hz
        Frames a second of stream time, 10 to 1000; each is the millisecond nearest its turn,
        with that millisecond's own time.
    noise
        Gaussian noise on accelerations, yaw rate and attitude; the wheel's angle in steps.
    mirror
        The mirror image: a right-turning oval.
    keys
        `full`, or `basic` for a simulator that tells little.
    evening
        A whole practice evening instead of clean laps, True for the usual one.
    """

    laps: int | None = None
    seed: int = 1
    rate_hz: float = 60.0
    noise: bool = True
    mirror: bool = False
    keys: Keys = "full"
    style: Style = field(default_factory=Style)
    car: CarData = field(default_factory=CarData)
    evening: Evening | bool = False


class Rehearsal:
    """One drive. `frames` yields it; `turn_ins` fills with the truth as it goes on."""

    def __init__(self, options: Options | None = None) -> None:
        self.options = options if options is not None else Options()
        self.oval = greenwold()
        self.laps = self.options.laps
        self.car, self.driver, self.evening = self._car_and_driver()
        self.controls = (0.0, 0.0, 0.0)
        self.time_s = 0.0
        self._noise = random.Random(f"{self.options.seed}/noise")
        self._side = -1.0 if self.options.mirror else 1.0

    def _car_and_driver(self) -> tuple[Car, Driver, EveningDriver | None]:
        options, oval = self.options, self.oval
        if options.evening is False:
            car = Car(oval, options.car)
            return car, Driver(oval, car, options.seed, options.style), None
        evening = Evening() if options.evening is True else options.evening
        self.laps = evening.laps if self.laps is None else self.laps
        script = Script(oval, evening, self.laps, options.seed)
        own = EveningCar(oval, options.car, evening.fuel_kg, evening.burn_kgps)
        driver = EveningDriver(oval, own, options.seed, options.style, script)
        return own, driver, driver

    @property
    def turn_ins(self) -> list[TurnIn]:
        """The true turn-ins so far, with the signs of the unmirrored oval."""
        return self.driver.turn_ins

    def steps(self) -> Iterator[int]:
        """Drive millisecond by millisecond; at each yield all forces belong to the state."""
        car, driver = self.car, self.driver
        tick = 0
        while not self._over():
            self.time_s = tick * STEP_S
            self.controls = wheel, throttle, brake = driver.controls(self.time_s)
            car.evaluate(wheel, throttle, brake)
            if tick % 1000 == 0:
                car.wear()
            yield tick
            car.advance()
            tick += 1
        if self.evening is not None:
            self.evening.book.finish(self.car.laps)

    def frames(self) -> Iterator[tuple[Values, Values]]:
        """Yield the values of each frame and its truth record."""
        every = 1.0 / (self.options.rate_hz * STEP_S)
        count, due = 0, 0
        for tick in self.steps():
            if tick == due:
                yield self._values(), self.truth()
                count += 1
                due = max(round(count * every), tick + 1)

    def datagrams(self) -> Iterator[tuple[bytes, Values]]:
        """Yield each frame as the native datagram, and its truth record."""
        for values, truth in self.frames():
            yield _encode(values), truth

    def turn_in_record(self, turn_in: TurnIn) -> Values:
        """Return a turn-in as a line of the truth file."""
        return {
            "kind": "turn_in",
            "lap": turn_in.lap,
            "corner": turn_in.corner,
            "knot_station_m": turn_in.knot_station_m,
            "knot_time_s": turn_in.knot_time_s,
            "level_steer_rad": self._side * turn_in.level_steer_rad,
        }

    @property
    def happenings(self) -> list[Values]:
        """The evening's records so far, as lines of the truth file; none of clean laps."""
        return [] if self.evening is None else self.evening.book.records

    def happening_record(self, happening: Values) -> Values:
        """Return one of `happenings` with the signs and wheels of the road as it is driven."""
        if not self.options.mirror:
            return happening
        record = dict(happening)
        for name in ("lateral_m", "apex_lateral_m"):
            if name in record:
                record[name] = -record[name]
        if "changed" in record:
            record["changed"] = [record["changed"][wheel] for wheel in _SWAP]
        return record

    def _over(self) -> bool:
        laps, car = self.laps, self.car
        return laps is not None and car.laps >= laps and car.station_m >= RUN_OUT_M

    def truth(self) -> Values:
        """Return what no sensor tells, for this instant."""
        car = self.car
        forces = [math.hypot(x, y) for x, y in zip(car.forward_n, car.left_n, strict=True)]
        order = _SWAP if self.options.mirror else (0, 1, 2, 3)
        return {
            "kind": "frame",
            "time_s": self.time_s,
            "station_m": car.station_m,
            "lap": car.laps + 1,
            "force_n": [forces[wheel] for wheel in order],
            "load_n": [car.load_n[wheel] for wheel in order],
            "demand": math.hypot(car.tires_x_n, car.tires_y_n) / car.normal_n,
            "side_demand": self._side * car.tires_y_n / car.normal_n,
            "sliding_power_w": [car.slide_w[wheel] for wheel in order],
            "bank_rad": -self.oval.roll(car.station_m)[0],
        }

    def _values(self) -> Values:
        values = basic_values(self)
        if self.options.keys == "full":
            values |= more_values(self)
        if self.evening is not None:
            self._through_the_evening(values, self.evening)
        if self.options.mirror:
            _mirror(values)
        if self.options.noise:
            self._disturb(values)
        return _rounded(values)

    def _through_the_evening(self, values: Values, evening: EveningDriver) -> None:
        values["steer_rad"] += evening.now.zero_rad
        if self.options.keys == "full":
            values |= evening_values(evening)
        if not evening.now.in_car:
            values |= {k: v for k, v in ghost_values(self).items() if k in values}

    def _disturb(self, values: Values) -> None:
        gauss = self._noise.gauss
        for name in _ACCELERATIONS:
            values[name] += gauss(0.0, ACCELERATION_NOISE_MPS2)
        values["yaw_rate_radps"] += gauss(0.0, YAW_RATE_NOISE_RADPS)
        values["steer_rad"] = STEER_STEP_RAD * round(values["steer_rad"] / STEER_STEP_RAD)
        if self.options.keys == "full":
            for name in _ATTITUDE:
                values[name] += gauss(0.0, ATTITUDE_NOISE_RAD)


def simulate(
    laps: int | None,
    seed: int = 1,
    rate_hz: float = 60.0,
    noise: bool = True,
    mirror: bool = False,
    keys: Keys = "full",
) -> Iterator[tuple[bytes, Values]]:
    """Yield (datagram, truth record) of every frame of a drive, without any socket."""
    return Rehearsal(Options(laps, seed, rate_hz, noise, mirror, keys)).datagrams()


def basic_values(drive: Rehearsal) -> Values:
    """Return what even a simulator of few words tells, in the car's own axes."""
    car = drive.car
    wheel, throttle, brake = drive.controls
    cos_roll, sin_roll = math.cos(car.body_roll_rad), math.sin(car.body_roll_rad)
    cos_x, sin_x = car.surface_at[4:6]
    pitching = car.turn_2 * cos_x - car.turn_1 * sin_x
    return {
        "time_s": drive.time_s,
        "speed_mps": math.hypot(car.vx_mps, car.vy_mps),
        "yaw_rate_radps": car.yaw_rate_radps * cos_roll - pitching * sin_roll,
        "accel_x_mps2": car.force_x_mps2,
        "accel_y_mps2": car.force_y_mps2 * cos_roll + car.force_z_mps2 * sin_roll,
        "accel_z_mps2": car.force_z_mps2 * cos_roll - car.force_y_mps2 * sin_roll,
        "station_m": car.station_m,
        "steer_rad": wheel,
        "throttle": throttle,
        "brake": brake,
    }


def more_values(drive: Rehearsal) -> Values:
    """Return what a simulator of many words adds."""
    car = drive.car
    x, y, z = drive.oval.place(car.station_m, car.lateral_m)
    roll, pitch, yaw = attitude(drive)
    wear = car.data.tread_loss_per_j
    return {
        "lap": car.laps + 1,
        "pos_x_m": x,
        "pos_y_m": y,
        "pos_z_m": z,
        "roll_rad": roll,
        "pitch_rad": pitch,
        "yaw_rad": yaw,
        "vel_x_mps": car.vx_mps,
        "vel_y_mps": car.vy_mps * math.cos(car.body_roll_rad),
        "lateral_m": car.lateral_m,
        "wheel_load_n": car.load_n,
        "wheel_slip_angle_rad": car.slip_angles_rad(),
        "wheel_slip_ratio": [slip / (1.0 - slip) for slip in car.slip_x],
        "tire_tread": [max(1.0 - wear * energy, 0.0) for energy in car.energy_j],
        "tire_set": "A1",
        "driver": DRIVER_NAME,
        "car_name": car.data.name,
        "track_name": track_name(drive.options.mirror),
        "in_car": True,
        "on_pit_road": False,
        "caution": False,
    }


def evening_values(driver: EveningDriver) -> Values:
    """Return what a practice evening adds for a simulator of many words."""
    now, car = driver.now, driver.evening_car
    return {
        "tire_set": now.tire_set,
        "fuel_kg": car.fuel_kg,
        "in_car": now.in_car,
        "on_pit_road": now.on_pit_road,
        "caution": now.caution,
        "car_left": now.car_inside,
        "car_right": now.car_outside,
        "gap_ahead_s": now.gap_s,
    }


def ghost_values(drive: Rehearsal) -> Values:
    """Return what a watched replay shows: another car that follows the reference line."""
    oval = drive.oval
    speed = GHOST_MPS + 2.0 * math.sin(drive.time_s / 5.0)
    station = (GHOST_MPS * drive.time_s) % oval.length_m
    curvature, (roll, _, _) = oval.curvature(station)[0], oval.roll(station)
    x, y, z = oval.place(station, 0.0)
    turning = speed * curvature
    cos_roll, sin_roll = math.cos(roll), math.sin(roll)
    return {
        "speed_mps": speed,
        "yaw_rate_radps": turning * cos_roll,
        "accel_x_mps2": 0.4 * math.cos(drive.time_s / 5.0),
        "accel_y_mps2": speed * turning * cos_roll + GRAVITY_MPS2 * sin_roll,
        "accel_z_mps2": GRAVITY_MPS2 * cos_roll - speed * turning * sin_roll,
        "station_m": station,
        "steer_rad": drive.car.data.steering_ratio * drive.car.data.wheelbase_m * 1.3 * curvature,
        "throttle": 0.6,
        "brake": 0.0,
        "pos_x_m": x,
        "pos_y_m": y,
        "pos_z_m": z,
        "roll_rad": roll,
        "pitch_rad": 0.0,
        "yaw_rad": math.remainder(oval.line(station)[2], 2.0 * math.pi),
        "vel_x_mps": speed,
        "vel_y_mps": 0.0,
        "lateral_m": 0.0,
    }


def attitude(drive: Rehearsal) -> tuple[float, float, float]:
    """Return roll, pitch (positive nose down) and yaw of the car's own axes in the world."""
    car = drive.car
    along, normal, cos_road, sin_road, cos_x, sin_x, _ = car.surface_at
    heading = drive.oval.line(car.station_m)[2]
    cos_h, sin_h = math.cos(heading), math.sin(heading)
    # the road's axes in the world: T, N' and b, then the tangent plane's e1 and e3
    left = (-cos_road * sin_h, cos_road * cos_h, sin_road)
    up = (sin_road * sin_h, -sin_road * cos_h, cos_road)
    e1 = (along * cos_h + normal * up[0], along * sin_h + normal * up[1], normal * up[2])
    e3_z = along * up[2]
    ahead = [cos_x * a + sin_x * b for a, b in zip(e1, left, strict=True)]
    side_z = cos_x * left[2] - sin_x * e1[2]
    cos_roll, sin_roll = math.cos(car.body_roll_rad), math.sin(car.body_roll_rad)
    roll = math.atan2(side_z * cos_roll + e3_z * sin_roll, e3_z * cos_roll - side_z * sin_roll)
    return roll, -math.asin(ahead[2]), math.atan2(ahead[1], ahead[0])


def _mirror(values: Values) -> None:
    for name in _LEFTWARD:
        if name in values:
            values[name] = -values[name]
    if "wheel_load_n" in values:
        for name in ("wheel_load_n", "wheel_slip_angle_rad", "wheel_slip_ratio", "tire_tread"):
            sign = -1.0 if name == "wheel_slip_angle_rad" else 1.0
            values[name] = [sign * values[name][wheel] for wheel in _SWAP]
    if "car_left" in values:
        values["car_left"], values["car_right"] = values["car_right"], values["car_left"]


_DIGITS = {
    **dict.fromkeys(("throttle", "brake"), 3),
    **dict.fromkeys(("speed_mps", "vel_x_mps", "vel_y_mps"), 4),
    **dict.fromkeys(_ACCELERATIONS, 4),
    **dict.fromkeys(("station_m", "pos_x_m", "pos_y_m", "pos_z_m", "lateral_m"), 3),
    **dict.fromkeys(("yaw_rate_radps", "steer_rad", *_ATTITUDE), 6),
    "wheel_load_n": 1,
    **dict.fromkeys(("fuel_kg", "gap_ahead_s"), 3),
    **dict.fromkeys(("wheel_slip_angle_rad", "wheel_slip_ratio", "tire_tread"), 6),
}


def _rounded(values: Values) -> Values:
    """Round to what a sensor tells; time is passed on as it is."""
    for name, digits in _DIGITS.items():
        value = values.get(name)
        if isinstance(value, list):
            values[name] = [round(each, digits) for each in value]
        elif value is not None:
            values[name] = round(value, digits)
    return values
