"""The parts of the turn-in by themselves: guide, calibration, and the two knots."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from streams import oval_file

from canticle_daemon.stream.knots import Knot, live_knot, refined_knot
from canticle_daemon.stream.steering import Guide
from canticle_daemon.stream.turn_in import Calibration
from canticle_daemon.track.profile import Track

SLOPE = math.radians(15.0)
CORNER = math.pi / 450.0
"""Curvature of the ruler oval's corners before the lap is scaled to close."""


def guide_at(track: Track, station: float) -> tuple[float, float, float]:
    guide = Guide.of(track)
    columns = (guide.held_1pm, guide.level_1pm, guide.dogleg_1pm)
    held, level, dogleg = (
        float(np.interp(station, guide.station_m, column, period=track.length_m))
        for column in columns
    )
    return held, level, dogleg


# --- what the road asks for --------------------------------------------------------------------


@pytest.mark.parametrize("station", [150.0, 280.0, 350.0, 550.0, 1200.0, 1500.0])
def test_a_straight_asks_for_nothing_and_its_corner_is_not_taken_for_it(station: float) -> None:
    assert_allclose(guide_at(Track(oval_file()), station), 0.0, atol=0.07 * CORNER)


@pytest.mark.parametrize("side", [1.0, -1.0])
def test_a_banked_arc_is_the_level_and_is_held_into_the_corner(side: float) -> None:
    track = Track(oval_file(arc=0.001, side=side))
    road = float(track.curvature_1pm(np.array([200.0]))[0])
    assert math.copysign(1.0, road) == side
    for station in (150.0, 250.0, 330.0, 500.0):
        held, level, dogleg = guide_at(track, station)
        assert held == pytest.approx(road, rel=0.1)
        assert level == pytest.approx(road, rel=0.1)
        assert dogleg == 0.0


@pytest.mark.parametrize("kink", [0.002, -0.002])
@pytest.mark.parametrize("side", [1.0, -1.0])
def test_a_dogleg_is_held_and_marked_but_is_not_the_level(kink: float, side: float) -> None:
    track = Track(oval_file(dogleg=kink, side=side))
    road = float(track.curvature_1pm(np.array([190.0]))[0])
    held, level, dogleg = guide_at(track, 190.0)
    assert held == pytest.approx(road, rel=0.05)
    assert abs(level) < 0.1 * abs(road)
    assert dogleg == pytest.approx(abs(road), rel=0.1)
    for far in (60.0, 330.0, 500.0):
        assert guide_at(track, far)[2] == 0.0


@pytest.mark.parametrize("start", [0.0, 270.0, 420.0, 1000.0])
def test_the_guide_knows_no_start_line(start: float) -> None:
    here = Track(oval_file(dogleg=0.002, arc=0.0))
    moved = Track(oval_file(dogleg=0.002, start_m=start))
    for station in (100.0, 190.0, 290.0, 600.0, 1250.0):
        expected = guide_at(here, station)
        assert_allclose(guide_at(moved, (station - start) % 2000.0), expected, atol=0.05 * CORNER)


# --- the threshold -----------------------------------------------------------------------------


def learned(scale: float, count: int = 400, seed: int = 3) -> Calibration:
    calibration = Calibration()
    for value in np.random.default_rng(seed).exponential(scale, count).tolist():
        calibration.add(value)
    return calibration


def test_before_anything_is_known_the_threshold_is_cautious() -> None:
    calm = learned(1e-9).threshold(SLOPE, 0.0)
    assert Calibration().threshold(SLOPE, 0.0) > 10.0 * calm
    assert learned(1e-9, count=5).threshold(SLOPE, 0.0) == Calibration().threshold(SLOPE, 0.0)


def test_a_busier_hand_gets_a_higher_threshold() -> None:
    thresholds = [learned(scale).threshold(SLOPE, 0.0) for scale in (1e-4, 1e-3, 1e-2)]
    assert thresholds == sorted(thresholds)
    assert thresholds[2] > 3.0 * thresholds[0]


def test_the_threshold_lies_above_nearly_all_that_was_calm() -> None:
    """As good as none of 20,000 windows like those learned from passes it."""
    threshold = learned(1e-3).threshold(SLOPE, 0.0)
    again = np.random.default_rng(99).exponential(1e-3, 20_000)
    assert float(np.mean(again > threshold)) <= 2e-4


def test_a_perfectly_still_hand_leaves_a_floor() -> None:
    still = learned(0.0)
    assert still.threshold(SLOPE, 0.0) > 0.0
    assert still.threshold(2.0 * SLOPE, 0.0) > still.threshold(SLOPE, 0.0)


def test_a_coarse_wheel_raises_the_floor() -> None:
    still = learned(0.0)
    assert still.threshold(SLOPE, math.radians(2.0)) > still.threshold(SLOPE, 0.0)


def test_what_is_not_a_number_teaches_nothing() -> None:
    calibration = learned(1e-3)
    before = calibration.threshold(SLOPE, 0.0)
    for value in (math.nan, math.inf, -math.inf):
        calibration.add(value)
    assert calibration.threshold(SLOPE, 0.0) == before


# --- the knot, live ----------------------------------------------------------------------------


def ramp(
    rate: float, knot: float, until: float, *, slope: float = SLOPE, level: float = 0.0,
    noise: float = 0.0, seed: int = 1,
) -> tuple[np.ndarray, np.ndarray]:  # fmt: skip
    """A second and a half that ends on a ramp, as the detector hands it over."""
    time = until - np.arange(int(1.6 * rate))[::-1] / rate
    clean = level + slope * np.clip(time - knot, 0.0, None)
    return time, clean + np.random.default_rng(seed).normal(0.0, noise, time.size)


@pytest.mark.parametrize("rate", [60.0, 120.0, 360.0, 1000.0])
@pytest.mark.parametrize("since", [0.15, 0.3, 0.5])
def test_a_clean_ramp_is_found_to_a_few_centimeters(rate: float, since: float) -> None:
    time, signal = ramp(rate, 50.0 - since, 50.0, level=0.05)
    knot = live_knot(time, signal, SLOPE, 0.25 * SLOPE)
    assert knot.x == pytest.approx(50.0 - since, abs=0.015)
    assert knot.level == pytest.approx(0.05, abs=0.005)
    assert 0.0 < knot.std < 0.06


@pytest.mark.parametrize("noise_deg", [0.1, 0.3])
def test_the_live_knot_in_noise_and_what_it_says_of_its_error(noise_deg: float) -> None:
    misses, stds = [], []
    for seed in range(60):
        time, signal = ramp(60.0, 49.7, 50.0, noise=math.radians(noise_deg), seed=seed)
        knot = live_knot(time, signal, SLOPE, 0.25 * SLOPE)
        misses.append(knot.x - 49.7)
        stds.append(knot.std)
    rms = float(np.sqrt(np.mean(np.square(misses))))
    assert rms < 0.05
    assert 0.5 * rms < float(np.median(stds)) < 4.0 * rms


def test_a_driver_known_to_be_quick_is_not_pulled_to_the_usual_slope() -> None:
    """A ramp half as steep again as usual, with a usual spread of a quarter."""
    time, signal = ramp(60.0, 49.7, 50.0, slope=1.5 * SLOPE, noise=math.radians(0.05))
    knot = live_knot(time, signal, SLOPE, 0.25 * SLOPE)
    assert knot.x == pytest.approx(49.7, abs=0.04)
    assert knot.slope > 1.2 * SLOPE


@given(st.floats(-1e3, 1e5), st.floats(0.2, 0.5))
def test_the_knot_hangs_on_no_clock(zero: float, since: float) -> None:
    time, signal = ramp(60.0, 50.0 - since, 50.0, noise=0.002)
    here = live_knot(time, signal, SLOPE, 0.25 * SLOPE)
    there = live_knot(time + zero, signal, SLOPE, 0.25 * SLOPE)
    assert there.x - zero == pytest.approx(here.x, abs=0.01)


# --- the knot, at the apex ---------------------------------------------------------------------


def entry(
    *, knot_m: float = -12.0, noise_deg: float = 0.1, rate: float = 60.0, rest_deg: float = 1.0,
    height_deg: float = 18.0, seed: int = 1, tail: float = 1.0,
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:  # fmt: skip
    """From 250 m before the transition to 275 m beyond, at 60 m/s."""
    time = np.arange(int(525.0 / 60.0 * rate)) / rate
    way = 60.0 * time - 250.0
    slope = math.radians(15.0) / 60.0
    rise = np.clip(slope * (way - knot_m), 0.0, math.radians(height_deg))
    rise *= np.where(way > 150.0, tail, 1.0)
    noise = np.random.default_rng(seed).normal(0.0, math.radians(noise_deg), time.size)
    return time + 7.0, way, math.radians(rest_deg) + rise + noise


def refined(drawn: tuple[np.ndarray, np.ndarray, np.ndarray]) -> tuple[Knot, float] | None:
    """With a level of 1° and ramps of 18° known, and no alarm to start from."""
    return refined_knot(*drawn, math.radians(1.0), math.radians(18.0), None)


@pytest.mark.parametrize("rate", [60.0, 360.0])
@pytest.mark.parametrize("knot_m", [-120.0, -12.0, 40.0])
def test_the_refined_knot_is_within_two_meters(rate: float, knot_m: float) -> None:
    for seed in range(10):
        found = refined(entry(knot_m=knot_m, rate=rate, seed=seed))
        assert found is not None
        knot, height = found
        assert knot.x == pytest.approx(knot_m, abs=2.0)
        assert knot.level == pytest.approx(math.radians(1.0), abs=math.radians(0.2))
        assert knot.slope * 60.0 == pytest.approx(math.radians(15.0), rel=0.1)
        assert height == pytest.approx(math.radians(18.0), rel=0.1)


def test_the_refined_knot_tells_its_error() -> None:
    misses, stds = [], []
    for seed in range(40):
        found = refined(entry(seed=seed, noise_deg=0.3))
        assert found is not None
        misses.append(found[0].x + 12.0)
        stds.append(found[0].std)
    assert 0.4 < float(np.std(misses)) / float(np.mean(stds)) < 2.5


@pytest.mark.parametrize("height", [0.0, 3.0, 5.0])
def test_less_than_a_third_of_the_usual_is_no_turn_in(height: float) -> None:
    assert refined(entry(height_deg=height, noise_deg=0.05)) is None


def test_a_flick_that_does_not_last_is_no_turn_in() -> None:
    """The wheel goes to 12° and is back within a sixth of a second."""
    time, way, signal = entry(height_deg=0.0, noise_deg=0.05)
    flick = np.clip(1.0 - np.abs(time - time[200]) / 0.08, 0.0, None)
    signal = signal + math.radians(12.0) * flick
    assert refined((time, way, signal)) is None


@pytest.mark.parametrize("count", [2, 5, 8])
def test_a_few_frames_are_no_entry(count: int) -> None:
    time, way, signal = (column[180 : 180 + count] for column in entry())
    assert refined((time, way, signal)) is None


def test_a_ramp_without_a_level_before_it_is_not_dated() -> None:
    """At 10 frames a second the ramp fills the two frames that were seen before its top."""
    time = np.arange(10.0) / 10.0
    signal = np.array([0.0, 0.2, *[0.4] * 8])
    assert refined_knot(time, 60.0 * time, signal, 0.0, 0.4, live_s=0.1) is None
