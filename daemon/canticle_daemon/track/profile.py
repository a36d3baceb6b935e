"""The track file and the questions the pipeline asks of it.

Signs. ``bank_deg`` is positive where the surface rises away from the inside of the corners.
With `side` +1 for a track whose corners turn left and −1 for right:

* ISO 8855 road roll (positive left side up):   φ = −side · bank
* ASAM OpenDRIVE superelevation (positive falls to the right): the same as φ.

Curvature is positive to the left in every file. Stations run along the reference line and
wrap at ``length_m``; differences are the shortest signed ones.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, replace
from itertools import pairwise
from pathlib import Path
from typing import Annotated, Literal

import numpy as np
from pydantic import AfterValidator, Field, model_validator
from scipy.spatial import cKDTree

from canticle_daemon.config import Section, load_toml
from canticle_daemon.errors import ConfigError
from canticle_daemon.frame import FloatArray
from canticle_daemon.messages import CornerView, Phase, TargetSource, TrackView

ENTRY_LEAD_M = 150.0
"""An entry is counted from this far before the transition's start (public contract)."""
ZONE_LEAD_M = 200.0
"""A turn-in is looked for from this far before the transition's start (public contract)."""
CLOSURE_DEG = 5.0
"""How far the curvature of a lap may integrate away from a full turn."""
MAP_STEP_M = 1.0

Direction = Literal["left", "right"]


def _bank_in_range(row: tuple[float, float, float]) -> tuple[float, float, float]:
    if not -45.0 <= row[1] <= 60.0:
        raise ValueError(f"a bank of {row[1]:g}° is not a racing surface (-45 to 60)")
    if abs(row[2]) > 0.2:
        raise ValueError(f"a curvature of {row[2]:g} 1/m is tighter than a radius of 5 m")
    return row


ProfileRow = Annotated[tuple[float, float, float], AfterValidator(_bank_in_range)]


class CornerFile(Section):
    """One ``[[corner]]`` of a track file."""

    name: str = Field(min_length=1)
    transition_start_m: float
    transition_end_m: float
    apex_m: float
    exit_m: float
    target_m: float | None = None
    window_m: tuple[float, float] | None = None
    landmark: str | None = None
    direction: Direction | None = None


class TrackFile(Section):
    """A track file as it stands; see the module for signs."""

    name: str = Field(min_length=1)
    length_m: float = Field(gt=50.0, le=100_000.0)
    direction: Direction = "left"
    reference: Literal["centerline", "driven line"] = "centerline"
    width_left_m: float | None = Field(None, gt=0)
    width_right_m: float | None = Field(None, gt=0)
    bank_axis_offset_m: float = 0.0
    origin: tuple[float, float, float, float] | None = None
    profile: tuple[ProfileRow, ...] = Field(min_length=2)
    corner: tuple[CornerFile, ...] = ()

    @model_validator(mode="after")
    def _consistent(self) -> TrackFile:
        self._check_stations()
        self._check_closure()
        self._check_corners()
        return self

    def _check_stations(self) -> None:
        stations = [row[0] for row in self.profile]
        if stations[0] != 0.0:
            raise ValueError(f"profile must start at station 0, not {stations[0]:g}")
        for row, (here, following) in enumerate(pairwise(stations)):
            if following <= here:
                raise ValueError(
                    f"profile row {row + 2}: station {following:g} does not rise above {here:g}"
                )
        if stations[-1] > self.length_m:
            raise ValueError(f"profile station {stations[-1]:g} is beyond length_m")

    def _check_closure(self) -> None:
        station, _, curvature = _closed_columns(self)
        turned_deg = math.degrees(float(np.trapezoid(curvature, station)))
        if abs(abs(turned_deg) - 360.0) > CLOSURE_DEG:
            raise ValueError(
                f"the lap does not close: the curvature turns {turned_deg:.1f}°, not ±360° "
                f"within {CLOSURE_DEG:g}°"
            )
        if (turned_deg > 0.0) != (self.direction == "left"):
            raise ValueError(
                f"direction is {self.direction!r}, but the curvature (positive left) turns "
                f"{turned_deg:+.0f}°"
            )

    def _check_corners(self) -> None:
        names = [corner.name for corner in self.corner]
        for name in names:
            if names.count(name) > 1:
                raise ValueError(f"two corners are named {name!r}")
        for corner in self.corner:
            self._check_corner(corner)
        starts = sorted(self.corner, key=lambda corner: corner.transition_start_m % self.length_m)
        for here, following in zip(starts, (*starts[1:], *starts[:1]), strict=True):
            if here is not following:
                self._check_order(here, following)

    def _check_corner(self, corner: CornerFile) -> None:
        places = ("transition_start_m", "transition_end_m", "apex_m", "exit_m")
        ahead = 0.0
        for earlier, later in pairwise(places):
            step = getattr(corner, later) - getattr(corner, earlier)
            if step <= 0.0 and -step < self.length_m / 2:
                raise ValueError(f"corner {corner.name!r}: {later} must come after {earlier}")
            ahead += step % self.length_m
        if ahead >= self.length_m:
            raise ValueError(f"corner {corner.name!r}: is longer than the lap")
        for place in (*places, "target_m"):
            self._check_on_lap(corner, place, getattr(corner, place))
        if corner.window_m is not None:
            for station in corner.window_m:
                self._check_on_lap(corner, "window_m", station)
            opens, closes = corner.window_m
            if opens == closes or (closes - opens) % self.length_m > self.length_m / 2:
                raise ValueError(f"corner {corner.name!r}: window_m must end after it begins")

    def _check_on_lap(self, corner: CornerFile, place: str, station: float | None) -> None:
        if station is not None and not 0.0 <= station <= self.length_m:
            raise ValueError(f"corner {corner.name!r}: {place} is not on the lap")

    def _check_order(self, here: CornerFile, following: CornerFile) -> None:
        start = here.transition_start_m
        exit_ahead = (here.exit_m - start) % self.length_m
        if exit_ahead > (following.transition_start_m - start) % self.length_m:
            raise ValueError(f"corner {here.name!r} exits after {following.name!r} has begun")


def _closed_columns(file: TrackFile) -> tuple[FloatArray, FloatArray, FloatArray]:
    rows = np.array(file.profile, dtype=np.float64)
    if rows[-1, 0] < file.length_m:
        rows = np.vstack([rows, [file.length_m, rows[0, 1], rows[0, 2]]])
    return rows[:, 0].copy(), rows[:, 1].copy(), rows[:, 2].copy()


@dataclass(frozen=True, slots=True)
class CornerPlan:
    """One corner with every station resolved; stations are on the lap, 0 ≤ s < length.

    `side` is +1 where the corner turns left, −1 where it turns right.
    """

    name: str
    side: float
    entry_start_m: float
    zone_start_m: float
    transition_start_m: float
    transition_end_m: float
    apex_m: float
    exit_m: float
    target_m: float
    target_source: TargetSource
    window_m: tuple[float, float] | None


class Track:
    """A track ready for use on frames.

    Parameters
    ----------
    file
        The checked track file.
    """

    def __init__(self, file: TrackFile) -> None:
        self.file = file
        self.name = file.name
        self.length_m = file.length_m
        self.side = 1.0 if file.direction == "left" else -1.0
        station, bank_deg, curvature = _closed_columns(file)
        self._station = station
        self._bank = np.radians(bank_deg)
        self._curvature = curvature
        self.corners = self._plan_corners()
        self._map: _Map | None = None

    @classmethod
    def load(cls, path: Path) -> Track:
        """Read a track file; ConfigError where it cannot be right."""
        return cls(load_toml(path, TrackFile))

    def with_targets(self, targets: Mapping[str, float], where: str) -> Track:
        """Return the same track with a coach's marks.

        Raises
        ------
        ConfigError
            A mark names no corner or lies off the lap; the text starts with `where`.
        """
        names = [corner.name for corner in self.corners]
        for name, station in targets.items():
            if name not in names:
                raise ConfigError(f"{where}: no corner {name!r} (known: {', '.join(names)})")
            if not 0.0 <= station <= self.length_m:
                raise ConfigError(f"{where}: {name}: {station:g} is not on the lap")
        marked = Track(self.file)
        marked.corners = tuple(
            replace(corner, target_m=targets[corner.name], target_source="coach")
            if corner.name in targets
            else corner
            for corner in self.corners
        )
        return marked

    def difference_m(self, ahead: float, behind: float) -> float:
        """Return the shortest signed way from one station to another."""
        half = self.length_m / 2
        return (ahead - behind + half) % self.length_m - half

    def bank_rad(self, station_m: FloatArray) -> FloatArray:
        """Return the bank with the file's sign, shape of the input; NaN stays NaN."""
        return np.interp(station_m % self.length_m, self._station, self._bank)

    def curvature_1pm(self, station_m: FloatArray) -> FloatArray:
        """Return the plan-view curvature of the reference line, positive left."""
        return np.interp(station_m % self.length_m, self._station, self._curvature)

    def roll_rad(self, station_m: FloatArray) -> FloatArray:
        """Return the ISO 8855 roll of the road, positive left side up."""
        return -self.side * self.bank_rad(station_m)

    def locate(self, x_m: FloatArray, y_m: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Return station and lateral offset (in the road's plane, left positive) of positions.

        Needs the file's `origin`; without one both are NaN. NaN in gives NaN out.
        """
        if self.file.origin is None:
            return np.full_like(x_m, np.nan), np.full_like(x_m, np.nan)
        if self._map is None:
            self._map = _Map(self, self.file.origin)
        station, plan_offset = self._map.nearest(x_m, y_m)
        return station, plan_offset / np.cos(self.bank_rad(station))

    def phase(self, corner: CornerPlan, station_m: float) -> Phase:
        """Tell whether a station lies before, in or after the corner's banking transition."""
        if self.difference_m(station_m, corner.transition_start_m) < 0.0:
            return "before"
        if self.difference_m(station_m, corner.transition_end_m) <= 0.0:
            return "in"
        return "after"

    def view(self, tolerance_m: float, window_m: float) -> TrackView:
        """Return the track as displays need it, with the coach's window where the file has none."""
        return TrackView(
            self.name,
            self.length_m,
            tuple(self._corner_view(corner, tolerance_m, window_m) for corner in self.corners),
        )

    def _corner_view(self, corner: CornerPlan, tolerance_m: float, window_m: float) -> CornerView:
        span = (corner.apex_m - corner.entry_start_m) % self.length_m
        stations = (corner.entry_start_m + np.linspace(0.0, span, 61)) % self.length_m
        banks = np.degrees(self.bank_rad(stations))
        default = (corner.target_m - window_m, corner.target_m + tolerance_m)
        return CornerView(
            corner=corner.name,
            entry_start_m=corner.entry_start_m,
            transition_start_m=corner.transition_start_m,
            transition_end_m=corner.transition_end_m,
            apex_m=corner.apex_m,
            exit_m=corner.exit_m,
            target_m=corner.target_m,
            window_m=corner.window_m or default,
            profile=tuple(zip(stations.tolist(), banks.tolist(), strict=True)),
        )

    def _plan_corners(self) -> tuple[CornerPlan, ...]:
        length = self.length_m
        ordered = sorted(self.file.corner, key=lambda corner: corner.transition_start_m % length)
        return tuple(
            self._plan_corner(corner, ordered[index - 1]) for index, corner in enumerate(ordered)
        )

    def _plan_corner(self, corner: CornerFile, previous: CornerFile) -> CornerPlan:
        length = self.length_m
        start = corner.transition_start_m % length
        free_m = (start - previous.exit_m) % length
        side = {"left": 1.0, "right": -1.0, None: self.side}[corner.direction]
        target = corner.transition_start_m if corner.target_m is None else corner.target_m
        return CornerPlan(
            name=corner.name,
            side=side,
            entry_start_m=(start - min(ENTRY_LEAD_M, free_m)) % length,
            zone_start_m=(start - min(ZONE_LEAD_M, free_m)) % length,
            transition_start_m=start,
            transition_end_m=corner.transition_end_m % length,
            apex_m=corner.apex_m % length,
            exit_m=corner.exit_m % length,
            target_m=target % length,
            target_source="transition" if corner.target_m is None else "driver",
            window_m=corner.window_m,
        )


class _Map:
    """The reference line in the stream's world axes, sampled every meter."""

    def __init__(self, track: Track, origin: tuple[float, float, float, float]) -> None:
        count = math.ceil(track.length_m / MAP_STEP_M)
        self._step_m = track.length_m / count
        fine = np.linspace(0.0, track.length_m, 8 * count + 1)
        curvature = track.curvature_1pm(np.minimum(fine, np.nextafter(track.length_m, 0.0)))
        heading = origin[3] + _integral(curvature, fine)
        self._x = (origin[0] + _integral(np.cos(heading), fine))[::8]
        self._y = (origin[1] + _integral(np.sin(heading), fine))[::8]
        self._heading = heading[::8]
        self._length_m = track.length_m
        self._tree = cKDTree(np.column_stack([self._x[:-1], self._y[:-1]]))

    def nearest(self, x_m: FloatArray, y_m: FloatArray) -> tuple[FloatArray, FloatArray]:
        known = np.isfinite(x_m) & np.isfinite(y_m)
        place = np.column_stack([np.where(known, x_m, 0.0), np.where(known, y_m, 0.0)])
        index = self._tree.query(place)[1]
        cos, sin = np.cos(self._heading[index]), np.sin(self._heading[index])
        dx, dy = place[:, 0] - self._x[index], place[:, 1] - self._y[index]
        station = (index * self._step_m + dx * cos + dy * sin) % self._length_m
        offset = dy * cos - dx * sin
        return np.where(known, station, np.nan), np.where(known, offset, np.nan)


def _integral(values: FloatArray, along: FloatArray) -> FloatArray:
    steps = 0.5 * (values[1:] + values[:-1]) * np.diff(along)
    return np.concatenate([[0.0], np.cumsum(steps)])
