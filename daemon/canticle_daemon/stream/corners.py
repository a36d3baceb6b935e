"""Corners: follows the car from gate to gate and turns what it sees into events.

On the way to a corner (`Part.APPROACH` and `Part.ENTRY`) a turn-in is looked for, from the
entry's gate on an account is kept, at the apex the turn-in is dated anew and the entry closed,
at the exit the corner. On straights the detector is calibrated. Time and energy are
interpolated between frames. A car that goes backward or joins in the middle is picked up at the
next gate.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np

from canticle_daemon.frame import BoolArray, FloatArray, Frame, FrameBlock, IntArray, Wheels
from canticle_daemon.messages import Context, Corner, Entry, Event, Phase, TurnIn, Verdict
from canticle_daemon.physics.car import CarFile
from canticle_daemon.stream.bank import Bank
from canticle_daemon.stream.demand import Demand
from canticle_daemon.stream.driver import Driver
from canticle_daemon.stream.knots import LONG_REACH_S, Knot, live_knot, refined_knot
from canticle_daemon.stream.locate import Located
from canticle_daemon.stream.passes import Gates, Part, Pass, Snapshot
from canticle_daemon.stream.spend import Spend
from canticle_daemon.stream.steering import Steering, SteeringStage
from canticle_daemon.stream.trace import (
    ASKED,
    DEMAND,
    ROLL,
    SIGNAL,
    SPEED,
    TIME,
    WAY,
    Trace,
    largest,
    pedals,
)
from canticle_daemon.stream.turn_in import LEVEL_S, SHORT_S, Ramps, RampStage
from canticle_daemon.track.profile import CornerPlan, Track

MEMORY_S = 2.0
STRAIGHT_S = 1.0
"""So much must be seen before a turn-in counts (public contract)."""
LONGEST_PASS_S = 120.0
"""A car that stays in one corner for longer is parked."""
SLOW_SHARE = 0.5
"""A corner under this share of its usual speed is not judged (public contract)."""
LEAST_LIVE_STD_M = 0.3
TURNED_SHARE = 0.3
"""Steering that rises by this share of the usual ramp is no straight."""
RAMP_HEIGHT_SHARE = 0.5
"""A level this share of the usual ramp above the straight's is a turn-in, however slow."""


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


@dataclass(frozen=True, slots=True)
class _View:
    """One block with all that the earlier stages made of it; `ahead` is the corner to come."""

    block: FrameBlock
    located: Located
    bank: Bank
    demand: Demand
    spend: Spend
    dt_s: FloatArray
    steering: Steering
    relative_m: FloatArray
    part: IntArray
    ahead: IntArray

    def at(self, frame: int) -> Snapshot:
        """Return what counts at a frame."""
        return Snapshot(
            float(self.relative_m[frame]),
            float(self.block.time_s[frame]),
            self.spend.energy_j[:, frame].copy(),
            float(self.block.speed_mps[frame]),
            float(self.located.lateral_m[frame]),
        )

    def rows(self, span: slice) -> FloatArray:
        """Return the rows of a trace."""
        block = self.block
        return np.stack([
            block.time_s[span], self.located.station_m[span], self.steering.beyond_rad[span],
            block.speed_mps[span], self.demand.demand[span], self.demand.utilization[span],
            self.bank.roll_rad[span], block.throttle[span], block.brake[span],
        ])  # fmt: skip


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
        self._gates = Gates(track)
        self._steering = SteeringStage(track, car)
        self._ramps = RampStage()
        self._driver = Driver(track, car)
        self._trace = Trace(track.length_m)
        self._runs = 1
        self.reset()

    def reset(self) -> None:
        """Drop the pass under way; what was learned of the driver stays."""
        self._steering.reset()
        self._ramps.reset()
        self._driver.reset()
        self._trace.reset()
        self._part = -1
        self._pass: Pass | None = None
        self._last: Snapshot | None = None
        self._seen_since = math.nan

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
        if math.isnan(self._seen_since):
            self._seen_since = float(block.time_s[0])
        relative = self._gates.relative_m(located.station_m)
        part = self._gates.parts(relative, self._part)
        view = _View(
            block, located, bank, demand, spend, dt_s,
            self._steering.process(block, located.station_m),
            relative, part, self._gates.corner_ahead(part),
        )  # fmt: skip
        events: list[Event] = []
        begin = 0
        # The detector's settings change only where a gate is passed, so cut there.
        for stop in [*_changes(part, self._part), len(block)]:
            while stop > begin:
                end = self._until_parked(block.time_s[begin:stop]) + begin
                events.extend(self._stretch(view, slice(begin, end)))
                begin = end
            if stop < len(block):
                events.extend(self._pass_gates(view, stop))
        return events

    # --- between gates -------------------------------------------------------------------

    def _stretch(self, view: _View, span: slice) -> Iterator[Event]:
        """Follow frames that lie between the same two gates."""
        time, ahead = view.block.time_s[span], view.ahead[span]
        ramps = self._ramps.process(
            time, view.dt_s[span], view.steering.beyond_rad[span], self._sides[ahead],
            self._driver.rests_rad[ahead], self._driver.slope_radps,
        )  # fmt: skip
        self._trace.add(view.rows(span))
        if self._pass is None:
            self._trace.forget(MEMORY_S)
        part = Part(int(view.part[span.start]) % 4)
        if part in (Part.APPROACH, Part.ENTRY):
            found = self._look(view, ramps, span)
            if found is not None:
                yield found
        calm = (view.steering.dogleg_rad[span] <= 0.0) & (part is not Part.CORNER)
        score = np.where(calm & ~np.isnan(ramps.score), ramps.score, np.inf)
        self._driver.watch(time, score, ramps.now_rad, int(ahead[0]))
        self._steering.learn(view.block.steer_rad[span])
        last = span.stop - 1
        self._last, self._part = view.at(last), int(view.part[last])

    def _until_parked(self, time_s: FloatArray) -> int:
        """Return after how many frames the car has been in one corner for too long.

        Where it has been so already, the pass under way is dropped.
        """
        here = self._pass
        if here is not None and time_s[0] > here.since_s + LONGEST_PASS_S:
            here = self._pass = None
        if here is None:
            return time_s.size
        return int(np.searchsorted(time_s, here.since_s + LONGEST_PASS_S, side="right"))

    def _look(self, view: _View, ramps: Ramps, span: slice) -> TurnIn | None:
        """Find the first frame at which a turn-in is certain enough."""
        here = self._pass
        if here is None or here.blind or here.alarm is not None:
            return None
        alarms = np.flatnonzero(self._alarms(view, ramps, span, here))
        if alarms.size == 0:
            return None
        index = int(alarms[0])
        found = self._turn_in(view, span.start + index, ramps.score.size - 1 - index, here)
        onset_s = found.time_s - found.detection_delay_s
        if onset_s < self._seen_since + STRAIGHT_S or self._begun(here):
            here.blind = True
            return None
        here.alarm, here.alarm_score = found, float(ramps.score[index])
        return found

    def _alarms(self, view: _View, ramps: Ramps, span: slice, here: Pass) -> BoolArray:
        """Tell at which frames a ramp is under way, or a level is reached, that is a turn-in."""
        driver, side = self._driver, self._corners[here.corner].side
        height, rest = driver.height_rad(here.corner), driver.rest_rad(here.corner)
        signal = side * view.steering.beyond_rad[span]
        base = rest if math.isfinite(rest) else 0.0
        above = signal + side * view.steering.offset_rad[span] - base
        clear = above > np.maximum(view.steering.dogleg_rad[span], 0.02 * height)
        clear &= view.block.speed_mps[span] > SLOW_SHARE * driver.usual_mps(here.corner)
        risen = ramps.now_rad - ramps.level_rad > RAMP_HEIGHT_SHARE * height
        risen &= view.block.time_s[span] >= self._seen_since + 2.0 * STRAIGHT_S
        # A rise that began before the zone is the driver's way out of the last corner.
        ramped = (ramps.score > driver.threshold) & (ramps.onset_s >= self._watched_since(here))
        found: BoolArray = (ramped | risen) & clear
        return found

    def _begun(self, here: Pass) -> bool:
        """Tell whether the corner may have begun before a second of straight was seen.

        So it is where the car was found beyond the straight, or its steering already rose.
        """
        if not here.joined:
            return False
        corner, watched_s = self._corners[here.corner], self._watched_since(here)
        trace = self._trace.toward(corner)
        time, signal = trace[TIME], corner.side * trace[SIGNAL]
        first = signal[(time >= watched_s - STRAIGHT_S) & (time < watched_s - STRAIGHT_S + SHORT_S)]
        last = signal[(time >= watched_s - SHORT_S) & (time < watched_s)]
        if first.size == 0 or last.size == 0 or np.interp(watched_s, time, trace[WAY]) > 0.0:
            return True
        rise = float(last.mean() - first.mean())
        return rise > TURNED_SHARE * self._driver.height_rad(here.corner)

    def _watched_since(self, here: Pass) -> float:
        """Return from when an onset counts: in the zone, after a second of straight."""
        return max(here.since_s, self._seen_since + STRAIGHT_S)

    def _turn_in(self, view: _View, frame: int, unseen: int, here: Pass) -> TurnIn:
        """Date the onset of an alarm at a frame; `unseen` frames of the trace lie beyond it."""
        corner = self._corners[here.corner]
        trace = self._trace.toward(corner)
        trace = trace[:, : trace.shape[1] - unseen]
        now = float(trace[TIME, -1])
        window = trace[:, trace[TIME] >= now - LONG_REACH_S - LEVEL_S]
        slope, spread = self._driver.slope_prior(here.corner)
        knot = live_knot(window[TIME], corner.side * window[SIGNAL], slope, spread)
        speed = float(view.block.speed_mps[frame])
        here.alarm_way_m = float(np.interp(knot.x, window[TIME], window[WAY]))
        bias, scatter = self._driver.live_error_m(here.corner)
        way, onset_s = here.alarm_way_m - bias, knot.x - bias / max(speed, 1.0)
        std_s = math.hypot(knot.std, self._driver.coarse_rad / slope)
        std = max(std_s * speed, scatter, LEAST_LIVE_STD_M)
        station = (corner.transition_start_m + way) % self._track.length_m
        margin = self._track.difference_m(corner.target_m, station)
        return TurnIn(
            time_s=now,
            lap=self._lap_of(corner, view, frame),
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

    # --- gates ---------------------------------------------------------------------------

    def _pass_gates(self, view: _View, frame: int) -> Iterator[Event]:
        """Pass every gate between the last frame and this one."""
        here = view.at(frame)
        gates = self._gates.passed(self._part, int(view.part[frame]))
        if gates is None or self._last is None:
            self._join(*divmod(int(view.part[frame]), 4), here)
            return
        for gate in gates:
            snapshot = self._gates.between(gate, self._last, here)
            yield from self._on_gate(*divmod(gate, 4), snapshot, view, frame)

    def _join(self, corner: int, part: int, here: Snapshot) -> None:
        """Begin in the middle of a lap."""
        self._pass = None
        if part in (Part.APPROACH, Part.ENTRY):
            self._open(corner, here, joined=True)
            if part == Part.ENTRY:
                self._enter(here)

    def _on_gate(
        self, corner: int, part: int, snapshot: Snapshot, view: _View, frame: int
    ) -> Iterator[Event]:
        if part == Part.APPROACH:
            self._open(corner, snapshot, joined=False)
        elif part == Part.ENTRY:
            self._enter(snapshot)
        elif part == Part.CORNER:
            yield from self._close_entry(snapshot, view, frame)
        else:
            yield from self._close_corner(snapshot, view, frame)

    def _open(self, corner: int, start: Snapshot, *, joined: bool) -> None:
        self._driver.aim(self._steering.resolution_rad)
        self._pass = Pass(corner, start.time_s, joined=joined)
        self._trace.keep_since(start.time_s - MEMORY_S)

    def _enter(self, snapshot: Snapshot) -> None:
        if self._pass is not None:
            self._pass.entry = snapshot

    def _close_entry(self, apex: Snapshot, view: _View, frame: int) -> Iterator[Event]:
        here = self._pass
        if here is None or here.entry is None:
            self._pass = None
            return
        corner = self._corners[here.corner]
        trace = self._trace.toward(corner)
        inside = trace[:, trace[TIME] >= here.entry.time_s]
        context = self._context(view, frame, here, inside)
        found = None if context == "slow" else self._refine(here, trace)
        self._driver.learn(here, found, trace, context == "slow")
        knot = found[0] if found is not None else None
        onset = self._where(corner, knot, trace)
        yield Entry(
            time_s=float(view.block.time_s[frame]),
            lap=self._lap_of(corner, view, frame),
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
            peak_demand=largest(inside[DEMAND]),
            peak_utilization=largest(inside[ASKED]),
            entry_energy_j=_four(apex.energy_j - here.entry.energy_j),
            entry_time_s=apex.time_s - here.entry.time_s,
            why=self._why(here, knot, context),
        )

    def _refine(self, here: Pass, trace: FloatArray) -> tuple[Knot, float] | None:
        if self._begun(here):
            return None
        corner = self._corners[here.corner]
        rest = self._driver.rest_rad(here.corner)
        signal = corner.side * trace[SIGNAL]
        if not math.isfinite(rest):
            start = trace[TIME] <= trace[TIME, 0] + LEVEL_S
            rest = float(np.median(signal[start]))
        alarm = here.alarm
        live_s = None if alarm is None else alarm.time_s - alarm.detection_delay_s
        found = refined_knot(
            trace[TIME], trace[WAY], signal, rest, self._driver.height_rad(here.corner), live_s
        )
        if found is None:
            return None
        knot, height = found
        if float(np.interp(knot.x, trace[WAY], trace[TIME])) < self._seen_since + STRAIGHT_S:
            return None
        std = math.hypot(knot.std, self._driver.coarse_rad / knot.slope)
        return replace(knot, std=std), height

    def _where(self, corner: CornerPlan, knot: Knot | None, trace: FloatArray) -> _Onset:
        """Return the fields of an entry that hang on its turn-in."""
        if knot is None:
            return _Onset()
        station = (corner.transition_start_m + knot.x) % self._track.length_m
        margin = self._track.difference_m(corner.target_m, station)
        at_target, at_knot = np.interp([knot.x + margin, knot.x], trace[WAY], trace[TIME])
        roll = float(np.interp(knot.x, trace[WAY], trace[ROLL]))
        return _Onset(
            verdict=self._marks.verdict(margin, station, corner, self._track),
            station_m=station,
            std_m=knot.std,
            transition_margin_m=-knot.x,
            phase=self._track.phase(corner, station),
            margin_m=margin,
            margin_s=float(at_target - at_knot),
            bank_deg=_finite(math.degrees(-self._track.side * roll)),
            demand=_finite(float(np.interp(knot.x, trace[WAY], trace[DEMAND]))),
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
        self._driver.left_corner(exit_.time_s)
        if here is None or here.entry is None:
            return
        corner = self._corners[here.corner]
        trace = self._trace.toward(corner)
        self._trace.keep_since(exit_.time_s - MEMORY_S)
        inside = trace[:, trace[TIME] >= here.entry.time_s]
        lift, brake, throttle = (
            None if way is None else (corner.transition_start_m + way) % self._track.length_m
            for way in pedals(inside)
        )
        yield Corner(
            time_s=float(view.block.time_s[frame]),
            lap=self._lap_of(corner, view, frame),
            run=self._runs,
            corner=corner.name,
            context=self._context(view, frame, here, inside),
            corner_energy_j=_four(exit_.energy_j - here.entry.energy_j),
            corner_time_s=exit_.time_s - here.entry.time_s,
            lift_station_m=lift,
            brake_station_m=brake,
            min_speed_mps=float(inside[SPEED].min()),
            throttle_station_m=throttle,
            exit_speed_mps=exit_.speed_mps,
        )

    def _context(self, view: _View, frame: int, here: Pass, inside: FloatArray) -> Context:
        usual = self._driver.usual_mps(here.corner)
        if inside.size == 0 or float(np.median(inside[SPEED])) < SLOW_SHARE * usual:
            return "slow"
        return _flagged(view.block.frames[frame]) or "free"

    def _lap_of(self, corner: CornerPlan, view: _View, frame: int) -> int:
        """Return the lap in which the corner's transition starts."""
        station = float(view.located.station_m[frame])
        way = self._track.difference_m(corner.transition_start_m, station)
        return int(view.located.lap[frame]) + math.floor((station + way) / self._track.length_m)


def _flagged(frame: Frame) -> Context | None:
    """Return the context that the stream itself tells of."""
    if frame.on_pit_road:
        return "pit"
    return "caution" if frame.caution else None


def _changes(part: IntArray, before: int) -> list[int]:
    return np.flatnonzero(np.diff(part, prepend=before)).tolist()


def _finite(value: float) -> float | None:
    return value if math.isfinite(value) else None


def _four(values: FloatArray) -> Wheels:
    first, second, third, fourth = values.tolist()
    return first, second, third, fourth
