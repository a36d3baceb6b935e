"""The brush tire against published relations and an independent Magic Formula.

Numbers marked "computed" follow from the stated formula with independent arithmetic; the
relations are E. Fiala 1954 and H. B. Pacejka 2012, chapter 3 (attribution from memory).
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from canticle_daemon.physics import tire as brush
from canticle_daemon.physics.car import TireFile

# The reference tire of the check values: 80 kN/rad at 4 kN with a friction of 1.
PLAIN = TireFile(peak_friction=1.0, load_sensitivity=0.0, cornering_stiffness_per_load=20.0)
FORCES = {
    0.01: -747.8750823553913,
    0.02: -1396.3084075393194,
    0.05: -2816.2971608440207,
    0.08: -3596.455224990379,
    0.10: -3854.806847188438,
    0.14: -3999.113309982378,
    0.20: -4000.0,
}
INVERSE = {
    0.25: 0.01371509551881271,
    0.50: 0.03093504927714902,
    0.75: 0.05544902353297802,
    0.875: 0.07485984771076686,
    0.90: 0.08020374985219941,
    0.99: 0.11714466802837602,
}
EXPONENTS = {
    0.0: 2.0,
    0.10: 2.03617005,
    0.25: 2.10401872,
    0.50: 2.28244070,
    0.75: 2.70241438,
    0.90: 3.59867451,
    0.95: 4.69416020,
}


@pytest.mark.parametrize(("angle", "force"), FORCES.items())
def test_force_at_slip_angles(angle: float, force: float) -> None:
    # Computed from the cubic in tan(angle): C 80 kN/rad, friction 1.0, load 4 kN.
    assert brush.brush_side_force_n(angle, 4000.0, 1.0, 80_000.0) == pytest.approx(force, rel=1e-12)


def test_force_saturates_where_the_source_says() -> None:
    # Full sliding from atan(3·mu·Fz/C) = 8.530765609948133 degrees (computed).
    angle = math.radians(8.530765609948133)
    below, above = brush.brush_side_force_n(angle * np.array([0.999, 1.001]), 4000.0, 1.0, 80_000.0)
    assert -4000.0 < below < -3999.99
    assert above == -4000.0


@pytest.mark.parametrize(("used", "angle"), INVERSE.items())
def test_inverse_at_utilizations(used: float, angle: float) -> None:
    assert math.atan(brush.slip_tangent(used, 1.0, 20.0)) == pytest.approx(angle, rel=1e-12)


def test_inverse_returns_the_slip_to_1e9() -> None:
    angle = np.linspace(0.0, 0.13, 400)
    force = brush.brush_side_force_n(angle, 4000.0, 1.0, 80_000.0)
    used = np.abs(force) / 4000.0
    assert_allclose(np.arctan(brush.slip_tangent(used, 1.0, 20.0)), angle, rtol=0, atol=1e-9)


@pytest.mark.parametrize(("used", "exponent"), EXPONENTS.items())
def test_wear_exponent(used: float, exponent: float) -> None:
    # Computed; the range agrees with the "2 to 4" of A. G. Veith's tire tests, Rubber Chem.
    # Technol. 46:821, 1973 (through a quotation).
    assert brush.wear_exponent(used) == pytest.approx(exponent, rel=1e-8)


def test_wear_exponent_is_the_slope_of_the_energy() -> None:
    used = np.linspace(0.05, 0.95, 19)
    step = 1e-6

    def energy(share: np.ndarray) -> np.ndarray:
        return brush.sliding_power_w(4000.0 * share, 4000.0, 1.0, PLAIN)

    slope = np.log(energy(used * (1 + step)) / energy(used * (1 - step))) / (2 * step)
    assert_allclose(brush.wear_exponent(used), slope, rtol=1e-6)


@pytest.mark.parametrize(
    ("force", "limit", "exact"),
    [(500.0, 3.125, 3.26508065), (1000.0, 12.5, 13.71595554), (2000.0, 50.0, 61.88984220)],
)
def test_energy_per_meter_and_its_small_force_limit(
    force: float, limit: float, exact: float
) -> None:
    # Schallamach and Turner 1960 (from memory): F²/C at small slip; the exact values computed.
    assert brush.sliding_power_w(force, 4000.0, 1.0, PLAIN) == pytest.approx(exact, rel=1e-8)
    assert force**2 / 80_000.0 == limit
    assert limit < exact < 1.25 * limit


def test_power_against_the_definition() -> None:
    # 2,816.297 N at 0.05 rad and 60 m/s along the path: 8,445.371551101247 W (computed from
    # force × speed × sin(slip)); ours takes the speed along the wheel, hence the cosine.
    speed = 60.0 * math.cos(0.05)
    power = brush.sliding_power_w(2816.2971608440207, 4000.0, speed, PLAIN)
    assert power == pytest.approx(8445.371551101247, rel=1e-12)


def test_peak_friction_line_and_floor() -> None:
    car_tire = TireFile(peak_friction=1.3, reference_load_n=4000.0, load_sensitivity=-0.1)
    loads = np.array([0.0, 4000.0, 8000.0, 100_000.0])
    assert_allclose(brush.peak_friction(car_tire, loads), [1.43, 1.3, 1.17, 0.13], rtol=1e-12)


def test_utilization_is_held_and_survives_no_load() -> None:
    force = np.array([0.0, 2000.0, 4000.0, 9000.0, 100.0, 0.0, 100.0])
    load = np.array([4000.0, 4000.0, 4000.0, 4000.0, 0.0, 0.0, -50.0])
    expected = [0.0, 0.5, 0.999, 0.999, 0.999, 0.0, 0.999]
    assert_allclose(brush.utilization(force, load, PLAIN), expected, rtol=1e-12)
    power = brush.sliding_power_w(force, load, 60.0, PLAIN)
    assert_allclose(power[4:], 0.0)


def test_any_cut_of_a_series_gives_the_same_bits() -> None:
    rng = np.random.default_rng(12)
    force, load, speed = rng.uniform(0.0, [[6000.0], [6000.0], [90.0]], (3, 61))
    whole = brush.sliding_power_w(force, load, speed, PLAIN)
    for size in (1, 2, 3, 7, 16):
        cut = [
            brush.sliding_power_w(*(c[i : i + size].copy() for c in (force, load, speed)), PLAIN)
            for i in range(0, 61, size)
        ]
        assert np.array_equal(np.concatenate(cut), whole)


def test_nan_in_nan_out() -> None:
    nan = math.nan
    assert np.isnan(brush.peak_friction(PLAIN, nan))
    assert np.isnan(brush.wear_exponent(nan))
    assert np.isnan(brush.slip_tangent(nan, 1.0, 20.0))
    for force, load, speed in [(nan, 1.0, 1.0), (1.0, nan, 1.0), (1.0, 1.0, nan), (nan, 0.0, 1.0)]:
        assert np.isnan(brush.sliding_power_w(force, load, speed, PLAIN))
    for angle, load in [(nan, 1.0), (0.1, nan)]:
        assert np.isnan(brush.brush_side_force_n(angle, load, 1.0, 20.0))


@settings(max_examples=60, deadline=None)
@given(
    angle=st.floats(-1.4, 1.4),
    load=st.floats(0.0, 20_000.0),
    friction=st.floats(0.1, 3.0),
    per_load=st.floats(2.0, 60.0),
)
def test_force_is_odd_and_within_friction(
    angle: float, load: float, friction: float, per_load: float
) -> None:
    left = brush.brush_side_force_n(angle, load, friction, per_load * load)
    right = brush.brush_side_force_n(-angle, load, friction, per_load * load)
    assert left == -right
    assert abs(left) <= friction * load * (1 + 1e-12)
    assert left * angle <= 0.0


@settings(max_examples=60, deadline=None)
@given(
    forces=st.tuples(st.floats(0.0, 5000.0), st.floats(0.0, 5000.0)),
    share=st.floats(0.0, 1.0),
    load=st.floats(3900.0, 9000.0),
)
def test_energy_is_convex_in_force(forces: tuple[float, float], share: float, load: float) -> None:
    car_tire = TireFile(peak_friction=1.3, load_sensitivity=0.0)
    mean = share * forces[0] + (1.0 - share) * forces[1]
    low, high = brush.sliding_power_w(np.array(forces), load, 60.0, car_tire)
    steady = brush.sliding_power_w(mean, load, 60.0, car_tire)
    assert steady <= share * low + (1.0 - share) * high + 1e-6


@pytest.mark.parametrize("slip", [0.005, 0.03, 0.06, 0.1, 0.2])
def test_how_force_follows_friction_at_a_given_slip(slip: float) -> None:
    """The exponent against a finite difference of the brush force itself."""
    step, load, stiffness = 1e-6, 4000.0, 80_000.0
    below, here, above = (
        -float(brush.brush_side_force_n(slip, load, friction, stiffness))
        for friction in (1.0 - step, 1.0, 1.0 + step)
    )
    slope = (above - below) / (2.0 * step) / here
    used = here / load
    if used < brush.MAX_UTILIZATION:
        assert float(brush.friction_exponent(used)) == pytest.approx(slope, abs=1e-5)
    else:  # all of it slides: the force is the friction's
        assert slope == pytest.approx(1.0, abs=1e-5)
        assert float(brush.friction_exponent(used)) > 0.9
