"""Units by name, and what each quantity of a frame is measured in.

Every factor is exact by definition (or a ratio of exact ones):

* the foot, yard, mile and pound by the international yard and pound agreement of 1959,
  1 yd = 0.9144 m and 1 lb = 0.45359237 kg;
* standard gravity, 9.80665 m/s², by the third General Conference on Weights and Measures, 1901;
* the pound-force as the pound times standard gravity; the knot as 1852 m an hour.

NIST Special Publication 811, appendix B, lists them all.
"""

from __future__ import annotations

import difflib
import math

STANDARD_GRAVITY_MPS2 = 9.80665
_FOOT_M = 0.3048
_MILE_M = 1609.344
_POUND_KG = 0.45359237

UNITS: dict[str, dict[str, float]] = {
    "time": {"s": 1.0, "ms": 1e-3, "us": 1e-6, "ns": 1e-9, "min": 60.0, "h": 3600.0},
    "length": {
        "m": 1.0,
        "mm": 1e-3,
        "cm": 1e-2,
        "km": 1000.0,
        "in": _FOOT_M / 12.0,
        "ft": _FOOT_M,
        "yd": 3.0 * _FOOT_M,
        "mi": _MILE_M,
    },
    "speed": {
        "m/s": 1.0,
        "km/h": 1000.0 / 3600.0,
        "mph": _MILE_M / 3600.0,
        "ft/s": _FOOT_M,
        "kn": 1852.0 / 3600.0,
    },
    "acceleration": {"m/s^2": 1.0, "g": STANDARD_GRAVITY_MPS2, "ft/s^2": _FOOT_M},
    "angle": {"rad": 1.0, "mrad": 1e-3, "deg": math.pi / 180.0, "rev": 2.0 * math.pi},
    "angular rate": {
        "rad/s": 1.0,
        "deg/s": math.pi / 180.0,
        "rev/s": 2.0 * math.pi,
        "rpm": math.pi / 30.0,
    },
    "force": {
        "N": 1.0,
        "kN": 1000.0,
        "lbf": _POUND_KG * STANDARD_GRAVITY_MPS2,
        "kgf": STANDARD_GRAVITY_MPS2,
    },
    "mass": {"kg": 1.0, "lb": _POUND_KG},
    "ratio": {"fraction": 1.0, "%": 0.01},
}
"""Factor from each unit to the SI unit, which comes first, by dimension."""

_SUFFIXES = {
    "_s": "time",
    "_m": "length",
    "_mps": "speed",
    "_mps2": "acceleration",
    "_rad": "angle",
    "_radps": "angular rate",
    "_n": "force",
    "_kg": "mass",
}


def dimension_of(quantity: str) -> str:
    """Return the dimension of a quantity whose name ends in its unit.

    Examples
    --------
    >>> dimension_of("accel_y_mps2"), dimension_of("throttle")
    ('acceleration', 'ratio')
    """
    suffix = "_" + quantity.rpartition("_")[2]
    return _SUFFIXES.get(suffix, "ratio")


def factor_to_si(unit: str, dimension: str) -> float:
    """Return what a value in that unit is multiplied by to be SI.

    Raises
    ------
    ValueError
        The unit is not known or does not measure that dimension; the text suggests one that does.

    Examples
    --------
    >>> factor_to_si("mph", "speed")
    0.44704
    """
    known = UNITS[dimension]
    if unit in known:
        return known[unit]
    elsewhere = [other for other, units in UNITS.items() if unit in units]
    if elsewhere:
        raise ValueError(
            f"unit {unit!r} measures {elsewhere[0]}, not {dimension} ({', '.join(known)})"
        )
    lowered = {name.lower(): name for name in known}
    close = difflib.get_close_matches(_plain(unit), lowered, n=1, cutoff=0.5)
    hint = f"did you mean {lowered[close[0]]!r}?" if close else f"known: {', '.join(known)}"
    raise ValueError(f"unknown unit {unit!r} ({hint})")


def _plain(unit: str) -> str:
    text = unit.lower().replace(" ", "").replace("²", "^2").replace("kph", "km/h")
    return text.replace("degree", "deg").replace("°", "deg").replace("percent", "%")
