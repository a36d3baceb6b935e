"""The pipeline: frames in; friction demand, turn-ins and the account of every lap out.

A block of frames is whatever the socket held: one frame when it is quiet, many under load.

1. continuity  drops stale frames and cuts the stream where it broke;
2. locate      finds the place on the lap;
3. bank        the road's roll under the car, and how sure that is;
4. demand      the friction that car, axles and tires are asked for;
5. spend       what the sliding costs each tire, in joules;
6. corners     from gate to gate: turn-in, entry, corner; and the lap at the start line.

The law: any way of cutting a stream into blocks gives the same estimates and events to the
bit. The only clock is the stream's `time_s`; nothing here knows a socket or a file.
"""

from __future__ import annotations

from dataclasses import dataclass, fields
from itertools import pairwise

import numpy as np

from canticle_daemon.frame import BoolArray, FloatArray, FrameBlock, IntArray
from canticle_daemon.messages import Discontinuity, Estimate, Event
from canticle_daemon.physics.car import CarFile
from canticle_daemon.stream.bank import Bank, BankStage
from canticle_daemon.stream.continuity import Break, Continuity
from canticle_daemon.stream.corners import CornerStage, Marks
from canticle_daemon.stream.demand import Demand, DemandStage
from canticle_daemon.stream.laps import Laps, LapStage
from canticle_daemon.stream.locate import Locate, Located
from canticle_daemon.stream.spend import Spend, SpendStage
from canticle_daemon.track.profile import Track


@dataclass(frozen=True, slots=True)
class Estimates:
    """Columns of estimates, one row a datagram; tires have shape (4, n), the rest (n,).

    What cannot be computed is NaN.
    """

    time_s: FloatArray
    lap: IntArray
    station_m: FloatArray
    bank_rad: FloatArray
    bank_std_rad: FloatArray
    demand: FloatArray
    side_demand: FloatArray
    utilization: FloatArray
    front_utilization: FloatArray
    rear_utilization: FloatArray
    load_n: FloatArray
    force_n: FloatArray
    sliding_power_w: FloatArray
    energy_j: FloatArray
    saturated: BoolArray

    def take(self, index: IntArray) -> Estimates:
        """Return the rows of an index."""
        return Estimates(*(getattr(self, item.name)[..., index] for item in fields(self)))

    def messages(self, received_ns: IntArray) -> list[Estimate]:
        """Return one bus message a row."""
        columns = [
            (received_ns if name == "received_ns" else getattr(self, name)).T.tolist()
            for name in _COLUMNS
        ]
        return [Estimate(*row) for row in zip(*columns, strict=True)]


_COLUMNS = tuple(name for name in Estimate.__struct_fields__ if name != "status")
"""The columns of a message, in its own order."""


@dataclass(frozen=True, slots=True)
class Outputs:
    """What one block gave: events in order, and an estimate for each frame."""

    events: list[Event]
    estimates: Estimates | None


@dataclass(frozen=True, slots=True)
class _Span:
    """An unbroken part of a block, with what the numeric stages made of it."""

    block: FrameBlock
    dt_s: FloatArray
    located: Located
    bank: Bank
    demand: Demand
    spend: Spend
    laps: Laps
    cut: Break | None

    def estimates(self, side: float) -> Estimates:
        """Return the rows of this part."""
        demand = self.demand
        return Estimates(
            time_s=self.block.time_s,
            lap=self.located.lap,
            station_m=self.located.station_m,
            bank_rad=-side * self.bank.roll_rad,
            bank_std_rad=self.bank.std_rad,
            demand=demand.demand,
            side_demand=demand.side,
            utilization=demand.utilization,
            front_utilization=demand.front_utilization,
            rear_utilization=demand.rear_utilization,
            load_n=demand.load_n,
            force_n=demand.force_n,
            sliding_power_w=self.spend.power_w,
            energy_j=self.laps.energy_j,
            saturated=demand.saturated,
        )


@dataclass(frozen=True, slots=True)
class Measured:
    """A block after the numeric stages: the estimates are there, the events are to come."""

    estimates: Estimates | None
    spans: tuple[_Span, ...]


class Pipeline:
    """All stages in a row, with their carried state.

    Parameters
    ----------
    track
        The track; without one demand, bank and energy are still computed, but no turn-in.
    car
        The car file.
    marks
        The coach's tolerance and window.
    """

    def __init__(self, track: Track | None, car: CarFile, marks: Marks | None = None) -> None:
        self._track = track
        length = None if track is None else track.length_m
        self._continuity = Continuity(length)
        self._locate = Locate(track)
        self._bank = BankStage(track, car)
        self._demand = DemandStage(car, track)
        self._spend = SpendStage(car)
        self._laps = LapStage(length)
        self._corners = (
            None if track is None or not track.corners
            else CornerStage(track, car, marks or Marks())
        )  # fmt: skip
        self._side = 1.0 if track is None else track.side
        self._last: Estimates | None = None

    def process(self, block: FrameBlock) -> Outputs:
        """Take in one block of at least one frame."""
        measured = self.measure(block)
        return Outputs(self.judge(measured), measured.estimates)

    def measure(self, block: FrameBlock) -> Measured:
        """Do the first half of `process`: the estimates, which are asked for at once."""
        found = self._continuity.process(block)
        if found.kept.size == 0:
            return Measured(self._held(len(block)), ())
        fresh = block if found.kept.size == len(block) else _pick(block, found.kept)
        spans: list[_Span] = []
        edges = [0, *(cut.index for cut in found.breaks), len(fresh)]
        for number, (start, stop) in enumerate(pairwise(edges)):
            cut = found.breaks[number - 1] if number else None
            if cut is not None:
                self._break()
            if stop > start:
                spans.append(self._run(fresh.cut(start, stop), found.dt_s[start:stop], cut))
        parts = [span.estimates(self._side) for span in spans]
        return Measured(self._expanded(parts, found.kept, len(block)), tuple(spans))

    def judge(self, measured: Measured) -> list[Event]:
        """Do the second half, once for each `measure` and in its order: the events."""
        events: list[Event] = []
        for span in measured.spans:
            if span.cut is not None:
                if self._corners is not None:
                    self._corners.reset()
                time = float(span.block.time_s[0])
                cut = span.cut
                events.append(Discontinuity(time_s=time, reason=cut.reason, detail=cut.detail))
            found: list[Event] = list(span.laps.events)
            if self._corners is not None:
                found += self._corners.process(
                    span.block, span.located, span.bank, span.demand, span.spend, span.dt_s
                )
                found.sort(key=lambda event: event.time_s)
            events += found
        return events

    def _run(self, block: FrameBlock, dt_s: FloatArray, cut: Break | None) -> _Span:
        located = self._locate.process(block)
        bank = self._bank.process(block, located, dt_s)
        demand = self._demand.process(block, located, bank, dt_s)
        spend = self._spend.process(block, demand, dt_s)
        laps = self._laps.process(block, located, demand, spend)
        return _Span(block, dt_s, located, bank, demand, spend, laps, cut)

    def _break(self) -> None:
        """Drop the carried state of the numeric stages."""
        self._locate.reset()
        self._bank.reset()
        self._demand.reset()
        self._spend.reset()
        self._laps.reset()

    def _held(self, count: int) -> Estimates:
        """Repeat the last estimate for frames that brought nothing new."""
        assert self._last is not None  # only what follows a frame can be stale
        return self._last.take(np.full(count, -1))

    def _expanded(self, parts: list[Estimates], kept: IntArray, count: int) -> Estimates:
        """Return a row for every frame: a stale one repeats the row before it."""
        before, joined = self._last, _joined(parts)
        self._last = joined
        if kept.size == count:
            return joined
        lead = 0
        if before is not None:
            joined, lead = _joined([before.take(np.array([-1])), joined]), 1
        index = lead - 1 + np.searchsorted(kept, np.arange(count), side="right")
        return joined.take(np.maximum(index, 0))


def _joined(parts: list[Estimates]) -> Estimates:
    if len(parts) == 1:
        return parts[0]
    return Estimates(
        *(
            np.concatenate([getattr(part, item.name) for part in parts], axis=-1)
            for item in fields(Estimates)
        )
    )


def _pick(block: FrameBlock, kept: IntArray) -> FrameBlock:
    frames = [block.frames[index] for index in kept.tolist()]
    scalars = np.ascontiguousarray(block.scalars[:, kept])
    return FrameBlock(frames, scalars, block.received_ns[kept])
