"""Every stage and the whole pipeline pass the battery; and the battery fails what it should."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
from streams import Drive, oval_file

from canticle_daemon.frame import Frame, FrameBlock
from canticle_daemon.physics.car import CarFile
from canticle_daemon.stream.bank import BankStage
from canticle_daemon.stream.continuity import Continuity
from canticle_daemon.stream.demand import DemandStage
from canticle_daemon.stream.filters import Derivative, FirstOrderLag, Hold, RunningSum
from canticle_daemon.stream.locate import Locate
from canticle_daemon.stream.pipeline import Pipeline
from canticle_daemon.stream.spend import SpendStage
from canticle_daemon.stream.steering import SteeringStage
from canticle_daemon.testing import check_stage
from canticle_daemon.track.profile import Track

TRACK = Track(oval_file())
CAR = CarFile()
FRAMES = Drive(TRACK, laps=2, rate_hz=30.0).frames()
MISSING = Drive(TRACK, laps=2, rate_hz=30.0, vertical=False, attitude=False, steer=False).frames()


class Chain:
    """The stages up to `last`, without what the pipeline does at a break."""

    def __init__(self, track: Track | None, last: str) -> None:
        self.last = last
        self.continuity = Continuity(None)
        self.locate = Locate(track)
        self.bank = BankStage(track, CAR)
        self.demand = DemandStage(CAR, track)
        self.spend = SpendStage(CAR)

    def reset(self) -> None:
        for stage in (self.continuity, self.bank, self.demand, self.spend):
            stage.reset()
        self.locate = Locate(TRACK)  # its count of laps outlives a break

    def process(self, block: FrameBlock) -> Any:
        found = self.continuity.process(block)
        dt = np.zeros(len(block))
        dt[found.kept] = found.dt_s
        located = self.locate.process(block)
        bank = self.bank.process(block, located, dt)
        demand = self.demand.process(block, located, bank, dt)
        spend = self.spend.process(block, demand, dt)
        place = {"station": located.station_m, "lateral": located.lateral_m, "lap": located.lap}
        return {"locate": place, "bank": bank, "demand": demand, "spend": spend}[self.last]


class Filters:
    """The small filters side by side on one signal."""

    def __init__(self) -> None:
        self.lag, self.rate = FirstOrderLag(0.3), Derivative(0.1)
        self.hold, self.sum = Hold(0.0), RunningSum()

    def reset(self) -> None:
        for part in (self.lag, self.rate, self.hold, self.sum):
            part.reset()

    def process(self, block: FrameBlock) -> dict[str, Any]:
        dt = np.full(len(block), 1 / 30)
        return {
            "lag": self.lag.process(block.steer_rad, dt),
            "rate": self.rate.process(block.accel_y_mps2, dt),
            "hold": self.hold.process(block.steer_rad),
            "sum": self.sum.process(block.accel_y_mps2),
        }


class Steer:
    """The turn-in signal."""

    def __init__(self) -> None:
        self.stage = SteeringStage(TRACK, CAR)

    def process(self, block: FrameBlock) -> Any:
        return self.stage.process(block, block.station_m)


@pytest.mark.parametrize("frames", [FRAMES, MISSING], ids=["complete", "bare"])
@pytest.mark.parametrize("track", [TRACK, None], ids=["track", "no track"])
def test_the_pipeline(track: Track | None, frames: list[Frame]) -> None:
    check_stage(lambda: Pipeline(track, CAR), frames)


@pytest.mark.parametrize("last", ["locate", "bank", "demand", "spend"])
@pytest.mark.parametrize("frames", [FRAMES, MISSING], ids=["complete", "bare"])
def test_each_stage(last: str, frames: list[Frame]) -> None:
    check_stage(lambda: Chain(TRACK, last), frames)


def test_the_filters() -> None:
    check_stage(Filters, FRAMES)


def test_the_steering_signal() -> None:
    check_stage(Steer, MISSING)
    check_stage(Steer, FRAMES)


# --- the battery itself ------------------------------------------------------------------------


class Plain:
    """Gives the speed; the base of the broken ones."""

    def __init__(self) -> None:
        self.sum = 0.0

    def reset(self) -> None:
        self.sum = 0.0

    def process(self, block: FrameBlock) -> dict[str, Any]:
        return {"value": block.speed_mps * 1.0}


class Writes(Plain):
    """Writes into its input."""

    def process(self, block: FrameBlock) -> dict[str, Any]:
        block.scalars[1] += 1.0
        return super().process(block)


class AddsAfterTheSum(Plain):
    """Adds the carry after the sum, which changes bits."""

    def process(self, block: FrameBlock) -> dict[str, Any]:
        total = np.cumsum(block.accel_y_mps2) + self.sum
        self.sum = float(total[-1])
        return {"value": total}


class LooksAhead(Plain):
    """Uses the mean of the block."""

    def process(self, block: FrameBlock) -> dict[str, Any]:
        return {"value": block.steer_rad - block.steer_rad.mean()}


class Forgets(Plain):
    """Its reset leaves something."""

    def reset(self) -> None:
        self.sum += 1.0

    def process(self, block: FrameBlock) -> dict[str, Any]:
        return {"value": block.speed_mps + self.sum}


class TellsTheTime(Plain):
    """Its result hangs on the clock's zero."""

    def process(self, block: FrameBlock) -> dict[str, Any]:
        return {"value": np.sin(block.time_s)}


class Shared(Plain):
    """Two copies share state."""

    tally: list[float]

    def __init__(self) -> None:
        super().__init__()
        self.tally = [0.0]

    def __deepcopy__(self, memo: object) -> Shared:
        twin = Shared()
        twin.tally = self.tally
        return twin

    def process(self, block: FrameBlock) -> dict[str, Any]:
        out = self.tally[0] + np.arange(len(block), dtype=np.float64)
        self.tally[0] += len(block)
        return {"value": out}


class Chokes(Plain):
    """Cannot bear a missing number."""

    def process(self, block: FrameBlock) -> dict[str, Any]:
        if np.isnan(block.throttle).any():
            raise ZeroDivisionError("no throttle")
        return super().process(block)


class Short(Plain):
    """Loses a row."""

    def process(self, block: FrameBlock) -> dict[str, Any]:
        return {"value": block.speed_mps[1:]}


class Chance(Plain):
    """Never the same twice."""

    made = 0

    def __init__(self) -> None:
        super().__init__()
        Chance.made += 1
        self.sum = float(Chance.made)

    def process(self, block: FrameBlock) -> dict[str, Any]:
        return {"value": block.speed_mps + self.sum}


class Untold(Plain):
    __doc__ = None


def test_a_good_stage_passes() -> None:
    check_stage(Plain, FRAMES)


@pytest.mark.parametrize(
    ("broken", "told"),
    [
        (Writes, "writes into its input"),
        (AddsAfterTheSum, "blocks of"),
        (LooksAhead, "blocks of"),
        (Forgets, "was reset"),
        (TellsTheTime, "zero of the clock"),
        (Shared, "deep copy"),
        (Chokes, "throttle missing from the middle on raised ZeroDivisionError"),
        (Short, "has shape"),
        (Chance, "second fresh stage"),
        (Untold, "no docstring"),
    ],
)
def test_a_broken_stage_is_told_what_is_wrong(broken: Callable[[], Any], told: str) -> None:
    with pytest.raises(AssertionError, match=told):
        check_stage(broken, FRAMES)
