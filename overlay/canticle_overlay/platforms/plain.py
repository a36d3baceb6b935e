"""An ordinary borderless window: works wherever pygame does."""

from __future__ import annotations

import os
from collections.abc import Sequence

import pygame

BOTTOM_GAP_PX = 48


class PlainWindow:
    """A borderless, opaque window at the bottom of the first screen."""

    def __init__(self) -> None:
        self._screen: pygame.Surface | None = None

    def prepare(self) -> None:
        """Let the screen saver run, and draw without the graphics card that the game needs."""
        os.environ.setdefault("SDL_FRAMEBUFFER_ACCELERATION", "0")
        os.environ.setdefault("SDL_VIDEO_ALLOW_SCREENSAVER", "1")

    def open(self, size: tuple[int, int], position: tuple[int | None, int | None]) -> None:
        """Open the window, centered above the screen's lower edge where nothing is asked."""
        left, top = place(size, position, pygame.display.get_desktop_sizes()[0])
        os.environ["SDL_VIDEO_WINDOW_POS"] = f"{left},{top}"
        self._screen = pygame.display.set_mode(size, pygame.NOFRAME)
        pygame.display.set_caption("Canticle")

    def present(self, picture: pygame.Surface, changed: Sequence[pygame.Rect]) -> None:
        """Copy what changed of the picture to the window."""
        if self._screen is not None:
            for box in changed:
                self._screen.blit(picture, box, box)
            pygame.display.update(changed)

    def tend(self) -> None:
        """Nothing: the window manager decides what is on top."""

    def close(self) -> None:
        """Close the display."""
        self._screen = None
        pygame.display.quit()


def place(
    size: tuple[int, int], asked: tuple[int | None, int | None], screen: tuple[int, int]
) -> tuple[int, int]:
    """Return the window's left and top: what is asked, else bottom center."""
    left = (screen[0] - size[0]) // 2 if asked[0] is None else asked[0]
    top = screen[1] - size[1] - BOTTOM_GAP_PX if asked[1] is None else asked[1]
    return max(left, 0) if asked[0] is None else left, max(top, 0) if asked[1] is None else top
