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
        before = np.concatenate([[self._station_m], station[:-1]])
        half_m = 100.0 if self._track is None else self._track.length_m / 2
        moved = station - before
        crossed = np.where(moved < -half_m, 1, 0)
        if self._track is not None:
            crossed = np.where(moved > half_m, -1, crossed)
        counted = self._counted + np.cumsum(crossed)
        furthest = np.maximum.accumulate(np.concatenate([[self._furthest], counted]))
        self._station_m, self._counted = float(station[-1]), int(counted[-1])
        self._furthest = int(furthest[-1])
        told = block.lap
        lap = np.where(np.isfinite(told), told, counted).astype(np.int64)
        return Located(station, lateral, lap, np.flatnonzero(counted > furthest[:-1]))

    def _place(self, block: FrameBlock) -> tuple[FloatArray, FloatArray]:
        station, lateral = block.station_m, block.lateral_m
        track = self._track
        if track is None:
            return station, lateral
        if not (np.isfinite(station).all() and np.isfinite(lateral).all()):
            mapped, offset = track.locate(block.pos_x_m, block.pos_y_m)
            station = np.where(np.isfinite(station), station, mapped)
            lateral = np.where(np.isfinite(lateral), lateral, offset)
        return np.where(station < 0.0, station + track.length_m, station) % track.length_m, lateral
