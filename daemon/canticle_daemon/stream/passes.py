"""Gates and passes: which part of which corner the car is in.

Each corner has four gates along the lap; what lies between them is the car's part:

    zone ─► entry ─► apex ─► exit ─► (straight) ─► zone of the next corner …

Gates are numbered round the lap from the first corner's zone, four a corner, and so are parts:
part 4·c + p lies beyond gate 4·c + p. Gates may coincide; they are passed in order.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass
from enum import IntEnum

import numpy as np

from canticle_daemon.frame import FloatArray, IntArray
from canticle_daemon.messages import TurnIn
from canticle_daemon.track.profile import Track

BACK_M = 50.0
"""A car this little behind a gate it has passed stays past it: places tremble, cars roll back."""


class Part(IntEnum):
    """Where the car is, as seen from one corner."""

    APPROACH = 0
    ENTRY = 1
    CORNER = 2
    STRAIGHT = 3


@dataclass(frozen=True, slots=True)
class Snapshot:
    """What counts at a gate or at a frame: time, place, account.

    `relative_m` counts from the first gate of the lap; `energy_j` has shape (4,).
    """

    relative_m: float
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
    """The onset as it was seen live, from the transition's start, before its usual bias."""
    joined: bool = False
    blind: bool = False
    """Whether it began before a second of straight was seen."""


class Gates:
    """The gates of all corners of a lap, as a ring.

    Parameters
    ----------
    track
        The track, with at least one corner.
    """

    def __init__(self, track: Track) -> None:
        places = [
            (corner.zone_start_m, corner.entry_start_m, corner.apex_m, corner.exit_m)
            for corner in track.corners
        ]
        self._length_m = track.length_m
        self._origin_m = places[0][0]
        self._at_m: FloatArray = (np.array(places).reshape(-1) - self._origin_m) % track.length_m

    def relative_m(self, station_m: FloatArray) -> FloatArray:
        """Return stations as counted from the first gate."""
        relative: FloatArray = (station_m - self._origin_m) % self._length_m
        return relative

    def parts(self, relative_m: FloatArray, now: int) -> IntArray:
        """Return the part of each frame; `now` is that of the frame before, −1 at first.

        A car that is but a little behind the gate of its part stays in it.
        """
        part = np.searchsorted(self._at_m, relative_m, side="right") - 1
        if (part == now).all():
            return part
        settled = part.copy()
        for frame, reached in enumerate(part.tolist()):
            if reached != now and now >= 0:
                behind = (float(self._at_m[now]) - float(relative_m[frame])) % self._length_m
                if behind < BACK_M:
                    settled[frame] = now
                    continue
            now = reached
        return settled

    def corner_ahead(self, part: IntArray) -> IntArray:
        """Return the index of the corner that a car in each part drives toward or through."""
        corner = np.where(part % 4 == Part.STRAIGHT, part // 4 + 1, part // 4)
        ahead: IntArray = corner % (self._at_m.size // 4)
        return ahead

    def passed(self, before: int, now: int) -> Iterable[int] | None:
        """Return the gates from one part to another, in order; None where it was no drive."""
        count = self._at_m.size
        steps = (now - before) % count
        if before < 0 or steps > count // 2 + 1:
            return None
        return [(before + step) % count for step in range(1, steps + 1)]

    def between(self, gate: int, before: Snapshot, here: Snapshot) -> Snapshot:
        """Return what counted at a gate that lies between two frames."""
        step = (here.relative_m - before.relative_m) % self._length_m
        way = (float(self._at_m[gate]) - before.relative_m) % self._length_m
        share = min(max(way / step if step > 0.0 else 1.0, 0.0), 1.0)
        return Snapshot(
            float(self._at_m[gate]),
            before.time_s + share * (here.time_s - before.time_s),
            before.energy_j + share * (here.energy_j - before.energy_j),
            before.speed_mps + share * (here.speed_mps - before.speed_mps),
            before.lateral_m + share * (here.lateral_m - before.lateral_m),
        )
