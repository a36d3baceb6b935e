"""Paints the pure list of shapes onto a pygame surface."""

from __future__ import annotations

from collections.abc import Sequence
from functools import lru_cache

import pygame

from canticle_overlay.palette import Color
from canticle_overlay.view import Line, Polygon, Rect, Shape, Text

FINE = 2
"""Shapes are drawn this much larger and scaled down, which smooths their edges."""


class Painter:
    """Holds the surfaces of one window size."""

    def __init__(self, size: tuple[int, int]) -> None:
        pygame.font.init()
        self._fine = pygame.Surface((size[0] * FINE, size[1] * FINE))
        self._picture = pygame.Surface(size)

    def paint(self, shapes: Sequence[Shape]) -> pygame.Surface:
        """Return the picture; the next call paints over it."""
        for shape in shapes:
            if not isinstance(shape, Text):
                _paint_shape(self._fine, shape)
        pygame.transform.smoothscale(self._fine, self._picture.get_size(), self._picture)
        for shape in shapes:
            if isinstance(shape, Text):
                _paint_text(self._picture, shape)
        return self._picture


def _paint_shape(surface: pygame.Surface, shape: Rect | Polygon | Line) -> None:
    match shape:
        case Rect(left, top, width, height, color):
            surface.fill(color, (left * FINE, top * FINE, width * FINE, height * FINE))
        case Polygon(points, color):
            pygame.draw.polygon(surface, color, [(x * FINE, y * FINE) for x, y in points])
        case Line(points, color, width):
            fine = [(x * FINE, y * FINE) for x, y in points]
            pygame.draw.lines(surface, color, False, fine, width * FINE)


def _paint_text(surface: pygame.Surface, text: Text) -> None:
    drawn = rendered(text.text, text.size, text.color)
    shift = {"left": 0.0, "center": 0.5, "right": 1.0}[text.align]
    surface.blit(drawn, (round(text.x - shift * drawn.get_width()), text.top))


@lru_cache(maxsize=256)
def rendered(text: str, size: int, color: Color) -> pygame.Surface:
    """Return the text as a transparent surface."""
    return _font(size).render(text, True, color)


@lru_cache(maxsize=16)
def _font(size: int) -> pygame.font.Font:
    # pygame's own font: the same on every system, no search through the installed ones.
    return pygame.font.Font(pygame.font.get_default_font(), size)
