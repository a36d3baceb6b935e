"""Place, laps and lap times, through the whole pipeline."""

from __future__ import annotations

import math

import msgspec
import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy.integrate import solve_ivp
from steady import NAN
from streams import Drive, oval_file

from canticle_daemon.frame import Frame, FrameBlock
from canticle_daemon.messages import LapCompleted
from canticle_daemon.physics.car import CarFile
from canticle_daemon.stream.pipeline import Outputs, Pipeline
from canticle_daemon.track.profile import Track, TrackFile

ORIGIN = (120.0, -75.0, 3.0, 0.8)
LENGTH = 2000.0


def oval(side: float = 1.0) -> Track:
    data = oval_file(side=side).model_dump() | {"origin": ORIGIN}
    return Track(TrackFile.model_validate(data))


def run(track: Track | None, frames: list[Frame]) -> Outputs:
    return Pipeline(track, CarFile()).process(FrameBlock.from_frames(frames))


def laps_of(outputs: Outputs) -> list[LapCompleted]:
    return [event for event in outputs.events if isinstance(event, LapCompleted)]


def changed(frames: list[Frame], **changes: float) -> list[Frame]:
    return [msgspec.structs.replace(frame, **changes) for frame in frames]


def walked(track: Track, station: np.ndarray, offset_m: float) -> tuple[np.ndarray, np.ndarray]:
    """Positions at a plan offset from the line, the line's path integrated by scipy."""
    rows = np.array(track.file.profile)
    table = np.vstack([rows, [LENGTH, *rows[0, 1:]]])

    def slope(s: float, state: np.ndarray) -> list[float]:
        return [
            math.cos(state[2]),
            math.sin(state[2]),
            float(np.interp(s, table[:, 0], table[:, 2])),
        ]

    start = [ORIGIN[0], ORIGIN[1], ORIGIN[3]]
    path = solve_ivp(slope, (0.0, LENGTH), start, max_step=2.5, dense_output=True).sol
    x, y, heading = path(station % LENGTH)
    return x - offset_m * np.sin(heading), y + offset_m * np.cos(heading)


@pytest.mark.parametrize("side", [1.0, -1.0])
@pytest.mark.parametrize("offset", [0.0, 4.0, -5.5])
def test_place_from_the_position_on_the_map(side: float, offset: float) -> None:
    track = oval(side)
    frames = Drive(track, laps=3, rate_hz=20.0).frames()
    truth = np.array([frame.station_m for frame in frames])
    x, y = walked(track, truth, offset)
    moved = [
        msgspec.structs.replace(frame, station_m=NAN, lap=NAN, pos_x_m=px, pos_y_m=py)
        for frame, px, py in zip(frames, x.tolist(), y.tolist(), strict=True)
    ]
    outputs = run(track, moved)
    assert outputs.estimates is not None
    away = (outputs.estimates.station_m - truth + LENGTH / 2) % LENGTH - LENGTH / 2
    assert float(np.abs(away).max()) < 0.5
    assert outputs.estimates.lap.tolist() == [int(frame.lap) for frame in frames]
    station, lateral = track.locate(x, y)
    bank = np.radians(np.interp(truth, *np.array(track.file.profile).T[:2]))
    # In the road's plane the same offset is longer by the cosine of the bank.
    assert_allclose(lateral * np.cos(bank), offset, atol=0.1)
    assert station.shape == truth.shape


def test_without_an_origin_a_position_is_no_place() -> None:
    station, lateral = Track(oval_file()).locate(np.array([0.0, 1.0]), np.array([0.0, 2.0]))
    assert np.isnan(station).all()
    assert np.isnan(lateral).all()


def test_lap_times_are_interpolated_to_a_millisecond() -> None:
    """60.37 m/s round 2,000 m takes 33.1290376 s, 17 thousandths of it between two frames."""
    track = oval()
    frames = changed(Drive(track, laps=5, speed_mps=60.37).frames(), lap=NAN)
    done = laps_of(run(track, frames))
    assert [event.lap for event in done] == [1, 2, 3, 4]
    for event in done:
        assert event.valid
        assert event.lap_time_s == pytest.approx(2000.0 / 60.37, abs=1e-3)


@pytest.mark.parametrize("shift", [-40, -7, -1, 0, 1, 7, 40])
def test_a_stream_may_count_its_laps_early_or_late(shift: int) -> None:
    track = oval()
    frames = Drive(track, laps=4, rate_hz=60.0).frames()
    told = [frames[min(max(i + shift, 0), len(frames) - 1)].lap for i in range(len(frames))]
    frames = [msgspec.structs.replace(f, lap=n) for f, n in zip(frames, told, strict=True)]
    assert [event.lap for event in laps_of(run(track, frames))] == [1, 2, 3]


def test_laps_are_counted_where_the_stream_does_not_tell() -> None:
    frames = changed(Drive(oval(), laps=4, rate_hz=30.0).frames(), lap=NAN)
    for track in (oval(), None):
        outputs = run(track, frames)
        assert outputs.estimates is not None
        assert [event.lap for event in laps_of(outputs)] == [1, 2, 3]
        assert outputs.estimates.lap[0] == 1
        assert outputs.estimates.lap[-1] == 4


def standing(station: float, seconds: float, jitter_m: float = 0.0) -> list[Frame]:
    chance = np.random.default_rng(3)
    return [
        Frame(
            50.0 + i / 60.0, 0.0, 0.0, accel_y_mps2=0.0, accel_x_mps2=0.0, accel_z_mps2=9.81,
            station_m=float((station + (chance.normal(0.0, jitter_m) if i else 0.0)) % LENGTH),
        )
        for i in range(int(60 * seconds))
    ]  # fmt: skip


def followed_by_laps(start: list[Frame], laps: int) -> list[Frame]:
    frames = changed(Drive(oval(), laps=laps, time0_s=start[-1].time_s + 1 / 60).frames(), lap=NAN)
    return start + frames


@pytest.mark.parametrize("jitter", [0.0, 0.3])
def test_a_car_that_stands_on_the_line_completes_nothing(jitter: float) -> None:
    outputs = run(oval(), standing(0.0, 5.0, jitter))
    assert laps_of(outputs) == []


@pytest.mark.parametrize("jitter", [0.0, 0.3])
def test_a_race_from_a_standing_start_on_the_line(jitter: float) -> None:
    done = laps_of(run(oval(), followed_by_laps(standing(0.1, 5.0, jitter), 3)))
    assert [event.lap for event in done] == [1, 2]
    assert done[1].valid
    assert done[1].lap_time_s == pytest.approx(2000.0 / 60.0, abs=1e-3)


def test_a_first_lap_from_the_line_is_whole() -> None:
    """The stream begins 0.01 m beyond the line, at speed: the whole lap is seen."""
    done = laps_of(run(oval(), Drive(oval(), laps=2, rate_hz=60.0).frames()))
    assert done[0].valid
    assert done[0].lap_time_s == pytest.approx(2000.0 / 60.0, abs=1e-3)


def test_a_first_lap_joined_in_the_middle_is_not_valid() -> None:
    frames = changed(Drive(oval(), laps=3, rate_hz=60.0).frames(), lap=NAN)[400:]
    done = laps_of(run(oval(), frames))
    assert [(event.lap, event.valid, event.lap_time_s is None) for event in done] == [
        (1, False, True),
        (2, True, False),
    ]


def test_rolling_back_over_the_line_is_not_a_lap() -> None:
    """Two meters over the line, back over it, and on again: one lap ended, and once."""
    track = oval()
    way = np.concatenate([
        np.arange(1900.0, 2002.0, 0.5),
        np.arange(2002.0, 1996.0, -0.1),
        np.arange(1996.0, 2300.0, 0.5),
    ])  # fmt: skip
    frames = [
        Frame(
            5.0 + i / 30.0, 15.0, 0.0, accel_y_mps2=0.0, accel_x_mps2=0.0, accel_z_mps2=9.81,
            station_m=s % LENGTH,
        )
        for i, s in enumerate(way.tolist())
    ]  # fmt: skip
    outputs = run(track, frames)
    assert outputs.estimates is not None
    assert [event.lap for event in laps_of(outputs)] == [1]
    assert outputs.estimates.lap[-1] == 2


def test_lap_energy_is_the_account_at_the_line_and_starts_again() -> None:
    track = oval()
    outputs = run(track, Drive(track, laps=4, rate_hz=60.0).frames())
    assert outputs.estimates is not None
    energy, lap = outputs.estimates.energy_j, outputs.estimates.lap
    for event in laps_of(outputs):
        last = int(np.flatnonzero(lap == event.lap)[-1])
        assert_allclose(event.tire_energy_j, energy[:, last], rtol=2e-3)
        assert (energy[:, last + 1] < 0.01 * energy[:, last]).all()
        assert np.all(np.diff(energy[:, lap == event.lap]) >= 0.0)
        assert event.peak_demand == np.nanmax(outputs.estimates.demand[lap == event.lap])


def test_a_station_before_the_line_is_the_end_of_the_lap_before() -> None:
    track = Track(oval_file())
    frames = [f for f in Drive(track, laps=2).frames() if f.lap == 1][-200:]
    counted = changed(frames, lap=NAN)
    before = [msgspec.structs.replace(f, station_m=f.station_m - LENGTH) for f in counted]
    there, here = run(track, before).estimates, run(track, counted).estimates
    assert there is not None and here is not None  # noqa: PT018
    assert_allclose(there.station_m, here.station_m, atol=1e-9)
    assert_allclose(there.demand, here.demand)
