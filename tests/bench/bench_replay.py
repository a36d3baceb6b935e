"""Frames a second of decode, pipeline and events, estimates off, on one core.

    python tests/bench/bench_replay.py [--laps N] [--repeat N]

Prints one JSON object. The stream is drawn with a ruler (tests/streams.py), 60 Hz, with the
twenty usual keys in each datagram; every block size is timed `repeat` times, the sizes
in turn so that a disturbed moment of the machine does not fall on one of them, and the median
counts. Target: 100,000 frames a second in the blocks that a replay uses.
"""

from __future__ import annotations

import argparse
import json
import math
import os
import statistics
import sys
import time
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parents[1]))

import msgspec
from streams import Drive, oval_file

from canticle_adapters.json_datagram import JsonAdapter
from canticle_daemon.cli.replay import BLOCK
from canticle_daemon.coach.judge import Coach
from canticle_daemon.config import CoachSection
from canticle_daemon.physics.car import CarFile
from canticle_daemon.runtime.engine import Engine
from canticle_daemon.stream.pipeline import Pipeline
from canticle_daemon.track.profile import Track

SIZES = (1, 16, 256, 1024, 4096)
TARGET_HZ = 100_000


def datagrams(track: Track, laps: int) -> list[bytes]:
    """Return native datagrams of twenty keys."""
    made = []
    for frame in Drive(track, laps=laps).frames():
        full = msgspec.structs.replace(
            frame, pitch_rad=0.001, yaw_rad=frame.station_m / 318.0, vel_x_mps=frame.speed_mps,
            vel_y_mps=-0.31, lateral_m=0.75, fuel_kg=41.3, in_car=True, on_pit_road=False,
        )  # fmt: skip
        made.append(msgspec.json.encode(full))
    return made


def engine(track: Track) -> Engine:
    """Return what a replay with a track file runs."""
    car = CarFile()
    coach = Coach(track, CoachSection(), car.length_m, lambda: "no voice")
    return Engine(JsonAdapter(), lambda: Pipeline(track, car), coach)


def frames_per_s(stream: list[bytes], track: Track, size: int) -> tuple[float, int]:
    """Put the stream through once; return the speed and the count of events."""
    fresh, events = engine(track), 0
    begun = time.perf_counter()
    for at in range(0, len(stream), size):
        block = stream[at : at + size]
        result = fresh.process(block, [at] * len(block))
        events += len(result.events) if result is not None else 0
    return len(stream) / (time.perf_counter() - begun), events


def main() -> None:
    """Measure and print."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--laps", type=int, default=30)
    parser.add_argument("--repeat", type=int, default=5)
    given = parser.parse_args()
    if hasattr(os, "sched_setaffinity"):
        os.sched_setaffinity(0, {max(os.sched_getaffinity(0))})
    track = Track(oval_file())
    stream = datagrams(track, given.laps)
    sizes = {*SIZES, BLOCK}
    # One frame a block is slow and steady: a part of the stream is enough for it.
    parts = {size: stream[: max(len(stream) // 10, 1)] if size == 1 else stream for size in sizes}
    speeds: dict[int, list[float]] = {size: [] for size in sorted(sizes)}
    events = 0
    for _ in range(given.repeat):
        for size, found in speeds.items():
            speed, count = frames_per_s(parts[size], track, size)
            found.append(speed)
            events = count if size == BLOCK else events
    median = {size: statistics.median(found) for size, found in speeds.items()}
    print(
        json.dumps(
            {
                "frames": len(stream),
                "keys": len(json.loads(stream[0])),
                "bytes_a_datagram": math.ceil(sum(map(len, stream)) / len(stream)),
                "events": events,
                "replay_block": BLOCK,
                "frames_per_s": round(median[BLOCK]),
                "target_frames_per_s": TARGET_HZ,
                "reached": median[BLOCK] >= TARGET_HZ,
                "by_block": {str(size): round(speed) for size, speed in median.items()},
                "best_by_block": {str(size): round(max(all_)) for size, all_ in speeds.items()},
            }
        )
    )


if __name__ == "__main__":
    main()
