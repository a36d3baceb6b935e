"""The law: however a stream is cut into blocks, events and estimates are the same to the bit."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import fields
from functools import cache
from typing import Any

import msgspec
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from streams import Drive, cut, oval_file

from canticle_daemon.frame import Frame, FrameBlock
from canticle_daemon.messages import encode
from canticle_daemon.physics.car import CarFile
from canticle_daemon.stream.pipeline import Estimates, Pipeline
from canticle_daemon.track.profile import Track

TRACKS = {
    "left": Track(oval_file()),
    "right": Track(oval_file(side=-1.0)),
    "line in the zone": Track(oval_file(start_m=270.0)),
    "dogleg": Track(oval_file(dogleg=0.002)),
    "banked arc": Track(oval_file(arc=0.0008)),
}
OPTIONAL = [
    "accel_x_mps2", "accel_z_mps2", "steer_rad", "roll_rad", "lap", "throttle", "lateral_m",
]  # fmt: skip


@cache
def stream(track: str, seed: int, **options: Any) -> tuple[Frame, ...]:
    drive = Drive(TRACKS[track], seed=seed, **{"laps": 3, "rate_hz": 30.0, **options})
    return tuple(drive.frames())


def run(blocks: list[FrameBlock], track: Track | None, car: CarFile) -> tuple[list[bytes], Any]:
    pipeline = Pipeline(track, car)
    events: list[bytes] = []
    parts: list[Estimates] = []
    for block in blocks:
        outputs = pipeline.process(block)
        events += [encode(event) for event in outputs.events]
        assert outputs.estimates is not None
        assert outputs.estimates.time_s.size == len(block)
        parts.append(outputs.estimates)
    columns = {
        item.name: np.concatenate([getattr(part, item.name) for part in parts], axis=-1)
        for item in fields(Estimates)
    }
    return events, columns


def assert_same(
    frames: list[Frame], sizes: list[int], track: Track | None, car: CarFile | None = None
) -> list[bytes]:
    car = car or CarFile()
    whole_events, whole = run([FrameBlock.from_frames(frames)], track, car)
    events, columns = run(cut(frames, sizes), track, car)
    assert events == whole_events
    for name, column in whole.items():
        assert np.array_equal(columns[name], column, equal_nan=column.dtype.kind == "f"), name
    return events


# --- what may happen to a stream ---------------------------------------------------------------


def without(name: str) -> Callable[[list[Frame], int, int], list[Frame]]:
    def apply(frames: list[Frame], at: int, length: int) -> list[Frame]:
        spell = [msgspec.structs.replace(f, **{name: float("nan")}) for f in frames[at:][:length]]
        return frames[:at] + spell + frames[at + length :]

    return apply


def lost(frames: list[Frame], at: int, length: int) -> list[Frame]:
    return frames[:at] + frames[at + length :]


def repeated(frames: list[Frame], at: int, length: int) -> list[Frame]:
    return frames[:at] + [frames[at]] * (length % 5 + 1) + frames[at:]


def swapped(frames: list[Frame], at: int, length: int) -> list[Frame]:
    pair = frames[at : at + 2]
    return frames[:at] + pair[::-1] + frames[at + 2 :]


def rewound(frames: list[Frame], at: int, length: int) -> list[Frame]:
    return frames[:at] + frames[max(at - length, 0) :]


def towed(frames: list[Frame], at: int, length: int) -> list[Frame]:
    moved = [
        msgspec.structs.replace(f, station_m=(f.station_m + 30.0 * length) % 2000.0)
        for f in frames[at:]
    ]
    return frames[:at] + moved


def slowed(frames: list[Frame], at: int, length: int) -> list[Frame]:
    slow = [msgspec.structs.replace(f, speed_mps=3.0) for f in frames[at:][:length]]
    return frames[:at] + slow + frames[at + length :]


def trembling(frames: list[Frame], at: int, length: int) -> list[Frame]:
    """Places go back and forth by up to 20 m, across whatever gate lies there."""
    moved = [
        msgspec.structs.replace(f, station_m=(f.station_m + (7 * i % 21) - 10.0) % 2000.0)
        for i, f in enumerate(frames[at:][:length])
    ]
    return frames[:at] + moved + frames[at + length :]


def flagged(frames: list[Frame], at: int, length: int) -> list[Frame]:
    told = [
        msgspec.structs.replace(
            f, caution=True, on_pit_road=length % 2 == 0, fuel_kg=30.0,
            wheel_load_n=(4000.0, 5000.0, 4100.0, float(length)),
        )
        for f in frames[at:][:length]
    ]  # fmt: skip
    return frames[:at] + told + frames[at + length :]


MISHAPS = [
    *map(without, OPTIONAL), lost, repeated, swapped, rewound, towed, slowed, trembling, flagged,
]  # fmt: skip

mishaps = st.lists(
    st.tuples(st.sampled_from(MISHAPS), st.floats(0.0, 0.95), st.integers(1, 90)), max_size=6
)
sizes = st.lists(st.one_of(st.integers(1, 12), st.integers(1, 600)), min_size=1, max_size=12)


@settings(max_examples=40)
@given(st.sampled_from(sorted(TRACKS)), st.integers(1, 4), mishaps, sizes)
def test_any_cut_of_any_stream_gives_the_same_bits(
    name: str, seed: int, events: list[Any], blocks: list[int]
) -> None:
    frames = list(stream(name, seed))
    for mishap, share, length in events:
        frames = mishap(frames, int(share * len(frames)), length)
    assert_same(frames, blocks, TRACKS[name])


@settings(max_examples=15)
@given(st.integers(1, 4), mishaps, sizes)
def test_the_law_holds_without_a_track(seed: int, events: list[Any], blocks: list[int]) -> None:
    frames = list(stream("left", seed))
    for mishap, share, length in events:
        frames = mishap(frames, int(share * len(frames)), length)
    assert_same(frames, blocks, None)


@pytest.mark.parametrize(
    "options",
    [
        {},
        {"steer": False},
        {"vertical": False},
        {"attitude": False},
        {"attitude": False, "vertical": False, "steer": False},
        {"correction_deg": 1.0, "quantum_deg": 1.0, "drift_dps": 0.05},
    ],
    ids=lambda options: " ".join(options) or "complete",
)
@pytest.mark.parametrize("name", ["left", "right"])
def test_frame_by_frame_equals_all_at_once(name: str, options: dict[str, Any]) -> None:
    frames = list(stream(name, 5, laps=2, **options))
    events = assert_same(frames, [1], TRACKS[name])
    assert b'"entry"' in b"".join(events)
