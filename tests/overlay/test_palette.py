"""Contrast as WCAG 2.2 computes it, and the overlay's colors held against it."""

import colorsys

import pytest
from hypothesis import given
from hypothesis import strategies as st

from canticle_overlay import palette
from canticle_overlay.palette import Color, contrast, luminance, mix

BLACK, WHITE = (0, 0, 0, 255), (255, 255, 255, 255)
colors = st.tuples(*(st.integers(0, 255),) * 3, st.just(255))


@pytest.mark.parametrize(
    ("gray", "ratio"),
    [(0x76, 4.542224959605253), (0x77, 4.478089453577214), (0x59, 7.004729208035935), (0, 21.0)],
)
def test_contrast_on_white(gray: int, ratio: float) -> None:
    # WCAG 2.2: #767676 on white is the well-known lightest gray that passes 4.5:1.
    assert contrast((gray, gray, gray, 255), WHITE) == pytest.approx(ratio, rel=1e-12)


@pytest.mark.parametrize(
    ("color", "light", "on_black", "on_white"),
    [
        ((0xE6, 0x9F, 0x00, 255), 0.416193, 9.3239, 2.2523),
        ((0x56, 0xB4, 0xE9, 255), 0.405041, 9.1008, 2.3075),
    ],
)
def test_okabe_ito_set(color: Color, light: float, on_black: float, on_white: float) -> None:
    # The set's hex values as in R's documentation of palette.colors("Okabe-Ito").
    assert luminance(color) == pytest.approx(light, abs=1e-6)
    assert contrast(color, BLACK) == pytest.approx(on_black, abs=1e-4)
    assert contrast(color, WHITE) == pytest.approx(on_white, abs=1e-4)


def test_the_two_named_colors_are_those_of_the_set() -> None:
    assert palette.ORANGE[:3] == (0xE6, 0x9F, 0x00)
    assert palette.SKY_BLUE[:3] == (0x56, 0xB4, 0xE9)


@given(one=colors, other=colors)
def test_contrast_is_symmetric_and_bounded(one: Color, other: Color) -> None:
    assert contrast(one, other) == contrast(other, one)
    assert 1 <= contrast(one, other) <= 21.000001


def test_mix_runs_from_one_color_to_the_other() -> None:
    assert mix(BLACK, WHITE, 0) == BLACK
    assert mix(BLACK, WHITE, 1) == WHITE
    assert mix(BLACK, (100, 200, 50, 255), 0.5) == (50, 100, 25, 255)


def test_one_hue_and_one_accent() -> None:
    named = {value for name, value in vars(palette).items() if name.isupper()}
    tuples = [value for value in named if isinstance(value, tuple)]
    assert len(tuples) >= 7
    for red, green, blue, _ in tuples:
        hue_deg = 360 * colorsys.rgb_to_hsv(red / 255, green / 255, blue / 255)[0]
        assert 195 <= hue_deg <= 215 or 38 <= hue_deg <= 45
