"""The script of a practice evening: what befalls the driver, drawn from a seed beforehand.

Laps count from 0 in here and a *way* is the distance from the first start line, counted on
over laps. The car begins in its pit box. A *leg* is a stretch that is not driven at racing
pace: out of the pit, into it, behind the pace car, a slow lap; everywhere else the racing
driver drives, in a lane and with company that the script names for every entry.

The pit road lies along the front stretch on the inside of the road. It begins late in the
last corner, so a stop is seen in that corner, and ends before the entry of the first.
"""

from __future__ import annotations

import math
import random
from dataclasses import dataclass, field
from typing import Literal

from canticle_adapters.rehearsal.car import GRAVITY_MPS2
from canticle_adapters.rehearsal.oval import Oval

Pair = tuple[float, float]
Triple = tuple[float, float, float]
Four = tuple[bool, bool, bool, bool]
LaneName = Literal["low", "middle", "high"]

BOX_M = 60.0
PIT_IN_M, PIT_OUT_M = 2120.0, 160.0
PIT_LANE_M = 6.5
PIT_MPS = 22.0
PACE_MPS = 36.0
CRAWL_MPS = 27.0
COAST_MPS2 = 2.6
FIRST_STAND_S = 4.0
WEAVE_M, WEAVE_LENGTH_M = 1.0, 97.0
NO_GAP_S = 9.0
TRAFFIC_GAP_S = 0.8
"""A car ahead closer than this at the entry makes it an entry in traffic."""

RIGHT_SIDES: Four = (False, True, False, True)
ALL_FOUR: Four = (True, True, True, True)
NONE: Four = (False, False, False, False)


@dataclass(frozen=True, slots=True)
class Evening:
    """How much of everything the evening has; None is by its length.

    Parameters
    ----------
    laps
        How many, unless `Options.laps` says it.
    stops
        Pit stops after the start; one of them under the first caution, the last one a tow.
    cautions, caution_laps
        How many, and how many laps each lasts.
    traffic_share
        The share of ordinary laps that are driven in company.
    lanes
        Whether the driver moves up the track through a run.
    bumps
        Bumps that shift the steering zero for the rest of the run.
    slow_laps
        Times of creeping through two corners under half the usual speed.
    replay, tow
        Whether a replay is watched during the first stop; whether one stop is a tow.
    fuel_kg, burn_kgps
        What the tank holds when full, and what racing burns.
    """

    laps: int = 80
    stops: int | None = None
    cautions: int | None = None
    caution_laps: tuple[int, int] = (2, 4)
    traffic_share: float = 0.20
    lanes: bool = True
    bumps: int = 1
    slow_laps: int = 1
    replay: bool = True
    tow: bool = True
    fuel_kg: float = 60.0
    burn_kgps: float = 0.05


@dataclass(frozen=True, slots=True)
class Lane:
    """Where a lane runs on the straight and in the corner, and how it moves the turn-in."""

    name: LaneName
    straight_m: float
    corner_m: float
    knot_m: float


LANES = (
    Lane("low", -1.8, 2.9, 2.0),
    Lane("middle", -3.7, -1.2, 8.0),
    Lane("high", -5.1, -5.1, 14.0),
)


def lane_at(corner_m: float) -> LaneName:
    """Return the lane whose place in the corner is nearest."""
    return min(LANES, key=lambda lane: abs(lane.corner_m - corner_m)).name


@dataclass(frozen=True, slots=True)
class Company:
    """Other cars about one entry.

    A car ahead has a gap and leaves a wake; one alongside pinches the entry: another lane, a
    moved turn-in, and a lift on the straight before.
    """

    gap_s: float
    inside: bool = False
    outside: bool = False
    moved_m: float | None = None
    lift_s: float = 0.0
    wake: float = 0.0
    pace: float = 1.0

    @property
    def alongside(self) -> bool:
        """Whether a car is beside."""
        return self.inside or self.outside


@dataclass(frozen=True, slots=True)
class Stop:
    """A stop in the box at the start of a lap; the tires and the fuel that it brings."""

    lap: int
    stand_s: float
    changed: Four
    tire_set: str
    fuel_kg: float
    replay_s: float = 0.0
    tow: bool = False


@dataclass(frozen=True, slots=True)
class Caution:
    """From the flag to the green, late in the last corner of `last_lap`."""

    first_lap: int
    last_lap: int
    thrown_m: float
    green_m: float


@dataclass(frozen=True, slots=True)
class Bump:
    """A sideways knock, and the steering wheel's angle that it leaves when driving straight."""

    lap: int
    way_m: float
    height_mps2: float
    length_s: float
    zero_rad: float


@dataclass(slots=True)
class Leg:
    """A stretch not driven at racing pace.

    Speeds are joined by constant accelerations, lanes by smooth changes (from, to, place).
    """

    start_m: float
    end_m: float
    speeds: list[Pair] = field(default_factory=list)
    lanes: list[Triple] = field(default_factory=list)
    weaves: list[Pair] = field(default_factory=list)
    tow_to_m: float | None = None

    def speed_at(self, way_m: float) -> float:
        """Return the speed to be driven somewhere on the leg."""
        before = self.speeds[0]
        for point in self.speeds:
            if way_m < point[0]:
                part = max(way_m - before[0], 0.0) / max(point[0] - before[0], 1e-9)
                square = before[1] ** 2 + part * (point[1] ** 2 - before[1] ** 2)
                return math.sqrt(square)
            before = point
        return before[1]


class Script:
    """All that happens, lap by lap.

    Parameters
    ----------
    oval
        The road.
    evening
        How much of everything.
    laps
        How many laps to fill.
    seed
        The same seed gives the same evening.
    """

    def __init__(self, oval: Oval, evening: Evening, laps: int, seed: int) -> None:
        self.evening, self.laps = evening, laps
        self.length_m = oval.length_m
        self._names = [marks.name for marks in oval.corners]
        self._exits = [marks.exit_m for marks in oval.corners]
        self._draw = random.Random(f"{seed}/evening")
        self._taken: set[int] = {0}
        self.stops = self._draw_stops()
        self.cautions = self._draw_cautions()
        self.bumps = self._draw_bumps()
        self.slow_laps = self._draw_slow_laps()
        self._lanes = self._draw_lanes()
        self.company = self._draw_company()
        self.legs = self._legs()

    def way(self, lap: int, station_m: float) -> float:
        """Return the distance from the first start line."""
        return lap * self.length_m + station_m

    def lane(self, lap: int) -> Lane:
        """Return the lane the driver means to use in a lap when alone."""
        return LANES[self._lanes[min(lap, len(self._lanes) - 1)]]

    def lane_in(self, lap: int, company: Company | None) -> Lane:
        """Return the lane that company leaves: a car inside pushes up, one outside down."""
        index = self._lanes[min(lap, len(self._lanes) - 1)]
        if company is not None and company.alongside:
            index += 1 if company.inside else -1
        return LANES[min(max(index, 0), 2)]

    def _free(self, first: int, last: int) -> bool:
        inside = 2 <= first and last < self.laps
        return inside and not self._taken.intersection(range(first, last + 1))

    def _take(self, first: int, last: int) -> None:
        self._taken.update(range(first, last + 1))

    def _place(self, first: float, last: float, length: int) -> int | None:
        """Find a lap from which so many laps are free, near a drawn place."""
        around = round(self._draw.uniform(first, last))
        for off in range(max(round(last - first), 1)):
            for lap in (around + off, around - off):
                if first <= lap <= last and self._free(lap, lap + length - 1):
                    self._take(lap, lap + length - 1)
                    return lap
        return None

    def _draw_stops(self) -> list[Stop]:
        evening, draw = self.evening, self._draw
        count = max(1, round(self.laps / 27)) if evening.stops is None else evening.stops
        stops = [Stop(0, FIRST_STAND_S, ALL_FOUR, "A1", evening.fuel_kg)]
        spacing = self.laps / (count + 1)
        letter, number = "A", 1
        for index in range(count):
            lap = round(spacing * (index + 1 + draw.uniform(-0.12, 0.12)))
            changed = draw.choices((RIGHT_SIDES, ALL_FOUR, NONE), (0.6, 0.25, 0.15))[0]
            if index == 0:
                changed = RIGHT_SIDES
            if changed == ALL_FOUR:
                letter, number = chr(ord(letter) + 1), 1
            elif changed == RIGHT_SIDES:
                number += 1
            tow = evening.tow and index == count - 1 and count > 1
            watched = draw.uniform(20.0, 40.0) if evening.replay and index == 0 else 0.0
            stand = draw.uniform(10.0, 14.0) + (20.0 if tow else 0.0)
            fuel = evening.fuel_kg * draw.uniform(0.85, 1.0)
            if lap < 4 or lap >= self.laps or not self._free(lap - 1, lap):
                continue
            self._take(lap - 1, lap)
            stops.append(Stop(lap, stand, changed, f"{letter}{number}", fuel, watched, tow))
        return stops

    def _draw_cautions(self) -> list[Caution]:
        evening, draw = self.evening, self._draw
        count = max(1, round(self.laps / 25)) if evening.cautions is None else evening.cautions
        cautions = []
        for index in range(count):
            length = draw.randint(*evening.caution_laps)
            thrown = draw.uniform(10.0, 60.0)
            green = draw.uniform(2080.0, 2200.0)
            if index == 0 and len(self.stops) > 1 and not self.stops[1].tow:
                first = self.stops[1].lap - 1
                self._take(first, first + length)
            else:
                part = self.laps / count
                place = self._place(part * index, part * (index + 1), length + 1)
                if place is None:
                    continue
                first = place
            last = first + length - 1
            if last < self.laps:
                ways = self.way(first, thrown), self.way(last, green)
                cautions.append(Caution(first, last, *ways))
        return sorted(cautions, key=lambda caution: caution.first_lap)

    def _draw_bumps(self) -> list[Bump]:
        draw = self._draw
        bumps = []
        for _ in range(self.evening.bumps):
            lap = self._place(0.3 * self.laps, 0.9 * self.laps, 3)
            station = draw.uniform(1185.0, 1235.0)
            height = GRAVITY_MPS2 * draw.uniform(1.5, 3.0) * draw.choice((-1.0, 1.0))
            zero = math.radians(draw.uniform(2.0, 4.0)) * draw.choice((-1.0, 1.0))
            length = draw.uniform(0.06, 0.09)
            if lap is not None:
                bumps.append(Bump(lap, self.way(lap, station), height, length, zero))
        return sorted(bumps, key=lambda bump: bump.lap)

    def _draw_slow_laps(self) -> list[int]:
        places = [
            self._place(0.15 * self.laps, 0.95 * self.laps, 2)
            for _ in range(self.evening.slow_laps)
        ]
        return sorted(place for place in places if place is not None)

    def _draw_lanes(self) -> list[int]:
        draw = self._draw
        starts = [stop.lap for stop in self.stops]
        lanes: list[int] = []
        for start, end in zip(starts, [*starts[1:], self.laps + 1], strict=True):
            moves = [draw.uniform(0.28, 0.42), draw.uniform(0.60, 0.75)]
            for lap in range(end - start):
                done = lap / max(end - start, 1)
                lanes.append(sum(done >= move for move in moves) if self.evening.lanes else 0)
        return lanes

    def _draw_company(self) -> dict[tuple[int, str], Company]:
        draw = self._draw
        company: dict[tuple[int, str], Company] = {}
        lap = 2
        while lap < self.laps:
            length = draw.randint(1, 3)
            if draw.random() < 0.75 * self.evening.traffic_share:
                for following in range(lap, min(lap + length, self.laps)):
                    if following not in self._taken:
                        self._meet(company, following)
                lap += length
            lap += 1
        return company

    def _meet(self, company: dict[tuple[int, str], Company], lap: int) -> None:
        draw = self._draw
        wake = draw.uniform(0.20, 0.30)
        gap = draw.uniform(0.9, 1.0) if draw.random() < 0.15 else draw.uniform(0.2, 0.7)
        for name in self._names:
            pace = draw.uniform(0.955, 0.985)
            lift = draw.uniform(0.8, 1.4)
            kind = draw.random()
            if kind < 0.45:
                company[lap, name] = Company(gap, lift_s=lift, wake=wake, pace=pace)
            elif kind < 0.9:
                inside = draw.random() < 0.5
                moved = draw.uniform(-25.0, 35.0)
                company[lap, name] = Company(
                    NO_GAP_S, inside, not inside, moved, lift, wake=0.0, pace=pace
                )

    def _legs(self) -> list[Leg]:
        legs = []
        by_lap = {stop.lap: stop for stop in self.stops}
        for caution in self.cautions:
            inside = range(caution.first_lap + 1, caution.last_lap + 1)
            halts = [by_lap.pop(lap) for lap in inside if lap in by_lap]
            legs.append(self._behind_the_pace_car(caution, halts))
        for stop in by_lap.values():
            legs.append(self._in_and_out(stop))
        legs += [self._creep(lap) for lap in self.slow_laps]
        return sorted(legs, key=lambda leg: leg.start_m)

    def _in_and_out(self, stop: Stop) -> Leg:
        """Return a stop under green: slowing from the last apex on, back to pace by Turn 3."""
        at, lap = self.way, stop.lap
        leg = Leg(at(lap - 1, 1900.0), at(lap, self._exits[0] + 20.0))
        if lap == 0:
            leg.start_m = BOX_M
        elif stop.tow:
            leg.start_m, leg.tow_to_m = at(lap - 1, 1185.0), at(lap, BOX_M)
        else:
            leg.speeds += [(at(lap - 1, 1905.0), 60.0), (at(lap - 1, 2255.0), PIT_MPS)]
            leg.lanes += self._into_the_pit(lap)
        leg.speeds += [(at(lap, 150.0), PIT_MPS), (at(lap, 151.0), 57.0)]
        leg.speeds += [(at(lap, 740.0), 57.0), (leg.end_m, 69.0)]
        leg.lanes += [(at(lap, 165.0), at(lap, 420.0), 4.0)]
        return leg

    def _into_the_pit(self, lap: int) -> list[Triple]:
        at = self.way
        return [
            (at(lap - 1, 1905.0), at(lap - 1, PIT_IN_M), 5.0),
            (at(lap - 1, PIT_IN_M + 10.0), at(lap - 1, 2262.0), PIT_LANE_M),
        ]

    def _behind_the_pace_car(self, caution: Caution, stops: list[Stop]) -> Leg:
        at, thrown, last = self.way, caution.thrown_m, caution.last_lap
        leg = Leg(thrown, at(last, self._exits[1] + 14.0))
        slowing = (68.0**2 - PACE_MPS**2) / (2.0 * COAST_MPS2)
        leg.speeds += [(thrown, 68.0), (thrown + slowing, PACE_MPS)]
        leg.lanes.append((thrown + 20.0, thrown + 240.0, -0.5))
        in_pit = {stop.lap for stop in stops}
        for lap in range(caution.first_lap, last + 1):
            if lap in in_pit:
                self._through_the_pit(leg, lap)
            elif lap > caution.first_lap:
                leg.weaves.append((at(lap, 10.0), at(lap, 301.0)))
            leg.weaves.append((at(lap, 1320.0 if lap in in_pit else 1110.0), at(lap, 1401.0)))
        leg.speeds += [(at(last, 1960.0), PACE_MPS), (at(last, 1961.0), 64.0)]
        return leg

    def _through_the_pit(self, leg: Leg, lap: int) -> None:
        at = self.way
        leg.speeds += [(at(lap - 1, 2000.0), PACE_MPS), (at(lap - 1, 2250.0), PIT_MPS)]
        leg.speeds += [(at(lap, 150.0), PIT_MPS), (at(lap, 151.0), PACE_MPS)]
        leg.lanes += self._into_the_pit(lap)
        leg.lanes += [(at(lap, 165.0), at(lap, 420.0), 2.5)]
        leg.lanes += [(at(lap, 1115.0), at(lap, 1300.0), -0.5)]

    def _creep(self, lap: int) -> Leg:
        """Return a time of creeping, from one Turn 1 to the next."""
        at, following = self.way, lap + 1
        leg = Leg(at(lap, 725.0), at(following, self._exits[0] + 20.0))
        leg.speeds = [(leg.start_m, 62.0), (at(lap, 1095.0), 48.0), (at(lap, 1390.0), CRAWL_MPS)]
        leg.speeds += [(at(following, 740.0), CRAWL_MPS), (at(following, 741.0), 64.0)]
        leg.lanes = [(leg.start_m + 5.0, at(lap, 1400.0), 0.0)]
        return leg

    def on_pit_road(self, way_m: float) -> bool:
        """Return whether that place on the way is pit road."""
        for stop in self.stops:
            start = self.way(stop.lap, 0.0 if stop.tow else PIT_IN_M - self.length_m)
            if start <= way_m < self.way(stop.lap, PIT_OUT_M):
                return True
        return False
