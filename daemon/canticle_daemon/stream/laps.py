"""Laps: closes the account at the start line."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from canticle_daemon.frame import FloatArray, FrameBlock, Wheels
from canticle_daemon.messages import LapCompleted
from canticle_daemon.stream.demand import Demand
from canticle_daemon.stream.locate import Located
from canticle_daemon.stream.spend import Spend

NEAR_LINE_M = 3.0


@dataclass(frozen=True, slots=True)
class Laps:
    """Energy of each tire since the lap began, shape (4, n), and the laps completed.

    The energy is NaN where it could never be computed.
    """

    energy_j: FloatArray
    events: list[LapCompleted]


class LapStage:
    """Keeps the account of the lap under way; time and energy at the line are interpolated.

    Notes
    -----
    Where the frames on both sides of the line tell how far they are from it, so does the
    interpolation; without a track the length of the lap is not known and the line is taken
    at the first frame beyond it.
    """

    def __init__(self, length_m: float | None = None) -> None:
        self._length_m = length_m
        self.reset()

    def reset(self) -> None:
        """Start again in the middle of a lap."""
        self._line_s = math.nan
        self._line_j: FloatArray = np.zeros(4)
        self._peak = math.nan
        self._before: tuple[float, float, FloatArray] | None = None
        self._lap: int | None = None
        self._run = 1
        self._fresh = True

    def process(self, block: FrameBlock, located: Located, demand: Demand, spend: Spend) -> Laps:
        """Take in a block."""
        energy = np.empty_like(spend.energy_j)
        if self._fresh:
            self._begin(block, located)
        events = []
        begin = 0
        for wrap in [*located.wraps.tolist(), len(block)]:
            energy[:, begin:wrap] = spend.energy_j[:, begin:wrap] - self._line_j[:, None]
            self._peak = float(np.fmax.reduce(demand.demand[begin:wrap], initial=self._peak))
            self._read_lap(located, begin, wrap)
            if wrap > begin:
                last = wrap - 1
                self._before = (
                    float(block.time_s[last]),
                    float(located.station_m[last]),
                    spend.energy_j[:, last].copy(),
                )
            if wrap < len(block):
                events.append(self._close(block, located, spend, wrap))
                begin = wrap
        return Laps(np.where(spend.blind, np.nan, energy), events)

    def _close(self, block: FrameBlock, located: Located, spend: Spend, wrap: int) -> LapCompleted:
        time_s, line_j = self._at_line(block, located, spend, wrap)
        lap_time = time_s - self._line_s
        lap = int(located.lap[wrap]) - 1 if self._lap is None else self._lap
        done = LapCompleted(
            time_s=float(block.time_s[wrap]),
            lap=lap,
            run=self._run,
            lap_time_s=lap_time if math.isfinite(lap_time) else None,
            valid=math.isfinite(lap_time),
            context="free",
            tire_energy_j=_four(np.where(spend.blind[wrap], np.nan, line_j - self._line_j)),
            peak_demand=self._peak,
        )
        self._line_s, self._line_j, self._peak = time_s, line_j, math.nan
        self._lap = None
        return done

    def _begin(self, block: FrameBlock, located: Located) -> None:
        """Take a first frame just beyond the line for the start of a whole lap."""
        self._fresh = False
        past, speed = float(located.station_m[0]), float(block.speed_mps[0])
        if 0.0 <= past < NEAR_LINE_M and speed > 1.0:
            self._line_s = float(block.time_s[0]) - past / speed

    def _read_lap(self, located: Located, begin: int, stop: int) -> None:
        """Note the lap's number away from the line, where streams may count early or late."""
        if self._length_m is None:
            self._lap = int(located.lap[stop - 1]) if stop > begin else self._lap
            return
        share = located.station_m[begin:stop] / self._length_m
        middle = np.flatnonzero((share > 0.05) & (share < 0.95))
        if middle.size:
            self._lap = int(located.lap[begin + int(middle[-1])])

    def _at_line(
        self, block: FrameBlock, located: Located, spend: Spend, wrap: int
    ) -> tuple[float, FloatArray]:
        after_s, after_j = float(block.time_s[wrap]), spend.energy_j[:, wrap].copy()
        if self._length_m is None or self._before is None:
            return after_s, after_j
        before_s, before_m, before_j = self._before
        short = self._length_m - before_m
        share = short / max(short + float(located.station_m[wrap]), 1e-9)
        return before_s + share * (after_s - before_s), before_j + share * (after_j - before_j)


def _four(values: FloatArray) -> Wheels:
    first, second, third, fourth = values.tolist()
    return first, second, third, fourth
