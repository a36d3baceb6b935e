"""Plays clips at once through `pygame.mixer`: a new one takes over with a short cross-fade."""

from __future__ import annotations

import contextlib
import os
import threading
from collections.abc import Iterator
from pathlib import Path

import pygame

from canticle_daemon.errors import SystemFaultError
from canticle_overlay.speech.sound import SAMPLE_RATE_HZ

BUFFER_SAMPLES = 256
FADE_MS = 15
OPEN_LIMIT_S = 5.0
CHANNELS = 2


class DeviceHangsError(SystemFaultError):
    """The sound device never answered; the thread that asked it is still waiting."""


class Player:
    """The open sound device and the clips loaded for it."""

    def __init__(self, volume: float) -> None:
        self._volume = volume
        self._clips: dict[str, pygame.mixer.Sound] = {}
        self._next = 0
        pygame.mixer.set_num_channels(CHANNELS)
        self._channels = [pygame.mixer.Channel(number) for number in range(CHANNELS)]

    @property
    def texts(self) -> frozenset[str]:
        """The phrases that can be played."""
        return frozenset(self._clips)

    def load(self, text: str, path: Path) -> None:
        """Read a clip into memory.

        Raises
        ------
        SystemFaultError
            The file is no sound.
        """
        try:
            clip = pygame.mixer.Sound(str(path))
        except (pygame.error, OSError) as error:
            raise SystemFaultError(f"{path}: cannot be played: {error}") from error
        clip.set_volume(self._volume)
        self._clips[text] = clip

    def play(self, text: str) -> bool:
        """Start the phrase now, fading out what is playing; False when it is not loaded."""
        clip = self._clips.get(text)
        if clip is None:
            return False
        # Two channels by turns: the old clip fades under the new one instead of clicking off.
        self._channels[1 - self._next].fadeout(FADE_MS)
        self._channels[self._next].play(clip)
        self._next = 1 - self._next
        return True

    def close(self) -> None:
        """Give the device back."""
        self._clips.clear()
        pygame.mixer.quit()


def open_player(volume: float, limit_s: float = OPEN_LIMIT_S) -> Player:
    """Open the sound device, waiting for it only so long.

    Raises
    ------
    SystemFaultError
        There is none, or (`DeviceHangsError`) it does not answer.
    """
    faults: list[str] = []
    thread = threading.Thread(target=_open_mixer, args=(faults,), name="mixer", daemon=True)
    with _quiet():
        thread.start()
        thread.join(limit_s)
    if thread.is_alive():
        raise DeviceHangsError(f"the sound device did not answer within {limit_s:g} s")
    if faults:
        raise SystemFaultError(f"no sound device ({faults[0]})")
    return Player(volume)


def _open_mixer(faults: list[str]) -> None:
    try:
        pygame.mixer.init(SAMPLE_RATE_HZ, -16, 2, BUFFER_SAMPLES, allowedchanges=0)
    except pygame.error as error:
        faults.append(str(error))


@contextlib.contextmanager
def _quiet() -> Iterator[None]:
    """Keep the sound system's own complaints off the terminal; ours says it in one line."""
    kept, nowhere = os.dup(2), os.open(os.devnull, os.O_WRONLY)
    try:
        os.dup2(nowhere, 2)
        yield
    finally:
        os.dup2(kept, 2)
        os.close(kept)
        os.close(nowhere)
