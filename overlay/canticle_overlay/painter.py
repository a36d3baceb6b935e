"""Paints the pure list of shapes onto a pygame surface."""

from __future__ import annotations

from collections.abc import Sequence
from functools import lru_cache

import pygame

from canticle_overlay.palette import Color
from canticle_overlay.view import Line, Part, Polygon, Rect, Text

FINE = 2
"""Shapes are drawn this much larger and scaled down, which smooths their edges."""


class Painter:
    """Holds the picture of one window size and repaints the parts of it that change."""

    def __init__(self, size: tuple[int, int]) -> None:
        pygame.font.init()
        self._fine = pygame.Surface((size[0] * FINE, size[1] * FINE))
        self.picture = pygame.Surface(size)
        self._painted: dict[int, Part] = {}

    def paint(self, parts: Sequence[Part]) -> list[pygame.Rect]:
        """Bring the picture up to date; return what of it is new."""
        changed = [part for part in parts if self._painted.get(part.left) != part]
        for part in changed:
            self._painted[part.left] = part
        return [self._repaint(part) for part in changed]

    def _repaint(self, part: Part) -> pygame.Rect:
        box = pygame.Rect(part.left, 0, part.width, self.picture.get_height())
        fine_box = pygame.Rect([FINE * side for side in box])
        self._fine.set_clip(fine_box)
        for shape in part.shapes:
            if not isinstance(shape, Text):
                _paint_shape(self._fine, shape)
        piece = self.picture.subsurface(box)
        pygame.transform.smoothscale(self._fine.subsurface(fine_box), box.size, piece)
        for shape in part.shapes:
            if isinstance(shape, Text):
                _paint_text(self.picture, shape)
        return box


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
