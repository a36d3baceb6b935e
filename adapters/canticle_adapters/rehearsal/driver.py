"""The driver: looks ahead, holds a lane, turns in at a knot early or late, varies by the lap.

A corner is driven from a plan, a path over the surface at every meter of station, made shortly
before the turn-in. Its entry has a path curvature of straight pieces (zero to the knot, up with
the steering ramp, on to the arc's own) whose two free levels are found so that the path
settles on the low lane; the rest is smooth changes of lane. A late knot so leaves less road
for the same change of heading, and needs a higher level.

The turn-in is exact. For the last `hold_s` before it the wheel is held still; then it turns at
a constant rate from the knot on, with the start rounded by a parabola that meets the ramp
`round_s`/2 after the knot, so that the ramp extended back meets the held level at the knot
itself. Feedback along the path takes over only after the ramp.
"""

from __future__ import annotations

import math
import random
from dataclasses import dataclass, field
from enum import Enum
from operator import mul

from canticle_adapters.rehearsal.car import GRAVITY_MPS2, STEP_S, Car
from canticle_adapters.rehearsal.oval import CornerMarks, Oval, Ramp, along
from canticle_adapters.rehearsal.preview import REACH_M, Preview, preview

Pair = tuple[float, float]
Triple = tuple[float, float, float]

USUAL_MPS = 66.0
CAR_LAG_S = 0.36
"""About how long this car's path takes to follow its wheel."""
TRIM_SHARE = STEP_S / 2.5
UNDERSTEER = 5.6e-4
"""Front less rear slip angle by side force squared over normal force (tried on this car)."""
UNDERSTEER_AHEAD_S = 0.15
PEDAL_SHARE = STEP_S / 0.12
SLOWING_MPS2 = 4.5
STRAIGHT_LEAD_M = 60.0
LEAST_RAMP_M = 8.0
SETTLE_M = 68.0
MOST_LEVEL = 1.6
MOST_TURN_RAD = math.radians(15.0)


@dataclass(frozen=True, slots=True)
class Style:
    """How the driver drives; angles are those of the steering wheel.

    Knots scatter about the mark: mostly normal about `knot_bias_m`, sometimes clearly late or
    clearly early. Corrections are bell-shaped pulses of the wheel on the straights.
    """

    knot_bias_m: float = -10.0
    knot_std_m: float = 12.0
    late_share: float = 0.18
    late_m: Pair = (12.0, 33.0)
    early_share: float = 0.10
    early_m: Pair = (-40.0, -30.0)
    ramp_radps: float = math.radians(26.0)
    ramp_spread: float = 0.20
    round_s: float = 0.06
    hold_s: float = 0.35
    correction_deg: float = 0.5
    corrections_per_s: float = 0.7
    correction_s: float = 0.5
    lane_m: float = -3.4
    low_m: Pair = (1.5, 1.5)
    speed_mps: Pair = (62.8, 59.0)
    speed_spread: float = 0.006


class Phase(Enum):
    """What the hands are doing."""

    FOLLOW = "follow the path"
    HOLD = "hold the wheel still before the knot"
    RAMP = "turn in"


@dataclass(slots=True)
class TurnIn:
    """What is true of one turn-in; the knot's station and time are those really driven."""

    lap: int
    corner: str
    mark_m: float
    ramp_radps: float
    knot_station_m: float = math.nan
    knot_time_s: float = math.nan
    level_steer_rad: float = math.nan


@dataclass(frozen=True, slots=True)
class Intent:
    """What the driver means to do in one corner of one lap.

    `knot_m` counts on over laps from the first start line; `start_m` is where its lap begins.
    """

    count: int
    marks: CornerMarks
    start_m: float
    knot_m: float
    ramp_radps: float
    speed_mps: float
    lane_m: float
    low_m: float
    turn_in: TurnIn


@dataclass(frozen=True, slots=True)
class Entry:
    """The entry's path: curvature up with the wheel's ramp, then straight on to the arc's."""

    start_m: float
    settle_m: int
    arc_1pm: float
    ramp_m_per_1pm: float

    def curvature(self, station_m: float, level_1pm: float) -> float:
        """Return the path's curvature when the ramp ends at that level."""
        way = station_m - self.start_m
        if way <= 0.0:
            return 0.0
        ramp_m = max(self.ramp_m_per_1pm * level_1pm, LEAST_RAMP_M)
        if way < ramp_m:
            return level_1pm * way / ramp_m
        part = (way - ramp_m) / max(self.settle_m - self.start_m - ramp_m, 1.0)
        return level_1pm + min(part, 1.0) * (self.arc_1pm - level_1pm)


@dataclass(slots=True)
class Bell:
    """A bell-shaped correction of the wheel under way."""

    height_rad: float = 0.0
    length_s: float = 1.0
    left_s: float = 0.0


@dataclass(slots=True)
class Path:
    """A path over the surface, one entry a meter from `start_m` (stations count on over laps)."""

    start_m: int
    lateral_m: list[float] = field(default_factory=list)
    heading_rad: list[float] = field(default_factory=list)
    curvature_1pm: list[float] = field(default_factory=list)
    ahead_radps: list[float] = field(default_factory=list)

    @property
    def end_m(self) -> int:
        """The station of the last entry."""
        return self.start_m + len(self.lateral_m) - 1

    def add(self, lateral_m: float, heading_rad: float, curvature_1pm: float) -> None:
        """Append the next meter."""
        self.lateral_m.append(lateral_m)
        self.heading_rad.append(heading_rad)
        self.curvature_1pm.append(curvature_1pm)

    def at(self, station_m: float) -> Triple:
        """Return lateral place, heading against the road and the wheel's rate for what comes."""
        place = min(max(station_m - self.start_m, 0.0), len(self.lateral_m) - 1.001)
        i = int(place)
        part = place - i
        n, x, w = self.lateral_m, self.heading_rad, self.ahead_radps
        return (
            n[i] + part * (n[i + 1] - n[i]),
            x[i] + part * (x[i + 1] - x[i]),
            w[i] + part * (w[i + 1] - w[i]),
        )

    def curvature(self, station_m: float) -> float:
        """Return the path's curvature in the surface near a station."""
        place = int(station_m - self.start_m)
        return self.curvature_1pm[min(max(place, 0), len(self.curvature_1pm) - 1)]


class Planner:
    """Makes paths over the surface of the oval."""

    def __init__(self, oval: Oval) -> None:
        self._oval = oval
        count = math.ceil(oval.length_m) + 1
        self._road = [self._at(float(index)) for index in range(count)]

    def _at(self, station_m: float) -> Triple:
        curvature = self._oval.curvature(station_m)[0]
        roll, roll_slope, _ = self._oval.roll(station_m)
        return curvature * math.cos(roll), roll_slope, math.sin(roll)

    def sin_roll(self, station_m: float) -> float:
        """Return the sine of the road roll near a station."""
        return self._near(station_m)[2]

    def _near(self, station_m: float) -> Triple:
        return self._road[int(station_m % self._oval.length_m)]

    def slope(self, station_m: float, state: Pair, curvature: float) -> Pair:
        """Return the change a meter of (lateral, heading) of a path of that curvature."""
        lateral, heading = state
        road, twist, _ = self._near(station_m)
        a, b = 1.0 - lateral * road, lateral * twist
        h = math.sqrt(a * a + b * b)
        return h * math.tan(heading), curvature * h / math.cos(heading) - (a * road - b * twist) / h

    def step(self, station_m: float, state: Pair, curvature: float) -> Pair:
        """Follow a path of that curvature for one meter (midpoint rule)."""
        n1, x1 = self.slope(station_m, state, curvature)
        middle = (state[0] + 0.5 * n1, state[1] + 0.5 * x1)
        n2, x2 = self.slope(station_m + 0.5, middle, curvature)
        return state[0] + n2, state[1] + x2

    def bending(self, station_m: float, lateral: Triple) -> Pair:
        """Return heading and curvature of a path given by n and its two derivatives."""
        n, n1, n2 = lateral
        road, twist, _ = self._near(station_m)
        a, b = 1.0 - n * road, n * twist
        h = math.sqrt(a * a + b * b)
        heading = math.atan(n1 / h)
        turned = n2 / h / (1.0 + (n1 / h) ** 2) + (a * road - b * twist) / h
        return heading, turned * math.cos(heading) / h

    def lanes(self, path: Path, end_m: float, changes: list[Triple]) -> None:
        """Extend a path by smooth lane changes, each (start, end, new lateral place)."""
        lane = path.lateral_m[-1] if path.lateral_m else changes[0][2]
        ramps = []
        for start, end, after in changes:
            ramps.append(Ramp(start, end, lane, after))
            lane = after
        station = path.start_m + len(path.lateral_m)
        while station <= end_m:
            lateral = along(ramps, station)
            heading, curvature = self.bending(station, lateral)
            path.add(lateral[0], heading, curvature)
            station += 1

    def straight_on(self, path: Path, end_m: float) -> None:
        """Extend a path without turning, whatever the road does."""
        state = (path.lateral_m[-1], path.heading_rad[-1])
        station = path.end_m
        while station < end_m:
            state = self.step(station, state, 0.0)
            station += 1
            path.add(*state, 0.0)

    def look_ahead(self, path: Path, gain: Preview) -> None:
        """Weigh the curvature and the pull of the bank ahead of every meter of a path."""
        count = len(path.lateral_m)
        bends = path.curvature_1pm + path.curvature_1pm[-1:] * REACH_M
        stations = range(path.start_m, path.start_m + count + REACH_M)
        pulls = [-GRAVITY_MPS2 * self.sin_roll(station) for station in stations]
        path.ahead_radps = [
            sum(map(mul, gain.curvature, bends[i : i + REACH_M]))
            + sum(map(mul, gain.side_pull, pulls[i : i + REACH_M]))
            for i in range(count)
        ]

    def settle(self, path: Path, entry: Entry) -> float:
        """Extend a path by an entry that ends along the road; returns the ramp's level.

        The level is found by halving: the more curvature early, the more the path ends left.
        """
        start = (path.lateral_m[-1], path.heading_rad[-1])
        stations = range(path.end_m, entry.settle_m)
        least, most = 0.0, MOST_LEVEL * entry.arc_1pm
        for _ in range(12):
            level = 0.5 * (least + most)
            state = start
            for station in stations:
                state = self.step(station, state, entry.curvature(station + 0.5, level))
            least, most = (least, level) if state[1] > 0.0 else (level, most)
        state = start
        for station in stations:
            state = self.step(station, state, entry.curvature(station + 0.5, level))
            path.add(*state, entry.curvature(station + 1.0, level))
        return level


class Driver:
    """Turns the car's state into steering wheel, throttle and brake, a millisecond at a time.

    Attributes
    ----------
    turn_ins
        The truth of every turn-in so far, in the order of driving.
    """

    def __init__(self, oval: Oval, car: Car, seed: int, style: Style | None = None) -> None:
        self.style = style if style is not None else Style()
        self.turn_ins: list[TurnIn] = []
        self._oval, self._car, self._seed = oval, car, seed
        self._planner = Planner(oval)
        self._gain = preview(car.data, USUAL_MPS)
        self._random = random.Random(f"{seed}/corrections")
        self._intent = self._next = self._intend(0)
        self._path = self._first_path()
        self._phase = Phase.FOLLOW
        self._trim = self._wheel = self._level = self._target = 0.0
        self._ticks = 0
        self._throttle, self._brake = 0.6, 0.0
        self._bell = Bell()
        self._clear_m = 0.0
        self._settle_m = 0.0
        self._bell_wait_s = self._random.expovariate(self.style.corrections_per_s)
        self._set_hold()

    def _intend(self, count: int) -> Intent:
        """Draw what to do in the count-th corner of the session."""
        lap, index = divmod(count, len(self._oval.corners))
        marks = self._oval.corners[index]
        draw = random.Random(f"{self._seed}/{lap + 1}/{marks.name}")
        style = self.style
        start = lap * self._oval.length_m
        ramp = style.ramp_radps * (1.0 + style.ramp_spread * draw.uniform(-1.0, 1.0))
        knot = marks.target_m + self._scatter(draw)
        return Intent(
            count=count,
            marks=marks,
            start_m=start,
            knot_m=start + knot,
            ramp_radps=ramp,
            speed_mps=style.speed_mps[index] * (1.0 + style.speed_spread * draw.gauss(0.0, 1.0)),
            lane_m=style.lane_m + draw.gauss(0.0, 0.25),
            low_m=style.low_m[index] + draw.gauss(0.0, 0.3),
            turn_in=TurnIn(lap + 1, marks.name, marks.target_m, ramp),
        )

    def _scatter(self, draw: random.Random) -> float:
        style = self.style
        kind = draw.random()
        if kind < style.late_share:
            return draw.uniform(*style.late_m)
        if kind < style.late_share + style.early_share:
            return draw.uniform(*style.early_m)
        usual = draw.gauss(style.knot_bias_m, style.knot_std_m)
        return min(max(usual, style.early_m[0]), style.late_m[1])

    def _first_path(self) -> Path:
        path = Path(0)
        self._to_next_corner(path, [(0.0, 1.0, self._intent.lane_m)])
        self._car.lateral_m = self._intent.lane_m
        return path

    def _to_next_corner(self, path: Path, changes: list[Triple]) -> None:
        """Extend a path to the next corner, straight on from shortly before its curve."""
        following = self._next
        curve_m = following.start_m + following.marks.curve_start_m
        self._planner.lanes(path, curve_m - STRAIGHT_LEAD_M, changes)
        self._planner.straight_on(path, following.knot_m + STRAIGHT_LEAD_M)
        self._planner.look_ahead(path, self._gain)

    def _set_hold(self) -> None:
        self._hold_m = self._next.knot_m - self._car.vx_mps * (
            self.style.hold_s + 0.5 * self.style.round_s
        )

    def controls(self, time_s: float) -> tuple[float, float, float]:
        """Return steering wheel (rad), throttle and brake for the car's present state."""
        way = self._car.laps * self._oval.length_m + self._car.station_m
        self._pedals(way)
        if self._phase is Phase.FOLLOW:
            wheel = self._follow(way)
            if way >= self._hold_m:
                self._hold(way, wheel)
        elif self._phase is Phase.HOLD:
            wheel = self._level
            if way + 0.5 * self.style.round_s * self._car.vx_mps >= self._intent.knot_m:
                self._phase, self._ticks = Phase.RAMP, 0
        else:
            wheel = self._ramp(way, time_s)
        return wheel, self._throttle, self._brake

    def _follow(self, way: float) -> float:
        """Steer along the path: the wheel's rate answers errors and what lies ahead."""
        car, gain = self._car, self._gain
        lateral, heading, known = self._path.at(way)
        place = car.lateral_m - lateral
        self._trim += TRIM_SHARE * place
        rate = (
            gain.place * (place + self._trim)
            + gain.heading * (car.heading_rad - heading)
            + gain.side_speed * car.vy_mps
            + gain.yaw_rate * car.yaw_rate_radps
            + gain.wheel * self._wheel
            + known
        )
        self._wheel += STEP_S * rate
        if way < self._settle_m:
            self._wheel = max(self._wheel, 0.0)  # no countersteering before the car is settled
        front = self._wheel + self._understeer_at(way)
        return front * car.data.steering_ratio + self._correct(way)

    def _understeer_at(self, way: float) -> float:
        ahead = way + UNDERSTEER_AHEAD_S * self._car.vx_mps
        return self._understeer(self._path.curvature(ahead), ahead)

    def _wheel_for(self, curvature: float, station_m: float) -> float:
        """Return the wheel that this driver knows to hold a path of that curvature there."""
        data = self._car.data
        turned = curvature * data.wheelbase_m + self._understeer(curvature, station_m)
        return data.steering_ratio * turned

    def _understeer(self, curvature: float, station_m: float) -> float:
        """Return what the front wheels must be turned beyond the path's own curvature."""
        car = self._car
        side = car.vx_mps * car.vx_mps * curvature
        side += GRAVITY_MPS2 * self._planner.sin_roll(station_m)
        return UNDERSTEER * side * abs(side) * car.data.mass_kg / car.normal_n

    def _correct(self, way: float) -> float:
        """Return the bell-shaped correction of the moment, and start one when it is due."""
        bell = self._bell
        if bell.left_s > 0.0:
            bell.left_s -= STEP_S
            return (
                bell.height_rad
                * 0.5
                * (1.0 - math.cos(2.0 * math.pi * bell.left_s / bell.length_s))
            )
        self._bell_wait_s -= STEP_S
        if self._bell_wait_s > 0.0:
            return 0.0
        style, draw = self.style, self._random
        self._bell_wait_s = draw.expovariate(style.corrections_per_s)
        length = style.correction_s * draw.uniform(0.8, 1.2)
        height = math.radians(style.correction_deg) * draw.uniform(0.5, 1.0) * draw.choice((-1, 1))
        if self._clear_m < way and way + (length + 0.05) * self._car.vx_mps < self._hold_m:
            bell.left_s, bell.length_s, bell.height_rad = length, length, height
        return 0.0

    def _hold(self, way: float, wheel: float) -> None:
        """Hold the wheel still before the knot, and plan the corner meanwhile."""
        self._phase, self._level = Phase.HOLD, wheel
        intent = self._intent = self._next
        self._next = self._intend(intent.count + 1)
        intent.turn_in.level_steer_rad = wheel
        path = Path(int(way))
        car = self._car
        path.add(car.lateral_m, car.heading_rad + car.vy_mps / car.vx_mps, 0.0)
        entry = self._entry(intent)
        self._planner.straight_on(path, math.floor(entry.start_m))
        level = self._planner.settle(path, entry)
        self._settle_m = float(path.end_m)
        self._target = min(self._wheel_for(level, entry.start_m + 20.0), MOST_TURN_RAD)
        marks, start = intent.marks, intent.start_m
        turn_out = start + marks.arc_end_m - 80.0
        low = (float(path.end_m), turn_out - 40.0, intent.low_m)
        self._to_next_corner(
            path, [low, (turn_out, start + marks.exit_m + 80.0, self._next.lane_m)]
        )
        self._path = path
        self._clear_m = start + marks.exit_m + 80.0
        self._set_hold()

    def _entry(self, intent: Intent) -> Entry:
        marks, speed = intent.marks, self._car.vx_mps
        settle = math.floor(intent.start_m + marks.arc_start_m + SETTLE_M)
        arc = self._planner.bending(settle, (0.0, 0.0, 0.0))[1]
        wheel = self._car.data.steering_ratio * self._car.data.wheelbase_m * 1.6
        return Entry(
            start_m=intent.knot_m + CAR_LAG_S * speed,
            settle_m=settle,
            arc_1pm=arc,
            ramp_m_per_1pm=speed * wheel / intent.ramp_radps,
        )

    def _ramp(self, way: float, time_s: float) -> float:
        """Turn the wheel at a constant rate from the knot on, rounded about the knot."""
        half = 0.5 * self.style.round_s
        rate = self._intent.ramp_radps
        since = self._ticks * STEP_S - half
        self._ticks += 1
        turned = rate * since if since >= half else rate * (since + half) ** 2 / (4.0 * half)
        if math.isnan(self._intent.turn_in.knot_time_s) and since >= -1e-9:
            self._note(way, time_s)
        wheel = self._level + turned
        if since > half and wheel >= self._target:
            self._phase = Phase.FOLLOW
            self._wheel = wheel / self._car.data.steering_ratio - self._understeer_at(way)
        return wheel

    def _note(self, way: float, time_s: float) -> None:
        turn_in = self._intent.turn_in
        turn_in.knot_time_s = time_s
        turn_in.knot_station_m = way - self._intent.start_m
        self.turn_ins.append(turn_in)

    def _pedals(self, way: float) -> None:
        intent, speed = self._intent if way < self._clear_m else self._next, self._car.vx_mps
        marks = intent.marks
        wanted = self._speed_at(way - intent.start_m, marks, intent.speed_mps)
        throttle = min(max(0.5 + 0.5 * (wanted - speed), 0.0), 1.0)
        brake = min(max(0.05 * (speed - wanted - 0.8), 0.0), 0.5)
        self._throttle += PEDAL_SHARE * (throttle - self._throttle)
        self._brake += PEDAL_SHARE * (brake - self._brake)

    def _speed_at(self, station: float, marks: CornerMarks, slow_mps: float) -> float:
        slow_m = marks.transition_end_m - 95.0
        if station < slow_m:
            return math.sqrt(slow_mps**2 + 2.0 * SLOWING_MPS2 * (slow_m - station))
        free = station - marks.apex_m - 20.0
        return slow_mps + max(free, 0.0) * 0.04
