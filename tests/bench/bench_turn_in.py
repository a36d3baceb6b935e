"""How well turn-ins are found, and how near the demand is, over rehearsed laps.

    python tests/bench/bench_turn_in.py [--laps 60] [--seeds 101 102 103] [--correction DEG]

Prints one JSON object. The delay is compared with an oracle: a generalized likelihood ratio
for a ramp that knows each ramp's own slope, the noise, and the level the driver held, with its
threshold set to the same number of false alarms on the same zones.
"""

from __future__ import annotations

import argparse
import json
import math
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass, field
from importlib.resources import files
from pathlib import Path
from typing import Any

import numpy as np

from canticle_adapters.json_datagram import JsonAdapter
from canticle_adapters.rehearsal.driver import Style
from canticle_adapters.rehearsal.telemetry import Options, Rehearsal
from canticle_daemon.frame import FrameBlock
from canticle_daemon.messages import Entry, TurnIn
from canticle_daemon.physics.car import CarFile
from canticle_daemon.stream.onset import ramp_glr
from canticle_daemon.stream.pipeline import Pipeline
from canticle_daemon.track.profile import CornerPlan, Track

FALSE_S = 0.05
"""An alarm sooner than this before its knot is false."""
TOLERANCE_M, WINDOW_M, NEAR_LIMIT_M = 5.0, 30.0, 3.0


@dataclass
class Tally:
    """What one or more streams gave."""

    live_m: list[float] = field(default_factory=list)
    refined_m: list[float] = field(default_factory=list)
    live_verdict: list[bool] = field(default_factory=list)
    refined_verdict: list[bool] = field(default_factory=list)
    delay_s: list[float] = field(default_factory=list)
    zones: list[tuple[Any, float, float]] = field(default_factory=list)
    demand_error: list[float] = field(default_factory=list)
    missed: int = 0
    false: int = 0

    def add(self, other: Tally) -> None:
        for name, value in vars(other).items():
            mine = getattr(self, name)
            setattr(self, name, mine + value)


def drive(seed: int, laps: int, correction_deg: float | None, noise: bool) -> Tally:
    style = Style() if correction_deg is None else Style(correction_deg=correction_deg)
    rehearsal = Rehearsal(Options(laps=laps, seed=seed, noise=noise, style=style))
    adapter = JsonAdapter()
    frames, truth = [], []
    for datagram, told in rehearsal.datagrams():
        frame = adapter.decode(datagram)
        assert frame is not None
        frames.append(frame)
        truth.append(told)
    track = Track.load(Path(str(files("canticle_adapters.rehearsal") / "track.toml")))
    pipeline = Pipeline(track, CarFile())
    events, demands = [], []
    for start in range(0, len(frames), 1024):
        out = pipeline.process(FrameBlock.from_frames(frames[start : start + 1024]))
        events += out.events
        assert out.estimates is not None
        demands.append(out.estimates.demand)
    tally = Tally()
    error = np.concatenate(demands) - np.array([told["demand"] for told in truth])
    tally.demand_error = [float(np.sum(error**2)), float(error.size)]
    judge(tally, track, rehearsal, events, frames)
    return tally


def judge(tally: Tally, track: Track, rehearsal: Rehearsal, events: list, frames: list) -> None:
    live = {(e.lap, e.corner): e for e in events if isinstance(e, TurnIn)}
    entries = {(e.lap, e.corner): e for e in events if isinstance(e, Entry)}
    corners = {corner.name: corner for corner in track.corners}
    time = np.array([frame.time_s for frame in frames])
    wheel = np.array([frame.steer_rad for frame in frames])
    station = np.array([frame.station_m for frame in frames])
    for true in rehearsal.turn_ins:
        key = (true.lap, true.corner)
        corner = corners[true.corner]
        if key not in entries:
            continue
        margin = track.difference_m(corner.target_m, true.knot_station_m)
        right = "late" if margin < -TOLERANCE_M else "early" if margin > WINDOW_M else "on"
        clear = min(abs(margin + TOLERANCE_M), abs(margin - WINDOW_M)) > NEAR_LIMIT_M
        zone(tally, track, corner, true, (time, station, wheel))
        event, entry = live.get(key), entries[key]
        if event is None:
            tally.missed += 1
        else:
            delay = event.time_s - true.knot_time_s
            tally.false += delay < -FALSE_S
            tally.delay_s.append(delay)
            tally.live_m.append(track.difference_m(event.turn_in_station_m, true.knot_station_m))
        if clear:
            tally.live_verdict.append(event is not None and event.verdict == right)
            tally.refined_verdict.append(entry.verdict == right)
        if entry.turn_in_station_m is not None:
            tally.refined_m.append(track.difference_m(entry.turn_in_station_m, true.knot_station_m))


def zone(tally: Tally, track: Track, corner: CornerPlan, true: Any, columns: tuple) -> None:
    """Keep the oracle's statistic over one zone."""
    time, station, wheel = columns
    near = np.abs(time - true.knot_time_s) < 12.0
    way = (station - corner.transition_start_m + track.length_m / 2) % track.length_m
    way = way - track.length_m / 2
    inside = (
        near
        & (way >= -200.0)
        & (way <= track.difference_m(corner.apex_m, corner.transition_start_m))
    )
    moment = time[inside]
    signal = corner.side * wheel[inside]
    calm = signal[moment < true.knot_time_s - 0.05]
    if calm.size < 20:
        return
    dt = float(np.median(np.diff(moment)))
    noise = max(float(np.std(np.diff(calm))) / math.sqrt(2.0), 1e-4)
    level = corner.side * true.level_steer_rad
    statistic, _ = ramp_glr(signal - level, dt, abs(true.ramp_radps), round(0.8 / dt), noise)
    before = moment < true.knot_time_s - FALSE_S
    after = moment >= true.knot_time_s
    tally.zones.append(
        ((moment[after] - true.knot_time_s, statistic[after]), float(statistic[before].max()), dt)
    )


def oracle_delay_s(tally: Tally) -> float:
    tops = sorted((top for _, top, _ in tally.zones), reverse=True)
    threshold = max(tops[min(tally.false, len(tops) - 1)] * (1.0 + 1e-9), 4.0)
    delays = []
    for (since, statistic), _, _ in tally.zones:
        alarm = np.flatnonzero(statistic > threshold)
        if alarm.size:
            delays.append(float(since[alarm[0]]))
    return float(np.mean(delays))


def share(values: list[bool]) -> float:
    return round(float(np.mean(values)), 4) if values else math.nan


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--laps", type=int, default=60)
    parser.add_argument("--seeds", type=int, nargs="+", default=[101, 102, 103])
    parser.add_argument("--correction", type=float, default=None, help="size of corrections, deg")
    parser.add_argument("--no-noise", action="store_true")
    options = parser.parse_args()
    total = Tally()
    with ProcessPoolExecutor(2) as pool:
        jobs = [
            pool.submit(drive, seed, options.laps, options.correction, not options.no_noise)
            for seed in options.seeds
        ]
        for job in jobs:
            total.add(job.result())
    live, refined = np.abs(total.live_m), np.abs(total.refined_m)
    squares, counts = sum(total.demand_error[::2]), sum(total.demand_error[1::2])
    oracle = oracle_delay_s(total)
    delay = float(np.mean(total.delay_s))
    print(
        json.dumps(
            {
                "laps": options.laps,
                "seeds": options.seeds,
                "correction_deg": options.correction,
                "noise": not options.no_noise,
                "entries": len(total.live_m) + total.missed,
                "missed": total.missed,
                "false_turn_ins": total.false,
                "live_p90_m": round(float(np.percentile(live, 90)), 3),
                "live_within_4m": share((live <= 4.0).tolist()),
                "refined_p90_m": round(float(np.percentile(refined, 90)), 3),
                "refined_within_2m": share((refined <= 2.0).tolist()),
                "refined_count": int(refined.size),
                "live_verdict_right": share(total.live_verdict),
                "refined_verdict_right": share(total.refined_verdict),
                "verdicts": len(total.refined_verdict),
                "delay_s": round(delay, 4),
                "oracle_delay_s": round(oracle, 4),
                "delay_ratio": round(delay / oracle, 3),
                "demand_rms": round(math.sqrt(squares / counts), 5),
            },
            indent=1,
        )
    )


if __name__ == "__main__":
    main()
