"""Streams drawn with a ruler, for tests of the turn-in and of the pipeline's laws.

A point drives a track at constant speed; its steering is a level, a straight ramp from a known
knot to a height, a hold, and a ramp back. Nothing of the daemon's own formulas is used.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field

import numpy as np

from canticle_daemon.frame import Frame, FrameBlock
from canticle_daemon.track.profile import Track, TrackFile

G = 9.81


def smooth(u: float) -> float:
    u = min(max(u, 0.0), 1.0)
    return u * u * u * (10.0 - 15.0 * u + 6.0 * u * u)


def oval_file(
    *,
    side: float = 1.0,
    dogleg: float = 0.0,
    arc: float = 0.0,
    start_m: float = 0.0,
    banks: tuple[float, float] = (22.0, 15.0),
) -> TrackFile:
    """An oval of 2,000 m with two corners, its start line moved by `start_m`.

    `dogleg` is a kink of that curvature from 60 m to 160 m before the first transition, undone
    on the other straight; `arc` a constant curvature of the first straight.
    """
    length = 2000.0
    rows = []
    ends = ((300.0, 850.0), (1300.0, 1850.0))
    stations = np.arange(0.0, length, 5.0)
    for station in stations:
        place = (station + start_m) % length
        bank, curve = 4.0, 0.0
        for (begin, stop), high in zip(ends, banks, strict=True):
            inside = smooth((place - begin) / 100.0) * smooth((stop - place) / 100.0)
            bank += (high - 4.0) * inside
            curve += inside * math.pi / 450.0
        kink = dogleg * smooth((place - 140.0) / 30.0) * smooth((240.0 - place) / 30.0)
        undone = dogleg * smooth((place - 940.0) / 30.0) * smooth((1040.0 - place) / 30.0)
        bend = arc * smooth((place - 1900.0) / 50.0) if place > 1900.0 else 0.0
        bend += arc * (1.0 - smooth((place - 300.0) / 100.0)) if place < 400.0 else 0.0
        rows.append((float(station), bank, side * (curve + kink - undone + bend)))
    turned = np.trapezoid([row[2] for row in (*rows, (length, 0, rows[0][2]))], dx=5.0)
    scale = side * 2.0 * math.pi / float(turned)
    rows = [(s, b, c * scale if abs(c) > 0 else c) for s, b, c in rows]

    def corner(name: str, begin: float, stop: float) -> dict[str, object]:
        return {
            "name": name,
            "transition_start_m": (begin - start_m) % length,
            "transition_end_m": (begin + 100.0 - start_m) % length,
            "apex_m": (0.5 * (begin + stop) - start_m) % length,
            "exit_m": (stop - start_m) % length,
        }

    return TrackFile.model_validate(
        {
            "name": "Ruler Oval",
            "length_m": length,
            "direction": "left" if side > 0 else "right",
            "profile": rows,
            "corner": [corner("North", *ends[0]), corner("South", *ends[1])],
        }
    )


@dataclass
class Drive:
    """How the ruler car is driven, and the knots that follow from it."""

    track: Track
    seed: int = 1
    laps: int = 6
    rate_hz: float = 60.0
    speed_mps: float = 60.0
    slope_dps: float = 15.0
    height_deg: float = 18.0
    scatter_m: float = 12.0
    mean_margin_m: float = 10.0
    noise_deg: float = 0.1
    quantum_deg: float = 0.0
    correction_deg: float = 0.0
    corrections_per_s: float = 0.7
    drift_dps: float = 0.0
    steer: bool = True
    attitude: bool = True
    vertical: bool = True
    follows: bool = False
    """Whether yaw rate and forces follow the steering, else the road's curvature."""
    absent: tuple[tuple[int, str], ...] = ()
    """Corners (lap, name) in which the wheel is never turned."""
    dogleg_gain: float = 1.25
    dogleg_shift_m: float = 15.0
    time0_s: float = 100.0
    rng: np.random.Generator = field(init=False)
    knots: list[tuple[int, str, float]] = field(init=False, default_factory=list)

    def __post_init__(self) -> None:
        self.rng = np.random.default_rng(self.seed)

    def frames(self) -> list[Frame]:
        track, length = self.track, self.track.length_m
        count = int(self.laps * length / self.speed_mps * self.rate_hz)
        time = np.arange(count) / self.rate_hz
        way = self.speed_mps * time + 0.01
        clean = self._wheel(way, time)
        steer = self._measured(clean, time)
        station = way % length
        curvature = clean / (12.0 * 2.79) if self.follows else track.curvature_1pm(station)
        roll = track.roll_rad(station)
        heading_rate = self.speed_mps * curvature
        yaw_rate = heading_rate * np.cos(roll)
        across = self.speed_mps * heading_rate
        side = np.cos(roll) * across + G * np.sin(roll)
        up = G * np.cos(roll) - np.sin(roll) * across
        body = np.zeros(count)
        for _ in range(20):  # the body rolls by what its own accelerometer reads
            felt = np.cos(body) * side + np.sin(body) * up
            body = math.radians(1.0) / G * felt
        side, up = felt, np.cos(body) * up - np.sin(body) * side
        noisy = self.rng.normal
        side = side + noisy(0, 0.1, count)
        up = up + noisy(0, 0.1, count)
        rows = zip(
            (time + self.time0_s).tolist(), station.tolist(), (way // length + 1).tolist(),
            steer.tolist(), side.tolist(), up.tolist(),
            (yaw_rate + noisy(0, 0.001, count)).tolist(), (roll + body).tolist(),
            strict=True,
        )  # fmt: skip
        return [
            Frame(
                time_s=t, speed_mps=self.speed_mps, yaw_rate_radps=r, accel_x_mps2=0.3,
                accel_y_mps2=fy, accel_z_mps2=fz if self.vertical else math.nan,
                station_m=s, lap=lap, steer_rad=w if self.steer else math.nan,
                roll_rad=phi if self.attitude else math.nan, throttle=1.0, brake=0.0,
            )
            for t, s, lap, w, fy, fz, r, phi in rows
        ]  # fmt: skip

    def _wheel(self, way: np.ndarray, time: np.ndarray) -> np.ndarray:
        track, length = self.track, self.track.length_m
        wheel = np.zeros_like(way)
        gain = 12.0 * 2.79
        straight = np.asarray(track.curvature_1pm((way + self.dogleg_shift_m) % length)).copy()
        for corner in track.corners:
            turning = (way - corner.transition_start_m + 30.0) % length
            reach = (corner.exit_m - corner.transition_start_m) % length + 60.0
            inside = turning < reach
            level = np.interp((corner.transition_start_m - 45.0) % length, *self._table(track))
            straight[inside] = level
        wheel += self.dogleg_gain * gain * straight
        for lap in range(-1, self.laps + 1):
            for corner in track.corners:
                self._ramp(wheel, way, lap, corner)
        if self.correction_deg:
            self._corrections(wheel, time)
        return wheel

    def _measured(self, clean: np.ndarray, time: np.ndarray) -> np.ndarray:
        wheel = clean + np.radians(self.drift_dps) * time
        wheel += self.rng.normal(0.0, math.radians(self.noise_deg), time.size)
        if self.quantum_deg:
            step = math.radians(self.quantum_deg)
            wheel = np.round(wheel / step) * step
        return wheel

    @staticmethod
    def _table(track: Track) -> tuple[np.ndarray, np.ndarray]:
        station = np.arange(0.0, track.length_m, 5.0)
        return station, track.curvature_1pm(station)

    def _ramp(self, wheel: np.ndarray, way: np.ndarray, lap: int, corner) -> None:
        length = self.track.length_m
        late = self.rng.normal(-self.mean_margin_m, self.scatter_m)
        slope = math.radians(self.slope_dps) * self.rng.uniform(0.85, 1.15) / self.speed_mps
        height = math.radians(self.height_deg) * self.rng.uniform(0.9, 1.1)
        if (lap + 1, corner.name) in self.absent:
            return
        base = lap * length + corner.transition_start_m
        knot = base + late
        leave = base + (corner.exit_m - corner.transition_start_m) % length
        up = np.clip(slope * (way - knot), 0.0, height)
        down = np.clip((leave - way) / 120.0, 0.0, 1.0)
        wheel += corner.side * up * down
        if way[0] + self.speed_mps * 1.5 < knot < way[-1]:
            apex = base + (corner.apex_m - corner.transition_start_m) % length
            if apex < way[-1]:
                self.knots.append((int(base // length) + 1, corner.name, knot % length))

    def _corrections(self, wheel: np.ndarray, time: np.ndarray) -> None:
        size = math.radians(self.correction_deg)
        for begin in np.flatnonzero(
            self.rng.random(time.size) < self.corrections_per_s / self.rate_hz
        ):
            u = (time - time[begin]) / 0.5
            bell = np.where((u > 0) & (u < 1), np.sin(np.pi * np.clip(u, 0, 1)) ** 2, 0.0)
            wheel += size * self.rng.choice([-1.0, 1.0]) * bell


def cut(frames: list[Frame], sizes: list[int]) -> list[FrameBlock]:
    """Cut a stream into blocks of the sizes given, over and over."""
    blocks, at, turn = [], 0, 0
    while at < len(frames):
        size = sizes[turn % len(sizes)]
        blocks.append(FrameBlock.from_frames(frames[at : at + size]))
        at += size
        turn += 1
    return blocks
