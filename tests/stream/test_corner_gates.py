"""Gates are passed once however places tremble, and a corner seen half is not judged."""

from __future__ import annotations

import math
from collections import Counter

import msgspec
import numpy as np
import pytest
from streams import Drive, cut, oval_file

from canticle_daemon.frame import Frame
from canticle_daemon.messages import Corner, Discontinuity, Entry, Event, LapEvent, TurnIn
from canticle_daemon.physics.car import CarFile
from canticle_daemon.stream.pipeline import Pipeline
from canticle_daemon.track.profile import Track, TrackFile

SPEED = 60.0


def run(track: Track, frames: list[Frame]) -> list[Event]:
    pipeline = Pipeline(track, CarFile())
    return [e for block in cut(frames, [300]) for e in pipeline.process(block).events]


def counted(events: list[Event]) -> Counter[tuple[str, int, str]]:
    kinds = (TurnIn, Entry, Corner)
    return Counter((type(e).__name__, e.lap, e.corner) for e in events if isinstance(e, kinds))


def moved(frames: list[Frame], meters: np.ndarray, length: float) -> list[Frame]:
    return [
        msgspec.structs.replace(f, station_m=(f.station_m + m) % length)
        for f, m in zip(frames, meters.tolist(), strict=True)
    ]


def without_a_corner(file: TrackFile) -> TrackFile:
    return file.model_copy(update={"corner": file.corner[:1]})


@pytest.mark.parametrize("corners", [1, 2])
@pytest.mark.parametrize("rate_hz", [60.0, 360.0])
def test_a_trembling_place_adds_and_loses_no_event(corners: int, rate_hz: float) -> None:
    """At 360 Hz a car at 60 m/s moves 0.17 m a frame: half a meter of noise goes back and forth."""
    file = oval_file()
    track = Track(file if corners == 2 else without_a_corner(file))
    frames = Drive(track, laps=3, rate_hz=rate_hz).frames()
    noise = np.random.default_rng(5).normal(0.0, 0.5, len(frames))
    noise[:20] = 0.0
    steady, trembling = run(track, frames), run(track, moved(frames, noise, track.length_m))
    assert counted(trembling) == counted(steady)
    assert set(counted(steady).values()) == {1}
    assert len(counted(steady)) == 3 * 3 * corners


def test_a_car_that_rolls_back_over_a_gate_has_passed_it_once() -> None:
    track = Track(oval_file())
    frames = Drive(track, laps=2).frames()
    apex = track.corners[0].apex_m
    at = next(i for i, f in enumerate(frames) if f.station_m > apex + 5.0)
    back = np.zeros(len(frames))
    back[at : at + 60] = -np.concatenate([np.linspace(0, 50, 30), np.linspace(50, 0, 30)])
    events = run(track, moved(frames, back, track.length_m))
    assert not any(isinstance(e, Discontinuity) for e in events)
    assert set(counted(events).values()) == {1}


def first(events: list[Event], kind: type[LapEvent]) -> LapEvent | None:
    return next((e for e in events if isinstance(e, kind) and e.lap == 1), None)


@pytest.mark.parametrize("before_knot_m", [-90.0, -60.0, -30.0, 0.0, 30.0, 55.0])
def test_a_corner_counts_only_after_a_second_of_straight(before_knot_m: float) -> None:
    """The stream begins within a second of the knot, or when the wheel is already being turned."""
    track = Track(oval_file())
    drive = Drive(track, laps=2, scatter_m=0.0, mean_margin_m=20.0)
    frames = drive.frames()
    knot = next(s for lap, name, s in drive.knots if (lap, name) == (1, "North"))
    later = [f for f in frames if f.lap > 1 or f.station_m >= knot - before_knot_m]
    events = run(track, later)
    turn_in, entry = first(events, TurnIn), first(events, Entry)
    assert turn_in is None or turn_in.corner == "South"
    assert isinstance(entry, Entry)
    assert entry.corner == "North"
    assert (entry.verdict, entry.turn_in_station_m) == ("not judged", None)
    assert entry.why == "no second of straight was seen before it"


def test_after_a_second_of_straight_it_counts() -> None:
    track = Track(oval_file())
    drive = Drive(track, laps=2, scatter_m=0.0, mean_margin_m=20.0)
    frames = drive.frames()
    knot = next(s for lap, name, s in drive.knots if (lap, name) == (1, "North"))
    events = run(track, [f for f in frames if f.lap > 1 or f.station_m >= knot - 1.2 * SPEED])
    for kind in (TurnIn, Entry):
        found = first(events, kind)
        assert isinstance(found, TurnIn | Entry)
        assert found.corner == "North"
        assert found.turn_in_station_m is not None
        assert math.isclose(found.turn_in_station_m, knot, abs_tol=3.0)


def test_a_gap_on_the_way_in_is_no_late_turn_in() -> None:
    """A second lost just before the bank rises: the steering is found already turned."""
    track = Track(oval_file())
    drive = Drive(track, laps=2, scatter_m=0.0, mean_margin_m=20.0)
    frames = drive.frames()
    knot = next(s for lap, name, s in drive.knots if (lap, name) == (2, "North"))
    at = next(i for i, f in enumerate(frames) if f.lap == 2 and f.station_m > knot - 30.0)
    events = run(track, frames[:at] + frames[at + 60 :])
    assert sum(isinstance(e, Discontinuity) for e in events) == 1
    assert ("TurnIn", 2, "North") not in counted(events)
    entry = next(e for e in events if isinstance(e, Entry) and (e.lap, e.corner) == (2, "North"))
    assert entry.verdict == "not judged"
