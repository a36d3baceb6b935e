"""The words of the spoken cues: a finite vocabulary, so that all of it can be rendered ahead.

A sentence has at most four units of information: `"One, forty late."`. Lengths are rounded to
steps that are hard to mishear: no vocabulary holds both a -teen and its -ty.
"""

from __future__ import annotations

import math
import re
from collections.abc import Sequence
from types import MappingProxyType
from typing import Literal, TypeAlias

Lengths: TypeAlias = Literal["meters", "feet", "car lengths"]

WORDS = ("late", "early")

METER_STEPS = (5, 10, 20, 25, 30, 40, 50, 60, 70, 80, 90, 100, 150, 200, 300)
CAR_LENGTH_STEPS = (1, 2, 3, 4, 5, 6, 8, 10, 12, 20, 30, 40)
STEPS = MappingProxyType(
    {"meters": METER_STEPS, "feet": METER_STEPS, "car lengths": CAR_LENGTH_STEPS}
)
FEET_PER_METER = 1 / 0.3048

_ONES = (
    *("zero", "one", "two", "three", "four", "five", "six", "seven", "eight", "nine", "ten"),
    *("eleven", "twelve", "thirteen", "fourteen", "fifteen", "sixteen", "seventeen"),
    *("eighteen", "nineteen"),
)
_TENS = ("", "", "twenty", "thirty", "forty", "fifty", "sixty", "seventy", "eighty", "ninety")
_NUMBERED_CORNER = re.compile(r"\s*(?:turn|corner|t)\s*0*([1-9]\d?)\s*", re.IGNORECASE)


def label_of(corner: str) -> str:
    """Return a corner's name as it is spoken: a numbered one by its number alone.

    Parameters
    ----------
    corner
        The name in the track file.

    Examples
    --------
    >>> label_of("Turn 1"), label_of("T12"), label_of("Chapel bend")
    ('One', 'Twelve', 'Chapel bend')
    """
    numbered = _NUMBERED_CORNER.fullmatch(corner)
    if numbered is None:
        return " ".join(corner.split())
    return number_word(int(numbered[1])).capitalize()


def number_word(number: int) -> str:
    """Return a whole number from 0 to 999 in words.

    Parameters
    ----------
    number
        The number.

    Raises
    ------
    ValueError
        The number is outside 0 to 999.

    Examples
    --------
    >>> number_word(25), number_word(100), number_word(150)
    ('twenty-five', 'one hundred', 'one hundred fifty')
    """
    if not 0 <= number <= 999:
        raise ValueError(f"no word for {number}: only 0 to 999 are spoken")
    hundreds, rest = divmod(number, 100)
    if not hundreds:
        return _below_hundred(rest)
    head = f"{_ONES[hundreds]} hundred"
    return f"{head} {_below_hundred(rest)}" if rest else head


def round_to_step(length: float, lengths: Lengths = "meters") -> int:
    """Return the nearest length that has a spoken form; of two equally near, the shorter.

    Parameters
    ----------
    length
        Size of the distance, in the unit that `lengths` names; its sign does not count.
    lengths
        The unit. Car lengths have finer steps than meters and feet.

    Raises
    ------
    ValueError
        The length is not finite.

    Examples
    --------
    >>> round_to_step(38.2), round_to_step(-3.0), round_to_step(7.7, "car lengths")
    (40, 5, 8)
    """
    if not math.isfinite(length):
        raise ValueError(f"a length to speak must be finite, not {length}")
    return min(STEPS[lengths], key=lambda step: abs(step - abs(length)))


def spoken_length(length_m: float, lengths: Lengths = "meters", car_length_m: float = 5.0) -> str:
    """Return a distance in the words of the chosen unit; car lengths name themselves.

    Parameters
    ----------
    length_m
        The distance in meters; its sign does not count.
    lengths
        The unit the driver chose.
    car_length_m
        Length of the car in meters.

    Raises
    ------
    ValueError
        The length is not finite.

    Examples
    --------
    >>> spoken_length(38.0), spoken_length(38.0, "feet"), spoken_length(38.0, "car lengths")
    ('forty', 'one hundred', 'eight lengths')
    """
    unit_m = {"meters": 1.0, "feet": 1 / FEET_PER_METER, "car lengths": car_length_m}[lengths]
    return _words(round_to_step(length_m / unit_m, lengths), lengths)


def late_detail(
    corner: str, length_m: float, lengths: Lengths = "meters", car_length_m: float = 5.0
) -> str:
    """Return the sentence for the straight after a late turn-in.

    Parameters
    ----------
    corner
        The corner's name in the track file.
    length_m
        How late, in meters; its sign does not count.
    lengths
        The unit the driver chose.
    car_length_m
        Length of the car in meters.

    Raises
    ------
    ValueError
        The length is not finite.

    Examples
    --------
    >>> late_detail("Turn 1", -41.7)
    'One, forty late.'
    """
    return f"{label_of(corner)}, {spoken_length(length_m, lengths, car_length_m)} late."


def vocabulary(corner_labels: Sequence[str], lengths: Lengths = "meters") -> list[str]:
    """Return everything that can be spoken, in the order in which it should be rendered.

    Parameters
    ----------
    corner_labels
        The corners as spoken (`label_of`).
    lengths
        The unit the driver chose.

    Examples
    --------
    >>> vocabulary(["One"])[:3]
    ['late', 'early', 'One, five late.']
    """
    details = [
        f"{label}, {_words(step, lengths)} late."
        for label in dict.fromkeys(corner_labels)
        for step in STEPS[lengths]
    ]
    return [*WORDS, *details]


def _words(step: int, lengths: Lengths) -> str:
    if lengths != "car lengths":
        return number_word(step)
    return f"{number_word(step)} {'length' if step == 1 else 'lengths'}"


def _below_hundred(number: int) -> str:
    if number < len(_ONES):
        return _ONES[number]
    tens, ones = divmod(number, 10)
    return f"{_TENS[tens]}-{_ONES[ones]}" if ones else _TENS[tens]
