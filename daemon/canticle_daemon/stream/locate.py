"""Locate: where on the lap, which lap, how far from the reference line, how long the lap took."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from canticle_daemon.frame import FloatArray, FrameBlock, IntArray
from canticle_daemon.track.profile import Track


@dataclass(frozen=True, slots=True)
class Located:
    """Place of each frame.

    `station_m` lies on the lap; `lateral_m` is positive left, NaN where not known; `lap` is
    the stream's own where it has one, else counted; `wraps` are the frames that are the first
    beyond the start line, going forward. A car that rolls back over the line and on again, or
    whose place trembles there, has passed it once.
    """

    station_m: FloatArray
    lateral_m: FloatArray
    lap: IntArray
    wraps: IntArray


class Locate:
    """Finds station, lap and lateral offset.

    Parameters
    ----------
    track
        The track, or None: then the station is taken as the stream gives it.
    """

    def __init__(self, track: Track | None) -> None:
        self._track = track
        self._station_m = math.nan
        self._counted = self._furthest = 1

    def reset(self) -> None:
        """Forget the last place; the count of laps goes on."""
        self._station_m = math.nan
        self._furthest = self._counted

    def process(self, block: FrameBlock) -> Located:
        """Locate every frame of a block."""
        station, lateral = self._place(block)
        moved = np.empty_like(station)
        moved[0] = station[0] - self._station_m
        np.subtract(station[1:], station[:-1], out=moved[1:])
        half_m = 100.0 if self._track is None else self._track.length_m / 2
        walk = np.empty(station.size + 1, np.int64)
        counted = walk[1:]
        np.less(moved, -half_m, out=counted, casting="unsafe")
        if self._track is not None:
            counted -= moved > half_m
        np.add.accumulate(counted, out=counted)
        counted += self._counted
        walk[0] = self._furthest
        furthest = np.maximum.accumulate(walk)
        self._station_m, self._counted = float(station[-1]), int(counted[-1])
        self._furthest = int(furthest[-1])
        told = block.lap
        known = np.isfinite(told)
        lap = told if known.all() else np.where(known, told, counted)
        wraps = (counted > furthest[:-1]).nonzero()[0]
        return Located(station, lateral, lap.astype(np.int64), wraps)

    def _place(self, block: FrameBlock) -> tuple[FloatArray, FloatArray]:
        station, lateral = block.station_m, block.lateral_m
        track = self._track
        if track is None:
            return station, lateral
        if not (np.isfinite(station).all() and np.isfinite(lateral).all()):
            mapped, offset = track.locate(block.pos_x_m, block.pos_y_m)
            station = np.where(np.isfinite(station), station, mapped)
            lateral = np.where(np.isfinite(lateral), lateral, offset)
        behind = station < 0.0
        if behind.any():
            station = np.where(behind, station + track.length_m, station)
        return station % track.length_m, lateral
