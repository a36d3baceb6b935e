"""Steering: the signal in which turn-ins are looked for.

It is the steering-wheel angle, or path curvature scaled to it where the stream has no steering,
less what the road asks for before the corner: a dogleg or a banked arc is not a turn-in.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from canticle_daemon.frame import FloatArray, FrameBlock
from canticle_daemon.physics.car import CarFile
from canticle_daemon.stream.filters import Hold
from canticle_daemon.track.profile import CornerPlan, Track

GRID_M = 2.0
LEVEL_SHARE = 0.06
"""Curvature up to this share of the corner's own still belongs to the straight."""
BEGUN_SHARE = 0.002
"""A straight ends where its curvature has risen by this share of the corner's own."""
DOGLEG_REACH_M = 60.0
"""A driver rounds a dogleg off by about this much on either side."""
DOGLEG_FACTOR = 1.6


@dataclass(frozen=True, slots=True)
class Guide:
    """What the road asks of the steering, on a grid of stations round the lap.

    Parameters
    ----------
    station_m
        The grid from 0 to the lap's length, both included, shape (n,).
    held_1pm
        Curvature of the straight, held on where a corner takes over; doglegs are in it.
    dogleg_1pm
        Size of the dogleg near this station, positive, 0 where there is none.
    level_1pm
        Curvature of the straight just before the next corner, constant over its zone.
    """

    station_m: FloatArray
    held_1pm: FloatArray
    dogleg_1pm: FloatArray
    level_1pm: FloatArray

    @classmethod
    def of(cls, track: Track) -> Guide:
        """Derive the guide from a track's curvature and corners."""
        count = max(int(track.length_m / GRID_M), 8)
        station = np.arange(count, dtype=np.float64) * (track.length_m / count)
        curvature = track.curvature_1pm(station)
        held, dogleg = curvature.copy(), np.zeros(count)
        level = np.zeros(count)
        for corner, previous in zip(
            track.corners, (track.corners[-1:] + track.corners[:-1]), strict=True
        ):
            _guide_corner(track, corner, previous, (station, curvature, held, dogleg, level))
        columns = (held, dogleg, level)
        held, dogleg, level = (np.append(column, column[0]) for column in columns)
        return cls(np.append(station, track.length_m), held, dogleg, level)


def corner_curvature(track: Track, corner: CornerPlan) -> float:
    """Return the largest curvature of a corner in its own direction, at least 1e-5 1/m."""
    span = (corner.exit_m - corner.transition_start_m) % track.length_m
    station = (corner.transition_start_m + np.arange(0.0, span, GRID_M)) % track.length_m
    return max(float(np.max(corner.side * track.curvature_1pm(station))), 1e-5)


def _guide_corner(
    track: Track, corner: CornerPlan, previous: CornerPlan, grid: tuple[FloatArray, ...]
) -> None:
    """Fill the guide from the previous corner's exit to this corner's exit."""
    station, curvature, held, dogleg, level = grid
    length = track.length_m
    start = previous.exit_m
    approach = (corner.apex_m - start) % length or length
    reach = (corner.exit_m - start) % length or length
    ahead = (station - start) % length
    order = np.argsort(ahead, kind="stable")
    order = order[ahead[order] <= reach]
    along, own = ahead[order], corner.side * curvature[order]
    peak = corner_curvature(track, corner)
    before_apex = along <= approach
    zone = before_apex & (along >= (corner.zone_start_m - start) % length)
    floor = max(float(np.min(own[zone], initial=peak)), 0.0)
    straight = before_apex & (own <= floor + LEVEL_SHARE * (peak - floor))
    begins = float(along[straight][-1]) if straight.any() else 0.0
    near = straight & (along > begins - 80.0)
    base = float(np.median(own[near])) if near.any() else floor
    # Held from where the road begins to bend: a step there would look like steering.
    begun = straight & (own <= base + BEGUN_SHARE * (peak - floor))
    begins = float(along[begun][-1]) if begun.any() else begins
    taken = along >= begins
    level[order] = corner.side * base
    held[order[taken]] = corner.side * base
    away = np.where(taken, 0.0, np.abs(own - base))
    away[away < LEVEL_SHARE * peak] = 0.0
    for index in np.flatnonzero(away):
        close = np.abs(along - along[index]) <= DOGLEG_REACH_M
        dogleg[order[close]] = np.maximum(dogleg[order[close]], away[index])


@dataclass(frozen=True, slots=True)
class Steering:
    """The turn-in signal of a block, positive left, as an angle at the steering wheel.

    `beyond_rad` is beyond what the road asks for; `offset_rad` puts a dogleg back in, so that
    the two together are beyond the straight's own level; `dogleg_rad` is the steering a dogleg
    near here may take, 0 where there is none.
    """

    beyond_rad: FloatArray
    offset_rad: FloatArray
    dogleg_rad: FloatArray


class SteeringStage:
    """Builds the turn-in signal from steering, or from path curvature where there is none."""

    def __init__(self, track: Track, car: CarFile) -> None:
        self._guide = Guide.of(track)
        self._track = track
        self._gain = car.steering_ratio * car.wheelbase_m
        self._hold = Hold(0.0)
        self._last_rad = math.nan
        self._step_rad = math.inf

    def reset(self) -> None:
        """Forget the past; the resolution stays."""
        self._hold.reset()
        self._last_rad = math.nan

    def process(self, block: FrameBlock, station_m: FloatArray) -> Steering:
        """Return the signal of a block."""
        guide, gain = self._guide, self._gain
        held = np.interp(station_m, guide.station_m, guide.held_1pm)
        level = np.interp(station_m, guide.station_m, guide.level_1pm)
        dogleg = np.interp(station_m, guide.station_m, guide.dogleg_1pm)
        wheel = block.steer_rad
        if not np.isfinite(wheel).all():
            moving = np.where(block.speed_mps > 5.0, block.speed_mps, np.nan)
            cos = np.cos(self._track.bank_rad(station_m))
            wheel = np.where(
                np.isfinite(wheel), wheel, gain * block.yaw_rate_radps / (moving * cos)
            )
        beyond = self._hold.process(wheel - gain * held)
        return Steering(beyond, gain * (held - level), DOGLEG_FACTOR * gain * dogleg)

    @property
    def resolution_rad(self) -> float:
        """The smallest step of the steering seen; 0 before one was."""
        return self._step_rad if math.isfinite(self._step_rad) else 0.0

    def learn(self, wheel_rad: FloatArray) -> None:
        """Look for the steering's resolution in frames that have been judged."""
        before = np.concatenate([[self._last_rad], wheel_rad[:-1]])
        steps = np.abs(wheel_rad - before)
        steps = np.where(steps > 1e-9, steps, np.inf)
        self._step_rad = float(np.minimum.reduce(steps, initial=self._step_rad))
        self._last_rad = float(wheel_rad[-1])
