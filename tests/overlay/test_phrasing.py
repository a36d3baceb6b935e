"""The vocabulary: finite, closed under what the coach can say, and hard to mishear."""

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from canticle_daemon.coach.phrasing import (
    STEPS,
    Lengths,
    label_of,
    late_detail,
    number_word,
    round_to_step,
    spoken_length,
    vocabulary,
)

UNITS: tuple[Lengths, ...] = ("meters", "feet", "car lengths")


@pytest.mark.parametrize(
    ("name", "label"),
    [
        ("Turn 1", "One"),
        ("turn 3", "Three"),
        ("TURN 04", "Four"),
        ("T2", "Two"),
        ("Corner 11", "Eleven"),
        ("Turn 21", "Twenty-one"),
        ("Mill  bend", "Mill bend"),
        ("Turn 1-2", "Turn 1-2"),
        ("Turn 0", "Turn 0"),
        ("Turnpike", "Turnpike"),
    ],
)
def test_corner_labels(name: str, label: str) -> None:
    assert label_of(name) == label


def test_number_words() -> None:
    words = {5: "five", 10: "ten", 20: "twenty", 25: "twenty-five", 30: "thirty", 40: "forty"}
    words |= {70: "seventy", 90: "ninety", 100: "one hundred", 150: "one hundred fifty"}
    assert {number: number_word(number) for number in words} == words


@pytest.mark.parametrize("number", [-1, 1000])
def test_numbers_without_a_word_are_refused(number: int) -> None:
    with pytest.raises(ValueError, match="only 0 to 999"):
        number_word(number)


@pytest.mark.parametrize(
    ("length", "step"),
    [(0.0, 5), (7.5, 5), (7.6, 10), (22.4, 20), (27.6, 30), (41.7, 40), (124.0, 100), (1e4, 300)],
)
def test_rounding(length: float, step: int) -> None:
    assert round_to_step(length) == step
    assert round_to_step(-length) == step


@pytest.mark.parametrize("length", [math.nan, math.inf])
def test_a_length_that_is_no_number_is_refused(length: float) -> None:
    with pytest.raises(ValueError, match="finite"):
        round_to_step(length)


def test_units() -> None:
    # The international foot is 0.3048 m by definition (1959 agreement).
    assert spoken_length(0.3048 * 60, "feet") == "sixty"
    assert spoken_length(25.0, "car lengths", car_length_m=5.0) == "five lengths"
    assert spoken_length(4.0, "car lengths", car_length_m=5.0) == "one length"


@given(
    corner=st.sampled_from(["Turn 1", "Turn 3", "Mill bend"]),
    length_m=st.floats(-500, 500),
    lengths=st.sampled_from(UNITS),
)
def test_whatever_the_coach_says_is_in_the_vocabulary(
    corner: str, length_m: float, lengths: Lengths
) -> None:
    labels = [label_of(name) for name in ("Turn 1", "Turn 3", "Mill bend")]
    assert late_detail(corner, length_m, lengths) in vocabulary(labels, lengths)


@pytest.mark.parametrize("lengths", UNITS)
def test_no_number_has_a_twin_that_sounds_alike(lengths: Lengths) -> None:
    words = {number_word(step) for step in STEPS[lengths]}
    twins = {f"{stem}teen" for stem in ("thir", "four", "fif", "six", "seven", "eigh", "nine")}
    assert not words & twins


def test_a_label_is_rendered_once_and_the_words_come_first() -> None:
    phrases = vocabulary(["One", "One"])
    assert phrases[:2] == ["late", "early"]
    assert len(phrases) == len(set(phrases)) == 2 + len(STEPS["meters"])
