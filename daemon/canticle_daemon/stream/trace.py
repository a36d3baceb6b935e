"""Trace: what is kept of the frames of a pass until its events are written."""

from __future__ import annotations

import math
from collections.abc import Iterator

import numpy as np

from canticle_daemon.frame import BoolArray, FloatArray
from canticle_daemon.track.profile import CornerPlan

TIME, WAY, SIGNAL, SPEED, DEMAND, ASKED, ROLL, THROTTLE, BRAKE = range(9)
"""Rows of a trace. The way is a station while it is kept, and is read out as the distance from
a transition's start; signal and roll are positive left; `ASKED` is the utilization."""
LIFTED, BRAKED, BACK = 0.9, 0.05, 0.5
"""Pedals: below this throttle the driver has lifted, above this brake he brakes, above this
throttle he is back on it (common practice, no source)."""


class Trace:
    """Columns of frames in order of time, of any length.

    Parameters
    ----------
    length_m
        Length of the lap.
    """

    def __init__(self, length_m: float) -> None:
        self._length_m = length_m
        self._chunks: list[FloatArray] = []

    def reset(self) -> None:
        """Forget everything."""
        self._chunks = []

    def add(self, rows: FloatArray) -> None:
        """Append frames, shape (9, n)."""
        self._chunks.append(rows)

    def forget(self, age_s: float) -> None:
        """Drop what is older, at least; blocks are dropped whole."""
        newest = self._chunks[-1][TIME, -1]
        while len(self._chunks) > 1 and self._chunks[1][TIME, 0] < newest - age_s:
            del self._chunks[0]

    def keep_since(self, time_s: float) -> None:
        """Cut at a time exactly, so that nothing depends on how the stream was cut."""
        kept = [chunk[:, chunk[TIME] >= time_s] for chunk in self._chunks]
        self._chunks = [chunk for chunk in kept if chunk.size]

    def toward(self, corner: CornerPlan) -> FloatArray:
        """Return a copy, shape (9, n), with the way from the corner's transition start."""
        trace = np.concatenate(self._chunks, axis=1)
        half = self._length_m / 2
        away = trace[WAY] - corner.transition_start_m
        trace[WAY] = (away + half) % self._length_m - half
        return trace


def pedals(inside: FloatArray) -> Iterator[float | None]:
    """Yield the way at the lift, at the brake, and at the return to throttle."""
    way, throttle, brake = inside[WAY], inside[THROTTLE], inside[BRAKE]
    lifted = (throttle[:-1] >= LIFTED) & (throttle[1:] < LIFTED)
    yield _first(way[1:], lifted)
    yield _first(way, brake > BRAKED)
    known = np.isfinite(throttle).any()
    closed = int(np.nanargmin(throttle)) if known else 0
    back = (throttle > BACK) & (np.arange(throttle.size) > closed)
    was_off = known and throttle[closed] < LIFTED  # be it since before the entry's start
    yield _first(way, back if was_off else np.zeros_like(back))


def largest(values: FloatArray) -> float:
    """Return the largest value that is known, NaN where none is."""
    known = values[np.isfinite(values)]
    return float(known.max()) if known.size else math.nan


def _first(way: FloatArray, where: BoolArray) -> float | None:
    index = np.flatnonzero(where)
    return float(way[index[0]]) if index.size else None
