"""How the strip gets onto the screen: one module a way, chosen here.

For now every system gets an ordinary borderless window. A way that is transparent, stays on
top or lets clicks through is another `Surrounding`, chosen in `choose` by system and session.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Protocol

import pygame

from canticle_overlay.platforms.plain import PlainWindow


class Surrounding(Protocol):
    """The window that the painter's finished picture is given to."""

    def prepare(self) -> None:
        """Set what must be set before pygame opens the display."""

    def open(self, size: tuple[int, int], position: tuple[int | None, int | None]) -> None:
        """Show an empty window; a position of None is chosen by the module."""

    def present(self, picture: pygame.Surface, changed: Sequence[pygame.Rect]) -> None:
        """Put a finished picture of the window's size on the screen, or what changed of it."""

    def tend(self) -> None:
        """Do what has to be done again now and then, such as staying on top."""

    def close(self) -> None:
        """Take the window away."""


def choose() -> Surrounding:
    """Return the best way on this system."""
    return PlainWindow()
