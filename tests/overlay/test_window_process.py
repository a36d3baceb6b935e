"""The overlay as its own process, on Xvfb where it is installed, else on SDL's dummy driver."""

from __future__ import annotations

import os
import shutil
import signal
import subprocess
import time
from collections.abc import Callable, Iterator, Sequence
from pathlib import Path

import numpy as np
import pygame
import pytest
import zmq
from overlay.companion import Companion

from canticle_daemon.messages import Entry, Estimate, TrackView
from canticle_overlay.lifeline import EXIT_CLOSED_BY_USER, EXIT_DONE
from canticle_overlay.painter import rendered
from canticle_overlay.palette import ORANGE, PANEL, SKY_BLUE, Color
from canticle_overlay.platforms.plain import PlainWindow, place
from canticle_overlay.state import Pass, Ribbon, Scene
from canticle_overlay.view import COLUMNS, Text, draw, size
from canticle_overlay.window import Options, Strip, open_display

pytestmark = pytest.mark.io

MODULE = "canticle_overlay.window"
MakeEstimate = Callable[..., Estimate]


@pytest.fixture(scope="module")
def screen() -> Iterator[dict[str, str | None]]:
    """The environment of the best screen there is."""
    xvfb = shutil.which("Xvfb")
    if xvfb is None:
        yield {"SDL_VIDEODRIVER": "dummy", "DISPLAY": None}
        return
    read, write = os.pipe()
    server = subprocess.Popen(
        [xvfb, "-displayfd", str(write), "-screen", "0", "1280x720x24", "-nolisten", "tcp"],
        pass_fds=(write,),
        stderr=subprocess.DEVNULL,
    )
    os.close(write)
    with os.fdopen(read) as numbers:
        number = numbers.readline().strip()
    yield {"DISPLAY": f":{number}", "SDL_VIDEODRIVER": None, "WAYLAND_DISPLAY": None}
    server.terminate()
    server.wait(10)


def feed(
    overlay: Companion, track: TrackView, estimates: Iterator[Estimate], seconds: float
) -> None:
    end_s = time.monotonic() + seconds
    while time.monotonic() < end_s:
        overlay.send("track", track)
        overlay.send("estimate", next(estimates))
        time.sleep(0.02)


def pixels(file: Path) -> np.ndarray:
    return pygame.surfarray.array3d(pygame.image.load(str(file))).swapaxes(0, 1)


def wait_for(file: Path, limit_s: float = 10) -> np.ndarray:
    end_s = time.monotonic() + limit_s
    while time.monotonic() < end_s:
        if file.exists() and file.stat().st_size:
            time.sleep(0.05)
            return pixels(file)
        time.sleep(0.02)
    raise AssertionError(f"no {file.name} within {limit_s} s")


def count(picture: np.ndarray, color: Color, slack: int = 12) -> int:
    near = np.abs(picture.astype(int) - np.array(color[:3])).max(axis=2) <= slack
    return int(near.sum())


def columns(picture: np.ndarray) -> np.ndarray:
    left, top, width, height = COLUMNS
    return picture[top : top + height - 3, left : left + width]


def test_live_data_is_drawn(
    screen: dict[str, str | None],
    track: TrackView,
    estimate: MakeEstimate,
    entry: Callable[..., Entry],
    tmp_path: Path,
) -> None:
    file = tmp_path / "strip.png"
    with Companion(MODULE, "--screenshot", str(file), "--after", "1.2", **screen) as overlay:
        assert overlay.state()["state"] == "ready"
        stations = iter(range(600, 10_000))
        feed(overlay, track, (estimate(float(at)) for at in stations), 0.3)
        overlay.send("entry", entry("Turn 1"))
        feed(overlay, track, (estimate(700 + at / 10) for at in stations), 1.0)
        picture = wait_for(file)
        assert overlay.let_go() < 0.5
        assert overlay.process.returncode == 0
    assert picture.shape[:2] == size(1.0)[::-1]
    assert count(picture, PANEL) > picture.shape[0] * picture.shape[1] / 2
    assert count(columns(picture), SKY_BLUE) > 1000, "the columns stand"
    assert count(picture, ORANGE) > 30, "the turn-in is pinned"


def test_old_numbers_are_not_shown(
    screen: dict[str, str | None], track: TrackView, estimate: MakeEstimate, tmp_path: Path
) -> None:
    file = tmp_path / "strip.png"
    with Companion(MODULE, "--screenshot", str(file), "--after", "1.6", **screen) as overlay:
        overlay.state()
        feed(overlay, track, (estimate(float(at)) for at in range(600, 9999)), 0.4)
        picture = wait_for(file)
    assert count(columns(picture), SKY_BLUE) == 0


def test_malformed_messages_are_ignored(
    screen: dict[str, str | None], track: TrackView, estimate: MakeEstimate, tmp_path: Path
) -> None:
    file = tmp_path / "strip.png"
    junk = (b"estimate ", b"estimate {", b"estimate {}", b"track []", b"entry \xff", b"cue null")
    with Companion(MODULE, "--screenshot", str(file), "--after", "0.9", **screen) as overlay:
        overlay.state()
        for message in junk * 50:
            overlay.send_raw(message)
        feed(overlay, track, (estimate(float(at)) for at in range(600, 9999)), 1.0)
        picture = wait_for(file)
        assert overlay.process.poll() is None
    assert count(columns(picture), SKY_BLUE) > 1000


def test_scale_makes_it_larger(screen: dict[str, str | None], tmp_path: Path) -> None:
    file = tmp_path / "strip.png"
    options = ("--scale", "1.5", "--left", "0", "--top", "10", "--screenshot", str(file))
    with Companion(MODULE, *options, "--after", "0.1", **screen) as overlay:
        assert "1230 by 198" in overlay.state()["detail"]
        assert wait_for(file).shape[:2] == (198, 1230)


def test_an_interrupt_is_left_to_the_daemon_and_terminate_ends_it(
    screen: dict[str, str | None],
) -> None:
    with Companion(MODULE, **screen) as overlay:
        overlay.state()
        overlay.process.send_signal(signal.SIGINT)
        time.sleep(0.2)
        assert overlay.process.poll() is None
        overlay.process.terminate()
        assert overlay.process.wait(2) == 0


def test_without_a_display_it_says_so_and_ends_well() -> None:
    nowhere = {"DISPLAY": None, "WAYLAND_DISPLAY": None, "SDL_VIDEODRIVER": None}
    with Companion(MODULE, **nowhere) as overlay:
        state = overlay.state()
        assert state["state"] == "unavailable"
        assert state["detail"].startswith("no display")
        assert overlay.process.wait(5) == 0


def test_an_unusable_endpoint_is_one_line() -> None:
    with Companion(MODULE, "--bus", "nonsense", SDL_VIDEODRIVER="dummy") as overlay:
        assert "cannot join the bus at nonsense" in overlay.state()["detail"]
        assert overlay.process.wait(5) == 1


class NoBus:
    def recv(self, flags: int) -> bytes:
        raise zmq.Again


class FakeSurrounding(PlainWindow):
    def __init__(self) -> None:
        super().__init__()
        self.shown = 0

    def present(self, picture: pygame.Surface, changed: Sequence[pygame.Rect]) -> None:
        self.shown += 1


class FakeLifeline:
    """Holds for a number of frames; before the last one something happens."""

    def __init__(self, frames: int, event: int | None = None) -> None:
        self.frames = frames
        self.event = event

    @property
    def holds(self) -> bool:
        self.frames -= 1
        if self.frames == 0 and self.event is not None:
            pygame.event.post(pygame.event.Event(self.event))
        return self.frames >= 0

    def wait(self, seconds: float) -> bool:
        return True


@pytest.fixture
def in_memory(monkeypatch: pytest.MonkeyPatch) -> Iterator[FakeSurrounding]:
    monkeypatch.setenv("SDL_VIDEODRIVER", "dummy")
    assert open_display() is None
    surrounding = FakeSurrounding()
    surrounding.open(size(1.0), (None, None))
    pygame.event.get()
    yield surrounding
    surrounding.close()


@pytest.mark.parametrize(
    ("event", "status", "pictures"),
    [
        (None, EXIT_DONE, 1),
        (pygame.QUIT, EXIT_CLOSED_BY_USER, 1),
        (pygame.VIDEOEXPOSE, EXIT_DONE, 2),
    ],
)
def test_the_loop_draws_changes_only_and_leaves_when_closed(
    in_memory: FakeSurrounding, event: int | None, status: int, pictures: int
) -> None:
    options = Options("", 1.0, (None, None), None, 1e9)
    strip = Strip(options, in_memory, NoBus(), NoBus())  # type: ignore[arg-type]
    assert strip.run(FakeLifeline(5, event)) == status  # type: ignore[arg-type]
    assert in_memory.shown == pictures


@pytest.mark.parametrize("cue", ["", "Three, three hundred lengths late."])
@pytest.mark.parametrize("condition", ["live", "no data", "bad data", "learning"])
def test_texts_do_not_run_into_each_other(track: TrackView, condition: str, cue: str) -> None:
    pygame.font.init()
    long = Pass(90.0, "on", -13.0, 0.71)
    corner = track.corners[0]
    corner.corner = "Chapel bend after the bridge"
    ribbon = Ribbon(corner, track.length_m, (long,), ((2450.0, 0.1), (2460.0, 0.2)))
    detail = "datagrams come, but are bad" if condition == "no data" else ""
    scene = Scene(condition, detail, 188, ribbon, cue)  # type: ignore[arg-type]
    boxes = []
    shapes = [shape for part in draw(scene) for shape in part.shapes]
    for text in (shape for shape in shapes if isinstance(shape, Text)):
        width, height = rendered(text.text, text.size, text.color).get_size()
        left = text.x - round({"left": 0.0, "center": 0.5, "right": 1.0}[text.align] * width)
        boxes.append(pygame.Rect(left, text.top, width, height))
    for index, box in enumerate(boxes):
        assert box.left >= 0
        assert box.right <= size(1.0)[0]
        assert box.collidelist(boxes[index + 1 :]) == -1


def test_where_the_window_goes() -> None:
    assert place((820, 132), (None, None), (1920, 1080)) == (550, 900)
    assert place((820, 132), (-1900, 5), (1920, 1080)) == (-1900, 5)
    assert place((3000, 400), (None, None), (1920, 300)) == (0, 0)
