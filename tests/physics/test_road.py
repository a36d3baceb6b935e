"""Banked-road statics and kinematics against textbooks, road design rows and a 3-D path.

OpenStax: *College Physics 2e*, module m42086, and *University Physics Volume 1*, module
m58305, both section 6.3 (g = 9.80). AASHTO: *A Policy on Geometric Design of Highways and
Streets*, minimum-radius table (limiting side friction from memory, radii computed).
"Computed" marks numbers from independent arithmetic on the stated formula.
"""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from canticle_daemon.physics import road

Motion = Callable[[np.ndarray], np.ndarray]

OPENSTAX_GRAVITY = 9.80
KMH = 1.0 / 3.6
FOOT = 0.3048
MPH = 0.44704

IDEAL_SPEEDS = [
    # radius, bank, printed answer, full value (computed)
    (100.0, 65.0, 45.8, 45.84339409),  # College Physics, steep bank
    (100.0, 31.0, 24.3, 24.26609582),  # University Physics, steep bank
    (100.0, 15.0, 16.2, 16.20463540),  # slow car on a bank, part a
    (500.0, 5.0, 20.7, 20.70493785),  # railway curve
    (100.0, 20.0, None, 18.88626034),  # problem without a printed answer
]
FLAT_CURVES = [
    # speed, radius, printed friction, full value (computed)
    (25.0, 500.0, 0.13, 0.12755102),
    (96.8 * KMH, 182.9, 0.40, 0.40337217),
    (30.0, 50.0, 1.84, 1.83673469),
]
IDEAL_BANKS = [
    # radius, speed, bank in degrees: printed, full value (computed)
    (1200.0, 105.0 * KMH, 4.14, 4.13745322),
    (310.0, 90.0 * KMH, None, 11.62511948),
    (24.60757890, 30.0, 75.0, 75.0),  # bobsled, radius printed as 24.6
]
EXACT_ROWS = [
    # speed, radius, bank in degrees, exact demand, highway relation (computed, g = 9.81)
    (60.0, 250.0, 0.0, 1.467890, 1.467890),
    (60.0, 250.0, 20.0, 0.719509, 1.103920),
    (80.0, 250.0, 20.0, 1.151708, 2.245612),
    (80.0, 300.0, 31.0, 0.682281, 1.573791),
    (70.0, 300.0, 24.0, 0.700480, 1.219739),
    (45.0, 200.0, 12.0, 0.672106, 0.819554),
    (20.0, 250.0, 20.0, -0.189615, -0.200871),
]
AASHTO_FRICTION_MPH = {20: 0.27, 30: 0.20, 40: 0.16, 50: 0.14, 60: 0.12, 70: 0.10, 80: 0.08}
AASHTO_RADIUS_FT = {
    0.04: {20: 86.0, 30: 250.0, 40: 533.3, 50: 925.9, 60: 1500.0},
    0.06: {20: 80.8, 30: 230.8, 40: 484.8, 50: 833.3, 60: 1333.3, 70: 2041.7, 80: 3047.6},
    0.08: {20: 76.2, 30: 214.3, 40: 444.4, 50: 757.6, 60: 1200.0, 70: 1814.8, 80: 2666.7},
    0.10: {20: 72.1, 30: 200.0, 40: 410.3, 50: 694.4, 60: 1090.9, 70: 1633.3, 80: 2370.4},
    0.12: {20: 68.4, 30: 187.5, 40: 381.0, 50: 641.0, 60: 1000.0, 70: 1484.8, 80: 2133.3},
}
AASHTO_FRICTION_KMH = {
    30: 0.28,
    50: 0.19,
    60: 0.17,
    80: 0.14,
    100: 0.12,
    120: 0.09,
    130: 0.08,
}
AASHTO_RADIUS_M = {
    0.04: {30: 22.1, 50: 85.6, 60: 135.0, 80: 280.0, 100: 492.1},
    0.06: {30: 20.8, 50: 78.7, 60: 123.2, 80: 252.0, 100: 437.4, 120: 755.9, 130: 950.5},
    0.08: {30: 19.7, 50: 72.9, 60: 113.4, 80: 229.1, 100: 393.7, 120: 667.0, 130: 831.7},
    0.10: {30: 18.6, 50: 67.9, 60: 105.0, 80: 210.0, 100: 357.9, 120: 596.8, 130: 739.3},
    0.12: {30: 17.7, 50: 63.5, 60: 97.7, 80: 193.8, 100: 328.1, 120: 539.9, 130: 665.4},
}
# Design radii in feet by superelevation, Highway Engineering Handbook, table 2.11.
HANDBOOK_FT = {
    0.100: {50: 1010.0, 60: 1500.0, 70: 2030.0, 80: 2660.0},
    0.082: {50: 1320.0, 60: 1910.0, 70: 2530.0, 80: 3260.0},
}


def rows_mph() -> list[tuple[float, float, float, float]]:
    return [
        (mph * MPH, radius * FOOT, slope, AASHTO_FRICTION_MPH[mph])
        for slope, by_speed in AASHTO_RADIUS_FT.items()
        for mph, radius in by_speed.items()
    ]


def rows_kmh() -> list[tuple[float, float, float, float]]:
    return [
        (kmh * KMH, radius, slope, AASHTO_FRICTION_KMH[kmh])
        for slope, by_speed in AASHTO_RADIUS_M.items()
        for kmh, radius in by_speed.items()
    ]


def openstax_demand(speed: float, radius: float, bank_deg: float) -> float:
    bank = math.radians(bank_deg)
    return float(road.side_demand_steady(speed, 1.0 / radius, bank, OPENSTAX_GRAVITY))


@pytest.mark.parametrize(("radius", "bank_deg", "printed", "full"), IDEAL_SPEEDS)
def test_openstax_ideal_speed(
    radius: float, bank_deg: float, printed: float | None, full: float
) -> None:
    speed = float(road.neutral_speed_mps(radius, math.radians(bank_deg), OPENSTAX_GRAVITY))
    assert speed == pytest.approx(full, rel=1e-9)
    assert printed is None or speed == pytest.approx(printed, abs=0.05)
    assert openstax_demand(speed, radius, bank_deg) == pytest.approx(0.0, abs=1e-12)


@pytest.mark.parametrize(("speed", "radius", "printed", "full"), FLAT_CURVES)
def test_openstax_flat_curve(speed: float, radius: float, printed: float, full: float) -> None:
    assert openstax_demand(speed, radius, 0.0) == pytest.approx(full, abs=1e-8)
    assert openstax_demand(speed, radius, 0.0) == pytest.approx(printed, abs=0.005)


@pytest.mark.parametrize(("radius", "speed", "printed", "full"), IDEAL_BANKS)
def test_openstax_ideal_bank(
    radius: float, speed: float, printed: float | None, full: float
) -> None:
    assert openstax_demand(speed, radius, full) == pytest.approx(0.0, abs=1e-8)
    assert printed is None or full == pytest.approx(printed, abs=0.005)


def test_openstax_flat_curve_force() -> None:
    # 900 kg at 25.0 m/s on 500 m: 1125 N, printed.
    force = float(road.lateral_specific_force(0, 0, 0, 0, 0, 0, 25.0, 25.0 / 500.0)) * 900.0
    assert force == pytest.approx(1125.0)


def test_openstax_slow_car_on_a_bank_leans_on_the_outside() -> None:
    # 100 m, 15.0°, 20.0 km/h: friction 0.234 printed, and it points up the bank, outward.
    demand = openstax_demand(20.0 * KMH, 100.0, 15.0)
    assert demand == pytest.approx(-0.23447641, abs=1e-8)
    assert -demand == pytest.approx(0.234, abs=0.0005)


@pytest.mark.parametrize(("speed", "radius", "bank_deg", "exact", "highway"), EXACT_ROWS)
def test_exact_relation_and_the_highway_one(
    speed: float, radius: float, bank_deg: float, exact: float, highway: float
) -> None:
    bank = math.radians(bank_deg)
    demand = float(road.side_demand_steady(speed, 1.0 / radius, bank))
    assert demand == pytest.approx(exact, abs=5e-7)
    pull = speed**2 / (9.81 * radius)
    assert demand * (1.0 + pull * math.tan(bank)) == pytest.approx(highway, abs=1e-6)


@pytest.mark.parametrize(
    ("friction", "bank_deg", "radius", "top_speed"),
    [(1.2, 20.0, 250.0, 82.52274301), (0.8, 31.0, 300.0, 89.10018840)],
)
def test_demand_at_the_highest_speed_is_the_friction(
    friction: float, bank_deg: float, radius: float, top_speed: float
) -> None:
    # Computed from the textbook form √(gR(tan β + μ)/(1 − μ·tan β)).
    demand = road.side_demand_steady(top_speed, 1.0 / radius, math.radians(bank_deg))
    assert demand == pytest.approx(friction, rel=1e-8)


@pytest.mark.parametrize(("speed", "radius", "slope", "friction"), rows_mph() + rows_kmh())
def test_aashto_rows(speed: float, radius: float, slope: float, friction: float) -> None:
    # The table is built on demand = v²/gR − e. The exact demand is that over 1 + v²/gR·e, so it
    # falls short of the row's friction by the factor named here: 0.7 % to 5 % on a road.
    demand = float(road.side_demand_steady(speed, 1.0 / radius, math.atan(slope), 9.80665))
    pull = speed**2 / (9.80665 * radius)
    assert demand * (1.0 + pull * slope) == pytest.approx(friction, abs=0.004)
    assert 0.94 * friction < demand < friction + 0.002


@pytest.mark.parametrize(
    ("slope", "mph", "radius_ft"),
    [(slope, mph, radius) for slope, row in HANDBOOK_FT.items() for mph, radius in row.items()],
)
def test_handbook_radii_leave_friction_unused(slope: float, mph: int, radius_ft: float) -> None:
    # A design radius must not ask for more than the limiting side friction of its speed.
    demand = road.side_demand_steady(mph * MPH, 1.0 / (radius_ft * FOOT), math.atan(slope))
    assert 0.0 < demand < AASHTO_FRICTION_MPH[mph]


def test_the_highway_relation_is_half_too_high_on_an_oval() -> None:
    # 60 m/s, 250 m, 20°: 1.104 against 0.720, 53 % (computed).
    exact = float(road.side_demand_steady(60.0, 1 / 250.0, math.radians(20.0)))
    highway = 60.0**2 / (9.81 * 250.0) - math.tan(math.radians(20.0))
    assert highway / exact == pytest.approx(1.53, abs=0.005)


@pytest.mark.parametrize(
    ("bank_deg", "radius", "speed"), [(20.0, 250.0, 29.87703130), (31.0, 300.0, 42.05154934)]
)
def test_neutral_speed(bank_deg: float, radius: float, speed: float) -> None:
    # Computed, g = 9.81.
    assert road.neutral_speed_mps(radius, math.radians(bank_deg)) == pytest.approx(speed, rel=1e-9)


def test_no_speed_is_neutral_on_an_adverse_bank() -> None:
    speeds = road.neutral_speed_mps(250.0, np.radians([-5.0, 0.0, 5.0]))
    assert np.isnan(speeds[0])
    assert speeds[1] == 0.0


def steady(roll: np.ndarray, speed: float, heading_rate: float) -> tuple[np.ndarray, ...]:
    """Specific forces and yaw rate of steady motion, straight from the rotation matrix.

    The acceleration v·ψ̇ is horizontal to the left and gravity's reaction is vertical; body
    yaw rate is the projection of a vertical rotation on the road's normal.
    """
    cosine, sine = np.cos(roll), np.sin(roll)
    inward, upward = speed * heading_rate, 9.81
    return (
        cosine * inward + sine * upward,
        -sine * inward + cosine * upward,
        heading_rate * cosine,
    )


def test_two_identities_of_steady_motion() -> None:
    roll = np.radians(np.linspace(-45.0, 45.0, 19))
    turning = np.full_like(roll, 0.24)
    zero = np.zeros_like(roll)
    side = road.lateral_specific_force(roll, zero, zero, zero, zero, zero, 60.0, turning)
    normal = road.normal_specific_force(roll, zero, zero, zero, zero, zero, 60.0, turning)
    assert_allclose(side**2 + normal**2, 9.81**2 + (60.0 * 0.24) ** 2, rtol=1e-12)
    assert_allclose(np.arctan2(side, normal), roll + math.atan(60.0 * 0.24 / 9.81), rtol=1e-12)


def test_bank_from_side_force_check_value() -> None:
    # f_y = 11.0, u = 60, r = 0.24: −20.27858729° (computed).
    roll = road.bank_from_side_force(11.0, 60.0, 0.24)
    assert math.degrees(roll) == pytest.approx(-20.27858729, abs=1e-8)


def test_bank_from_side_force_saturates() -> None:
    assert_allclose(
        road.bank_from_side_force(np.array([50.0, -50.0]), 1.0, 0.0),
        [1, -1] * np.array(math.pi / 2),
    )


@pytest.mark.parametrize("heading_rate", [-0.5, -0.24, 0.0, 0.24, 0.5])
def test_both_bank_estimates_are_exact_in_steady_motion(heading_rate: float) -> None:
    roll = np.radians(np.linspace(-60.0, 60.0, 121))
    side, normal, yaw_rate = steady(roll, 60.0, heading_rate)
    assert_allclose(road.bank_from_side_force(side, 60.0, yaw_rate), roll, atol=1e-12)
    found = road.bank_from_specific_force(side, normal, 60.0, yaw_rate)
    assert_allclose(found, roll, atol=1e-12)


def test_which_bank_estimate_is_better_conditioned() -> None:
    # At 20° and 1.5 g centripetal: the numbers in the docstring.
    roll = np.radians([-20.0])
    side, normal, yaw_rate = steady(roll, 1.5 * 9.81, 1.0)
    speed = 1.5 * 9.81

    def error_deg(d_side: float, d_normal: float, d_turn: float) -> tuple[float, float]:
        rate = yaw_rate + d_turn / speed
        plain = road.bank_from_side_force(side + d_side, speed, rate)
        both = road.bank_from_specific_force(side + d_side, normal + d_normal, speed, rate)
        return float(np.degrees(plain - roll)[0]), float(np.degrees(both - roll)[0])

    assert error_deg(0.1, 0.0, 0.0) == pytest.approx((0.62, 0.31), abs=0.01)
    assert error_deg(0.0, 0.0, 0.1) == pytest.approx((-0.62, -0.23), abs=0.01)
    assert error_deg(0.0, 4.0, 0.0) == pytest.approx((0.0, -8.1), abs=0.1)
    assert error_deg(0.0, -4.0, 0.0) == pytest.approx((0.0, 10.6), abs=0.1)


@pytest.mark.parametrize(
    ("roll_deg", "yaw", "pitch"),
    [
        (-12.0, 0.2347554242, -0.0498988058),
        (-20.0, 0.2255262290, -0.0820848344),
        (-31.0, 0.2057201522, -0.1236091380),
    ],
)
def test_body_rates_on_a_constant_bank(roll_deg: float, yaw: float, pitch: float) -> None:
    # Computed from the Euler rates at ψ̇ = 0.24 rad/s: the ribbon at one meter per second.
    rates = road.ribbon_rates(0.24, 0.0, math.radians(roll_deg), 0.0, 0.0)
    assert_allclose(rates, [0.0, pitch, yaw], atol=1e-10)


def test_ribbon_rates_in_a_transition() -> None:
    # Slope 0, roll −20°, 1/250 per meter, −11° in 120 m (computed; relations of Perantoni and
    # Limebeer 2015 as restated by later open code).
    rates = road.ribbon_rates(1 / 250.0, 0.0, math.radians(-20.0), math.radians(-11.0) / 120.0, 0.0)
    assert_allclose(rates, [-0.00159989, -0.00136808, 0.00375877], atol=5e-9)


def test_ribbon_rates_against_the_rotation_matrix() -> None:
    # The skew part of Rᵀ·R′ by finite differences, R = Rz(heading)·Ry(slope)·Rx(roll).
    def rotation(along: float) -> np.ndarray:
        heading, slope, roll = 0.3 + 0.01 * along, 0.05 - 0.002 * along, -0.3 + 0.004 * along
        ch, sh, cs, ss = math.cos(heading), math.sin(heading), math.cos(slope), math.sin(slope)
        cr, sr = math.cos(roll), math.sin(roll)
        about_z = np.array([[ch, -sh, 0], [sh, ch, 0], [0, 0, 1]])
        about_y = np.array([[cs, 0, ss], [0, 1, 0], [-ss, 0, cs]])
        about_x = np.array([[1, 0, 0], [0, cr, -sr], [0, sr, cr]])
        return about_z @ about_y @ about_x

    step = 1e-4
    skew = rotation(0.0).T @ (rotation(step) - rotation(-step)) / (2 * step)
    rates = road.ribbon_rates(0.01, 0.05, -0.3, 0.004, -0.002)
    assert_allclose(rates, [skew[2, 1], skew[0, 2], skew[1, 0]], atol=1e-9)


class BankedEntry:
    """A car moving over a ruled surface that turns about a spine, known only as points in space.

    The spine is level, straight up to station 0 and then tightens; the surface's roll rises at
    the same place. Everything the formulas are held against comes from differences of the
    position and from the normal of the surface itself.
    """

    def __init__(
        self,
        start_m: float,
        length_m: float,
        move_m: float,
        *,
        side: float = 1.0,
        rise_m: float = 0.0,
    ) -> None:
        self.start_m, self.length_m, self.move_m, self.rise_m = start_m, length_m, move_m, rise_m
        self.side = side
        self.speed_mps = 62.0
        station = np.arange(-220.0, 320.0, 0.02)
        heading = side / 200.0 * self._integral(self.ramp(station / 120.0), station)
        self._station = station
        self._heading = heading
        self._x = self._integral(np.cos(heading), station)
        self._y = self._integral(np.sin(heading), station)
        self.time_s = np.linspace(-2.6, 3.6, 311)

    @staticmethod
    def ramp(share: np.ndarray) -> np.ndarray:
        share = np.clip(share, 0.0, 1.0)
        return share**3 * (10.0 - 15.0 * share + 6.0 * share**2)

    @staticmethod
    def _integral(values: np.ndarray, station: np.ndarray) -> np.ndarray:
        steps = 0.5 * (values[1:] + values[:-1]) * np.diff(station)
        return np.concatenate([[0.0], np.cumsum(steps)])

    def roll(self, time: np.ndarray) -> np.ndarray:
        share = self.ramp(self.speed_mps * time / 120.0)
        return -self.side * np.radians(4.0 + 18.0 * share)

    def offset(self, time: np.ndarray) -> np.ndarray:
        share = self.ramp((self.speed_mps * time - self.start_m) / self.length_m)
        return self.side * (-7.0 + self.move_m * share)

    def heading(self, time: np.ndarray) -> np.ndarray:
        return self._look(self._heading, self.speed_mps * time)

    def spine_height(self, station: np.ndarray) -> np.ndarray:
        return self.rise_m * np.sin(station / 60.0)

    def point(self, time: np.ndarray, along: float = 0.0, across: float = 0.0) -> np.ndarray:
        """Position at a time, moved along the spine or across the surface to feel its shape."""
        station = self.speed_mps * time + along
        heading = self._look(self._heading, station)
        roll = self.roll(time + along / self.speed_mps)
        level = (self.offset(time) + across) * np.cos(roll)
        x = self._look(self._x, station) - level * np.sin(heading)
        y = self._look(self._y, station) + level * np.cos(heading)
        z = self.spine_height(station) + (self.offset(time) + across) * np.sin(roll)
        return np.stack([x, y, z])

    def _look(self, values: np.ndarray, station: np.ndarray) -> np.ndarray:
        return _cubic(self._station, values, station)

    def felt(self) -> tuple[np.ndarray, np.ndarray]:
        """Specific force to the left in the surface and along its normal, by differences."""
        force = _second(self.point, self.time_s) + np.array([[0.0], [0.0], [9.81]])
        step = 1e-3
        along = self.point(self.time_s, along=step) - self.point(self.time_s, along=-step)
        across = self.point(self.time_s, across=step) - self.point(self.time_s, across=-step)
        normal = np.cross(along.T, across.T).T
        normal /= np.linalg.norm(normal, axis=0)
        forward = _first(self.point, self.time_s)
        forward /= np.linalg.norm(forward, axis=0)
        left = np.cross(normal.T, forward.T).T
        return (left * force).sum(axis=0), (normal * force).sum(axis=0)

    def arguments(self) -> tuple[np.ndarray, ...]:
        """What the formulas ask for; the path's heading rate in plan again by differences."""
        time = self.time_s
        velocity, acceleration = _first(self.point, time), _second(self.point, time)
        speed = np.hypot(velocity[0], velocity[1])
        turning = velocity[0] * acceleration[1] - velocity[1] * acceleration[0]
        return (
            self.roll(time),
            _first(self.roll, time),
            _second(self.roll, time),
            self.offset(time),
            _first(self.offset, time),
            _second(self.offset, time),
            speed,
            turning / speed**2,
            _second(lambda t: self.spine_height(self.speed_mps * t), time),
        )


def _cubic(grid: np.ndarray, values: np.ndarray, at: np.ndarray) -> np.ndarray:
    """Cubic Lagrange interpolation on an even grid: smooth enough to differentiate twice."""
    step = grid[1] - grid[0]
    place = (at - grid[0]) / step
    index = np.floor(place).astype(int)
    u = place - index
    before, here, after, beyond = (values[index + k] for k in (-1, 0, 1, 2))
    return (
        -u * (u - 1) * (u - 2) / 6 * before
        + (u * u - 1) * (u - 2) / 2 * here
        - u * (u + 1) * (u - 2) / 2 * after
        + u * (u * u - 1) / 6 * beyond
    )


def _first(function: Motion, time: np.ndarray, step: float = 4e-3) -> np.ndarray:
    near = function(time + step) - function(time - step)
    far = function(time + 2 * step) - function(time - 2 * step)
    return (8.0 * near - far) / (12.0 * step)


def _second(function: Motion, time: np.ndarray, step: float = 4e-3) -> np.ndarray:
    near = function(time + step) + function(time - step)
    far = function(time + 2 * step) + function(time - 2 * step)
    return (16.0 * near - far - 30.0 * function(time)) / (12.0 * step * step)


ENTRIES = {
    "early": {"start_m": -120.0, "length_m": 240.0, "move_m": 10.0},
    "late": {"start_m": 30.0, "length_m": 160.0, "move_m": 7.0},
    "rising spine": {"start_m": -60.0, "length_m": 200.0, "move_m": 8.0, "rise_m": 0.5},
    "turning right": {"start_m": -60.0, "length_m": 200.0, "move_m": 8.0, "side": -1.0},
}


@pytest.mark.parametrize("entry", ENTRIES)
def test_specific_forces_against_differences_of_a_path(entry: str) -> None:
    # The formulas neglect the square of the angle between path and spine, here up to 5°: that
    # is worth under 0.07 m/s² of 6 to 18.
    car = BankedEntry(**ENTRIES[entry])
    side, normal = car.felt()
    arguments = car.arguments()
    assert_allclose(road.normal_specific_force(*arguments), normal, atol=0.07)
    assert_allclose(road.lateral_specific_force(*arguments), side, atol=0.07)


@pytest.mark.parametrize("entry", ENTRIES)
def test_specific_forces_are_exact_in_the_section_across_the_spine(entry: str) -> None:
    # With the horizontal acceleration taken across the spine in place of across the path,
    # nothing is neglected.
    car = BankedEntry(**ENTRIES[entry])
    heading, roll = car.heading(car.time_s), car.roll(car.time_s)
    level, upright = np.zeros_like(heading), np.ones_like(heading)
    plan_left = np.stack([-np.sin(heading), np.cos(heading), level])
    up = np.stack([level, level, upright])
    force = _second(car.point, car.time_s) + 9.81 * up
    motion, rise = car.arguments()[:6], car.arguments()[8]
    inward = (plan_left * force).sum(axis=0)
    across = ((np.cos(roll) * plan_left + np.sin(roll) * up) * force).sum(axis=0)
    normal = ((np.cos(roll) * up - np.sin(roll) * plan_left) * force).sum(axis=0)
    assert_allclose(road.normal_specific_force(*motion, 1.0, inward, rise), normal, atol=2e-5)
    assert_allclose(road.lateral_specific_force(*motion, 1.0, inward, rise), across, atol=2e-5)


@pytest.mark.parametrize("entry", ["early", "late"])
def test_the_steady_formula_fails_in_the_transition(entry: str) -> None:
    # Why the long expression is there: without the surface's rise a meter per second squared and
    # more goes missing, in different places for early and late entries.
    car = BankedEntry(**ENTRIES[entry])
    roll, speed, turning = car.arguments()[0], *car.arguments()[6:8]
    steady_normal = np.cos(roll) * 9.81 - np.sin(roll) * speed * turning
    assert np.max(np.abs(steady_normal - car.felt()[1])) > 1.2


def test_bank_ramp_term_check_values() -> None:
    # 11° over 120 m at 60 m/s, 6 m from the axis, cubic ramp: peak roll rate 0.14399 rad/s, peak
    # vertical acceleration 1.7279 m/s² (computed).
    rise = math.radians(11.0)
    share = np.linspace(0.0, 1.0, 2001)
    rate = rise * (6 * share - 6 * share**2) * 60.0 / 120.0
    acceleration = rise * (6 - 12 * share) * (60.0 / 120.0) ** 2
    assert np.max(rate) == pytest.approx(0.14399, abs=5e-6)
    flat = np.zeros_like(share)
    felt = road.normal_specific_force(flat, flat, acceleration, 6.0, flat, flat, 60.0, 0.0) - 9.81
    assert np.max(felt) == pytest.approx(1.7279, abs=5e-5)


def test_common_practice_on_a_large_steep_oval() -> None:
    # Common practice, no source: at racing speed on a large steep oval the centripetal force is
    # about twice the weight and the normal load two to three times; on a straight about one. A
    # 3,400 lb car weighs about 15,000 N.
    weight = 3400.0 * 0.45359237 * 9.81
    assert weight == pytest.approx(15_000.0, rel=0.02)
    speed, radius, roll = 85.0, 330.0, math.radians(-31.0)
    pull = speed**2 / radius / 9.81
    assert 1.8 < pull < 2.5
    normal = float(road.normal_specific_force(roll, 0, 0, 0, 0, 0, speed, speed / radius)) / 9.81
    assert 2.0 < normal * weight / 15_000.0 < 3.0
    straight = float(road.normal_specific_force(math.radians(-3), 0, 0, 0, 0, 0, 90.0, 0.0)) / 9.81
    assert straight == pytest.approx(1.0, abs=0.01)


def test_downforce_adds_to_the_normal_force() -> None:
    # 1,500 kg, 70 m/s, 280 m, 24°, 4,501.875 N: normal 28,621.5333 N, side 17,995.4386 N, demand
    # 0.628737754, without downforce 0.746090112 (computed).
    motion = (math.radians(-24.0), 0, 0, 0, 0, 0, 70.0, 70.0 / 280.0)
    side = 1500.0 * float(road.lateral_specific_force(*motion))
    normal = 1500.0 * float(road.normal_specific_force(*motion)) + 4501.875
    assert (normal, side) == pytest.approx((28_621.5333, 17_995.4386), abs=1e-3)
    assert side / normal == pytest.approx(0.628737754, abs=1e-9)
    bare = road.side_demand_steady(70.0, 1 / 280.0, math.radians(24.0))
    assert bare == pytest.approx(0.746090112, abs=1e-9)


def test_one_row_of_a_published_racing_line() -> None:
    # −20°, 33.898472 m/s² in the road's plane: 30.543087 aside and 21.557055 along the normal
    # (computed from the row of an open 3-D racing line data set; the roll is rounded).
    roll = math.radians(-20.0)
    motion = (roll, 0, 0, 0, 0, 0, 1.0, 33.898472 / math.cos(roll))
    assert road.lateral_specific_force(*motion) == pytest.approx(30.543087, abs=1e-3)
    assert road.normal_specific_force(*motion) == pytest.approx(21.557055, abs=1e-3)


def test_any_cut_of_a_series_gives_the_same_bits() -> None:
    rng = np.random.default_rng(11)
    side, normal, speed, turn = rng.uniform(
        [[5], [8], [20], [-0.4]], [[25], [25], [90], [0.4]], (4, 61)
    )
    parts = [
        (road.bank_from_specific_force, (side, normal, speed, turn)),
        (road.bank_from_side_force, (side, speed, turn)),
        (road.side_demand_steady, (speed, turn / speed, turn)),
        (road.normal_specific_force, (turn, turn, side, normal, side, normal, speed, turn)),
    ]
    for function, columns in parts:
        whole = function(*columns)
        for size in (1, 2, 3, 7, 16):
            cut = [
                function(*(column[start : start + size].copy() for column in columns))
                for start in range(0, 61, size)
            ]
            assert np.array_equal(np.concatenate(cut), whole), function.__name__


def test_nan_in_nan_out() -> None:
    nan = math.nan
    assert np.isnan(road.neutral_speed_mps(nan, 0.3))
    assert np.isnan(road.side_demand_steady(60.0, 0.004, nan))
    assert np.isnan(road.bank_from_side_force(nan, 60.0, 0.2))
    assert np.isnan(road.bank_from_specific_force(11.0, nan, 60.0, 0.2))
    assert np.isnan(road.normal_specific_force(0.1, 0, 0, nan, 0, 0, 60.0, 0.2))
    assert np.isnan(road.lateral_specific_force(0.1, 0, 0, 0, 0, 0, nan, 0.2))


SPEEDS = st.floats(5.0, 100.0)
CURVATURES = st.floats(-0.01, 0.01)
BANKS = st.floats(-0.5, 0.5)


@settings(max_examples=60, deadline=None)
@given(speed=SPEEDS, curvature=CURVATURES, bank=BANKS)
def test_mirrored_road_mirrors_everything(speed: float, curvature: float, bank: float) -> None:
    demand = road.side_demand_steady(speed, curvature, bank)
    assert road.side_demand_steady(speed, -curvature, -bank) == -demand
    turning = speed * curvature
    left = (-bank, 0.1, 0.2, 3.0, 1.0, 0.5, speed, turning)
    right = (bank, -0.1, -0.2, -3.0, -1.0, -0.5, speed, -turning)
    assert road.normal_specific_force(*left) == road.normal_specific_force(*right)
    assert road.lateral_specific_force(*left) == -road.lateral_specific_force(*right)


@settings(max_examples=60, deadline=None)
@given(speed=SPEEDS, curvature=CURVATURES)
def test_flat_road_is_the_flat_formula(speed: float, curvature: float) -> None:
    assert road.side_demand_steady(speed, curvature, 0.0) == speed**2 * curvature / 9.81
    turning = speed * curvature
    assert road.normal_specific_force(0, 0, 0, 5.0, 2.0, 1.0, speed, turning) == 9.81
    assert road.lateral_specific_force(0, 0, 0, 5.0, 2.0, 1.0, speed, turning) == speed * turning


@settings(max_examples=60, deadline=None)
@given(speed=SPEEDS, curvature=st.floats(1e-4, 0.01), bank=st.floats(0.0, 0.5))
def test_demand_is_the_ratio_of_the_specific_forces(
    speed: float, curvature: float, bank: float
) -> None:
    steady_state = (-bank, 0, 0, 0, 0, 0, speed, speed * curvature)
    side = road.lateral_specific_force(*steady_state)
    normal = road.normal_specific_force(*steady_state)
    assert side / normal == pytest.approx(
        float(road.side_demand_steady(speed, curvature, bank)), abs=1e-9
    )


@pytest.mark.parametrize("roll_deg", [-31.0, -20.0, 0.0, 8.0])
@pytest.mark.parametrize("rise", [0.0, -3.0])
def test_the_normal_force_that_goes_with_a_side_force(roll_deg: float, rise: float) -> None:
    """Two vectors: whatever pushes the car level, its weight and its rise are carried."""
    roll = math.radians(roll_deg)
    force = np.array([13.0, 9.81 + rise])  # level and upward
    left, up = (math.cos(roll), math.sin(roll)), (-math.sin(roll), math.cos(roll))
    found = road.normal_from_side_force(force @ left, roll, rise)
    assert float(found) == pytest.approx(float(force @ up), rel=1e-12)
