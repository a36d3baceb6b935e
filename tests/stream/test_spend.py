"""The account: power and energy of the sliding, against independent sums."""

from __future__ import annotations

import math

import msgspec
import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy.integrate import simpson
from steady import NAN, bare_car, estimates, steady
from streams import Drive, oval_file

from canticle_daemon.frame import Frame, FrameBlock
from canticle_daemon.messages import Corner, Entry, LapCompleted
from canticle_daemon.physics.car import CarFile
from canticle_daemon.stream.pipeline import Pipeline
from canticle_daemon.track.profile import Track


def test_power_of_a_steady_turn_by_bisection() -> None:
    """Slip found by bisecting the brush tire's own cubic; power = force × slip speed.

    One tire of four, evenly loaded: a car as low as its tires, weight shared in four.
    """
    speed, friction, stiffness = 60.0, 1.3, 18.0
    tire = {
        "peak_friction": friction,
        "load_sensitivity": 0.0,
        "cornering_stiffness_per_load": stiffness,
    }
    car = bare_car(cg_height_m=0.0, front_weight_share=0.5, tire=tire)
    found = estimates(steady(speed, 250.0, 20.0), car=car)
    load = 1540.0 / 4.0 * math.hypot(9.81, speed**2 / 250.0) / math.hypot(1.0, 0.719509)
    force = 0.719509 * load
    low, high = 0.0, 3.0 * friction / stiffness
    for _ in range(80):
        slip = 0.5 * (low + high)
        reach = stiffness * slip / (3.0 * friction)
        low, high = (slip, high) if 1.0 - (1.0 - reach) ** 3 < 0.719509 / friction else (low, slip)
    assert_allclose(found.force_n, force, rtol=1e-5)
    assert_allclose(found.sliding_power_w, force * speed * slip, rtol=1e-4)


def test_energy_is_the_integral_of_power() -> None:
    """Simpson's rule over the power in place of the trapezoids of the account."""
    track = Track(oval_file())
    frames = Drive(track, laps=1, rate_hz=120.0).frames()
    found = Pipeline(track, CarFile()).process(FrameBlock.from_frames(frames)).estimates
    assert found is not None
    for share in (0.4, 0.7, 1.0):
        stop = int(share * len(frames))
        power = found.sliding_power_w[:, :stop]
        expected = simpson(power, x=found.time_s[:stop], axis=1)
        assert_allclose(found.energy_j[:, stop - 1], expected, rtol=2e-3)


def test_steady_energy_is_power_times_time_whatever_the_rate() -> None:
    for rate in (20.0, 60.0, 1000.0):
        found = estimates(steady(60.0, 250.0, 20.0, seconds=4.0, rate_hz=rate))
        time = found.time_s - found.time_s[0]
        assert_allclose(found.energy_j, found.sliding_power_w[:, :1] * time, rtol=1e-9, atol=1e-6)


def test_a_lost_packet_costs_no_energy() -> None:
    frames = steady(60.0, 250.0, 20.0, seconds=4.0)
    whole = estimates(frames).energy_j[:, -1]
    thinned = estimates([f for i, f in enumerate(frames) if i % 7]).energy_j[:, -1]
    assert_allclose(thinned, whole * (4.0 - 2 / 60) / (4.0 - 1 / 60), rtol=1e-9)


def test_a_slow_spell_spends_nothing_and_loses_nothing() -> None:
    frames = steady(60.0, 250.0, 20.0, seconds=4.0)
    slow = [
        msgspec.structs.replace(f, speed_mps=3.0) if 60 <= i < 120 else f
        for i, f in enumerate(frames)
    ]
    found = estimates(slow)
    assert np.isnan(found.sliding_power_w[:, 60:120]).all()
    assert_allclose(found.energy_j[:, 60:120], found.energy_j[:, 60:61] * np.ones(60))
    assert (found.energy_j[:, -1] > 1.5 * found.energy_j[:, 119]).all()


def test_energy_that_cannot_be_computed_is_null() -> None:
    """With no vertical acceleration and no map there is no load, so no power and no account."""
    found = estimates(steady(60.0, 250.0, 20.0, accel_z_mps2=NAN))
    assert np.isnan(found.sliding_power_w).all()
    assert np.isnan(found.energy_j).all()


def test_standing_costs_nothing_and_is_known() -> None:
    standing = [
        Frame(
            10.0 + i / 60.0, 0.0, 0.0, accel_y_mps2=0.0, accel_x_mps2=0.0, accel_z_mps2=9.81,
            station_m=5.0,
        )
        for i in range(60)
    ]  # fmt: skip
    moving = [msgspec.structs.replace(f, time_s=f.time_s - 39.0) for f in steady(60.0, 250.0, 20.0)]
    found = estimates([*standing, *moving])
    assert (found.energy_j[:, -1] > 0.0).all()


def test_entry_corner_and_lap_add_up() -> None:
    track = Track(oval_file())
    outputs = Pipeline(track, CarFile()).process(
        FrameBlock.from_frames(Drive(track, laps=4).frames())
    )
    for lap in (2, 3):
        done = next(e for e in outputs.events if isinstance(e, LapCompleted) and e.lap == lap)
        entries = [e for e in outputs.events if isinstance(e, Entry) and e.lap == lap]
        corners = [e for e in outputs.events if isinstance(e, Corner) and e.lap == lap]
        total = np.array(done.tire_energy_j)
        by_corner = np.sum([corner.corner_energy_j for corner in corners], axis=0)
        by_entry = np.sum([entry.entry_energy_j for entry in entries], axis=0)
        assert (by_entry < by_corner).all()
        assert (by_corner < total).all()
        # Straights at constant speed cost nearly nothing beside the corners.
        assert (by_corner > 0.9 * total).all()
        for entry, corner in zip(entries, corners, strict=True):
            assert entry.corner == corner.corner
            assert entry.entry_time_s < corner.corner_time_s


@pytest.mark.parametrize("rate", [60.0, 240.0])
def test_times_and_energy_of_an_entry_do_not_hang_on_the_rate(rate: float) -> None:
    """150 m before the transition to the apex, 275 m beyond: 425 m at 60 m/s."""
    track = Track(oval_file())
    outputs = Pipeline(track, CarFile()).process(
        FrameBlock.from_frames(Drive(track, laps=2, rate_hz=rate).frames())
    )
    entries = [e for e in outputs.events if isinstance(e, Entry)]
    corners = [e for e in outputs.events if isinstance(e, Corner)]
    for entry in entries[1:]:
        assert entry.entry_time_s == pytest.approx(425.0 / 60.0, abs=1e-6)
        assert entry.entry_speed_mps == pytest.approx(60.0)
    for corner in corners[1:]:
        assert corner.corner_time_s == pytest.approx(700.0 / 60.0, abs=1e-6)
