"""Wheel loads and axle forces against a textbook, invariants and an independent car model.

Textbook: *Automotive Chassis Engineering*, chapter 3, page 174 (0.6 g, track 1.46 m); its
parts are asserted, not its printed front total, which slips by 10 N. Car model: the
single-track model of commonroad-vehicle-models 3.0.2, vehicle 2.
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from vehiclemodels.utils.tire_model import formula_lateral
from vehiclemodels.vehicle_dynamics_st import vehicle_dynamics_st
from vehiclemodels.vehicle_parameters import setup_vehicle_parameters

from canticle_daemon.physics.car import CarFile, axle_side_forces, wheel_loads
from canticle_daemon.physics.tire import brush_side_force_n

CAR = CarFile()
BOOK_SIDE_MPS2 = 0.6 * 9.81
BOOK_TRACK_M = 1.46


def loads(car: CarFile, normal: float, side: float, forward: float, front: float, rear: float):
    columns = [np.array([value]) for value in (normal, side, forward, front, rear)]
    return wheel_loads(car, *columns)[:, 0]


def book_transfer(mass_kg: float, height_m: float, front_share: float) -> tuple[float, float]:
    """What a mass at a height moves from left to right on each axle, by the code under test."""
    car = CarFile(
        mass_kg=1600.0,
        cg_height_m=height_m,
        track_front_m=BOOK_TRACK_M,
        track_rear_m=BOOK_TRACK_M,
        roll_stiffness_front_share=front_share,
    )
    wheel = loads(car, 1600.0 * 9.81, mass_kg * BOOK_SIDE_MPS2, 0.0, 0.0, 0.0)
    return float(wheel[1] - wheel[0]) / 2.0, float(wheel[3] - wheel[2]) / 2.0


def test_textbook_parts_through_the_roll_centers() -> None:
    # Printed 195 and 760 N (sprung), 158 and 218 N (unsprung).
    assert book_transfer(0.54 * 1280.0, 0.07, 1.0)[0] == pytest.approx(195.0604, abs=1e-3)
    assert book_transfer(0.46 * 1280.0, 0.32, 0.0)[1] == pytest.approx(759.6004, abs=1e-3)
    assert book_transfer(140.0, 0.280, 1.0)[0] == pytest.approx(158.0351, abs=1e-3)
    assert book_transfer(180.0, 0.300, 0.0)[1] == pytest.approx(217.7014, abs=1e-3)


def test_textbook_body_roll_part() -> None:
    # Printed 1556 N front and 671 N rear from springs of 28,650 N m/rad at 10.9°/g of roll; the
    # moment is the sprung mass's at the arm of 0.365 m plus its own shift while leaning.
    sprung, arm, stiffness = 1280.0, 0.365, 28_650.0
    weight_moment = sprung * 9.81 * arm
    gradient = sprung * arm / (stiffness - weight_moment)
    assert math.degrees(gradient) * 9.81 == pytest.approx(10.911305171, abs=1e-9)
    leaning = 1.0 + weight_moment / (stiffness - weight_moment)
    front, rear = book_transfer(sprung, arm * leaning, 1556.0 / 2227.0)
    assert front + rear == pytest.approx(2242.21, abs=0.05)
    assert front == pytest.approx(1556.0, rel=0.01)
    assert rear == pytest.approx(671.0, rel=0.01)


def test_textbook_parts_add_up_to_the_whole_car() -> None:
    # One mass of 1,600 kg at the height of the parts' common center moves what they move together,
    # less the shift of the leaning body, which a car without roll does not have.
    parts = 2242.21 + 195.0604 + 759.6004 + 158.0351 + 217.7014
    shift = 1280.0 * 9.81 * 0.365 * 0.11426 / BOOK_TRACK_M
    axis_m = 0.54 * 0.07 + 0.46 * 0.32
    height = (1280.0 * (axis_m + 0.365) + 140.0 * 0.280 + 180.0 * 0.300) / 1600.0
    assert sum(book_transfer(1600.0, height, 0.5)) == pytest.approx(parts - shift, rel=1e-3)


def test_straight_and_level_is_the_static_car() -> None:
    # Common practice, no source: a 3,400 lb car weighs about 15,000 N, about one weight on the
    # wheels of a straight.
    car = CarFile(mass_kg=3400.0 * 0.45359237, left_weight_share=0.54, front_weight_share=0.51)
    weight = car.mass_kg * 9.81
    wheel = loads(car, weight, 0.0, 0.0, 0.0, 0.0)
    assert wheel.sum() == pytest.approx(15_000.0, rel=0.02)
    assert (wheel[0] + wheel[1]) / weight == pytest.approx(0.51)
    assert (wheel[0] + wheel[2]) / weight == pytest.approx(0.54)


def test_a_left_turn_loads_the_right_and_braking_the_front() -> None:
    weight = CAR.mass_kg * 9.81
    turning = loads(CAR, weight, 0.4 * weight, 0.0, 0.0, 0.0)
    assert turning[1] > turning[0]
    assert turning[3] > turning[2]
    braking = loads(CAR, weight, 0.0, -0.4 * weight, 0.0, 0.0)
    still = loads(CAR, weight, 0.0, 0.0, 0.0, 0.0)
    assert braking[0] > still[0]
    assert braking[2] < still[2]


def test_downforce_lands_on_its_axle() -> None:
    weight = CAR.mass_kg * 9.81
    still = loads(CAR, weight, 0.0, 0.0, 0.0, 0.0)
    pressed = loads(CAR, weight + 3000.0, 0.0, 0.0, 2000.0, 1000.0)
    assert_allclose(pressed - still, [1000.0, 1000.0, 500.0, 500.0])


FORCES = {
    "normal": st.floats(8_000.0, 60_000.0),
    "side": st.floats(-0.8, 0.8),
    "forward": st.floats(-0.5, 0.5),
    "left_share": st.floats(0.45, 0.58),
    "press": st.floats(0.0, 0.3),
}


@settings(max_examples=80, deadline=None)
@given(**FORCES)
def test_invariants_while_every_wheel_is_down(
    normal: float, side: float, forward: float, left_share: float, press: float
) -> None:
    car = CarFile(left_weight_share=left_share)
    front_press, rear_press = 0.4 * press * normal, 0.6 * press * normal
    given_forces = (normal, side * normal, forward * normal, front_press, rear_press)
    wheel = loads(car, *given_forces)
    assert wheel.sum() == pytest.approx(normal)
    if wheel.min() <= 0.0:
        return
    # Moments about the middle of the track: what leaves the left arrives at the right.
    still = loads(car, normal, 0.0, forward * normal, front_press, rear_press)
    moved = wheel - still
    overturning = side * normal * car.cg_height_m
    assert (moved[1] - moved[0]) / 2 * car.track_front_m + (
        moved[3] - moved[2]
    ) / 2 * car.track_rear_m == pytest.approx(overturning, abs=1e-6 * normal)
    assert moved[0] == pytest.approx(-moved[1], abs=1e-6 * normal)
    # And about the axles: longitudinal force at the height of the center of gravity.
    pitching = (wheel[2] + wheel[3]) - (normal * (1 - press) * (1 - car.front_weight_share))
    assert (pitching - rear_press) * car.wheelbase_m == pytest.approx(
        forward * normal * car.cg_height_m, abs=1e-6 * normal
    )


@settings(max_examples=80, deadline=None)
@given(
    normal=st.floats(-5_000.0, 60_000.0),
    side=st.floats(-200_000.0, 200_000.0),
    forward=st.floats(-400_000.0, 400_000.0),
)
def test_loads_are_never_negative_and_add_up(normal: float, side: float, forward: float) -> None:
    wheel = loads(CAR, normal, side, forward, 500.0, 700.0)
    assert wheel.min() >= 0.0
    assert wheel.sum() == pytest.approx(max(normal, 0.0), abs=1e-6)


@settings(max_examples=60, deadline=None)
@given(normal=st.floats(8_000.0, 60_000.0), side=st.floats(-2.0, 2.0), forward=st.floats(-1, 1))
def test_mirrored_car(normal: float, side: float, forward: float) -> None:
    left = loads(CarFile(left_weight_share=0.55), normal, side * normal, forward * normal, 900, 900)
    right = loads(
        CarFile(left_weight_share=0.45), normal, -side * normal, forward * normal, 900, 900
    )
    assert_allclose(left, right[[1, 0, 3, 2]], atol=1e-6 * normal)


def test_a_car_file_may_be_absent() -> None:
    assert CarFile.load(None) == CarFile()


def test_nan_in_nan_out() -> None:
    assert np.isnan(loads(CAR, math.nan, 0.0, 0.0, 0.0, 0.0)).all()
    assert np.isnan(loads(CAR, 15_000.0, math.nan, 0.0, 0.0, 0.0)).all()
    assert np.isnan(loads(CAR, 15_000.0, 0.0, math.nan, 0.0, 0.0)).all()


REFERENCE = setup_vehicle_parameters(vehicle_id=2)
REFERENCE_CAR = CarFile(
    mass_kg=REFERENCE.m,
    wheelbase_m=REFERENCE.a + REFERENCE.b,
    front_weight_share=REFERENCE.b / (REFERENCE.a + REFERENCE.b),
    yaw_inertia_kgm2=REFERENCE.I_z,
    cg_height_m=REFERENCE.h_s,
)
CHECK_STATE = [
    2.0233348142065677,
    0.0041907137716636,
    0.0197545248559617,
    15.7216236334290116,
    0.0025857914776859,
    0.0529001056654038,
    0.0033012170610298,
]
CHECK_RATES = [
    15.7213512030862397,
    0.0925527979719355,
    0.15,
    5.3536773276413925,
    0.0529001056654038,
    0.6435589397748606,
    0.0313297971641291,
]


def reference_axle_forces(state: list[float], accel_mps2: float) -> tuple[float, float]:
    """Axle forces of the reference model from its slip angles and its linear tires."""
    _, _, steer, speed, _, yaw_rate, sideslip = state
    front_slip = steer - sideslip - REFERENCE.a * yaw_rate / speed
    rear_slip = REFERENCE.b * yaw_rate / speed - sideslip
    front = loads(REFERENCE_CAR, REFERENCE.m * 9.81, 0.0, REFERENCE.m * accel_mps2, 0.0, 0.0)
    per_load = -REFERENCE.tire.p_ky1
    return (
        per_load * float(front[0] + front[1]) * front_slip,
        per_load * float(front[2] + front[3]) * rear_slip,
    )


def test_reference_model_gives_its_published_vector() -> None:
    rates = vehicle_dynamics_st(CHECK_STATE, [0.15, 0.63 * 9.81], REFERENCE)
    assert_allclose(rates, CHECK_RATES, rtol=0, atol=1e-14)


def test_axle_forces_at_the_published_vector() -> None:
    # Ours come from the rates, theirs from the slip angles; loads shift by the acceleration that
    # the reference allows itself.
    speed, yaw_rate = CHECK_STATE[3], CHECK_STATE[5]
    side = REFERENCE.m * speed * (CHECK_RATES[6] + yaw_rate)
    front, rear = axle_side_forces(REFERENCE_CAR, np.array([side]), np.array([CHECK_RATES[5]]))
    expected = reference_axle_forces(CHECK_STATE, CHECK_RATES[3])
    assert (front[0], rear[0]) == pytest.approx(expected, rel=1e-9)


@pytest.mark.parametrize("steer", [-0.03, 0.01, 0.04])
@pytest.mark.parametrize("speed", [20.0, 45.0])
def test_axle_forces_in_steady_turns(speed: float, steer: float) -> None:
    # The reference's steady state: its derivative is affine in yaw rate and sideslip, so two
    # probes of each give the state where both rates vanish.
    def rates(yaw_rate: float, sideslip: float) -> np.ndarray:
        state = [0.0, 0.0, steer, speed, 0.0, yaw_rate, sideslip]
        return np.array(vehicle_dynamics_st(state, [0.0, 0.0], REFERENCE)[5:7])

    at_rest = rates(0.0, 0.0)
    slopes = np.column_stack([rates(1.0, 0.0) - at_rest, rates(0.0, 1.0) - at_rest])
    yaw_rate, sideslip = np.linalg.solve(slopes, -at_rest)
    side = np.array([REFERENCE.m * speed * yaw_rate])
    front, rear = axle_side_forces(REFERENCE_CAR, side, np.zeros(1))
    expected = reference_axle_forces([0, 0, steer, speed, 0, yaw_rate, sideslip], 0.0)
    assert (front[0], rear[0]) == pytest.approx(expected, rel=1e-9)
    assert front[0] * steer > 0.0


@pytest.mark.parametrize(
    ("slip", "load", "force"),
    [
        (0.02, 2000.0, -827.3918099013821),
        (0.05, 4000.0, -3260.484051024234),
        (-0.05, 4000.0, 3260.484051024234),
        (0.1, 4000.0, -4092.168590136721),
        (0.2, 6000.0, -6239.939909274177),
    ],
)
def test_brush_beside_the_magic_formula(slip: float, load: float, force: float) -> None:
    # Same cornering stiffness (21.92 of load per radian) and peak friction (1.0489). The brush
    # softens from the start where the Magic Formula is straight at first: up to 9 % less in
    # between, alike at both ends.
    assert formula_lateral(slip, 0.0, load, REFERENCE.tire)[0] == pytest.approx(force, rel=1e-12)
    ours = brush_side_force_n(slip, load, 1.0489, 21.92 * load)
    assert 0.91 < ours / force < 1.01


def test_brush_and_magic_formula_rise_together() -> None:
    slips = np.linspace(1e-4, 0.14, 60)
    magic = np.array([-formula_lateral(slip, 0.0, 4000.0, REFERENCE.tire)[0] for slip in slips])
    ours = -brush_side_force_n(slips, 4000.0, 1.0489, 21.92 * 4000.0)
    assert np.all(np.diff(magic) > 0.0)
    assert np.all(np.diff(ours) > 0.0)
    linear = slips <= 0.002
    assert_allclose(ours[linear], magic[linear], rtol=0.02)
    assert ours[0] == pytest.approx(21.92 * 4000.0 * slips[0], rel=1e-3)
    assert magic[0] == pytest.approx(21.92 * 4000.0 * slips[0], rel=1e-3)
