"""The synthetic car against mechanics that it does not use itself.

Sources: the exact banked-curve relation (textbook statics of a body on an incline in uniform
circular motion) and the two identities of steady motion that follow from it; everything else
is finite differences of the path the car really drove, and balances of energy and force.
"""

from __future__ import annotations

import math
from functools import lru_cache
from typing import Any

import numpy as np
import pytest

from canticle_adapters.rehearsal.car import GRAVITY_MPS2, STEP_S, Car, CarData
from canticle_adapters.rehearsal.oval import Oval, greenwold
from canticle_adapters.rehearsal.telemetry import Options, Rehearsal, basic_values

NO_AERO = {
    "downforce_front_n_per_mps2": 0.0,
    "downforce_rear_n_per_mps2": 0.0,
    "drag_n_per_mps2": 0.0,
}


class Circle:
    """A road that is one banked circle for ever, in the shape in which the car reads a road."""

    step_m = 1.0

    def __init__(self, radius_m: float, bank_rad: float) -> None:
        self.length_m = 2.0 * math.pi * radius_m
        row = (1.0 / radius_m, 0.0, math.cos(bank_rad), -math.sin(bank_rad), 0.0, 0.0)
        self.surface = [(*row, *[0.0] * 6)] * (int(self.length_m) + 1)


def steady_circle(speed: float, radius: float, bank_deg: float) -> Car:
    """Drive a circle until nothing changes; a slow hand keeps the car on its line."""
    road: Any = Circle(radius, math.radians(bank_deg))
    car = Car(road, CarData(roll_gradient_deg_per_g=0.0, **NO_AERO))
    car.vx_mps, car.yaw_rate_radps = speed, speed * math.cos(math.radians(bank_deg)) / radius
    wheel = 12.0 * 2.79 * math.cos(math.radians(bank_deg)) / radius
    for _ in range(30_000):
        course = car.heading_rad + car.vy_mps / car.vx_mps
        wheel -= STEP_S * (0.01 * car.lateral_m + 0.5 * course)
        damped = wheel - 0.02 * car.lateral_m - 2.0 * course
        throttle = min(max(0.5 + 2.0 * (speed - car.vx_mps), 0.0), 1.0)
        car.evaluate(damped, throttle, 0.0)
        car.advance()
    return car


@pytest.mark.parametrize(
    ("speed", "radius", "bank_deg"),
    [(50.0, 250.0, 20.0), (20.0, 250.0, 20.0), (40.0, 200.0, 12.0), (30.0, 300.0, 0.0)],
)
def test_steady_circle_obeys_statics(speed: float, radius: float, bank_deg: float) -> None:
    car = steady_circle(speed, radius, bank_deg)
    bank = math.radians(bank_deg)
    place = radius - car.lateral_m * math.cos(bank)
    turning = car.station_rate / radius
    speed = turning * place
    lateral, normal = car.force_y_mps2, car.force_z_mps2
    slip = car.heading_rad  # side force is across the road, the car's axes are turned by this
    across = lateral * math.cos(slip) + car.force_x_mps2 * math.sin(slip)
    k = speed**2 / (GRAVITY_MPS2 * place)
    assert across / normal == pytest.approx(math.tan(math.atan(k) - bank), abs=1e-4)
    square = GRAVITY_MPS2**2 + (speed * turning) ** 2
    assert across**2 + normal**2 == pytest.approx(square, rel=1e-4)
    angle = -bank + math.atan(speed * turning / GRAVITY_MPS2)
    assert math.atan2(across, normal) == pytest.approx(angle, abs=1e-4)


@lru_cache(maxsize=1)
def entry_of_turn_1() -> dict[str, np.ndarray]:
    """Every millisecond from the dogleg to the apex of the first corner, unrounded."""
    drive = Rehearsal(Options(laps=1, seed=4, noise=False))
    oval, car = drive.oval, drive.car
    rows = []
    for _ in drive.steps():
        if car.station_m > 720.0:
            break
        values = basic_values(drive)
        rows.append(
            (
                *oval.place(car.station_m, car.lateral_m),
                *(values[name] for name in ("accel_x_mps2", "accel_y_mps2", "accel_z_mps2")),
                *(car.force_x_mps2, car.force_y_mps2, car.force_z_mps2),
                *(car.station_m, car.lateral_m, car.heading_rad, car.vx_mps, car.vy_mps),
                *(car.body_roll_rad, car.yaw_rate_radps),
            )
        )
    names = "x y z ax ay az fx fy fz s n chi vx vy roll r".split()
    return dict(zip(names, np.array(rows).T, strict=True))


def surface_axes(oval: Oval, station: float, lateral: float) -> np.ndarray:
    """The tangent plane's axes by finite differences of the surface itself."""
    d = 1e-3
    along = np.subtract(oval.place(station + d, lateral), oval.place(station - d, lateral))
    left = np.subtract(oval.place(station, lateral + d), oval.place(station, lateral - d))
    e1, e2 = along / np.linalg.norm(along), left / np.linalg.norm(left)
    return np.array([e1, e2, np.cross(e1, e2)])


def test_forces_are_the_second_differences_of_the_path() -> None:
    """All three specific forces, with the transition's own terms, from the 3-D path driven."""
    drive = entry_of_turn_1()
    oval = greenwold()
    path = np.stack([drive["x"], drive["y"], drive["z"]])
    half = 40
    worst = np.zeros(3)
    for i in range(1000, path.shape[1] - half, 97):
        span = half * STEP_S
        felt = (path[:, i + half] - 2 * path[:, i] + path[:, i - half]) / span**2
        felt[2] += GRAVITY_MPS2
        e1, e2, e3 = surface_axes(oval, drive["s"][i], drive["n"][i])
        chi = drive["chi"][i]
        ahead = math.cos(chi) * e1 + math.sin(chi) * e2
        left = -math.sin(chi) * e1 + math.cos(chi) * e2
        window = slice(i - half, i + half + 1)
        told = [
            np.average(drive[name][window], weights=triangle(half)) for name in ("fx", "fy", "fz")
        ]
        worst = np.maximum(worst, np.abs([felt @ ahead, felt @ left, felt @ e3] - np.array(told)))
    assert worst.max() < 0.15, worst


def triangle(half: int) -> np.ndarray:
    """The weights with which a second difference sees the acceleration between its ends."""
    return 1.0 - np.abs(np.arange(-half, half + 1)) / half


def test_transition_terms_matter_in_that_test() -> None:
    """Statics alone would miss the normal force by far more than the tolerance above."""
    drive = entry_of_turn_1()
    roll = np.array([greenwold().roll(s)[0] for s in drive["s"]])
    turning = np.gradient(np.unwrap(np.arctan2(np.gradient(drive["y"]), np.gradient(drive["x"]))))
    static = GRAVITY_MPS2 * np.cos(roll) - np.sin(roll) * drive["vx"] * turning / STEP_S
    assert np.abs(static - drive["fz"])[500:-500].max() > 0.5


def test_accelerometer_is_the_force_seen_from_the_rolled_body() -> None:
    drive = entry_of_turn_1()
    np.testing.assert_allclose(
        drive["ay"] ** 2 + drive["az"] ** 2, drive["fy"] ** 2 + drive["fz"] ** 2, rtol=1e-12
    )
    lean = np.arctan2(drive["ay"], drive["az"]) - np.arctan2(drive["fy"], drive["fz"])
    np.testing.assert_allclose(lean, drive["roll"], atol=1e-12)
    settled = drive["s"] > 650.0
    gradient = np.degrees(drive["roll"][settled]) / (drive["ay"][settled] / GRAVITY_MPS2)
    assert gradient == pytest.approx(1.0, abs=0.05)  # left side up for a force to the left


def test_energy_balance_over_a_lap() -> None:
    """Work of tires and drag = kinetic energy gained + weight raised (yaw included)."""
    drive = Rehearsal(Options(laps=1, seed=6, noise=False))
    car = drive.car
    data = car.data
    work, states = 0.0, []
    for _ in drive.steps():
        height = car.lateral_m * math.sin(drive.oval.roll(car.station_m)[0])
        kinetic = 0.5 * data.mass_kg * (car.vx_mps**2 + car.vy_mps**2)
        states.append(kinetic + data.mass_kg * GRAVITY_MPS2 * height)
        power = car.force_x_mps2 * car.vx_mps + car.force_y_mps2 * car.vy_mps
        work += STEP_S * data.mass_kg * power
    turnover = 0.5 * data.mass_kg * 70.0**2
    assert work == pytest.approx(states[-1] - states[0], abs=0.01 * turnover)


def test_loads_sum_and_slide_never_gains() -> None:
    """The wheels carry what the surface needs; friction only ever takes power."""
    drive = Rehearsal(Options(laps=1, seed=8, noise=False))
    for tick in drive.steps():
        if tick % 50:
            continue
        car = drive.car
        downforce = 0.80 * car.vx_mps**2
        needed = car.data.mass_kg * car.force_z_mps2 + downforce
        assert sum(car.load_n) == pytest.approx(needed, rel=1e-9)
        assert min(car.load_n) > 0.0
        assert min(car.slide_w) >= 0.0
        for x, y, load in zip(car.forward_n, car.left_n, car.load_n, strict=True):
            assert math.hypot(x, y) < 1.45 * load


@pytest.mark.parametrize(
    ("alpha", "force"),
    [(0.02, -1396.3084075393194), (0.05, -2816.2971608440207), (0.2, -4000.0)],
)
def test_tire_has_the_brush_models_forces(alpha: float, force: float) -> None:
    """C = 80,000 N/rad, μ = 1, Fz = 4,000 N: values computed from the published cubic.

    E. Fiala 1954; H. B. Pacejka, Tire and Vehicle Dynamics, chapter 3 (from memory).
    """
    data = CarData(peak_friction=1.0, load_sensitivity=0.0, cornering_stiffness_per_load=20.0)
    car = Car(greenwold(), data)
    car.load_n = [4000.0] * 4
    car.slip_x = [0.0] * 4
    car._tire(0, 50.0, 50.0 * math.tan(alpha), 0.0)
    assert car.left_n[0] == pytest.approx(force, rel=1e-12)
    assert car.forward_n[0] == 0.0


def test_tire_gives_the_longitudinal_force_asked_for() -> None:
    """The fixed point of the quasi-steady wheel, with side slip, is the demanded force."""
    car = Car(greenwold())
    car.load_n = [4000.0] * 4
    for _ in range(60):
        car._tire(2, 60.0, 60.0 * 0.04, 2000.0)
    assert car.forward_n[2] == pytest.approx(2000.0, rel=1e-6)
    slip_speed = -car.left_n[2] / 2000.0
    assert car.slip_x[2] == pytest.approx(0.04 * (1.0 - car.slip_x[2]) / slip_speed, rel=1e-6)


def test_grip_goes_with_the_energy_spent() -> None:
    car = Car(greenwold())
    fresh = list(car.peak)
    car.energy_j = [0.0, 1e7, 2e7, 1e12]
    car.wear()
    assert car.peak[0] == fresh[0]
    assert fresh[1] > car.peak[1] > car.peak[2] > car.peak[3] == pytest.approx(0.85 * fresh[3])
