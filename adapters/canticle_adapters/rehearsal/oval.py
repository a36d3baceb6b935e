"""The made-up oval: its line, its banked surface and its track file.

The reference line lies in the plane z = 0 and has the plan-view curvature κ(s), positive
left. The surface turns about it by the road roll φ(s) of ISO 8855 (positive left side up, so
negative on a left-hand bank)::

    X(s, n) = r(s) + n·(cosφ·N + sinφ·Z)        N the left normal in plan, Z up

Curvature and bank change by quintic smoothsteps, so both have two continuous derivatives.
The oval turns left; a right-turning one is its mirror image.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache

NAME = "Greenwold Oval"
HALF_WIDTH_M = 8.0
TABLE_STEP_M = 0.25
PROFILE_STEP_M = 5.0

Row = tuple[float, ...]


@dataclass(frozen=True, slots=True)
class Ramp:
    """A smooth change from one constant value to another between two stations."""

    start_m: float
    end_m: float
    before: float
    after: float

    def at(self, station_m: float) -> tuple[float, float, float]:
        """Return the value and its first two derivatives by station."""
        length = self.end_m - self.start_m
        u = (station_m - self.start_m) / length
        change = self.after - self.before
        value = self.before + change * u**3 * (10.0 + u * (6.0 * u - 15.0))
        first = change * 30.0 * u * u * (1.0 - u) ** 2 / length
        second = change * 60.0 * u * (1.0 - u) * (1.0 - 2.0 * u) / length**2
        return value, first, second


def along(ramps: Sequence[Ramp], station_m: float) -> tuple[float, float, float]:
    """Return value and derivatives of a quantity that is constant between its ramps."""
    value = ramps[0].before
    for ramp in ramps:
        if station_m < ramp.start_m:
            break
        if station_m < ramp.end_m:
            return ramp.at(station_m)
        value = ramp.after
    return value, 0.0, 0.0


@dataclass(frozen=True, slots=True)
class End:
    """One banked end of the oval, from the road that leads into it to the one out of it."""

    name: str
    radius_m: float
    bank_deg: float
    ease_m: float
    bank_ramp_m: float
    bank_lag_m: float
    mark_lead_m: float


@dataclass(frozen=True, slots=True)
class CornerMarks:
    """The stations of one corner, as the track file names them, and its line's arc."""

    name: str
    target_m: float
    transition_start_m: float
    transition_end_m: float
    curve_start_m: float
    arc_start_m: float
    apex_m: float
    arc_end_m: float
    exit_m: float


TURN_1 = End("Turn 1", 225.0, 22.0, 90.0, 120.0, -4.0, 18.0)
TURN_3 = End("Turn 3", 235.0, 16.0, 90.0, 110.0, -2.0, 16.0)
FRONT_BANK_DEG = 4.5
BACK_BANK_DEG = 3.0
DOGLEG_DEG = 7.0
DOGLEG_START_M = 20.0
DOGLEG_EASE_M = 50.0
DOGLEG_ARC_M = 50.0
AFTER_DOGLEG_M = 150.0
BEFORE_LINE_M = 40.0


class Oval:
    """The oval, laid out so that it closes, with tables for fast look-up.

    Attributes
    ----------
    length_m
        Length of a lap along the reference line.
    corners
        The two corners in the order of driving.
    surface
        One row a quarter of a meter: κ, κ', cosφ, sinφ, φ', φ'' and their steps to the next
        row, so that a look-up is one multiplication and one addition a value.
    """

    def __init__(self) -> None:
        first_turn_rad, back_m = _closing_shape()
        self._layout(first_turn_rad, back_m)
        self.count = math.ceil(self.length_m / TABLE_STEP_M)
        self.step_m = self.length_m / self.count
        self._rows = [self._row(index * self.step_m) for index in range(self.count)]
        self.surface = [
            (*row, *(b - a for a, b in zip(row, self._rows[index + 1 - self.count], strict=True)))
            for index, row in enumerate(self._rows)
        ]
        self._line = self._trace()

    def _layout(self, first_turn_rad: float, back_m: float) -> None:
        dogleg_turn = math.radians(DOGLEG_DEG)
        dogleg = dogleg_turn / (DOGLEG_EASE_M + DOGLEG_ARC_M)
        curve = _bump(DOGLEG_START_M, DOGLEG_EASE_M, DOGLEG_ARC_M, dogleg)
        bank: list[Ramp] = []
        corners: list[CornerMarks] = []
        start = curve[-1].end_m + AFTER_DOGLEG_M
        turns = (first_turn_rad, 2.0 * math.pi - dogleg_turn - first_turn_rad)
        roads = ((FRONT_BANK_DEG, BACK_BANK_DEG), (BACK_BANK_DEG, FRONT_BANK_DEG))
        for end, turn, (before, after) in zip((TURN_1, TURN_3), turns, roads, strict=True):
            arc_m = turn * end.radius_m - end.ease_m
            curve += _bump(start, end.ease_m, arc_m, 1.0 / end.radius_m)
            finish = start + arc_m + 2.0 * end.ease_m
            bank += _bank_ramps(end, start, finish, before, after)
            corners.append(_marks(end, start, finish))
            start = finish + back_m
        self.corners = tuple(corners)
        self.length_m = corners[-1].exit_m + BEFORE_LINE_M
        self._curve = tuple(curve)
        self._roll = tuple(bank)

    def _row(self, station_m: float) -> Row:
        curvature, curvature_slope, _ = along(self._curve, station_m)
        roll, roll_slope, roll_bend = along(self._roll, station_m)
        return (curvature, curvature_slope, math.cos(roll), math.sin(roll), roll_slope, roll_bend)

    def _trace(self) -> list[tuple[float, float, float]]:
        """Integrate heading and place by Simpson's rule, the heading exactly enough to close."""
        x = y = heading = 0.0
        line = []
        step = self.step_m
        for index in range(self.count):
            line.append((x, y, heading))
            here, middle, there = (
                along(self._curve, (index + part) * step)[0] for part in (0.0, 0.5, 1.0)
            )
            half = heading + step * (5.0 * here + 8.0 * middle - there) / 24.0
            following = heading + step * (here + 4.0 * middle + there) / 6.0
            x += step * (math.cos(heading) + 4.0 * math.cos(half) + math.cos(following)) / 6.0
            y += step * (math.sin(heading) + 4.0 * math.sin(half) + math.sin(following)) / 6.0
            heading = following
        self.closing_error = (x, y, heading - 2.0 * math.pi)
        return line

    def curvature(self, station_m: float) -> tuple[float, float, float]:
        """Return κ, κ' and κ'' of the reference line at a station of any lap."""
        return along(self._curve, station_m % self.length_m)

    def roll(self, station_m: float) -> tuple[float, float, float]:
        """Return the road roll φ, φ' and φ'' (ISO 8855) at a station of any lap."""
        return along(self._roll, station_m % self.length_m)

    def line(self, station_m: float) -> tuple[float, float, float]:
        """Return x, y and heading of the reference line at a station of any lap."""
        station = station_m % self.length_m
        index = min(int(station / self.step_m), self.count - 1)
        x, y, heading = self._line[index]
        ahead = station - index * self.step_m
        row = self._rows[index]
        middle = heading + ahead * (0.5 * row[0] + ahead * row[1] / 8.0)
        turned = heading + ahead * (row[0] + 0.5 * ahead * row[1])
        return x + ahead * math.cos(middle), y + ahead * math.sin(middle), turned

    def place(self, station_m: float, lateral_m: float) -> tuple[float, float, float]:
        """Return the world position of a point of the surface."""
        x, y, heading = self.line(station_m)
        roll = self.roll(station_m)[0]
        across = lateral_m * math.cos(roll)
        return (
            x - across * math.sin(heading),
            y + across * math.cos(heading),
            lateral_m * math.sin(roll),
        )


@lru_cache(maxsize=1)
def greenwold() -> Oval:
    """Return the oval; laid out once a process."""
    return Oval()


def track_toml(mirror: bool = False) -> str:
    """Return the track file of the oval, or of its right-turning mirror image."""
    oval = greenwold()
    side = -1.0 if mirror else 1.0
    head = [
        f'name = "{track_name(mirror)}"',
        f"length_m = {oval.length_m:.4f}",
        f'direction = "{"right" if mirror else "left"}"',
        'reference = "centerline"',
        f"width_left_m = {HALF_WIDTH_M}",
        f"width_right_m = {HALF_WIDTH_M}",
        "bank_axis_offset_m = 0.0",
        "origin = [0.0, 0.0, 0.0, 0.0]",
        "profile = [ # station_m, bank_deg, curvature_1pm",
    ]
    rows = [_profile_row(oval, side, index) for index in range(_profile_count(oval))]
    corners = [line for corner in oval.corners for line in _corner_lines(corner)]
    return "\n".join([*head, *rows, "]", *corners, ""])


def track_name(mirror: bool = False) -> str:
    """Return the name of the oval or of its mirror image."""
    return f"{NAME}, mirrored" if mirror else NAME


def _profile_count(oval: Oval) -> int:
    return math.ceil(oval.length_m / PROFILE_STEP_M)


def _profile_row(oval: Oval, side: float, index: int) -> str:
    station = index * PROFILE_STEP_M
    bank_deg = -math.degrees(oval.roll(station)[0])
    curvature = side * oval.curvature(station)[0]
    return f"  [{station:.1f}, {bank_deg:.4f}, {curvature:.9f}],"


def _corner_lines(corner: CornerMarks) -> list[str]:
    places = ("transition_start_m", "transition_end_m", "apex_m", "exit_m", "target_m")
    return [
        "",
        "[[corner]]",
        f'name = "{corner.name}"',
        *(f"{place} = {getattr(corner, place):.1f}" for place in places),
    ]


def _bump(start_m: float, ease_m: float, arc_m: float, curvature: float) -> list[Ramp]:
    top = start_m + ease_m
    return [
        Ramp(start_m, top, 0.0, curvature),
        Ramp(top + arc_m, top + arc_m + ease_m, curvature, 0.0),
    ]


def _bank_ramps(end: End, start: float, finish: float, before: float, after: float) -> list[Ramp]:
    roll, roll_before, roll_after = (-math.radians(deg) for deg in (end.bank_deg, before, after))
    rise, fall = start + end.bank_lag_m, finish - end.bank_lag_m
    return [
        Ramp(rise, rise + end.bank_ramp_m, roll_before, roll),
        Ramp(fall - end.bank_ramp_m, fall, roll, roll_after),
    ]


def _marks(end: End, start: float, finish: float) -> CornerMarks:
    rise = start + end.bank_lag_m
    return CornerMarks(
        name=end.name,
        target_m=round(rise - end.mark_lead_m, 1),
        transition_start_m=rise,
        transition_end_m=rise + end.bank_ramp_m,
        curve_start_m=start,
        arc_start_m=start + end.ease_m,
        apex_m=0.5 * (start + finish),
        arc_end_m=finish - end.ease_m,
        exit_m=finish,
    )


def _closing_shape() -> tuple[float, float]:
    """Find the turn of the first end and the back straight that close the lap (Newton)."""
    turn, back = math.pi - math.radians(0.5 * DOGLEG_DEG), 350.0
    for _ in range(8):
        x, y = _lap_end(turn, back)
        x_turn, y_turn = (b - a for a, b in zip((x, y), _lap_end(turn + 1e-6, back), strict=True))
        x_back, y_back = (b - a for a, b in zip((x, y), _lap_end(turn, back + 1e-3), strict=True))
        x_turn, y_turn, x_back, y_back = x_turn * 1e6, y_turn * 1e6, x_back * 1e3, y_back * 1e3
        det = x_turn * y_back - x_back * y_turn
        turn -= (x * y_back - x_back * y) / det
        back -= (x_turn * y - x * y_turn) / det
    return turn, back


def _lap_end(first_turn_rad: float, back_m: float) -> tuple[float, float]:
    """Return where a lap with these two free lengths ends, starting at the origin."""
    dogleg = math.radians(DOGLEG_DEG)
    last_turn = 2.0 * math.pi - dogleg - first_turn_rad
    pieces = [
        (DOGLEG_START_M, 0.0, 0.0, 0.0),
        (0.0, DOGLEG_EASE_M, DOGLEG_ARC_M, dogleg),
        (AFTER_DOGLEG_M, 0.0, 0.0, 0.0),
        (0.0, TURN_1.ease_m, first_turn_rad * TURN_1.radius_m - TURN_1.ease_m, first_turn_rad),
        (back_m, 0.0, 0.0, 0.0),
        (0.0, TURN_3.ease_m, last_turn * TURN_3.radius_m - TURN_3.ease_m, last_turn),
        (BEFORE_LINE_M, 0.0, 0.0, 0.0),
    ]
    place, heading = 0j, 0.0
    for straight_m, ease_m, arc_m, turn in pieces:
        place += straight_m * complex(math.cos(heading), math.sin(heading))
        if turn:
            place += _turned(ease_m, arc_m, turn, heading)
            heading += turn
    return place.real, place.imag


def _turned(ease_m: float, arc_m: float, turn: float, heading: float) -> complex:
    """Return the displacement over one eased turn, by Simpson's rule."""
    curvature = turn / (ease_m + arc_m)
    total = arc_m + 2.0 * ease_m
    count = 2 * math.ceil(total)
    step = total / count
    angles = [heading + _turn_so_far(i * step, ease_m, arc_m, curvature) for i in range(count + 1)]
    weights = [1.0, *([4.0, 2.0] * (count // 2))[:-1], 1.0]
    units = (complex(math.cos(angle), math.sin(angle)) for angle in angles)
    return sum(w * unit for w, unit in zip(weights, units, strict=True)) * step / 3.0


def _turn_so_far(way_m: float, ease_m: float, arc_m: float, curvature: float) -> float:
    """Return the closed integral of the curvature of one eased turn."""
    if way_m <= ease_m:
        return curvature * ease_m * _smoothstep_area(way_m / ease_m)
    if way_m <= ease_m + arc_m:
        return curvature * (way_m - 0.5 * ease_m)
    rest = (2.0 * ease_m + arc_m - way_m) / ease_m
    return curvature * (ease_m + arc_m - ease_m * _smoothstep_area(max(rest, 0.0)))


def _smoothstep_area(u: float) -> float:
    return u**4 * (2.5 + u * (u - 3.0))
