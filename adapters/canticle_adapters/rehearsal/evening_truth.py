"""The truth of an evening: the context of every entry, corner and lap, and the runs.

Records, each a line of the truth file (laps count from 1, stations and laterals as elsewhere)::

    {"kind": "entry",  "lap", "corner", "context", "also", "lane", "lateral_m", "apex_lateral_m"}
    {"kind": "corner", "lap", "corner", "context", "also", "lane", "lateral_m"}
    {"kind": "lap",    "lap", "context", "also", "complete"}
    {"kind": "run",    "run", "first_lap", "last_lap", "changed": [four], "tire_set", "fuel_kg"}
    {"kind": "happening", "what": "caution" | "green" | "bump" | "tow", "lap", "station_m", ...}

An entry reaches from 150 m before the transition's start to the apex, a corner on to the exit.
The context of a span is the first of these that held at any instant of it; `also` names the
others that did:

1. `pit`: on pit road. Of a lap only where it ends there; one that begins there is an out-lap.
2. `caution`: from the flag to the green.
3. `out_lap`: the first lap of a run, which begins in the box, at the lap's start.
4. `restart`: the first lap after the lap of the green.
5. `incident`: from a bump on, to the end of the second lap after its own.
6. `traffic`: a car alongside, or a gap under 0.8 s, before the transition's end.
7. `slow`: at the transition's start under half the usual speed of that corner; of a corner also
   where its exit is left at under four fifths of it (the driver gave up on the way).
8. `free`: none of these.

An entry's `lateral_m` is that at its start, a corner's that at the apex. The lane is the one
meant at racing pace, elsewhere the one whose usual place at the apex is nearest. A run is from
leaving the box (or a tow to it) to the next stop; `changed` says which tires were fresh at its
start (front left, front right, rear left, rear right), the tire set and the fuel too.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

from canticle_adapters.rehearsal.car import Car
from canticle_adapters.rehearsal.driver import Style
from canticle_adapters.rehearsal.evening import (
    NO_GAP_S,
    NONE,
    TRAFFIC_GAP_S,
    Four,
    LaneName,
    Script,
    Stop,
    lane_at,
)
from canticle_adapters.rehearsal.oval import CornerMarks, Oval

ENTRY_LEAD_M = 150.0
CONTEXTS = ("pit", "caution", "out_lap", "restart", "incident", "traffic", "slow", "free")

Record = dict[str, Any]


@dataclass(slots=True)
class Now:
    """What holds at an instant; inside and outside are as seen from the corners."""

    time_s: float = 0.0
    on_pit_road: bool = True
    caution: bool = False
    in_car: bool = True
    car_inside: bool = False
    car_outside: bool = False
    gap_s: float = NO_GAP_S
    zero_rad: float = 0.0
    tire_set: str = "A1"
    lane: LaneName | None = None
    restart_lap: int = 0
    incident_laps: tuple[int, int] = (0, 0)


@dataclass(slots=True)
class Span:
    """An entry, a corner or a lap under way."""

    lap: int
    seen: set[str] = field(default_factory=set)
    lateral_m: float = 0.0
    lane: LaneName = "low"
    entered: bool = False
    apex_lateral_m: float = 0.0

    def context(self) -> Record:
        """Return the context, and the others that held too."""
        held = [name for name in CONTEXTS if name in self.seen] or ["free"]
        return {"context": held[0], "also": held[1:]}


class Book:
    """Watches the drive and writes its truth down.

    Attributes
    ----------
    records
        All that is known so far, in the order of its end.
    """

    def __init__(self, oval: Oval, script: Script, style: Style) -> None:
        self.records: list[Record] = []
        self._corners = oval.corners
        self._slow_mps = [0.5 * speed for speed in style.speed_mps]
        self._length_m = oval.length_m
        self._lap = Span(1)
        self._corner: Span | None = None
        self._run, self._first_lap = 0, 1
        self._changed: Four = NONE
        self._fitted = ("", 0.0)
        self._station_m = 0.0

    def note(self, what: str, car: Car, **more: object) -> None:
        """Write that something happened."""
        record = {"kind": "happening", "what": what, "lap": car.laps + 1}
        self.records.append(record | {"station_m": car.station_m} | more)

    def begin_run(self, stop: Stop, lap: int, time_s: float) -> None:
        """Note what a run starts with."""
        self._run += 1
        self._first_lap = lap
        self._changed, self._fitted = stop.changed, (stop.tire_set, stop.fuel_kg)

    def end_run(self, stop: Stop) -> None:
        """Write the run that ends at a stop."""
        if self._run:
            self._write_run(stop.lap)

    def finish(self, laps: int) -> None:
        """Write the last run."""
        self._write_run(laps)

    def _write_run(self, last_lap: int) -> None:
        self.records.append(
            {
                "kind": "run",
                "run": self._run,
                "first_lap": self._first_lap,
                "last_lap": last_lap,
                "changed": list(self._changed),
                "tire_set": self._fitted[0],
                "fuel_kg": self._fitted[1],
            }
        )

    def tow(self, now: Now, car: Car) -> None:
        """Write a lap that ended in a tow to the box."""
        self.note("tow", car)
        self._corner = None
        self._end_lap(now, car, complete=False)

    def sample(self, now: Now, car: Car, racing: bool) -> None:
        """Look at an instant of the drive."""
        if car.laps + 1 > self._lap.lap:
            self._end_lap(now, car, complete=True)
        held = self._held(now, self._lap.lap)
        self._lap.seen |= held
        if now.in_car:
            self._along_the_corner(now, car, held)

    def _end_lap(self, now: Now, car: Car, complete: bool) -> None:
        span = self._lap
        if not now.on_pit_road and "out_lap" in span.seen:
            span.seen.discard("pit")
        if not complete:
            span.seen.add("pit")
        record = {"kind": "lap", "lap": span.lap, **span.context(), "complete": complete}
        self.records.append(record)
        self._lap = Span(car.laps + 1)

    def _held(self, now: Now, lap: int) -> set[str]:
        """Return the contexts of the instant that need no place on the road."""
        first, last = now.incident_laps
        flags = {
            "pit": now.on_pit_road,
            "caution": now.caution,
            "out_lap": lap == self._first_lap,
            "restart": lap == now.restart_lap,
            "incident": first <= lap <= last,
        }
        return {name for name, holds in flags.items() if holds}

    def _along_the_corner(self, now: Now, car: Car, held: set[str]) -> None:
        station = car.station_m
        index = 0 if station < self._corners[0].exit_m + 1.0 else 1
        marks, span = self._corners[index], self._corner
        before, self._station_m = self._station_m, station
        start = marks.transition_start_m - ENTRY_LEAD_M
        if span is None:
            if before < start <= station < start + 20.0:
                self._corner = Span(car.laps + 1, set(held), car.lateral_m)
            return
        span.seen |= held
        self._see(span, marks, now, car)
        if before < marks.transition_start_m <= station and car.vx_mps < self._slow_mps[index]:
            span.seen.add("slow")
        if not span.entered and station >= marks.apex_m:
            self._end_entry(span, marks, now, car)
        if station >= marks.exit_m:
            if car.vx_mps < 1.6 * self._slow_mps[index]:
                span.seen.add("slow")
            self._write(span, "corner", marks, lateral_m=span.apex_lateral_m)
            self._lap.seen |= span.seen
            self._corner = None

    def _see(self, span: Span, marks: CornerMarks, now: Now, car: Car) -> None:
        near = now.car_inside or now.car_outside or now.gap_s < TRAFFIC_GAP_S
        if near and not now.caution and car.station_m < marks.transition_end_m:
            span.seen.add("traffic")

    def _end_entry(self, span: Span, marks: CornerMarks, now: Now, car: Car) -> None:
        span.entered, span.apex_lateral_m = True, car.lateral_m
        span.lane = now.lane if now.lane is not None else lane_at(car.lateral_m)
        more = {"lateral_m": span.lateral_m, "apex_lateral_m": span.apex_lateral_m}
        self._write(span, "entry", marks, **more)

    def _write(self, span: Span, kind: str, marks: CornerMarks, **more: float) -> None:
        record = {"kind": kind, "lap": span.lap, "corner": marks.name, **span.context()}
        self.records.append(record | {"lane": span.lane} | more)
