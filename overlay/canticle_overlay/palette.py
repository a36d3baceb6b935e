"""Pure: the overlay's colors and the contrast that they keep.

One hue (sky blue of the Okabe–Ito set) varied in lightness, one accent (its orange), on dark.
Nothing is told by color alone, and red is never set against green.
"""

from __future__ import annotations

from typing import TypeAlias

Color: TypeAlias = tuple[int, int, int, int]
"""Red, green, blue, alpha, each 0 to 255."""

PANEL: Color = (13, 19, 26, 255)
SKY_BLUE: Color = (86, 180, 233, 255)
ORANGE: Color = (230, 159, 0, 255)
PALE: Color = (214, 236, 249, 255)
DIM: Color = (66, 122, 156, 255)
HATCH: Color = (110, 166, 198, 255)
GROUND: Color = (28, 58, 78, 255)
"""A fill behind other shapes; the line on its edge is what must be seen."""
RULE: Color = (40, 56, 70, 255)
"""Divides the parts of the strip; carries no information."""

TEXT_CONTRAST = 4.5
SHAPE_CONTRAST = 3.0


def luminance(color: Color) -> float:
    """Return the relative luminance, 0 for black to 1 for white.

    Parameters
    ----------
    color
        An opaque color; alpha is not looked at.

    References
    ----------
    WCAG 2.2, "relative luminance" (sRGB, threshold 0.04045).
    """
    red, green, blue = (_linear(channel / 255) for channel in color[:3])
    return 0.2126 * red + 0.7152 * green + 0.0722 * blue


def contrast(one: Color, other: Color) -> float:
    """Return the contrast ratio of two opaque colors, 1 to 21, in either order.

    Parameters
    ----------
    one, other
        The two colors; alpha is not looked at.

    References
    ----------
    WCAG 2.2, "contrast ratio".
    """
    light, dark = sorted((luminance(one), luminance(other)), reverse=True)
    return (light + 0.05) / (dark + 0.05)


def mix(one: Color, other: Color, share: float) -> Color:
    """Return `one` with a share of `other`, 0 to 1, mixed in.

    Parameters
    ----------
    one, other
        The two colors.
    share
        0 gives `one`, 1 gives `other`.
    """
    red, green, blue, alpha = (
        round(first + (second - first) * share) for first, second in zip(one, other, strict=True)
    )
    return red, green, blue, alpha


def _linear(channel: float) -> float:
    return channel / 12.92 if channel <= 0.04045 else ((channel + 0.055) / 1.055) ** 2.4
