"""The overlay process: hears the bus, folds it into a scene, shows it at 30 Hz when it changed.

Start it with `python -m canticle_overlay.window --bus ENDPOINT`.
"""

from __future__ import annotations

import argparse
import os
import time
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import pygame
import zmq

from canticle_daemon.errors import SystemFaultError
from canticle_overlay import platforms
from canticle_overlay.bus import drain, subscribe
from canticle_overlay.lifeline import EXIT_CLOSED_BY_USER, EXIT_DONE, EXIT_FAULT, Lifeline
from canticle_overlay.painter import Painter
from canticle_overlay.state import Display
from canticle_overlay.view import draw, size

FRAME_S = 1 / 30
TEND_S = 1.0
EVENTS = (
    *("track", "status", "entry", "lap_completed", "cue"),
    *("discontinuity", "session_started"),
)
EXPOSED = frozenset({pygame.VIDEOEXPOSE, pygame.WINDOWEXPOSED, pygame.WINDOWSHOWN})
NO_SCREEN_DRIVERS = frozenset({"offscreen", "dummy", "evdev"})


@dataclass(frozen=True, slots=True)
class Options:
    """What the daemon asks for."""

    bus: str
    scale: float
    position: tuple[int | None, int | None]
    screenshot: Path | None
    after_s: float


def main(argv: Sequence[str] | None = None) -> int:
    """Run the overlay until the daemon lets go of it or the user closes the window."""
    options = _parse(argv)
    lifeline = Lifeline()
    surrounding = platforms.choose()
    try:
        with zmq.Context() as context:
            return _show(options, lifeline, surrounding, context)
    except SystemFaultError as fault:
        lifeline.say("unavailable", str(fault))
        return EXIT_FAULT
    finally:
        surrounding.close()


def _show(
    options: Options,
    lifeline: Lifeline,
    surrounding: platforms.Surrounding,
    context: zmq.Context[zmq.Socket[bytes]],
) -> int:
    # Subscribed before the window is there, so that nothing published meanwhile is lost.
    newest = subscribe(context, options.bus, ("estimate",), newest_only=True)
    events = subscribe(context, options.bus, EVENTS)
    with newest, events:
        surrounding.prepare()
        fault = open_display()
        if fault is not None:
            lifeline.say("unavailable", fault)
            return EXIT_DONE
        surrounding.open(size(options.scale), options.position)
        lifeline.say("ready", f"window of {size(options.scale)[0]} by {size(options.scale)[1]}")
        return Strip(options, surrounding, newest, events).run(lifeline)


class Strip:
    """The loop: drain, fold, draw what changed."""

    def __init__(
        self,
        options: Options,
        surrounding: platforms.Surrounding,
        newest: zmq.Socket[bytes],
        events: zmq.Socket[bytes],
    ) -> None:
        self._options = options
        self._surrounding = surrounding
        self._sockets = (events, newest)  # in this order: an entry before the exit that ends it
        self._display = Display()
        self._painter = Painter(size(options.scale))
        self._screenshot = options.screenshot

    def run(self, lifeline: Lifeline) -> int:
        """Show until told otherwise; return the exit status."""
        begun_s = time.monotonic()
        due_s, tend_s = begun_s, begun_s
        while lifeline.holds:
            happened = {event.type for event in pygame.event.get()}
            if pygame.QUIT in happened:
                return EXIT_CLOSED_BY_USER
            if happened & EXPOSED:
                self._surrounding.present(self._painter.picture, [self._painter.picture.get_rect()])
            now_s = time.monotonic()
            self.step(now_s)
            if now_s - begun_s >= self._options.after_s:
                self._save()
            if now_s >= tend_s:
                self._surrounding.tend()
                tend_s = now_s + TEND_S
            due_s = max(due_s + FRAME_S, time.monotonic())
            lifeline.wait(due_s - time.monotonic())
        return EXIT_DONE

    def step(self, now_s: float) -> None:
        """Take in what came and draw it if it looks different."""
        for socket in self._sockets:
            for topic, payload in drain(socket):
                self._display.fold(topic, payload, now_s)
        parts = draw(self._display.scene(now_s), self._options.scale)
        changed = self._painter.paint(parts)
        if changed:
            self._surrounding.present(self._painter.picture, changed)

    def _save(self) -> None:
        if self._screenshot is not None:
            pygame.image.save(self._painter.picture, str(self._screenshot))
            self._screenshot = None


def open_display() -> str | None:
    """Open pygame's display; return why there is none to be seen, if so."""
    advice = "start it from a desktop session, or turn it off with --no-overlay"
    try:
        pygame.display.init()
    except pygame.error as error:
        return f"no display ({error}): {advice}"
    driver = pygame.display.get_driver()
    # Without a display pygame silently draws into memory, unless that was asked for.
    if driver in NO_SCREEN_DRIVERS and os.environ.get("SDL_VIDEODRIVER") != driver:
        return f"no display: {advice}"
    return None


def _parse(argv: Sequence[str] | None) -> Options:
    parser = argparse.ArgumentParser(
        prog="python -m canticle_overlay.window", description="The overlay window."
    )
    parser.add_argument("--bus", required=True, help="the daemon's PUB endpoint")
    parser.add_argument("--scale", type=float, default=1.0, metavar="S", help="1 is 820 by 132")
    parser.add_argument("--left", type=int, metavar="PX", help="default: centered")
    parser.add_argument("--top", type=int, metavar="PX", help="default: near the lower edge")
    parser.add_argument("--screenshot", type=Path, metavar="FILE", help="save the strip once")
    parser.add_argument("--after", type=float, default=2.0, metavar="S", help="when to save it")
    given = parser.parse_args(argv)
    position = (given.left, given.top)
    return Options(given.bus, given.scale, position, given.screenshot, given.after)


if __name__ == "__main__":
    raise SystemExit(main())
