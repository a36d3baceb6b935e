"""The bank under the car, from attitude, from specific force, from the map."""

from __future__ import annotations

import math
from typing import Any

import msgspec
import numpy as np
import pytest
from numpy.testing import assert_allclose
from steady import NAN, bare_car, estimates, ring, steady
from streams import Drive, oval_file

from canticle_daemon.frame import Frame
from canticle_daemon.physics.car import CarFile
from canticle_daemon.track.profile import Track

BANK_DEG = 20.0


def noisy(side: float = 1.0, **changes: Any) -> list[Frame]:
    """60 m/s on a 20° bank with 0.3 m/s² of noise in f_y: 1.86° a single sample."""
    return steady(60.0, 250.0, BANK_DEG, side=side, seconds=20.0, noise_mps2=0.3, **changes)


def settled(values: np.ndarray) -> np.ndarray:
    return np.degrees(values[300:])


@pytest.mark.parametrize("side", [1.0, -1.0])
@pytest.mark.parametrize("attitude", [True, False])
@pytest.mark.parametrize("mapped", [None, 20.0, 17.0])
def test_half_a_degree_at_sixty_meters_a_second(
    side: float, attitude: bool, mapped: float | None
) -> None:
    """The design's target: within 0.5°, whatever the map says."""
    track = None if mapped is None else ring(250.0, mapped, side=side)
    found = estimates(noisy(side, attitude=attitude), track)
    sign = side if track is None else 1.0  # without a track no side of the bank is the inside
    error = sign * settled(found.bank_rad) - BANK_DEG
    assert float(np.sqrt(np.mean(error**2))) < 0.5
    seconds = error[: 60 * (error.size // 60)].reshape(-1, 60).mean(axis=1)
    assert float(np.sqrt(np.mean(seconds**2))) < 0.4


def test_the_claimed_spread_is_about_the_true_one() -> None:
    found = estimates(noisy())
    error = settled(found.bank_rad) - BANK_DEG
    claimed = settled(found.bank_std_rad)
    rms = float(np.sqrt(np.mean(error**2)))
    assert 0.7 * rms < float(np.median(claimed)) < 3.0 * rms


def test_a_first_sample_is_not_called_sure() -> None:
    """One sample is good to 1.9° with this noise; nothing yet tells how noisy it is."""
    spread = np.degrees(estimates(noisy()).bank_std_rad)
    assert spread[0] >= 1.0
    assert spread[-1] < 0.7


@pytest.mark.parametrize("attitude", [True, False])
@pytest.mark.parametrize("side", [1.0, -1.0])
def test_body_roll_is_told_from_the_road(attitude: bool, side: float) -> None:
    """A body that rolls by 2° a g (10 m/s² in the road's plane here) without noise."""
    frames = steady(
        60.0, 250.0, BANK_DEG, side=side, seconds=8.0, gradient_deg_per_g=2.0, attitude=attitude
    )  # fmt: skip
    known = estimates(frames, None, bare_car(roll_gradient_deg_per_g=2.0))
    assert_allclose(side * settled(known.bank_rad), BANK_DEG, atol=0.1)
    ignored = estimates(frames, None, bare_car())
    assert abs(side * settled(ignored.bank_rad)[-1] - BANK_DEG) > 1.0


@pytest.mark.parametrize(("side", "bank"), [(1.0, 20.0), (-1.0, 20.0), (1.0, -6.0), (-1.0, -6.0)])
def test_the_sign_is_the_track_file_s(side: float, bank: float) -> None:
    """Positive where the surface rises away from the inside, adverse where it falls."""
    frames = steady(40.0, 300.0, bank, side=side, attitude=True)
    found = estimates(frames, ring(300.0, bank, side=side))
    assert_allclose(np.degrees(found.bank_rad), bank, atol=1e-9)


def test_the_inertial_example() -> None:
    """f_y = 11.0, u = 60, r = 0.24 give a road roll of −20.27858729° (Tseng's static estimate)."""
    frames = [
        msgspec.structs.replace(f, accel_y_mps2=11.0, yaw_rate_radps=0.24)
        for f in steady(60.0, 250.0, 20.0)
    ]
    found = estimates(frames)
    assert_allclose(np.degrees(found.bank_rad), 20.27858729, atol=1e-6)


def test_the_map_alone_where_nothing_is_measured() -> None:
    frames = steady(60.0, 250.0, 20.0, accel_y_mps2=NAN)
    found = estimates(frames, ring(250.0, 18.0))
    assert_allclose(np.degrees(found.bank_rad), 18.0, atol=1e-9)
    assert_allclose(np.degrees(found.bank_std_rad), 1.0)
    blind = estimates(frames, None)
    assert np.isnan(blind.bank_rad).all()
    assert np.isnan(blind.bank_std_rad).all()


def test_a_spell_without_attitude_falls_back_on_force() -> None:
    frames = steady(60.0, 250.0, 20.0, attitude=True, seconds=10.0)
    frames[300:] = [msgspec.structs.replace(f, roll_rad=NAN) for f in frames[300:]]
    found = estimates(frames)
    assert_allclose(np.degrees(found.bank_rad), 20.0, atol=0.05)
    assert found.bank_std_rad[0] == pytest.approx(math.radians(0.3))


def test_the_transition_is_followed() -> None:
    """A bank that rises from 4° to 22° in 1.7 s is followed with and without attitude."""
    track = Track(oval_file())
    truth_of = np.array(track.file.profile)
    for attitude, limit in ((True, 0.1), (False, 0.6)):
        frames = Drive(track, laps=2, attitude=attitude).frames()
        station = np.array([f.station_m for f in frames])
        truth = np.interp(station, truth_of[:, 0], truth_of[:, 1], period=track.length_m)
        error = np.degrees(estimates(frames, track, CarFile()).bank_rad) - truth
        assert float(np.sqrt(np.mean(error**2))) < limit


def corrected(*, told: bool, wave_hz: float = 0.5) -> list[Frame]:
    """A driver who keeps correcting: side velocity swings, and its rate adds to f_y alone."""
    frames, wave = [], 2.0 * math.pi * wave_hz
    for frame in steady(60.0, 250.0, BANK_DEG, seconds=20.0):
        swing = wave * frame.time_s
        frames.append(
            msgspec.structs.replace(
                frame,
                accel_y_mps2=frame.accel_y_mps2 + 1.2 * wave * math.cos(swing),
                vel_y_mps=1.2 * math.sin(swing) if told else NAN,
            )
        )
    return frames


def rms_deg(frames: list[Frame], track: Track | None) -> float:
    error = settled(estimates(frames, track).bank_rad) - BANK_DEG
    return float(np.sqrt(np.mean(error**2)))


def test_side_velocity_is_not_taken_for_bank() -> None:
    """Its rate of ±3.8 m/s² reads as ±24° of bank in a sample."""
    ringed = ring(250.0, BANK_DEG)
    assert rms_deg(corrected(told=True), ringed) < 0.3
    assert rms_deg(corrected(told=True), None) < 1.0
    assert rms_deg(corrected(told=False), ringed) < 1.5
    assert rms_deg(corrected(told=False), None) > 5.0  # nobody can tell it from the road


def test_what_cannot_be_told_from_the_road_widens_the_spread() -> None:
    unsure = np.degrees(estimates(corrected(told=False)).bank_std_rad)[300:]
    sure = np.degrees(estimates(corrected(told=True)).bank_std_rad)[300:]
    assert float(np.median(unsure)) > 5.0
    assert float(np.median(sure)) < 1.5
