"""Corners: follows the car from gate to gate and turns what it sees into events.

Each corner has four gates along the lap; what lies between them is the state:

    zone ─► entry ─► apex ─► exit ─► (straight) ─► zone of the next corner …

`APPROACH` looks for a turn-in, `ENTRY` does too and keeps the entry's account, `CORNER` keeps
the corner's account, `STRAIGHT` calibrates. Gates may coincide; they are passed in order, with
time and energy interpolated between frames. A car that goes backward or joins in the middle
is picked up at the next gate.
"""

from __future__ import annotations

import math
from collections import deque
from collections.abc import Iterator
from dataclasses import dataclass, field, replace
from enum import IntEnum
from itertools import pairwise

import numpy as np

from canticle_daemon.frame import FloatArray, Frame, FrameBlock, IntArray, Wheels
from canticle_daemon.messages import Context, Corner, Entry, Event, Phase, TurnIn, Verdict
from canticle_daemon.physics.car import CarFile
from canticle_daemon.physics.road import GRAVITY_MPS2
from canticle_daemon.stream.bank import Bank
from canticle_daemon.stream.demand import Demand
from canticle_daemon.stream.knots import LONG_REACH_S, Knot, live_knot, refined_knot
from canticle_daemon.stream.locate import Located
from canticle_daemon.stream.spend import Spend
from canticle_daemon.stream.steering import Steering, SteeringStage, corner_curvature
from canticle_daemon.stream.turn_in import (
    LEVEL_S,
    SHORT_S,
    WINDOW_S,
    Calibration,
    Ramps,
    RampStage,
)
from canticle_daemon.track.profile import CornerPlan, Track

MEMORY_S = 2.0
STRAIGHT_S = 1.0
"""So much must be seen before a turn-in counts (public contract)."""
LONGEST_PASS_S = 120.0
"""A car that stays in one corner for longer is parked."""
SETTLE_S = 1.0
"""After a corner's exit the steering still unwinds for about so long."""
SLOPE_SHARE = 0.85
"""The detector's slope over the driver's median: a slower hand is then still seen in time."""
SLOW_SHARE = 0.5
LEAST_LIVE_STD_M = 0.3
RAMP_TIME_S = 1.2
"""A driver's steering ramp before one was learned (common practice, no source)."""
BACK_M = 50.0
"""A car this little behind a gate it has passed stays past it: places tremble, cars roll back."""
TURNED_SHARE = 0.3
"""Steering that rises by this share of the usual ramp is no straight."""
RAMP_HEIGHT_SHARE = 0.5
"""A level this share of the usual ramp above the straight's is a turn-in, however slow."""


class Part(IntEnum):
    """Where the car is, as seen from one corner."""

    APPROACH = 0
    ENTRY = 1
    CORNER = 2
    STRAIGHT = 3


@dataclass(frozen=True, slots=True)
class Marks:
    """The coach's tolerance and window, used where the track file has no window of its own."""

    tolerance_m: float = 5.0
    window_m: float = 30.0

    def verdict(
        self, margin_m: float, station_m: float, corner: CornerPlan, track: Track
    ) -> Verdict:
        """Judge a turn-in: positive margins are early."""
        if corner.window_m is not None:
            if track.difference_m(station_m, corner.window_m[1]) > 0.0:
                return "late"
            return "early" if track.difference_m(station_m, corner.window_m[0]) < 0.0 else "on"
        if margin_m < -self.tolerance_m:
            return "late"
        return "early" if margin_m > self.window_m else "on"


@dataclass(frozen=True, slots=True)
class Habits:
    """What is learned of the driver in one corner."""

    heights: deque[float] = field(default_factory=lambda: deque(maxlen=12))
    slopes: deque[float] = field(default_factory=lambda: deque(maxlen=12))
    speeds: deque[float] = field(default_factory=lambda: deque(maxlen=12))
    misses_m: deque[float] = field(default_factory=lambda: deque(maxlen=12))
    rests: deque[float] = field(default_factory=lambda: deque(maxlen=3))


@dataclass(frozen=True, slots=True)
class Snapshot:
    """Time and account at a gate."""

    time_s: float
    energy_j: FloatArray
    speed_mps: float
    lateral_m: float


@dataclass(slots=True)
class Pass:
    """One pass through a corner: from the zone's start to the exit."""

    corner: int
    since_s: float
    entry: Snapshot | None = None
    alarm: TurnIn | None = None
    alarm_score: float = math.nan
    alarm_way_m: float = math.nan
    joined: bool = False
    blind: bool = False
    """Whether it began before a second of straight was seen."""


# Rows of the trace that is kept of a pass; the way is from the transition's start.
_TIME, _WAY, _SIGNAL, _SPEED, _DEMAND, _ASKED, _ROLL, _THROTTLE, _BRAKE = range(9)


@dataclass(frozen=True, slots=True)
class _Onset:
    """What an entry says of its turn-in; all None where there was none."""

    verdict: Verdict = "not judged"
    station_m: float | None = None
    std_m: float | None = None
    transition_margin_m: float | None = None
    phase: Phase | None = None
    margin_m: float | None = None
    margin_s: float | None = None
    bank_deg: float | None = None
    demand: float | None = None


class CornerStage:
    """Finds turn-ins and closes entries and corners.

    Parameters
    ----------
    track
        The track, with at least one corner.
    car
        The car file, for the first guess of steering ramps.
    marks
        The coach's tolerance and window.
    """

    def __init__(self, track: Track, car: CarFile, marks: Marks) -> None:
        self._track, self._marks = track, marks
        self._corners = track.corners
        self._sides = np.array([corner.side for corner in track.corners])
        gates = [
            (corner.zone_start_m, corner.entry_start_m, corner.apex_m, corner.exit_m)
            for corner in track.corners
        ]
        self._origin_m = gates[0][0]
        self._gates = (np.array(gates).reshape(-1) - self._origin_m) % track.length_m
        self._steering = SteeringStage(track, car)
        self._ramps = RampStage()
        self._calibration = Calibration()
        self._habits = [Habits() for _ in track.corners]
        gain = car.steering_ratio * car.wheelbase_m
        self._guess = [1.3 * gain * corner_curvature(track, corner) for corner in track.corners]
        self._neutral_mps = [_neutral_speed_mps(track, corner) for corner in track.corners]
        self._runs = 1
        self.reset()
        self._aim()

    def reset(self) -> None:
        """Drop the pass under way; what was learned of the driver stays."""
        self._steering.reset()
        self._ramps.reset()
        self._part = -1
        self._pass: Pass | None = None
        self._chunks: list[FloatArray] = []
        self._last: tuple[float, float, FloatArray, float, float] | None = None
        self._exit_s = -math.inf
        self._seen_since = math.nan
        self._windows: list[tuple[float, float, float, int]] = []
        self._window = (-1, -math.inf)

    def process(
        self,
        block: FrameBlock,
        located: Located,
        bank: Bank,
        demand: Demand,
        spend: Spend,
        dt_s: FloatArray,
    ) -> list[Event]:
        """Take in a block and return the events it completes, in order."""  # fmt: skip
        station = located.station_m
        if math.isnan(self._seen_since):
            self._seen_since = float(block.time_s[0])
        relative = (station - self._origin_m) % self._track.length_m
        part = self._settled(np.searchsorted(self._gates, relative, side="right") - 1, relative)
        ahead = np.where(part % 4 == Part.STRAIGHT, part // 4 + 1, part // 4) % len(self._corners)
        steering = self._steering.process(block, station)
        side = self._sides[ahead]
        view = _View(block, located, demand, spend, steering, part, ahead, side, relative)
        events: list[Event] = []
        begin = 0
        # The detector's settings change only where a gate is passed, so cut there.
        for stop in [*_changes(part, self._part), len(block)]:
            if stop > begin:
                self._stretch(view, bank, dt_s, self._rests, slice(begin, stop), events)
                begin = stop
            if stop < len(block):
                events.extend(self._pass_gates(view, stop))
        return events

    def _settled(self, part: IntArray, relative: FloatArray) -> IntArray:
        """Leave the car in the part it has reached while it is but a little behind its gate."""
        now, length = self._part, self._track.length_m
        if (part == now).all():
            return part
        settled = part.copy()
        for frame, reached in enumerate(part.tolist()):
            if reached != now and now >= 0:
                behind = (float(self._gates[now]) - float(relative[frame])) % length
                if behind < BACK_M:
                    settled[frame] = now
                    continue
            now = reached
        return settled

    # --- between gates -------------------------------------------------------------------

    def _stretch(
        self,
        view: _View,
        bank: Bank,
        dt_s: FloatArray,
        rest: FloatArray,
        span: slice,
        events: list[Event],
    ) -> None:
        """Follow frames that lie between the same two gates."""  # fmt: skip
        frames = view.block
        beyond = view.steering.beyond_rad[span]
        ramps = self._ramps.process(
            frames.time_s[span], dt_s[span], beyond, view.side[span],
            rest[view.ahead[span]], self._slope,
        )  # fmt: skip
        self._record(view, bank, span)
        part = Part(int(view.part[span.start]) % 4)
        if part in (Part.APPROACH, Part.ENTRY):
            found = self._look(view, ramps, span)
            if found is not None:
                events.append(found)
        self._calibrate(view, ramps, span, part)
        self._steering.learn(frames.steer_rad[span])
        last = span.stop - 1
        self._last = (
            float(view.relative[last]), float(frames.time_s[last]),
            view.spend.energy_j[:, last].copy(), float(frames.speed_mps[last]),
            float(view.located.lateral_m[last]),
        )  # fmt: skip
        self._part = int(view.part[last])

    def _record(self, view: _View, bank: Bank, span: slice) -> None:
        block = view.block
        self._chunks.append(
            np.stack([
                block.time_s[span], view.located.station_m[span], view.steering.beyond_rad[span],
                block.speed_mps[span], view.demand.demand[span], view.demand.utilization[span],
                bank.roll_rad[span], block.throttle[span], block.brake[span],
            ])
        )  # fmt: skip
        if (
            self._pass is not None
            and block.time_s[span.start] > self._pass.since_s + LONGEST_PASS_S
        ):
            self._pass = None
        if self._pass is None:
            self._forget_old()

    def _forget_old(self) -> None:
        newest = self._chunks[-1][_TIME, -1]
        while len(self._chunks) > 1 and self._chunks[1][_TIME, 0] < newest - MEMORY_S:
            del self._chunks[0]

    def _look(self, view: _View, ramps: Ramps, span: slice) -> TurnIn | None:
        """Find the first frame at which a turn-in is certain enough."""
        here = self._pass
        if here is None or here.blind or here.alarm is not None:
            return None
        side, rest = self._corners[here.corner].side, self._rest(here.corner)
        signal = side * view.steering.beyond_rad[span]
        base = rest if math.isfinite(rest) else 0.0
        above = signal + side * view.steering.offset_rad[span] - base
        clear = above > np.maximum(view.steering.dogleg_rad[span], 0.02 * self._height(here.corner))
        clear &= view.block.speed_mps[span] > SLOW_SHARE * self._usual_mps(here.corner)
        risen = ramps.now_rad - ramps.level_rad > RAMP_HEIGHT_SHARE * self._height(here.corner)
        # A rise that began before the zone is the driver's way out of the last corner.
        ramped = (ramps.score > self._threshold) & (ramps.onset_s >= self._watched_since(here))
        risen &= view.block.time_s[span] >= self._seen_since + 2.0 * STRAIGHT_S
        alarms = np.flatnonzero((ramped | risen) & clear)
        if alarms.size == 0:
            return None
        index = int(alarms[0])
        found = self._turn_in(view, span.start + index, len(signal) - 1 - index)
        onset_s = found.time_s - found.detection_delay_s
        if onset_s < self._seen_since + STRAIGHT_S or self._begun(here):
            here.blind = True
            return None
        here.alarm, here.alarm_score = found, float(ramps.score[index])
        return found

    def _begun(self, here: Pass) -> bool:
        """Tell whether the corner may have begun before a second of straight was seen.

        So it is where the car was found beyond the straight, or its steering already rose.
        """
        if not here.joined:
            return False
        corner, watched_s = self._corners[here.corner], self._watched_since(here)
        trace = self._traced(corner)
        time, signal = trace[_TIME], corner.side * trace[_SIGNAL]
        first = signal[(time >= watched_s - STRAIGHT_S) & (time < watched_s - STRAIGHT_S + SHORT_S)]
        last = signal[(time >= watched_s - SHORT_S) & (time < watched_s)]
        if first.size == 0 or last.size == 0 or np.interp(watched_s, time, trace[_WAY]) > 0.0:
            return True
        return float(last.mean() - first.mean()) > TURNED_SHARE * self._height(here.corner)

    def _watched_since(self, here: Pass) -> float:
        """Return from when an onset counts: in the zone, after a second of straight."""
        return max(here.since_s, self._seen_since + STRAIGHT_S)

    def _turn_in(self, view: _View, frame: int, unseen: int) -> TurnIn:
        here = self._pass
        assert here is not None
        corner, habits = self._corners[here.corner], self._habits[here.corner]
        trace = self._traced(corner)
        trace = trace[:, : trace.shape[1] - unseen]
        now = float(trace[_TIME, -1])
        window = trace[:, trace[_TIME] >= now - LONG_REACH_S - LEVEL_S]
        slope = _median(habits.slopes, self._slope / SLOPE_SHARE)
        spread = (1.0, 0.5, 0.5, 0.25)[min(len(habits.slopes), 3)]
        knot = live_knot(window[_TIME], corner.side * window[_SIGNAL], slope, spread * slope)
        speed = float(view.block.speed_mps[frame])
        here.alarm_way_m = float(np.interp(knot.x, window[_TIME], window[_WAY]))
        bias = _median(habits.misses_m, 0.0) if len(habits.misses_m) >= 3 else 0.0
        way = here.alarm_way_m - bias
        onset_s = knot.x - bias / max(speed, 1.0)
        std_s = math.hypot(knot.std, self._coarse_rad / slope)
        scatter = _rms(deque(miss - bias for miss in habits.misses_m))
        std = max(std_s * speed, scatter, LEAST_LIVE_STD_M)
        station = (corner.transition_start_m + way) % self._track.length_m
        margin = self._track.difference_m(corner.target_m, station)
        return TurnIn(
            time_s=now,
            lap=self._lap_of(corner, int(view.located.lap[frame]), view.located.station_m[frame]),
            run=self._runs,
            corner=corner.name,
            turn_in_station_m=station,
            turn_in_std_m=std,
            transition_margin_m=-way,
            phase=self._track.phase(corner, station),
            target_station_m=corner.target_m,
            margin_m=margin,
            margin_s=margin / max(speed, 1.0),
            verdict=self._marks.verdict(margin, station, corner, self._track),
            target_source=corner.target_source,
            context=_flagged(view.block.frames[frame]) or "free",
            detection_delay_s=now - onset_s,
        )

    def _calibrate(self, view: _View, ramps: Ramps, span: slice, part: Part) -> None:
        """Collect the largest score of each calm window of half a second."""
        window = np.floor(view.block.time_s[span] / WINDOW_S).astype(np.int64)
        score = np.where(view.steering.dogleg_rad[span] > 0.0, np.inf, ramps.score)
        score = np.where(np.isnan(score), np.inf, score)
        if part is Part.CORNER:
            score = np.full_like(score, np.inf)
        starts = np.flatnonzero(np.diff(window, prepend=self._window[0]))
        edges = [0, *starts.tolist(), window.size] if 0 not in starts else [*starts, window.size]
        level = ramps.now_rad
        for begin, stop in pairwise(edges):
            top = float(np.maximum.reduce(score[begin:stop]))
            if int(window[begin]) == self._window[0]:
                top = max(top, self._window[1])
            else:
                self._close_window(float(view.block.time_s[span][begin]))
            self._window = (int(window[begin]), top)
            self._window_rest = (float(level[stop - 1]), int(view.ahead[span.start]))

    def _close_window(self, end_s: float) -> None:
        top = self._window[1]
        if math.isfinite(top) and end_s - WINDOW_S > self._exit_s + SETTLE_S:
            self._windows.append((end_s, top, *self._window_rest))

    def _settle(self, until_s: float) -> None:
        """Commit the calm windows that ended before a turn-in; drop the others."""
        for end_s, top, level, corner in self._windows:
            if end_s < until_s:
                self._calibration.add(top)
                if end_s > until_s - 3.0 * WINDOW_S and math.isfinite(level):
                    self._habits[corner].rests.append(level)
        self._windows.clear()

    # --- gates ---------------------------------------------------------------------------

    def _pass_gates(self, view: _View, frame: int) -> Iterator[Event]:
        """Pass every gate between the last frame and this one."""
        count = self._gates.size
        now = int(view.part[frame])
        steps = (now - self._part) % count
        if self._part < 0 or steps > count // 2 + 1 or self._last is None:
            self._join(view, frame)
            return
        for step in range(1, steps + 1):
            gate = (self._part + step) % count
            snapshot = self._at_gate(view, frame, gate)
            yield from self._on_gate(gate // 4, Part(gate % 4), snapshot, view, frame)

    def _join(self, view: _View, frame: int) -> None:
        corner, part = divmod(int(view.part[frame]), 4)
        self._pass = None
        if part in (Part.APPROACH, Part.ENTRY):
            here = self._at_frame(view, frame)
            self._open(corner, here, joined=True)
            if part == Part.ENTRY:
                self._enter(here)

    def _at_frame(self, view: _View, frame: int) -> Snapshot:
        block = view.block
        return Snapshot(
            float(block.time_s[frame]), view.spend.energy_j[:, frame].copy(),
            float(block.speed_mps[frame]), float(view.located.lateral_m[frame]),
        )  # fmt: skip

    def _at_gate(self, view: _View, frame: int, gate: int) -> Snapshot:
        """Interpolate between the last frame and this one to a gate."""
        assert self._last is not None
        length = self._track.length_m
        before, time, energy, speed, lateral = self._last
        here = self._at_frame(view, frame)
        step = (float(view.relative[frame]) - before) % length
        share = ((float(self._gates[gate]) - before) % length) / step if step > 0.0 else 1.0
        share = min(max(share, 0.0), 1.0)
        return Snapshot(
            time + share * (here.time_s - time),
            energy + share * (here.energy_j - energy),
            speed + share * (here.speed_mps - speed),
            lateral + share * (here.lateral_m - lateral),
        )

    def _on_gate(
        self, corner: int, part: Part, snapshot: Snapshot, view: _View, frame: int
    ) -> Iterator[Event]:
        if part is Part.APPROACH:
            self._open(corner, snapshot, joined=False)
        elif part is Part.ENTRY:
            self._enter(snapshot)
        elif part is Part.CORNER:
            yield from self._close_entry(snapshot, view, frame)
        else:
            yield from self._close_corner(snapshot, view, frame)

    def _open(self, corner: int, start: Snapshot, *, joined: bool) -> None:
        self._aim()
        self._pass = Pass(corner, start.time_s, joined=joined)
        self._keep_since(start.time_s - MEMORY_S)

    def _enter(self, snapshot: Snapshot) -> None:
        if self._pass is not None:
            self._pass.entry = snapshot

    def _close_entry(self, apex: Snapshot, view: _View, frame: int) -> Iterator[Event]:
        here = self._pass
        if here is None or here.entry is None:
            self._pass = None
            return
        corner = self._corners[here.corner]
        trace = self._traced(corner)
        inside = trace[:, trace[_TIME] >= here.entry.time_s]
        context = self._context(view, frame, here, inside)
        found = None if context == "slow" else self._refine(here, trace)
        self._learn(here, found, trace, context)
        knot = found[0] if found is not None else None
        onset = self._where(corner, knot, trace)
        yield Entry(
            time_s=float(view.block.time_s[frame]),
            lap=self._lap_of(corner, int(view.located.lap[frame]), view.located.station_m[frame]),
            run=self._runs,
            corner=corner.name,
            turn_in_station_m=onset.station_m,
            turn_in_std_m=onset.std_m,
            transition_margin_m=onset.transition_margin_m,
            phase=onset.phase,
            target_station_m=corner.target_m,
            margin_m=onset.margin_m,
            margin_s=onset.margin_s,
            verdict=onset.verdict,
            target_source=corner.target_source,
            context=context,
            bank_deg=onset.bank_deg,
            lateral_m=_finite(here.entry.lateral_m),
            entry_speed_mps=here.entry.speed_mps,
            demand_at_turn_in=onset.demand,
            peak_demand=_largest(inside[_DEMAND]),
            peak_utilization=_largest(inside[_ASKED]),
            entry_energy_j=_four(apex.energy_j - here.entry.energy_j),
            entry_time_s=apex.time_s - here.entry.time_s,
            why=self._why(here, knot, context),
        )

    def _refine(self, here: Pass, trace: FloatArray) -> tuple[Knot, float] | None:
        if self._begun(here):
            return None
        corner = self._corners[here.corner]
        rest = self._rest(here.corner)
        signal = corner.side * trace[_SIGNAL]
        if not math.isfinite(rest):
            start = trace[_TIME] <= trace[_TIME, 0] + LEVEL_S
            rest = float(np.median(signal[start]))
        alarm = here.alarm
        live_s = None if alarm is None else alarm.time_s - alarm.detection_delay_s
        found = refined_knot(
            trace[_TIME], trace[_WAY], signal, rest, self._height(here.corner), live_s
        )
        if found is None:
            return None
        knot, height = found
        if float(np.interp(knot.x, trace[_WAY], trace[_TIME])) < self._seen_since + STRAIGHT_S:
            return None
        std = math.hypot(knot.std, self._coarse_rad / knot.slope)
        return replace(knot, std=std), height

    def _where(self, corner: CornerPlan, knot: Knot | None, trace: FloatArray) -> _Onset:
        """Return the fields of an entry that hang on its turn-in."""
        if knot is None:
            return _Onset()
        station = (corner.transition_start_m + knot.x) % self._track.length_m
        margin = self._track.difference_m(corner.target_m, station)
        at_target, at_knot = np.interp([knot.x + margin, knot.x], trace[_WAY], trace[_TIME])
        roll = float(np.interp(knot.x, trace[_WAY], trace[_ROLL]))
        return _Onset(
            verdict=self._marks.verdict(margin, station, corner, self._track),
            station_m=station,
            std_m=knot.std,
            transition_margin_m=-knot.x,
            phase=self._track.phase(corner, station),
            margin_m=margin,
            margin_s=float(at_target - at_knot),
            bank_deg=_finite(math.degrees(-self._track.side * roll)),
            demand=_finite(float(np.interp(knot.x, trace[_WAY], trace[_DEMAND]))),
        )

    def _why(self, here: Pass, knot: Knot | None, context: Context) -> str:
        if context == "slow":
            return "under half the usual speed"
        if knot is None and (here.blind or here.joined):
            return "no second of straight was seen before it"
        if knot is None:
            return "no turn-in found before the apex"
        return "joined after the entry's start" if here.joined else ""

    def _close_corner(self, exit_: Snapshot, view: _View, frame: int) -> Iterator[Event]:
        here, self._pass = self._pass, None
        self._exit_s = exit_.time_s
        if here is None or here.entry is None:
            return
        corner = self._corners[here.corner]
        trace = self._traced(corner)
        self._keep_since(exit_.time_s - MEMORY_S)
        inside = trace[:, trace[_TIME] >= here.entry.time_s]
        lift, brake, throttle = (
            None if way is None else (corner.transition_start_m + way) % self._track.length_m
            for way in _pedals(inside)
        )
        yield Corner(
            time_s=float(view.block.time_s[frame]),
            lap=self._lap_of(corner, int(view.located.lap[frame]), view.located.station_m[frame]),
            run=self._runs,
            corner=corner.name,
            context=self._context(view, frame, here, inside),
            corner_energy_j=_four(exit_.energy_j - here.entry.energy_j),
            corner_time_s=exit_.time_s - here.entry.time_s,
            lift_station_m=lift,
            brake_station_m=brake,
            min_speed_mps=float(inside[_SPEED].min()),
            throttle_station_m=throttle,
            exit_speed_mps=exit_.speed_mps,
        )

    # --- what is known of the driver -----------------------------------------------------

    def _aim(self) -> None:
        """Set slope and threshold for the next pass from what has been learned."""
        known = [_median(habit.slopes, math.nan) for habit in self._habits]
        guesses = [guess / RAMP_TIME_S for guess in self._guess]
        slopes = [k if math.isfinite(k) else g for k, g in zip(known, guesses, strict=True)]
        self._slope = SLOPE_SHARE * min(slopes)
        self._rests = np.array([self._rest(corner) for corner in range(len(self._corners))])
        step = self._quantum()
        self._threshold = self._calibration.threshold(self._slope, step)
        self._coarse_rad = step / math.sqrt(12.0)

    def _quantum(self) -> float:
        step = self._steering.quantum_rad
        return step if math.isfinite(step) else 0.0

    def _height(self, corner: int) -> float:
        return _median(self._habits[corner].heights, self._guess[corner])

    def _rest(self, corner: int) -> float:
        return _median(self._habits[corner].rests, math.nan)

    def _learn(
        self, here: Pass, found: tuple[Knot, float] | None, trace: FloatArray, context: Context
    ) -> None:
        """Let a finished entry teach the detector."""
        habits = self._habits[here.corner]
        if context != "slow" and here.entry is not None:
            habits.speeds.append(float(np.median(trace[_SPEED])))
        if found is None:
            if here.alarm is not None:
                self._calibration.add(here.alarm_score)
            self._windows.clear()
            return
        knot, height = found
        onset_s = float(np.interp(knot.x, trace[_WAY], trace[_TIME]))
        speed = float(np.interp(knot.x, trace[_WAY], trace[_SPEED]))
        habits.heights.append(height)
        habits.slopes.append(knot.slope * speed)
        if here.alarm is not None:
            miss = here.alarm_way_m - knot.x
            if here.alarm.time_s < onset_s - 0.3:
                self._calibration.add(here.alarm_score)
            else:
                habits.misses_m.append(miss)
        self._settle(onset_s - 0.1)

    def _context(self, view: _View, frame: int, here: Pass, inside: FloatArray) -> Context:
        usual = self._usual_mps(here.corner)
        if inside.size == 0 or float(np.median(inside[_SPEED])) < SLOW_SHARE * usual:
            return "slow"
        return _flagged(view.block.frames[frame]) or "free"

    def _usual_mps(self, corner: int) -> float:
        return _median(self._habits[corner].speeds, self._neutral_mps[corner])

    def _lap_of(self, corner: CornerPlan, lap: int, station_m: float) -> int:
        """Return the lap in which the corner's transition starts."""
        way = self._track.difference_m(corner.transition_start_m, float(station_m))
        return lap + math.floor((float(station_m) + way) / self._track.length_m)

    def _keep_since(self, time_s: float) -> None:
        """Cut the trace at a time, so that it never depends on how the stream was cut."""
        kept = [chunk[:, chunk[_TIME] >= time_s] for chunk in self._chunks]
        self._chunks = [chunk for chunk in kept if chunk.size]

    def _traced(self, corner: CornerPlan) -> FloatArray:
        """Return the trace with stations turned into the way from the transition's start."""
        trace = np.concatenate(self._chunks, axis=1)
        half = self._track.length_m / 2
        away = trace[_WAY] - corner.transition_start_m
        trace[_WAY] = (away + half) % self._track.length_m - half
        return trace


@dataclass(frozen=True, slots=True)
class _View:
    """One block with all that the earlier stages made of it."""

    block: FrameBlock
    located: Located
    demand: Demand
    spend: Spend
    steering: Steering
    part: IntArray
    ahead: IntArray
    side: FloatArray
    relative: FloatArray


def _flagged(frame: Frame) -> Context | None:
    """Return the context that the stream itself tells of."""
    if frame.on_pit_road:
        return "pit"
    return "caution" if frame.caution else None


def _changes(part: IntArray, before: int) -> list[int]:
    return np.flatnonzero(np.diff(part, prepend=before)).tolist()


def _neutral_speed_mps(track: Track, corner: CornerPlan) -> float:
    """Return the speed at which the corner's bank alone would carry a car, at least 10 m/s."""
    bank = float(track.bank_rad(np.array([corner.apex_m]))[0])
    radius = 1.0 / corner_curvature(track, corner)
    return max(math.sqrt(GRAVITY_MPS2 * radius * max(math.tan(bank), 0.0)), 10.0)


def _pedals(inside: FloatArray) -> Iterator[float | None]:
    """Yield the way at the lift, at the brake, and at the return to throttle."""
    way, throttle, brake = inside[_WAY], inside[_THROTTLE], inside[_BRAKE]
    lifted = (throttle[:-1] >= 0.9) & (throttle[1:] < 0.9)
    yield _first(way[1:], lifted)
    yield _first(way, brake > 0.05)
    known = np.isfinite(throttle).any()
    closed = int(np.nanargmin(throttle)) if known else 0
    back = (throttle > 0.5) & (np.arange(throttle.size) > closed)
    was_off = known and throttle[closed] < 0.9  # be it since before the entry's start
    yield _first(way, back if was_off else np.zeros_like(back))


def _first(way: FloatArray, where: np.ndarray[tuple[int, ...], np.dtype[np.bool_]]) -> float | None:
    index = np.flatnonzero(where)
    return float(way[index[0]]) if index.size else None


def _median(values: deque[float], default: float) -> float:
    return float(np.median(values)) if values else default


def _rms(values: deque[float]) -> float:
    return math.sqrt(sum(value * value for value in values) / len(values)) if values else 0.0


def _largest(values: FloatArray) -> float:
    known = values[np.isfinite(values)]
    return float(known.max()) if known.size else math.nan


def _finite(value: float) -> float | None:
    return value if math.isfinite(value) else None


def _four(values: FloatArray) -> Wheels:
    first, second, third, fourth = values.tolist()
    return first, second, third, fourth
