"""Breaks of the stream: what counts as one, what it says, and what is forgotten."""

from __future__ import annotations

import math

import msgspec
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from steady import NAN, bare_car, ring, steady
from streams import Drive, oval_file

from canticle_daemon.frame import Frame, FrameBlock
from canticle_daemon.messages import Discontinuity, Entry, LapCompleted
from canticle_daemon.physics.car import CarFile
from canticle_daemon.stream.continuity import JUMP_M, MAX_GAP_S, REORDER_S, Continuity, Continuous
from canticle_daemon.stream.pipeline import Pipeline
from canticle_daemon.track.profile import Track

LENGTH = 2000.0


def frame(time: float, station: float = NAN, speed: float = 60.0, **more: float) -> Frame:
    return Frame(time, speed, 0.0, accel_y_mps2=0.0, station_m=station, **more)


def sort(frames: list[Frame], length: float | None = LENGTH) -> Continuous:
    return Continuity(length).process(FrameBlock.from_frames(frames))


def driven(count: int = 30, start: float = 0.0, rate: float = 60.0) -> list[Frame]:
    return [frame(10.0 + i / rate, (start + 60.0 * i / rate) % LENGTH) for i in range(count)]


def test_an_unbroken_stream_is_kept_whole() -> None:
    found = sort(driven())
    assert found.kept.tolist() == list(range(30))
    assert found.breaks == ()
    assert found.dt_s[0] == 0.0
    np.testing.assert_allclose(found.dt_s[1:], 1 / 60, rtol=1e-9)


@pytest.mark.parametrize("length", [LENGTH, None])
def test_the_start_line_is_no_break(length: float | None) -> None:
    assert sort(driven(200, start=1990.0), length).breaks == ()


def test_a_repeat_and_a_late_frame_are_stale() -> None:
    frames = driven()
    order = [0, 1, 1, 2, 4, 3, 5, 6, 6, 6, 7]
    found = sort([frames[i] for i in order])
    assert [order[i] for i in found.kept.tolist()] == [0, 1, 2, 4, 5, 6, 7]
    assert found.breaks == ()


@pytest.mark.parametrize(("skipped", "broken"), [(MAX_GAP_S - 0.01, False), (0.52, True)])
def test_a_gap(skipped: float, broken: bool) -> None:
    frames = [frame(0.0, 0.0), frame(skipped, 60.0 * skipped), frame(skipped + 0.02, 40.0)]
    found = sort(frames)
    assert [item.reason for item in found.breaks] == (["gap"] if broken else [])
    assert found.kept.size == 3
    if broken:
        assert found.breaks[0].index == 1
        assert found.dt_s[1] == 0.0
        assert "0.520 s" in found.breaks[0].detail


@pytest.mark.parametrize(("back", "broken"), [(REORDER_S - 0.01, False), (30.0, True)])
def test_a_rewind(back: float, broken: bool) -> None:
    frames = [frame(50.0, 1000.0), frame(50.0 - back, 1000.0 - 60.0 * back)]
    found = sort(frames)
    assert [item.reason for item in found.breaks] == (["rewind"] if broken else [])
    assert found.kept.size == (2 if broken else 1)
    assert not broken or "30.000 s" in found.breaks[0].detail


@pytest.mark.parametrize("way", [JUMP_M - 5.0, JUMP_M + 5.0, -JUMP_M - 5.0, 700.0, -700.0])
def test_a_jump_of_the_station(way: float) -> None:
    frames = [frame(0.0, 1000.0), frame(0.02, 1001.2 + way)]
    assert [item.reason for item in sort(frames).breaks] == (["jump"] if abs(way) > 26 else [])


def test_a_jump_of_the_position() -> None:
    here = {"pos_x_m": 100.0, "pos_y_m": 50.0}
    there = {"pos_x_m": -200.0, "pos_y_m": 450.0}
    found = sort([frame(0.0, **here), frame(0.02, **here), frame(0.04, **there)])
    assert [(item.index, item.reason) for item in found.breaks] == [(2, "jump")]
    assert "500 m" in found.breaks[0].detail  # 300, 400, 500: a right triangle


def test_without_a_length_only_a_fall_toward_zero_is_the_line() -> None:
    line = [frame(0.0, 2519.0), frame(0.02, 0.3)]
    towed = [frame(0.0, 2519.0), frame(0.02, 900.0)]
    assert sort(line, None).breaks == ()
    # A fall to the middle of the lap cannot be the line.
    assert [item.reason for item in sort(towed, None).breaks] == ["jump"]


def test_a_fresh_start_after_reset() -> None:
    stage = Continuity(LENGTH)
    stage.process(FrameBlock.from_frames(driven()))
    stage.reset()
    found = stage.process(FrameBlock.from_frames([frame(0.0, 999.0)]))
    assert found.breaks == ()


@settings(max_examples=60)
@given(
    st.lists(
        st.tuples(st.floats(0.0, 100.0), st.floats(0.0, 3000.0), st.floats(0.0, 120.0)),
        min_size=1,
        max_size=60,
    )
)
def test_time_rises_between_breaks_whatever_comes(rows: list[tuple[float, float, float]]) -> None:
    found = sort([frame(*row) for row in rows])
    starts = [item.index for item in found.breaks]
    kept_s = np.array([rows[i][0] for i in found.kept.tolist()])
    steps = np.diff(kept_s, prepend=kept_s[0])
    for index, (step, dt) in enumerate(zip(steps.tolist(), found.dt_s.tolist(), strict=True)):
        if index == 0 or index in starts:
            assert dt == 0.0
        else:
            assert 0.0 < dt <= MAX_GAP_S
            assert dt == step


# --- what the pipeline makes of a break --------------------------------------------------------


def oval_stream(laps: int = 3, **options: float) -> tuple[Track, list[Frame]]:
    track = Track(oval_file())
    return track, Drive(track, laps=laps, rate_hz=30.0, **options).frames()


def events_of(track: Track | None, frames: list[Frame]) -> list[object]:
    return list(Pipeline(track, CarFile()).process(FrameBlock.from_frames(frames)).events)


def breaks_in(events: list[object]) -> list[tuple[str, float]]:
    return [(e.reason, e.time_s) for e in events if isinstance(e, Discontinuity)]


def test_an_event_says_why_and_when() -> None:
    track, frames = oval_stream(1)
    gapped = frames[:100] + frames[160:300]
    assert breaks_in(events_of(track, gapped)) == [("gap", frames[160].time_s)]
    rewound = frames[:300] + frames[100:200]
    assert breaks_in(events_of(track, rewound)) == [("rewind", frames[100].time_s)]
    towed = frames[:100] + [
        msgspec.structs.replace(f, station_m=(f.station_m + 900.0) % LENGTH) for f in frames[100:]
    ]
    assert breaks_in(events_of(track, towed)) == [("jump", frames[100].time_s)]


def test_a_stale_frame_repeats_the_estimate_before_it() -> None:
    track, frames = oval_stream(1)
    late = [*frames[:100], frames[95], *frames[100:110], frames[109]]
    found = Pipeline(track, CarFile()).process(FrameBlock.from_frames(late)).estimates
    plain = Pipeline(track, CarFile()).process(FrameBlock.from_frames(frames[:110])).estimates
    assert found is not None and plain is not None  # noqa: PT018
    assert found.time_s.size == len(late)
    assert found.time_s[100] == frames[99].time_s
    assert found.time_s[-1] == found.time_s[-2] == frames[109].time_s
    kept = np.delete(np.arange(112), [100, 111])
    assert np.array_equal(found.demand[kept], plain.demand)
    assert np.array_equal(found.energy_j[:, kept], plain.energy_j)


def test_a_block_of_stale_frames_alone_still_gives_an_estimate_each() -> None:
    track, frames = oval_stream(1)
    pipeline = Pipeline(track, CarFile())
    pipeline.process(FrameBlock.from_frames(frames[:50]))
    outputs = pipeline.process(FrameBlock.from_frames([frames[49], frames[48]]))
    assert outputs.events == []
    assert outputs.estimates is not None
    assert outputs.estimates.time_s.tolist() == [frames[49].time_s] * 2


def test_a_break_starts_a_new_account_and_no_lap_over_it_is_valid() -> None:
    track, frames = oval_stream(3)
    lap = len(frames) // 3
    cut = frames[: lap + 200] + frames[lap + 260 :]
    block = FrameBlock.from_frames(cut)
    outputs = Pipeline(track, CarFile()).process(block)
    assert outputs.estimates is not None
    assert (outputs.estimates.energy_j[:, lap + 199] > 0.0).all()
    assert (outputs.estimates.energy_j[:, lap + 200] == 0.0).all()
    laps = [event for event in outputs.events if isinstance(event, LapCompleted)]
    assert [(done.lap, done.valid, done.lap_time_s is None) for done in laps] == [
        (1, True, False),
        (2, False, True),
    ]


def test_a_break_within_an_entry_ends_it_unjudged() -> None:
    """The entry that was under way has lost its start, so nothing is said of it."""
    track, frames = oval_stream(2)
    at = next(i for i, f in enumerate(frames) if f.station_m > 260.0)
    events = events_of(track, frames[:at] + frames[at + 30 :])
    entries = [(e.lap, e.corner) for e in events if isinstance(e, Entry)]
    assert (1, "South") in entries
    assert (2, "North") in entries


@pytest.mark.parametrize("track", [None, ring(250.0, 20.0)], ids=["no track", "track"])
def test_after_a_break_all_is_as_in_a_fresh_pipeline(track: Track | None) -> None:
    """What was learned of the driver stays, but estimates owe nothing to the time before."""
    frames = steady(60.0, 250.0, 20.0, noise_mps2=0.3, seconds=6.0)
    second = [msgspec.structs.replace(f, time_s=f.time_s + 500.0) for f in frames]
    pipeline = Pipeline(track, bare_car())
    pipeline.process(FrameBlock.from_frames(frames))
    after = pipeline.process(FrameBlock.from_frames(second)).estimates
    fresh = Pipeline(track, bare_car()).process(FrameBlock.from_frames(second)).estimates
    assert after is not None and fresh is not None  # noqa: PT018
    for name in ("bank_rad", "bank_std_rad", "demand", "load_n", "sliding_power_w", "energy_j"):
        assert np.array_equal(getattr(after, name), getattr(fresh, name), equal_nan=True), name


def test_a_stream_that_repeats_forever_does_not_count_laps() -> None:
    frames = driven(10)
    pipeline = Pipeline(None, CarFile())
    for _ in range(5):
        outputs = pipeline.process(FrameBlock.from_frames([frames[-1]] * 3))
        assert outputs.events == []
    assert outputs.estimates is not None
    assert math.isclose(outputs.estimates.time_s[-1], frames[-1].time_s)
