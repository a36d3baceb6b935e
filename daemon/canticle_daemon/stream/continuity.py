"""Continuity: whether a frame follows the last one, or the stream has broken.

Only the stream's own clock and place are looked at, so live and replay see the same breaks:

* `gap`     the clock jumps forward by more than `MAX_GAP_S`;
* `rewind`  it jumps back by more than `REORDER_S`;
* `jump`    the car is somewhere its speed cannot have taken it (pits, tow, reset).

A frame that repeats the clock or comes a little late is stale: it is dropped here and its
estimate is the one before it. Pauses are seen by receive time and so belong to the runtime.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from canticle_daemon.frame import FloatArray, FrameBlock, IntArray
from canticle_daemon.messages import Reason

MAX_GAP_S = 0.5
REORDER_S = 0.25
JUMP_M = 25.0
"""Slack of the place check: positions may be coarse, and a lane change shifts the station."""


@dataclass(frozen=True, slots=True)
class Break:
    """A break before the kept frame `index`."""

    index: int
    reason: Reason
    detail: str


@dataclass(frozen=True, slots=True)
class Continuous:
    """Which frames of a block are new, their time steps, and where the stream broke.

    `kept` indexes the block; `dt_s` belongs to the kept frames and is 0 after a break.
    """

    kept: IntArray
    dt_s: FloatArray
    breaks: tuple[Break, ...]


class Continuity:
    """Watches clock and place from frame to frame.

    Parameters
    ----------
    lap_length_m
        Length of the lap, or None when it is not known: then a fall of the station toward
        zero passes for the start line.
    """

    def __init__(self, lap_length_m: float | None) -> None:
        self._length_m = lap_length_m
        self._last: tuple[float, float, float, float, float] | None = None

    def reset(self) -> None:
        """Forget the last frame."""
        self._last = None

    def process(self, block: FrameBlock) -> Continuous:
        """Sort a block's frames into new and stale and find the breaks."""
        kept: list[int] = []
        steps: list[float] = []
        breaks: list[Break] = []
        rows = zip(
            block.time_s.tolist(),
            block.speed_mps.tolist(),
            block.station_m.tolist(),
            block.pos_x_m.tolist(),
            block.pos_y_m.tolist(),
            strict=True,
        )
        for index, row in enumerate(rows):
            last = self._last
            dt = 0.0 if last is None else row[0] - last[0]
            if last is not None:
                if -REORDER_S < dt <= 0.0:
                    continue
                found = self._break(last, row, dt)
                if found is not None:
                    breaks.append(Break(len(kept), *found))
                    dt = 0.0
            kept.append(index)
            steps.append(dt)
            self._last = row
        return Continuous(np.array(kept, np.int64), np.array(steps), tuple(breaks))

    def _break(
        self, last: tuple[float, ...], row: tuple[float, ...], dt: float
    ) -> tuple[Reason, str] | None:
        if dt < 0.0:
            return "rewind", f"the stream's clock went back by {-dt:.3f} s"
        if dt > MAX_GAP_S:
            return "gap", f"the stream's clock skipped {dt:.3f} s"
        way = max(last[1], row[1]) * dt
        moved = self._station_move(last[2], row[2])
        if moved > way + JUMP_M or moved < -way - JUMP_M:
            return "jump", f"the station moved {moved:.0f} m in {dt:.3f} s"
        apart = ((row[3] - last[3]) ** 2 + (row[4] - last[4]) ** 2) ** 0.5
        if apart > way + JUMP_M:
            return "jump", f"the position moved {apart:.0f} m in {dt:.3f} s"
        return None

    def _station_move(self, before: float, after: float) -> float:
        moved = after - before
        length = self._length_m
        if length is not None:
            return (moved + length / 2) % length - length / 2
        return 0.0 if moved < -JUMP_M and after < 2 * JUMP_M else moved
