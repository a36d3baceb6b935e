"""Pure: a scene as a list of shapes and texts, in pixels, ready for any painter.

The strip has three parts from left to right: the entry ribbon (the ground of the corner's
entry against distance, with the mark, its window, the last turn-ins and the demand), the axle
columns (how much of the grip front and rear use), and the tire ledger (energy of this lap).
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Literal, TypeAlias

from canticle_overlay.palette import (
    DIM,
    GROUND,
    HATCH,
    ORANGE,
    PALE,
    PANEL,
    RULE,
    SKY_BLUE,
    Color,
    mix,
)
from canticle_overlay.state import Condition, Pass, Ribbon, Scene

Point: TypeAlias = tuple[int, int]
Align: TypeAlias = Literal["left", "center", "right"]

WIDTH, HEIGHT = 820, 132
TEXT_SIZE, SMALL_SIZE = 16, 13

RIBBON = (16, 36, 500, 74)
COLUMNS = (552, 36, 92, 74)
LEDGER = (682, 36, 122, 74)
"""Left, top, width, height of the plots; titles stand above, labels below."""

BANK_SHARE = 0.62
"""Of the plot's height: the steepest bank."""
DEMAND_TOP = 1.2
COLUMN_TOP = 1.15
HATCH_PX = 7
SCALE_BAR_M = 50
BEYOND_M = 100.0
"""A turn-in this far outside the ribbon is still shown, by an arrow at its edge."""
PINS = ((34, 3, 0.0), (28, 2, 0.2), (24, 2, 0.3), (20, 2, 0.4), (16, 2, 0.48))
"""By age, newest first: height, width, share of the panel's color mixed into the accent."""
WHEELS = ("LF", "RF", "LR", "RR")
CONDITION_TEXT: dict[Condition, str] = {
    "no data": "No data",
    "bad data": "Bad data",
    "learning": "Learning",
    "live": "",
}


@dataclass(frozen=True, slots=True)
class Rect:
    """A filled rectangle."""

    left: int
    top: int
    width: int
    height: int
    color: Color


@dataclass(frozen=True, slots=True)
class Polygon:
    """A filled polygon."""

    points: tuple[Point, ...]
    color: Color


@dataclass(frozen=True, slots=True)
class Line:
    """An open line through its points."""

    points: tuple[Point, ...]
    color: Color
    width: int = 1


@dataclass(frozen=True, slots=True)
class Text:
    """A line of text whose top is at `top` and which is aligned to `x`."""

    x: int
    top: int
    text: str
    color: Color
    size: int
    align: Align = "left"


Shape: TypeAlias = Rect | Polygon | Line | Text


def size(scale: float) -> tuple[int, int]:
    """Return width and height of the strip in pixels.

    Parameters
    ----------
    scale
        1 for the design size.
    """
    return round(WIDTH * scale), round(HEIGHT * scale)


@dataclass(frozen=True, slots=True)
class Part:
    """A full-height piece of the strip: repainted when its shapes differ, else left alone."""

    left: int
    width: int
    shapes: tuple[Shape, ...]


def draw(scene: Scene, scale: float = 1.0) -> tuple[Part, ...]:
    """Return the parts of a scene, each with its shapes, the backmost first.

    Parameters
    ----------
    scene
        What to show.
    scale
        1 for the design size.
    """
    edges = (0, (_right(RIBBON) + COLUMNS[0]) // 2, (_right(COLUMNS) + LEDGER[0]) // 2, WIDTH)
    contents = (
        (*_header(scene), *_ribbon(scene.ribbon)),
        tuple(_columns(scene)),
        tuple(_ledger(scene)),
    )
    return tuple(
        _part(left, right, shapes, scale)
        for left, right, shapes in zip(edges, edges[1:], contents, strict=False)
    )


def _part(left: int, right: int, shapes: tuple[Shape, ...], scale: float) -> Part:
    back: tuple[Shape, ...] = (Rect(left, 0, right - left, HEIGHT, PANEL),)
    if left > 0:
        back = (*back, Line(((left, 12), (left, HEIGHT - 12)), RULE))
    first, last = round(left * scale), round(right * scale)
    if scale == 1.0:
        return Part(first, last - first, (*back, *shapes))
    return Part(first, last - first, tuple(_scaled(shape, scale) for shape in (*back, *shapes)))


def _header(scene: Scene) -> Iterator[Shape]:
    name = scene.ribbon.corner.corner if scene.ribbon else "Entry"
    yield Text(RIBBON[0], 10, _shortened(name), PALE, TEXT_SIZE)
    words, color = _news(scene)
    if words:
        yield Text(_right(RIBBON), 10, words, color, TEXT_SIZE, "right")


def _news(scene: Scene) -> tuple[str, Color]:
    """Return the most pressing words: the state when it is not well, a cue, the last entry."""
    state = CONDITION_TEXT[scene.condition]
    if scene.cue:
        return " · ".join(filter(None, (state, scene.cue))), ORANGE
    if state:
        return ": ".join(filter(None, (state, scene.detail))), ORANGE
    if scene.ribbon and scene.ribbon.passes:
        return result_text(scene.ribbon.passes[0]), PALE
    return "", PALE


def result_text(done: Pass) -> str:
    """Return a finished entry in a few words.

    Parameters
    ----------
    done
        The entry.
    """
    peak = "" if done.peak_demand is None else f", peak demand {done.peak_demand:.2f}"
    if done.margin_m is None or done.verdict == "not judged":
        return f"not judged{peak}"
    if done.verdict == "on":
        side = "before" if done.margin_m > 0 else "after"
        return f"on, {abs(done.margin_m):.0f} m {side} the mark{peak}"
    return f"{abs(done.margin_m):.0f} m {done.verdict}{peak}"


class _Plot:
    """The ribbon's axes: stations wrap, so distance counts from the ribbon's first station."""

    def __init__(self, ribbon: Ribbon) -> None:
        corner = ribbon.corner
        self._length_m = ribbon.lap_length_m
        self._first_m = corner.profile[0][0]
        self._span_m = max(self._distance(corner.profile[-1][0]), 1.0)
        self._bank = [(self._distance(at), bank) for at, bank in corner.profile]
        self._steepest = max(max(abs(bank) for _, bank in self._bank), 1.0)

    def x(self, station_m: float) -> int | None:
        """Return the pixel of a station, None when it is outside the ribbon."""
        distance_m = self._distance(station_m)
        if distance_m > self._span_m:
            return None
        return RIBBON[0] + self.pixels(distance_m)

    def pixels(self, distance_m: float) -> int:
        """Return how many pixels a distance takes."""
        return round(distance_m / self._span_m * RIBBON[2])

    def beyond_m(self, station_m: float) -> float:
        """Return how far a station is outside the ribbon, from the nearer end; 0 inside."""
        past_m = max(self._distance(station_m) - self._span_m, 0.0)
        return min(past_m, self._length_m - self._span_m - past_m) if past_m > 0 else 0.0

    def near(self, station_m: float) -> int:
        """Return the pixel of a station, of the nearer end when it is outside."""
        inside = self.x(station_m)
        if inside is not None:
            return inside
        past_m = self._distance(station_m) - self._span_m
        before = past_m > (self._length_m - self._span_m) / 2
        return RIBBON[0] if before else _right(RIBBON)

    def ground(self) -> list[Point]:
        """Return the ground line from left to right."""
        return [
            (RIBBON[0] + self.pixels(distance_m), self._bank_y(bank))
            for distance_m, bank in self._bank
        ]

    def ground_y(self, station_m: float) -> int:
        """Return the height of the ground at a station, as a pixel row."""
        distance_m = self._distance(station_m)
        if self.x(station_m) is None:
            distance_m = 0.0 if self.near(station_m) == RIBBON[0] else self._span_m
        before = self._bank[0]
        for after in self._bank:
            if after[0] >= distance_m:
                break
            before = after
        run_m = after[0] - before[0]
        share = (distance_m - before[0]) / run_m if run_m > 0 else 0.0
        return self._bank_y(before[1] + (after[1] - before[1]) * min(max(share, 0.0), 1.0))

    def _distance(self, station_m: float) -> float:
        return (station_m - self._first_m) % self._length_m

    def _bank_y(self, bank_deg: float) -> int:
        height = max(bank_deg, 0.0) / self._steepest * BANK_SHARE * RIBBON[3]
        return _bottom(RIBBON) - 6 - round(height)


def _ribbon(ribbon: Ribbon | None) -> Iterator[Shape]:
    left, bottom, right = RIBBON[0], _bottom(RIBBON), _right(RIBBON)
    if ribbon is None or not ribbon.corner.profile:
        yield Line(((left, bottom), (right, bottom)), DIM, 2)
        yield Text(left, bottom + 4, "the corners are not known yet", PALE, SMALL_SIZE)
        return
    plot = _Plot(ribbon)
    ground = plot.ground()
    yield Polygon(((left, bottom), *ground, (right, bottom)), GROUND)
    yield from _window(ribbon, plot)
    yield Line(tuple(ground), SKY_BLUE, 3)
    yield from _demand(ribbon, plot)
    yield from _mark(ribbon, plot)
    yield from _pins(ribbon, plot)
    yield from _scale_bar(plot)
    steepest = max(ribbon.corner.profile, key=lambda point: point[1])
    yield Text(right, bottom + 4, f"{steepest[1]:.0f}° bank", PALE, SMALL_SIZE, "right")


def _window(ribbon: Ribbon, plot: _Plot) -> Iterator[Shape]:
    first, last = (plot.near(station_m) for station_m in ribbon.corner.window_m)
    top, bottom = RIBBON[1] + 22, _bottom(RIBBON)
    if last <= first:
        return
    for start in range(first - (bottom - top), last, HATCH_PX):
        low, high = max(start, first), min(start + bottom - top, last)
        if high > low:
            yield Line(((low, bottom - low + start), (high, bottom - high + start)), HATCH)
    for x in (first, last):
        yield Line(((x, top), (x, bottom)), HATCH)


def _mark(ribbon: Ribbon, plot: _Plot) -> Iterator[Shape]:
    x = plot.x(ribbon.corner.target_m)
    if x is None:
        return
    top, bottom = RIBBON[1], _bottom(RIBBON)
    yield Line(((x, top), (x, bottom)), PALE, 2)
    yield Polygon(((x, top), (x - 11, top + 6), (x, top + 12)), PALE)
    yield Text(x, bottom + 4, "mark", PALE, SMALL_SIZE, "center")


def _pins(ribbon: Ribbon, plot: _Plot) -> Iterator[Shape]:
    aged = list(zip(ribbon.passes, PINS, strict=False))
    for done, (height, width, fade) in reversed(aged):
        if done.turn_in_m is None or plot.beyond_m(done.turn_in_m) > BEYOND_M:
            continue
        x = plot.near(done.turn_in_m)
        color = mix(ORANGE, PANEL, fade)
        foot = plot.ground_y(done.turn_in_m)
        head = foot - height
        yield Line(((x, foot), (x, head)), color, width)
        if plot.x(done.turn_in_m) is None:
            outward = -8 if x == RIBBON[0] else 8
            yield Polygon(((x, head - 5), (x + outward, head), (x, head + 5)), color)
        elif fade == 0.0:
            yield Polygon(((x, head - 6), (x + 6, head), (x, head + 6), (x - 6, head)), color)


def _demand(ribbon: Ribbon, plot: _Plot) -> Iterator[Shape]:
    points: list[Point] = []
    for station_m, demand in ribbon.demand:
        x = plot.x(station_m)
        if x is not None and (not points or x > points[-1][0]):
            share = min(max(demand / DEMAND_TOP, 0.0), 1.0)
            points.append((x, _bottom(RIBBON) - round(share * RIBBON[3])))
    if len(points) > 1:
        yield Line(tuple(points), PALE, 2)
        yield Text(RIBBON[0], _bottom(RIBBON) + 4, "line: demand", PALE, SMALL_SIZE)


def _scale_bar(plot: _Plot) -> Iterator[Shape]:
    right, y = _right(RIBBON) - 92, _bottom(RIBBON) + 12
    width = plot.pixels(SCALE_BAR_M)
    if width <= RIBBON[2] // 3:
        yield Line(((right - width, y), (right, y)), SKY_BLUE, 3)
        yield Text(right - width - 6, y - 8, f"{SCALE_BAR_M} m", PALE, SMALL_SIZE, "right")


def _columns(scene: Scene) -> Iterator[Shape]:
    left, _, width, height = COLUMNS
    bottom = _bottom(COLUMNS)
    yield Text(left, 10, "Grip used", PALE, TEXT_SIZE)
    for number, (name, value) in enumerate((("front", scene.front), ("rear", scene.rear))):
        x = left + number * 52
        yield Text(x + 20, bottom + 4, name, PALE, SMALL_SIZE, "center")
        yield Line(((x, bottom), (x + 40, bottom)), DIM, 2)
        if value is None:
            yield Text(x + 20, bottom - 20, "–", PALE, TEXT_SIZE, "center")
            continue
        tall = round(min(value, COLUMN_TOP) / COLUMN_TOP * height)
        yield Rect(x, bottom - tall, 40, tall, SKY_BLUE)
    limit = bottom - round(height / COLUMN_TOP)
    yield Line(((left - 6, limit), (left + width + 6, limit)), PALE, 2)
    word, color = ("at the limit", ORANGE) if scene.saturated else ("limit", PALE)
    yield Text(left + width + 6, limit - 16, word, color, SMALL_SIZE, "right")


def _ledger(scene: Scene) -> Iterator[Shape]:
    left, _, _, height = LEDGER
    bottom = _bottom(LEDGER)
    title = "Tire energy" if scene.lap is None else f"Tires, lap {scene.lap}"
    yield Text(left, 10, title, PALE, TEXT_SIZE)
    yield Line(((left - 2, bottom), (_right(LEDGER), bottom)), DIM, 2)
    full = _ledger_scale(scene)
    bars = zip(WHEELS, scene.energy_j, scene.last_lap_j, strict=True)
    for number, (name, energy_j, last_j) in enumerate(bars):
        x = left + number * 31
        yield Text(x + 13, bottom + 4, name, PALE, SMALL_SIZE, "center")
        if energy_j is not None and full > 0:
            tall = round(max(energy_j, 0.0) / full * height)
            yield Rect(x, bottom - tall, 26, tall, SKY_BLUE)
        if last_j is not None and full > 0:
            y = bottom - round(max(last_j, 0.0) / full * height)
            yield Line(((x - 2, y), (x + 28, y)), PALE, 2)


def _ledger_scale(scene: Scene) -> float:
    """Return the energy of a full bar: some above the last lap's largest, else a round number."""
    last = max((value for value in scene.last_lap_j if value is not None), default=0.0)
    now = max((value for value in scene.energy_j if value is not None), default=0.0)
    steps = 2.0 ** math.ceil(math.log2(now)) if now > 0 else 0.0
    return max(last * 1.25, now) if last > 0 else steps


def _shortened(name: str, limit: int = 15) -> str:
    return name if len(name) <= limit else name[: limit - 1].rstrip() + "…"


def _right(box: tuple[int, int, int, int]) -> int:
    return box[0] + box[2]


def _bottom(box: tuple[int, int, int, int]) -> int:
    return box[1] + box[3]


def _scaled(shape: Shape, scale: float) -> Shape:
    match shape:
        case Rect(left, top, width, height, color):
            right, bottom = round((left + width) * scale), round((top + height) * scale)
            left, top = round(left * scale), round(top * scale)
            return Rect(left, top, right - left, bottom - top, color)
        case Polygon(points, color):
            return Polygon(_scaled_points(points, scale), color)
        case Line(points, color, width):
            return Line(_scaled_points(points, scale), color, max(round(width * scale), 1))
        case Text(x, top, text, color, text_size, align):
            x, top = round(x * scale), round(top * scale)
            return Text(x, top, text, color, round(text_size * scale), align)


def _scaled_points(points: tuple[Point, ...], scale: float) -> tuple[Point, ...]:
    return tuple((round(x * scale), round(y * scale)) for x, y in points)
