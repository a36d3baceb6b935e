"""The evening's car and driver: at racing pace as ever, and by a simpler hand everywhere else.

Away from racing pace the wheel is what the path's curvature needs, a moment ahead, less what
place and course err, with a stiffness that fits the speed; from walking pace to the straight's.
"""

from __future__ import annotations

import math
from collections import deque
from dataclasses import dataclass, replace

from canticle_adapters.rehearsal.car import STEP_S, Car, CarData
from canticle_adapters.rehearsal.driver import (
    PEDAL_SHARE,
    Driver,
    Intent,
    Path,
    Phase,
    Style,
)
from canticle_adapters.rehearsal.evening import (
    BOX_M,
    NO_GAP_S,
    PIT_LANE_M,
    PIT_MPS,
    WEAVE_LENGTH_M,
    WEAVE_M,
    Bump,
    Company,
    Four,
    LaneName,
    Leg,
    Script,
    Stop,
)
from canticle_adapters.rehearsal.evening_truth import Book, Now
from canticle_adapters.rehearsal.oval import Oval, Ramp, along

LEAST_MPS = 0.5
STOP_MPS2 = 3.0
PREVIEW_S = 0.28
PLACE_GAIN, COURSE_GAIN, YAW_GAIN_S, SLIP_GAIN = 0.0075, 0.42, 0.06, 0.12
SLIP_S = 0.8
"""Of the front wheels: those of the racing driver's optimum, which hardly change with speed."""
BLEND_S = 0.5
STRAIGHT_1PM = 0.0006
STRAIGHT_BRAKE, CURVE_BRAKE = 0.28, 0.16
"""How hard the brake is pressed at most: this car's rear steps out beyond (tried)."""
BRAKE_FRONT_SHARE = 0.92
"""Further forward than for racing alone, for stops from full speed."""
SAMPLE_TICKS = 10
INNER_EDGE_M, OUTER_EDGE_M = 4.4, -6.0
SLOWER_M = 40.0
"""How much further inside a slower car settles, by the share that it is slower."""
SHIFTS_M = (-45.0, -30.0, -15.0, 0.0, 15.0, 35.0, 45.0)
"""Turn-ins about the mark, and how far inside of the straight's lane each lets the car settle
(tried on this car and road)."""
SETTLES_M = (8.0, 7.0, 5.7, 3.8, 1.4, -2.7, -4.9)


class EveningCar(Car):
    """The car with a tank, a wake over it, knocks, and the gift of standing still."""

    def __init__(self, oval: Oval, data: CarData, fuel_kg: float, burn_kgps: float) -> None:
        self.push_mps2 = self.wake = 0.0
        self.standing = False
        self.fuel_kg, self._burn_kgps = fuel_kg, burn_kgps
        self.dry = replace(data, brake_front_share=BRAKE_FRONT_SHARE)
        super().__init__(oval, data)
        self.load()

    def load(self) -> None:
        """Let the fuel's mass and the wake's air act."""
        dry, share = self.dry, 1.0 - self.wake
        self.data = replace(
            dry,
            mass_kg=dry.mass_kg + self.fuel_kg,
            downforce_front_n_per_mps2=share * dry.downforce_front_n_per_mps2,
            downforce_rear_n_per_mps2=share * dry.downforce_rear_n_per_mps2,
        )

    def wear(self) -> None:
        """Wear the tires and burn a second's fuel."""
        super().wear()
        share = max(min(self.vx_mps / 60.0, 1.0), 0.1)
        self.fuel_kg = max(self.fuel_kg - self._burn_kgps * share, 1.0)
        self.load()

    def serve(self, changed: Four, fuel_kg: float) -> None:
        """Fit fresh tires and fill the tank up to a level."""
        self.energy_j = [
            0.0 if fresh else e for e, fresh in zip(self.energy_j, changed, strict=True)
        ]
        self.fuel_kg = max(fuel_kg, self.fuel_kg)
        self.wear()

    def halt(self) -> None:
        """Stand still where the car is."""
        self.standing = True
        self.vx_mps = self.vy_mps = self.yaw_rate_radps = self.heading_rad = 0.0
        self._lag_x = self._lag_y = self.body_roll_rad = 0.0

    def start(self) -> None:
        """Roll away."""
        self.standing = False
        self.vx_mps = LEAST_MPS

    def evaluate(self, steer_rad: float, throttle: float, brake: float) -> None:
        """Work out the forces; of a standing car those that hold it on the slope."""
        if not self.standing:
            super().evaluate(steer_rad, throttle, brake)
            return
        self._on_surface()
        self._loads()
        self.wheel_rad = steer_rad / self.data.steering_ratio
        self.force_x_mps2, self.force_y_mps2 = -self.gravity_x, -self.gravity_y
        self.tires_x_n = self.data.mass_kg * self.force_x_mps2
        self.tires_y_n = self.data.mass_kg * self.force_y_mps2
        self.forward_n = [self.tires_x_n * load / self.normal_n for load in self.load_n]
        self.left_n = [self.tires_y_n * load / self.normal_n for load in self.load_n]
        self.slip_x, self.slip_tan, self.slide_w = [0.0] * 4, [0.0] * 4, [0.0] * 4
        self.yaw_accel_radps2 = 0.0

    def _accelerations(self) -> None:
        super()._accelerations()
        self.force_y_mps2 += self.push_mps2

    def advance(self) -> None:
        """Move one millisecond on, unless standing."""
        if not self.standing:
            super().advance()


@dataclass(slots=True)
class Pit:
    """A stop under way: when the car came to stand, and when a replay is watched."""

    stop: Stop
    since_s: float
    served: bool = False

    def watching(self, time_s: float) -> bool:
        """Return whether a replay is being watched."""
        return 0.0 <= time_s - self.since_s - self.stop.stand_s < self.stop.replay_s

    def over(self, time_s: float) -> bool:
        """Return whether the car may leave."""
        watched_s = self.stop.replay_s + 1.0 if self.stop.replay_s else 0.0
        return time_s - self.since_s >= self.stop.stand_s + watched_s


class EveningDriver(Driver):
    """The driver of a whole evening.

    Attributes
    ----------
    now
        What holds at this instant: flags, gap, steering zero, tire set.
    book
        The truth written so far.
    """

    def __init__(
        self, oval: Oval, car: EveningCar, seed: int, style: Style, script: Script
    ) -> None:
        self.script, self.now = script, Now()
        self.book = Book(oval, script, style)
        self.evening_car = car
        super().__init__(oval, car, seed, style)
        self._legs = deque(script.legs)
        self._leg: Leg | None = None
        self._stops, self._bumps = deque(script.stops), deque(script.bumps)
        self._cautions = deque(script.cautions)
        self._pit: Pit | None = None
        self._bump: Bump | None = None
        self._bump_s = 0.0
        self._blend = self._wheel_told = self._slip = 0.0
        self._count = 0
        self._begin_in_the_box()

    def _begin_in_the_box(self) -> None:
        car = self.evening_car
        car.station_m, car.lateral_m = BOX_M, PIT_LANE_M
        car.halt()
        self._start_leg(BOX_M)
        self._arrive(0.0)

    def controls(self, time_s: float) -> tuple[float, float, float]:
        """Return steering wheel (rad), throttle and brake for the car's present state."""
        car = self.evening_car
        way = car.laps * self._oval.length_m + car.station_m
        if self._count % SAMPLE_TICKS == 0:
            self._look_about(way, time_s)
        self._count += 1
        self._knock(way)
        if self._pit is not None and not self._leave(time_s):
            return self._wheel_told, 0.0, 1.0
        if self._leg is None and self._due(way):
            self._start_leg(way)
            if car.standing:
                self._arrive(time_s)
                return 0.0, 0.0, 1.0
        if self._leg is not None and way >= self._leg.end_m:
            self._resume(way)
        if self._leg is None:
            if self._phase is Phase.FOLLOW:
                self._set_hold()
            wheel, throttle, brake = super().controls(time_s)
        else:
            wheel = self._steer(way)
            self._slow_pedals(self._leg, way)
            throttle, brake = self._throttle, self._brake
            if self._at_the_box(way):
                self._arrive(time_s)
        self._wheel_told = wheel
        return wheel, throttle, brake

    def _due(self, way: float) -> bool:
        return bool(self._legs) and way >= self._legs[0].start_m and self._phase is Phase.FOLLOW

    def _start_leg(self, way: float) -> None:
        leg = self._leg = self._legs.popleft()
        car = self.evening_car
        if leg.tow_to_m is not None:
            way = leg.tow_to_m
            car.laps, car.station_m, car.lateral_m = car.laps + 1, BOX_M, PIT_LANE_M
            car.halt()
            self._wheel_told = 0.0
            self.book.tow(self.now, car)
        self._path = self._leg_path(leg, way)
        self._bell.left_s = 0.0
        self._blend, self._slip = 0.0, car.vy_mps / max(car.vx_mps, 3.0)
        if not car.standing:
            self._blend = self._wheel_told - self._steer(way)

    def _leg_path(self, leg: Leg, way: float) -> Path:
        """Return the leg's path: smooth lanes, and the weaving that warms the tires."""
        lane, ramps = self._car.lateral_m, []
        for start, end, after in leg.lanes:
            ramps.append(Ramp(start, end, lane, after))
            lane = after
        path = Path(int(way))
        for station in range(int(way), int(leg.end_m) + 100):
            n, n1, n2 = along(ramps, station)
            w, w1, w2 = _weave(leg, station)
            heading, curvature = self._planner.bending(station, (n + w, n1 + w1, n2 + w2))
            path.add(n + w, heading, curvature)
        path.ahead_radps = [0.0] * len(path.lateral_m)
        return path

    def _steer(self, way: float) -> float:
        car, data = self.evening_car, self._car.data
        speed = max(car.vx_mps, 3.0)
        lateral, heading, _ = self._path.at(way)
        ahead = way + PREVIEW_S * speed
        curvature = self._path.curvature(ahead)
        slip = car.vy_mps / speed
        self._slip += STEP_S / SLIP_S * (slip - self._slip)
        course = car.heading_rad + self._slip - heading
        turning = car.yaw_rate_radps - speed * self._path.curvature(way)
        back = PLACE_GAIN * (car.lateral_m - lateral) + COURSE_GAIN * course
        back += YAW_GAIN_S * turning + SLIP_GAIN * (slip - self._slip)
        turned = curvature * data.wheelbase_m + self._understeer(curvature, ahead) - back
        self._blend -= STEP_S / BLEND_S * self._blend
        return turned * data.steering_ratio + self._blend

    def _slow_pedals(self, leg: Leg, way: float) -> None:
        speed = self._car.vx_mps
        wanted = leg.speed_at(way + 0.15 * speed)
        way_left = self._box_ahead() - way
        if 0.0 < way_left < 200.0:
            wanted = min(wanted, math.sqrt(2.0 * STOP_MPS2 * max(way_left - 0.1 * speed, 0.01)))
        error = wanted - speed
        throttle = min(max(0.15 + 0.5 * error, 0.0), 1.0)
        straight = abs(self._path.curvature(way)) < STRAIGHT_1PM
        most = STRAIGHT_BRAKE if straight or speed < PIT_MPS else CURVE_BRAKE
        brake = min(max(-0.15 * (error + 0.3), 0.0), most)
        self._throttle += PEDAL_SHARE * (throttle - self._throttle)
        self._brake += PEDAL_SHARE * (brake - self._brake)

    def _box_ahead(self) -> float:
        """Return the way to the next stop's box."""
        return self.script.way(self._stops[0].lap, BOX_M) if self._stops else math.inf

    def _at_the_box(self, way: float) -> bool:
        left = self._box_ahead() - way
        return left < 0.3 or (left < 15.0 and self._car.vx_mps < LEAST_MPS)

    def _arrive(self, time_s: float) -> None:
        stop = self._stops.popleft()
        self.evening_car.halt()
        self._pit = Pit(stop, time_s)
        self._throttle, self._brake = 0.0, 1.0
        self.book.end_run(stop)

    def _leave(self, time_s: float) -> bool:
        """Do the crew's work at the right time; return whether the car leaves now."""
        pit, car = self._pit, self.evening_car
        assert pit is not None
        if not pit.served and time_s - pit.since_s >= 0.8 * pit.stop.stand_s:
            pit.served = True
            if pit.stop.lap:
                car.serve(pit.stop.changed, pit.stop.fuel_kg)
            self.now.tire_set, self.now.zero_rad = pit.stop.tire_set, 0.0
            self.now.incident_laps = (0, 0)
            self.book.begin_run(pit.stop, car.laps + 1, time_s)
        if not pit.over(time_s):
            return False
        self._pit = None
        car.start()
        self._throttle, self._brake, self._blend = 0.2, 0.0, 0.0
        return True

    def _resume(self, way: float) -> None:
        """Hand the car over to the racing driver, on a straight."""
        self._leg = None
        length = self._oval.length_m
        count = 2 * int(way // length)
        while self._knot_mark(count) < way + 60.0:
            count += 1
        self._next = self._intend(count)
        self._settle_m = self._clear_m = way
        path = Path(int(way))
        path.add(self._car.lateral_m, 0.0, 0.0)
        moved = min(way + 220.0, self._next.start_m + self._next.marks.curve_start_m - 70.0)
        self._to_next_corner(path, [(way + 2.0, moved, self._next.lane_m)])
        self._path = path
        self._trim = 0.0
        self._wheel = self._wheel_told / self._car.data.steering_ratio - self._understeer_at(way)
        self._set_hold()

    def _knot_mark(self, count: int) -> float:
        lap, index = divmod(count, 2)
        return lap * self._oval.length_m + self._oval.corners[index].target_m

    def _company(self, lap: int, name: str) -> Company | None:
        return self.script.company.get((lap, name))

    def _intend(self, count: int) -> Intent:
        """Draw what to do in a corner, as the lane and the company of the moment have it."""
        usual = super()._intend(count)
        lap, name = usual.turn_in.lap - 1, usual.marks.name
        company = self._company(lap, name)
        lane = self.script.lane_in(lap, company)
        lane_m = lane.straight_m + 0.6 * (usual.lane_m - self.style.lane_m)
        index = count % 2
        shift = usual.knot_m - usual.start_m - usual.marks.target_m + lane.knot_m
        if company is not None and company.moved_m is not None:
            shift = company.moved_m
        pace = 1.0 if company is None else company.pace
        inner = INNER_EDGE_M - SLOWER_M * (1.0 - pace)
        least, most = (_shift_for(edge - lane_m) for edge in (inner, OUTER_EDGE_M))
        shift = min(max(shift, least), most)
        if any(bump.lap < lap + 1 <= bump.lap + 2 for bump in self.script.bumps):
            pace *= 0.985
        return replace(
            usual,
            knot_m=usual.start_m + usual.marks.target_m + shift,
            speed_mps=usual.speed_mps * pace,
            lane_m=lane_m,
            low_m=lane.corner_m + usual.low_m - self.style.low_m[index],
        )

    def _pedals(self, way: float) -> None:
        """Work the pedals; company makes the driver lift on the straight."""
        super()._pedals(way)
        following = self._next
        if self._phase is not Phase.FOLLOW or way < self._clear_m:
            return
        company = self._company(following.turn_in.lap - 1, following.marks.name)
        if company is not None:
            start = following.knot_m - 60.0 - 66.0 * company.lift_s
            if start <= way < start + 60.0 * company.lift_s:
                self._throttle -= 2.0 * PEDAL_SHARE * self._throttle

    def _note(self, way: float, time_s: float) -> None:
        super()._note(way, time_s)
        self._intent.turn_in.level_steer_rad += self.now.zero_rad

    def _knock(self, way: float) -> None:
        """Push the car aside when it is due, and let the steering be bent by it."""
        car, bump = self.evening_car, self._bump
        if bump is None:
            if self._bumps and way >= self._bumps[0].way_m:
                self._bump, self._bump_s = self._bumps.popleft(), 0.0
            return
        if self._bump_s == 0.0:
            self.now.zero_rad += bump.zero_rad
            self.now.incident_laps = (bump.lap + 1, bump.lap + 3)
            self.book.note("bump", car, zero_rad=bump.zero_rad)
        side = abs(bump.height_mps2) if car.lateral_m < -4.0 else bump.height_mps2
        self._bump_s += STEP_S
        part = self._bump_s / bump.length_s
        car.push_mps2 = side * math.sin(math.pi * part) if part < 1.0 else 0.0
        if part >= 1.0:
            self._bump = None

    def _look_about(self, way: float, time_s: float) -> None:
        """Bring flags, gap and wake up to date, and write the book."""
        now, car = self.now, self.evening_car
        self._flags(way)
        now.time_s = time_s
        now.on_pit_road = self.script.on_pit_road(way)
        now.in_car = self._pit is None or not self._pit.watching(time_s)
        now.lane = self._lane()
        self._neighbors(car.laps, car.station_m)
        self.book.sample(now, car, self._leg is None)

    def _flags(self, way: float) -> None:
        now = self.now
        if not self._cautions:
            now.caution = False
            return
        caution = self._cautions[0]
        if not now.caution and way >= caution.thrown_m:
            now.caution = True
            self.book.note("caution", self._car)
        if now.caution and way >= caution.green_m:
            now.caution = False
            now.restart_lap = caution.last_lap + 2
            self.book.note("green", self._car)
            self._cautions.popleft()

    def _lane(self) -> LaneName | None:
        if self._leg is not None:
            return None
        lap = self._car.laps
        index = 0 if self._car.station_m < self._oval.corners[0].exit_m else 1
        return self.script.lane_in(lap, self._company(lap, self._oval.corners[index].name)).name

    def _neighbors(self, lap: int, station: float) -> None:
        now, car = self.now, self.evening_car
        first, second = self._oval.corners
        marks = first if station < first.exit_m else second
        company = self._company(lap, marks.name) if station < marks.exit_m else None
        near = marks.transition_start_m - 230.0 <= station < marks.apex_m + 150.0
        now.car_inside = company is not None and company.inside and near
        now.car_outside = company is not None and company.outside and near
        now.gap_s = NO_GAP_S if company is None else company.gap_s
        if now.caution and not now.on_pit_road:
            now.gap_s = 0.6
        wake = 0.0 if company is None else company.wake
        if wake != car.wake:
            car.wake = wake
            car.load()


def _weave(leg: Leg, station: float) -> tuple[float, float, float]:
    """Return a smooth weave about the lane and its two derivatives, by central differences."""
    for start, end in leg.weaves:
        if start + 1.0 < station < end - 1.0:
            before, here, after = (_weave_at(start, end, station + d) for d in (-1.0, 0.0, 1.0))
            return here, 0.5 * (after - before), after - 2.0 * here + before
    return 0.0, 0.0, 0.0


def _weave_at(start: float, end: float, station: float) -> float:
    window = math.sin(math.pi * (station - start) / (end - start)) ** 2
    return WEAVE_M * window * math.sin(2.0 * math.pi * (station - start) / WEAVE_LENGTH_M)


def _shift_for(settle_m: float) -> float:
    """Return the turn-in about the mark that lets the car settle so far inside of its lane."""
    for i in range(len(SHIFTS_M) - 1):
        high, low = SETTLES_M[i], SETTLES_M[i + 1]
        if settle_m >= low:
            part = min(max((high - settle_m) / (high - low), 0.0), 1.0)
            return SHIFTS_M[i] + part * (SHIFTS_M[i + 1] - SHIFTS_M[i])
    return SHIFTS_M[-1]
