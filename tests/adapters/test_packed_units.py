import re

import pytest

from canticle_adapters.units import UNITS, dimension_of, factor_to_si

# NIST Special Publication 811 (2008), appendix B.8, to the digits printed there (from memory);
# the yard and the pound behind them by the international agreement of 1959.
NIST = [
    ("mph", "speed", 4.4704e-01),
    ("km/h", "speed", 2.777778e-01),
    ("ft/s", "speed", 3.048e-01),
    ("kn", "speed", 5.144444e-01),
    ("ft", "length", 3.048e-01),
    ("in", "length", 2.54e-02),
    ("yd", "length", 9.144e-01),
    ("mi", "length", 1.609344e03),
    ("g", "acceleration", 9.80665),
    ("ft/s^2", "acceleration", 3.048e-01),
    ("deg", "angle", 1.745329e-02),
    ("rpm", "angular rate", 1.047198e-01),
    ("lbf", "force", 4.448222),
    ("kgf", "force", 9.80665),
    ("lb", "mass", 4.535924e-01),
    ("min", "time", 60.0),
    ("h", "time", 3600.0),
]


@pytest.mark.parametrize(("unit", "dimension", "factor"), NIST)
def test_factors_are_those_of_the_standard(unit: str, dimension: str, factor: float):
    assert factor_to_si(unit, dimension) == pytest.approx(factor, rel=5e-7)


def test_the_si_unit_comes_first_and_is_one():
    assert all(next(iter(units.values())) == 1.0 for units in UNITS.values())


@pytest.mark.parametrize(
    ("unit", "dimension", "hint"),
    [
        ("kph", "speed", "did you mean 'km/h'"),
        ("MPH", "speed", "did you mean 'mph'"),
        ("m/s²", "acceleration", "did you mean 'm/s^2'"),
        ("degrees", "angle", "did you mean 'deg'"),
        ("°/s", "angular rate", "did you mean 'deg/s'"),
        ("percent", "ratio", "did you mean '%'"),
        ("furlong", "length", "known: m, mm"),
        ("g", "speed", "'g' measures acceleration, not speed"),
    ],
)
def test_a_wrong_unit_is_answered_with_the_right_one(unit: str, dimension: str, hint: str):
    with pytest.raises(ValueError, match=re.escape(hint)):
        factor_to_si(unit, dimension)


def test_a_quantitys_name_tells_its_dimension():
    assert dimension_of("yaw_rate_radps") == "angular rate"
    assert dimension_of("wheel_load_n") == "force"
    assert dimension_of("wheel_slip_ratio") == dimension_of("lap") == "ratio"
