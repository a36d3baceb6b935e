"""Friction demand through the whole pipeline, against published and tabled values."""

from __future__ import annotations

import math
from typing import Any

import msgspec
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from steady import NAN, bare_car, estimates, ring, steady
from streams import Drive, oval_file

from canticle_daemon.frame import Frame, FrameBlock
from canticle_daemon.messages import Entry, TurnIn
from canticle_daemon.physics.car import CarFile
from canticle_daemon.physics.tire import MAX_UTILIZATION
from canticle_daemon.stream.pipeline import Pipeline
from canticle_daemon.track.profile import Track, TrackFile

# Speed m/s, radius m, bank deg, demand: (k − tan β)/(1 + k·tan β) by hand, g = 9.81. The first
# line is the flat road of every textbook; the simplified highway relation k − tan β gives 1.104
# in the second, half too much (AASHTO drops the denominator, which is 1 on a highway).
ROWS = [
    (60.0, 250.0, 0.0, 1.467890),
    (60.0, 250.0, 20.0, 0.719509),
    (80.0, 250.0, 20.0, 1.151708),
    (80.0, 300.0, 31.0, 0.682281),
    (70.0, 300.0, 24.0, 0.700480),
    (45.0, 200.0, 12.0, 0.672106),
    (20.0, 250.0, 20.0, -0.189615),
]


@pytest.mark.parametrize("side", [1.0, -1.0])
@pytest.mark.parametrize(("speed", "radius", "bank", "expected"), ROWS)
def test_the_exact_relation_on_a_steady_bank(
    speed: float, radius: float, bank: float, expected: float, side: float
) -> None:
    found = estimates(steady(speed, radius, bank, side=side))
    assert_allclose(found.side_demand, side * expected, atol=2e-6)
    assert_allclose(found.demand, abs(expected), atol=2e-6)


def test_a_slow_car_on_a_bank_holds_itself_up_by_its_tires() -> None:
    """OpenStax College Physics 2e, chapter 6: 15.0°, 100 m, 20.0 km/h, g = 9.80: 0.234."""
    found = estimates(steady(20.0 / 3.6, 100.0, 15.0, gravity=9.80))
    assert round(float(found.demand[-1]), 3) == 0.234
    assert found.side_demand[-1] < 0.0  # a left turn: to the right is up the bank


@pytest.mark.parametrize(("radius", "bank", "kmh"), [(100.0, 65.0, 165.0362), (100.0, 31.0, 87.36)])
def test_no_demand_at_the_neutral_speed(radius: float, bank: float, kmh: float) -> None:
    """OpenStax, both books: 45.8 m/s at 65.0° and 24.3 m/s at 31.0°, 100 m, without friction."""
    found = estimates(steady(kmh / 3.6, radius, bank, gravity=9.80))
    assert float(found.demand[-1]) < 2e-3


def test_downforce_is_taken_in() -> None:
    """1500 kg, 70 m/s, 280 m, 24°, ½·1.225·1.5·v² of downforce: 17995.4386 N on 28621.5333 N."""
    car = bare_car(
        mass_kg=1500.0, downforce_front_n_per_mps2=0.4, downforce_rear_n_per_mps2=0.51875
    )
    found = estimates(steady(70.0, 280.0, 24.0), car=car)
    assert_allclose(found.demand, 0.628737754, atol=1e-8)
    assert_allclose(found.load_n.sum(axis=0), 28621.5333, atol=1e-3)


def test_streamed_fuel_adds_to_the_mass() -> None:
    car = bare_car(
        mass_kg=1440.0, downforce_front_n_per_mps2=0.4, downforce_rear_n_per_mps2=0.51875
    )
    found = estimates(steady(70.0, 280.0, 24.0, fuel_kg=60.0), car=car)
    assert_allclose(found.demand, 0.628737754, atol=1e-8)


def test_drag_at_steady_speed_is_carried_by_the_driven_tires() -> None:
    """0.55·60² = 1980 N forward on 1540·9.81 = 15107.4 N."""
    car = bare_car(mass_kg=1540.0, drag_n_per_mps2=0.55)
    found = estimates(steady(60.0, 1e12, 0.0), car=car)
    assert_allclose(found.demand, 1980.0 / 15107.4, rtol=1e-6)
    assert_allclose(found.force_n.sum(axis=0), 1980.0, rtol=1e-6)
    assert_allclose(found.force_n[:2], 0.0, atol=0.1)


def test_body_roll_against_the_road_does_not_count() -> None:
    """The last degree of body roll would shift 0.72 by 0.02; it is removed by the car file."""
    frames = steady(60.0, 250.0, 20.0, gradient_deg_per_g=1.5)
    rolled = estimates(frames, car=bare_car(roll_gradient_deg_per_g=1.5))
    assert_allclose(rolled.side_demand, 0.719509, atol=2e-6)
    ignored = estimates(frames, car=bare_car())
    assert abs(float(ignored.side_demand[-1]) - 0.719509) > 0.02


@pytest.mark.parametrize("side", [1.0, -1.0])
@pytest.mark.parametrize("gradient", [0.0, 1.5])
def test_the_map_stands_in_for_the_vertical_accelerometer(side: float, gradient: float) -> None:
    frames = steady(
        60.0, 250.0, 20.0, side=side, gradient_deg_per_g=gradient, accel_z_mps2=NAN
    )  # fmt: skip
    car = bare_car(roll_gradient_deg_per_g=gradient)
    found = estimates(frames, ring(250.0, 20.0, side=side), car)
    assert_allclose(found.side_demand, side * 0.719509, atol=2e-6)
    assert np.isnan(estimates(frames, None, car).demand).all()


def ramped_bank_rad(station: np.ndarray) -> np.ndarray:
    up = np.clip((station - 300.0) / 150.0, 0.0, 1.0)
    down = np.clip((1500.0 - station) / 150.0, 0.0, 1.0)
    return np.radians(4.0 + 18.0 * _smooth(up) * _smooth(down))


def _smooth(u: np.ndarray) -> np.ndarray:
    return u**3 * (10.0 - 15.0 * u + 6.0 * u * u)


@pytest.mark.parametrize("axis", [0.0, -6.0])
def test_the_stand_in_feels_the_surface_rise_under_a_car_that_crosses_it(axis: float) -> None:
    """A car crosses 6 m of a surface while that turns up about an axis beside the line.

    The surface is drawn point by point; its rise under the car is a finite difference.
    """
    length, speed, rate = 1600.0, 60.0, 240.0
    grid = np.arange(0.0, length, 2.0)
    curve = 2.0 * math.pi / length
    rows = [
        (float(s), math.degrees(bank), curve)
        for s, bank in zip(grid, ramped_bank_rad(grid), strict=True)
    ]
    data = {"name": "Ramp", "length_m": length, "profile": rows, "bank_axis_offset_m": axis}
    track = Track(TrackFile.model_validate(data))
    time = np.arange(int(rate * 9.0)) / rate
    station = speed * time + 5.0
    offset = 3.0 - 6.0 * _smooth(np.clip((station - 250.0) / 250.0, 0.0, 1.0))
    roll = -ramped_bank_rad(station)
    lift = np.gradient(np.gradient((offset - axis) * np.sin(roll), time), time)
    across = speed * speed * curve
    normal = np.cos(roll) * (9.81 + lift) - np.sin(roll) * across
    side = np.sin(roll) * (9.81 + lift) + np.cos(roll) * across
    columns = (time, station, offset, side, speed * curve * np.cos(roll))
    frames = [
        Frame(t, speed, r, accel_y_mps2=y, accel_x_mps2=0.0, station_m=s, lateral_m=n)
        for t, s, n, y, r in zip(*(column.tolist() for column in columns), strict=True)
    ]
    found = estimates(frames, track, bare_car())
    inside = (station > 280.0) & (station < 480.0)
    assert float(np.ptp(lift[inside])) > 1.5  # else nothing is tested
    error = found.load_n.sum(axis=0) / 1540.0 - normal
    # Rates are smoothed over 0.08 s; what is left must be a small part of the rise.
    assert float(np.std(error[inside])) < 0.4 * float(np.std(lift[inside]))
    assert abs(float(np.mean(error[inside]))) < 0.1 * float(np.ptp(lift[inside]))


def test_the_change_of_speed_stands_in_for_the_forward_accelerometer() -> None:
    """Braking from 80 m/s at 4 m/s² on a flat straight is 4/9.81 = 0.408."""
    frames = [
        msgspec.structs.replace(
            frame, speed_mps=80.0 - 4.0 * (frame.time_s - 50.0), accel_x_mps2=NAN,
            station_m=10.0 + 80.0 * (frame.time_s - 50.0) - 2.0 * (frame.time_s - 50.0) ** 2,
        )
        for frame in steady(80.0, 1e9, 0.0)
    ]  # fmt: skip
    found = estimates(frames, ring(250.0, 0.0))
    assert_allclose(found.demand[60:], 4.0 / 9.81, rtol=0.01)
    assert np.isnan(estimates(frames, None).demand).all()


def test_null_below_five_meters_a_second() -> None:
    assert np.isnan(estimates(steady(4.9, 50.0, 5.0)).demand).all()
    assert np.isfinite(estimates(steady(5.1, 50.0, 5.0)).demand).all()


def test_null_where_the_car_is_all_but_in_the_air() -> None:
    frames = steady(60.0, 1e9, 0.0)
    for normal, defined in ((1.9, False), (2.1, True)):
        found = estimates([msgspec.structs.replace(f, accel_z_mps2=normal) for f in frames])
        for column in (found.demand, found.side_demand, found.utilization, found.front_utilization):
            assert (np.isfinite(column) == defined).all()
        assert (np.isfinite(found.load_n) == defined).all()


def test_null_without_a_side_force() -> None:
    found = estimates(steady(60.0, 250.0, 10.0, accel_y_mps2=NAN))
    assert np.isnan(found.demand).all()


def test_utilization_is_held_and_says_so() -> None:
    """Flat at 60 m/s and 250 m asks for 1.47; the car file's tires give at most 1.3."""
    found = estimates(steady(60.0, 250.0, 0.0))
    assert (found.utilization == MAX_UTILIZATION).all()
    assert found.saturated.all()
    calm = estimates(steady(60.0, 250.0, 20.0))
    assert not calm.saturated.any()
    assert (calm.utilization < 0.8).all()


def test_utilization_with_tires_of_even_friction_is_demand_over_friction() -> None:
    car = bare_car(tire={"peak_friction": 1.2, "load_sensitivity": 0.0})
    found = estimates(steady(60.0, 250.0, 20.0), car=car)
    assert_allclose(found.utilization, 0.719509 / 1.2, atol=2e-6)
    # Steady, so the axles carry as they are loaded (no yaw acceleration).
    assert_allclose(found.front_utilization, 0.719509 / 1.2, atol=2e-6)
    assert_allclose(found.rear_utilization, 0.719509 / 1.2, atol=2e-6)


def test_streamed_wheel_loads_win_over_the_car_file() -> None:
    loads = (3000.0, 6000.0, 2500.0, 7000.0)
    found = estimates(steady(60.0, 250.0, 20.0, wheel_load_n=loads))
    assert_allclose(found.load_n, np.array(loads)[:, None] * np.ones(found.time_s.size))
    assert_allclose(found.demand, 0.719509, atol=2e-6)


def test_the_outer_tires_of_a_turn_carry_more() -> None:
    left = estimates(steady(60.0, 250.0, 5.0))
    assert (left.load_n[1] > left.load_n[0]).all()
    assert (left.load_n[3] > left.load_n[2]).all()


def mirrored(frame: Frame) -> Frame:
    swapped = None
    if frame.wheel_load_n is not None:
        fl, fr, rl, rr = frame.wheel_load_n
        swapped = (fr, fl, rr, rl)
    return msgspec.structs.replace(
        frame, yaw_rate_radps=-frame.yaw_rate_radps, accel_y_mps2=-frame.accel_y_mps2,
        steer_rad=-frame.steer_rad, roll_rad=-frame.roll_rad, lateral_m=-frame.lateral_m,
        wheel_load_n=swapped,
    )  # fmt: skip


@pytest.mark.parametrize("options", [{}, {"vertical": False, "attitude": False}, {"steer": False}])
def test_a_mirrored_world_gives_a_mirrored_result(options: dict[str, Any]) -> None:
    left, right = Track(oval_file()), Track(oval_file(side=-1.0))
    frames = Drive(left, laps=3, rate_hz=30.0, **options).frames()
    car = CarFile(left_weight_share=0.53)
    one = Pipeline(left, car).process(FrameBlock.from_frames(frames))
    other = Pipeline(right, CarFile(left_weight_share=0.47)).process(
        FrameBlock.from_frames([mirrored(frame) for frame in frames])
    )
    assert one.estimates is not None and other.estimates is not None  # noqa: PT018
    assert_allclose(other.estimates.demand, one.estimates.demand, rtol=1e-9)
    assert_allclose(other.estimates.side_demand, -one.estimates.side_demand, rtol=1e-9)
    assert_allclose(other.estimates.bank_rad, one.estimates.bank_rad, rtol=1e-9, atol=1e-12)
    assert_allclose(other.estimates.load_n, one.estimates.load_n[[1, 0, 3, 2]], rtol=1e-9)
    assert_allclose(other.estimates.energy_j, one.estimates.energy_j[[1, 0, 3, 2]], rtol=1e-7)
    assert [type(event) for event in other.events] == [type(event) for event in one.events]
    for event, twin in zip(one.events, other.events, strict=True):
        if isinstance(event, TurnIn | Entry):
            assert isinstance(twin, TurnIn | Entry)
            assert event.turn_in_station_m == pytest.approx(twin.turn_in_station_m, abs=1e-6)
            assert event.verdict == twin.verdict


@settings(max_examples=40)
@given(
    st.floats(8.0, 95.0), st.floats(60.0, 900.0), st.floats(-5.0, 40.0), st.floats(0.0, 4.0),
    st.sampled_from([1.0, -1.0]),
)  # fmt: skip
def test_demand_is_the_tangent_of_an_angle_between_two_angles(
    speed: float, radius: float, bank: float, gradient: float, side: float
) -> None:
    """tan(atan k − β): the other form of the same geometry (methods' first identity)."""
    lean = math.atan(speed**2 / (9.81 * radius))
    angle = lean - math.radians(bank)
    weight = math.hypot(9.81, speed**2 / radius) * math.cos(angle)
    frames = steady(speed, radius, bank, side=side, seconds=0.2, gradient_deg_per_g=gradient)
    found = estimates(frames, car=bare_car(roll_gradient_deg_per_g=gradient))
    if weight < 0.21 * 9.81:
        return
    assert_allclose(found.side_demand, side * math.tan(angle), rtol=1e-6, atol=1e-9)
