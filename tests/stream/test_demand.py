"""Friction demand through the whole pipeline, against published and tabled values."""

from __future__ import annotations

import math
from dataclasses import dataclass
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


def surface_path(
    station: np.ndarray, offset: np.ndarray, axis: float, curve: float
) -> tuple[np.ndarray, np.ndarray]:
    """Return the car's place in the world, and the surface's left there, shape (3, n).

    The reference line is a circle; the surface turns about its own axis, `axis` beside it.
    """
    roll, heading = -ramped_bank_rad(station), curve * station
    out = np.stack([-np.sin(heading), np.cos(heading), 0.0 * heading])
    line = np.stack([np.sin(heading), -np.cos(heading), 0.0 * heading]) / curve
    left = np.cos(roll) * out + np.sin(roll) * np.array([[0.0], [0.0], [1.0]])
    return line + axis * out + (offset - axis) * left, left


@dataclass(frozen=True)
class Crossing:
    """A car that crosses 6 m of a surface while that turns up, and what it feels."""

    track: Track
    frames: list[Frame]
    normal_mps2: np.ndarray
    inside: np.ndarray


def crossing(axis: float, early_m: float = 0.0, **absent: float) -> Crossing:
    """Drive a drawn 3-D path; the forces are its finite differences, no formula of ours."""
    length, rate = 1600.0, 240.0
    curve = 2.0 * math.pi / length
    grid = np.arange(0.0, length, 2.0)
    rows = [
        (float(s), math.degrees(bank), curve)
        for s, bank in zip(grid, ramped_bank_rad(grid), strict=True)
    ]
    data = {"name": "Ramp", "length_m": length, "profile": rows, "bank_axis_offset_m": axis}
    track = Track(TrackFile.model_validate(data))
    time = np.arange(int(rate * 9.0)) / rate
    station = 60.0 * time + 5.0
    part = np.clip((station - 250.0 + early_m) / 250.0, 0.0, 1.0)
    offset = 3.0 - 6.0 * _smooth(part)
    place, left = surface_path(station, offset, axis, curve)
    velocity = np.gradient(place, time, axis=1)
    force = np.gradient(velocity, time, axis=1) + np.array([[0.0], [0.0], [9.81]])
    speed = np.linalg.norm(velocity, axis=0)
    up = np.cross(velocity / speed, left, axis=0)
    side, normal = (force * left).sum(axis=0), (force * up).sum(axis=0)
    yaw_rate = speed * curve * np.cos(ramped_bank_rad(station))
    columns = (time, speed, yaw_rate, side, station, absent.get("lateral_m", 1.0) * offset)
    frames = [
        Frame(t, v, r, accel_y_mps2=y, accel_x_mps2=0.0, station_m=s, lateral_m=n)
        for t, v, r, y, s, n in zip(*(column.tolist() for column in columns), strict=True)
    ]
    return Crossing(track, frames, normal, (station > 280.0) & (station < 480.0))


def stand_in_error_mps2(drive: Crossing) -> np.ndarray:
    found = estimates(drive.frames, drive.track, bare_car())
    error = found.load_n.sum(axis=0) / 1540.0 - drive.normal_mps2
    return np.asarray(error[drive.inside])


@pytest.mark.parametrize("axis", [0.0, -6.0])
def test_the_stand_in_feels_the_surface_rise_under_a_car_that_crosses_it(axis: float) -> None:
    drive = crossing(axis)
    assert float(np.ptp(drive.normal_mps2[drive.inside])) > 3.5  # else nothing is tested
    assert float(np.sqrt(np.mean(stand_in_error_mps2(drive) ** 2))) < 0.05


def test_the_stand_in_does_not_favor_early_or_late() -> None:
    """A lag of its rates would: the surface rises while an early car crosses it."""
    errors = [
        float(np.mean(stand_in_error_mps2(crossing(0.0, early_m=early)))) for early in (60.0, -60.0)
    ]
    assert abs(errors[0] - errors[1]) < 0.02


def test_the_stand_in_without_a_place_across_the_road_goes_by_the_forces() -> None:
    """Better than taking the surface for still, and no more is promised."""
    known, unknown = (stand_in_error_mps2(crossing(0.0, lateral_m=factor)) for factor in (1.0, NAN))
    still = 0.588  # m/s² rms of 2ṅφ̇ + nφ̈ over this crossing, worked out apart
    assert float(np.sqrt(np.mean(known**2))) < float(np.sqrt(np.mean(unknown**2))) < still


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


# --- how an axle's force is shared among its tires ---------------------------------------------


def test_drive_is_shared_half_and_half_and_side_force_by_slip() -> None:
    """The rear tires' slips follow from their forces; one axle has one slip angle.

    Each tire's slip comes from bisecting the brush law for its own load and friction. With even
    friction the side force is shared by load, so equal slips need no more than that.
    """
    car = bare_car(mass_kg=1540.0, drive="rear", tire={"load_sensitivity": 0.0})
    plain = estimates(steady(60.0, 250.0, 20.0), car=car)
    ratio = plain.force_n / plain.load_n
    assert_allclose(ratio, np.broadcast_to(ratio[:1], ratio.shape), rtol=1e-9)
    driven = estimates(steady(60.0, 250.0, 20.0, forward_mps2=2.0), car=car)
    share = driven.load_n / (driven.load_n[::2] + driven.load_n[1::2]).repeat(2, axis=0)
    rear_side = 0.719509 * driven.load_n.sum(axis=0) * (1.0 - car.front_weight_share)
    expected = np.hypot(share[2:] * rear_side, 0.5 * 1540.0 * 2.0)
    assert_allclose(driven.force_n[2:], expected, rtol=1e-5)


def test_tires_of_one_axle_get_one_slip_angle() -> None:
    """Friction that falls with load moves side force to the lighter tire."""
    tire = {"peak_friction": 1.3, "load_sensitivity": -0.15, "cornering_stiffness_per_load": 18.0}
    car = bare_car(tire=tire)
    found = estimates(steady(60.0, 250.0, 20.0), car=car)
    load, force = found.load_n[:, -1], found.force_n[:, -1]
    slips = [
        bisected_slip(f, n, 1.3 * (1.0 - 0.15 * (n / 4000.0 - 1.0)), 18.0 * n)
        for f, n in zip(force, load, strict=True)
    ]
    by_load = [
        bisected_slip(f, n, 1.3 * (1.0 - 0.15 * (n / 4000.0 - 1.0)), 18.0 * n)
        for f, n in zip(load * (force[0] + force[1]) / (load[0] + load[1]), load, strict=True)
    ]
    assert abs(slips[0] - slips[1]) < 0.2 * abs(by_load[0] - by_load[1])
    assert abs(slips[2] - slips[3]) < 0.2 * abs(by_load[2] - by_load[3])


def bisected_slip(force: float, load: float, friction: float, stiffness: float) -> float:
    low, high = 0.0, 3.0 * friction * load / stiffness
    for _ in range(60):
        middle = 0.5 * (low + high)
        reach = stiffness * middle / (3.0 * friction * load)
        less = friction * load * (1.0 - (1.0 - reach) ** 3) < force
        low, high = (middle, high) if less else (low, middle)
    return low


@pytest.mark.parametrize(
    ("drive", "brake", "front_share"),
    [
        ("rear", 0.0, 0.0), ("front", 0.0, 1.0), ("all", 0.0, 0.5),
        ("rear", 0.5, 0.7), ("rear", NAN, 0.7),
    ],
)  # fmt: skip
def test_the_engine_slows_by_the_driven_axle_and_the_brakes_by_both(
    drive: str, brake: float, front_share: float
) -> None:
    car = bare_car(drive=drive, brake_front_share=0.7, mass_kg=1500.0)
    found = estimates(steady(60.0, 1e9, 0.0, forward_mps2=-3.0, brake=brake), car=car)
    front = found.force_n[:2, -1].sum()
    assert front == pytest.approx(front_share * 4500.0, abs=1.0)
    assert found.force_n[2:, -1].sum() == pytest.approx((1.0 - front_share) * 4500.0, abs=1.0)


def test_steered_wheels_lean_their_side_force_back() -> None:
    """At steady speed the driven wheels make up for it: F·tan δ of the front axle."""
    car = bare_car(mass_kg=1540.0, steering_ratio=10.0)
    straight, steered = (
        estimates(steady(60.0, 250.0, 20.0, steer_rad=angle), car=car) for angle in (0.0, 0.3)
    )
    side = straight.force_n[:2, -1].sum()
    assert float(steered.demand[-1]) == pytest.approx(float(straight.demand[-1]))
    rear = np.hypot(straight.force_n[2:, -1], 0.5 * 0.03 * side)
    assert_allclose(steered.force_n[2:, -1], rear, rtol=1e-3)


def test_an_unloaded_wheel_passes_its_drive_to_its_neighbor() -> None:
    loads = (4000.0, 4000.0, 0.0, 7000.0)
    frames = steady(60.0, 1e9, 0.0, forward_mps2=3.0, wheel_load_n=loads)
    found = estimates(frames, car=bare_car(mass_kg=1500.0))
    assert found.force_n[2, -1] == pytest.approx(0.0, abs=1.0)
    assert found.force_n[3, -1] == pytest.approx(4500.0, rel=1e-6)
