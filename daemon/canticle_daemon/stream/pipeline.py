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
from canticle_daemon.stream.bank import BankStage
from canticle_daemon.stream.continuity import Continuity
from canticle_daemon.stream.corners import CornerStage, Marks
from canticle_daemon.stream.demand import DemandStage
from canticle_daemon.stream.laps import LapStage
from canticle_daemon.stream.locate import Locate
from canticle_daemon.stream.spend import SpendStage
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
        columns = {item.name: getattr(self, item.name).T.tolist() for item in fields(Estimates)}
        columns["received_ns"] = received_ns.tolist()
        names = list(columns)
        return [
            Estimate(**dict(zip(names, row, strict=True)))
            for row in zip(*columns.values(), strict=True)
        ]


@dataclass(frozen=True, slots=True)
class Outputs:
    """What one block gave: events in order, and an estimate for each frame."""

    events: list[Event]
    estimates: Estimates | None


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
        found = self._continuity.process(block)
        events: list[Event] = []
        if found.kept.size == 0:
            return Outputs(events, self._held(len(block)))
        fresh = block if found.kept.size == len(block) else _pick(block, found.kept)
        parts: list[Estimates] = []
        edges = [0, *(cut.index for cut in found.breaks), len(fresh)]
        for number, (start, stop) in enumerate(pairwise(edges)):
            if number:
                cut = found.breaks[number - 1]
                self._break()
                time = float(fresh.time_s[start])
                events.append(Discontinuity(time_s=time, reason=cut.reason, detail=cut.detail))
            if stop > start:
                span = fresh.cut(start, stop)
                parts.append(self._run(span, found.dt_s[start:stop], events))
        return Outputs(events, self._expanded(parts, found.kept, len(block)))

    def _run(self, block: FrameBlock, dt_s: FloatArray, events: list[Event]) -> Estimates:
        located = self._locate.process(block)
        bank = self._bank.process(block, located, dt_s)
        demand = self._demand.process(block, located, bank, dt_s)
        spend = self._spend.process(block, demand, dt_s)
        laps = self._laps.process(block, located, demand, spend)
        found: list[Event] = list(laps.events)
        if self._corners is not None:
            found += self._corners.process(block, located, bank, demand, spend, dt_s)
            found.sort(key=lambda event: event.time_s)
        events += found
        return Estimates(
            time_s=block.time_s,
            lap=located.lap,
            station_m=located.station_m,
            bank_rad=-self._side * bank.roll_rad,
            bank_std_rad=bank.std_rad,
            demand=demand.demand,
            side_demand=demand.side,
            utilization=demand.utilization,
            front_utilization=demand.front_utilization,
            rear_utilization=demand.rear_utilization,
            load_n=demand.load_n,
            force_n=demand.force_n,
            sliding_power_w=spend.power_w,
            energy_j=laps.energy_j,
            saturated=demand.saturated,
        )

    def _break(self) -> None:
        """Drop all carried state; what was learned of the driver stays."""
        self._locate.reset()
        self._bank.reset()
        self._demand.reset()
        self._spend.reset()
        self._laps.reset()
        if self._corners is not None:
            self._corners.reset()

    def _held(self, count: int) -> Estimates | None:
        """Repeat the last estimate for frames that brought nothing new."""
        if self._last is None:
            return None
        return self._last.take(np.zeros(count, np.int64))

    def _expanded(self, parts: list[Estimates], kept: IntArray, count: int) -> Estimates:
        rows = [*([self._last] if self._last is not None else []), *parts]
        joined = parts[0] if len(rows) == 1 else _joined(rows)
        lead = 0 if self._last is None else 1
        if kept.size == count and len(rows) == 1:
            index = None
        else:
            index = lead - 1 + np.searchsorted(kept, np.arange(count), side="right")
            index = np.maximum(index, 0)
        self._last = joined.take(np.array([-1]))
        return joined if index is None else joined.take(index)


def _joined(parts: list[Estimates]) -> Estimates:
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
