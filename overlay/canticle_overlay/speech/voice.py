"""The voice process: hears the bus, has the vocabulary rendered, plays the newest cue at once.

A cue whose phrase is ready starts with the next buffer of the sound device. One that is not is
rendered on the fly, and dropped when that takes so long that the moment has passed.
"""

from __future__ import annotations

import argparse
import os
import queue
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path

import zmq

from canticle_daemon.errors import SystemFaultError
from canticle_daemon.messages import Cue
from canticle_overlay.bus import drain, subscribe
from canticle_overlay.lifeline import EXIT_DONE, EXIT_FAULT, Lifeline
from canticle_overlay.speech.engine import VoiceSettings, default_voice
from canticle_overlay.speech.player import DeviceHangsError, Player, open_player
from canticle_overlay.speech.render import (
    Child,
    PhraseCache,
    Rendered,
    Renderer,
    default_cache_dir,
)

TOPICS = ("cue", "vocabulary")
FIRST_PHRASE = "late"
STALE_S = 2.0
POLL_MS = 20
VOCABULARY_WAIT_S = 5.0
SILENT_LIMIT_S = 30.0


@dataclass(frozen=True, slots=True)
class Options:
    """What the daemon asks for."""

    bus: str
    settings: VoiceSettings
    volume: float
    cache: Path


class Speech:
    """Which phrase is wanted, which are ready, and what the daemon is told; no sockets here."""

    def __init__(
        self,
        player: Player | None,
        request: Callable[..., None],
        clock: Callable[[], float] = time.monotonic,
    ) -> None:
        self._player = player
        self._request = request
        self._clock = clock
        self._late_text: str | None = None
        self._late_until = 0.0
        self._replaced: set[str] = set()
        self.wanted: set[str] = {FIRST_PHRASE}
        self.done: set[str] = set()
        self.faults: dict[str, str] = {}
        self.played = 0

    def learn(self, phrases: Sequence[str]) -> None:
        """Have the phrases that are new rendered."""
        new = [phrase for phrase in phrases if phrase not in self.wanted]
        self.wanted.update(new)
        if new:
            self._request(new)

    def say(self, text: str) -> None:
        """Play a phrase now, or as soon as it is rendered if that is soon enough."""
        self._late_text = None
        if self._player is None:
            return
        if self._player.play(text):
            self.played += 1
            return
        self._late_text, self._late_until = text, self._clock() + STALE_S
        self._request([text], urgent=True)

    def take(self, result: Rendered) -> None:
        """Account for a rendered phrase and play it if it is still waited for."""
        fault = result.fault
        if fault is None and self._player is not None:
            try:
                self._player.load(result.text, result.path)
            except SystemFaultError as error:
                fault = str(error)
                if self._render_again(result):
                    return
        if fault is not None:
            self.faults[result.text] = fault
            return
        self.faults.pop(result.text, None)
        self.done.add(result.text)
        if result.text == self._late_text and self._clock() < self._late_until:
            self.say(result.text)

    def _render_again(self, broken: Rendered) -> bool:
        """Have a file replaced that is no sound, such as one from a full disk; only once."""
        if broken.text in self._replaced:
            return False
        self._replaced.add(broken.text)
        broken.path.unlink(missing_ok=True)
        self._request([broken.text], urgent=True)
        return True

    @property
    def settled(self) -> bool:
        """Whether every wanted phrase is either done or given up."""
        return self.wanted <= self.done | self.faults.keys()

    def summary(self, folder: Path) -> str:
        """Return the state in a sentence."""
        text = f"{len(self.done)} phrase{'' if len(self.done) == 1 else 's'} in {folder}"
        if self.faults:
            reason = next(iter(self.faults.values()))
            text += f"; {len(self.faults)} could not be rendered: {reason}"
        return text


def is_stale(cue: Cue, now: datetime) -> bool:
    """Return whether the cue's moment has passed; one without a wall time is taken as new."""
    try:
        made = datetime.fromisoformat(cue.wall_time)
    except ValueError:
        return False
    if made.tzinfo is None:
        made = made.replace(tzinfo=UTC)
    return (now - made).total_seconds() > STALE_S


def main(argv: Sequence[str] | None = None) -> int:
    """Run the voice until the daemon lets go of it."""
    options = _parse(argv)
    lifeline = Lifeline()
    player, why_silent, hangs = _open(options.volume)
    results: queue.SimpleQueue[Rendered] = queue.SimpleQueue()
    cache = PhraseCache(options.cache, options.settings)
    renderer = Renderer(cache, Child(options.settings), results.put)
    renderer.request([FIRST_PHRASE])
    speech = Speech(player, renderer.request)
    try:
        _run(options, lifeline, speech, results, why_silent)
    except SystemFaultError as fault:
        lifeline.say("unavailable", str(fault))
        return EXIT_FAULT
    finally:
        renderer.close()
        if player is not None:
            player.close()
        if hangs:
            os._exit(EXIT_DONE)  # a thread is stuck in the sound system and would hold us
    return EXIT_DONE


def _run(
    options: Options,
    lifeline: Lifeline,
    speech: Speech,
    results: queue.SimpleQueue[Rendered],
    why_silent: str | None,
) -> None:
    with zmq.Context() as context, subscribe(context, options.bus, TOPICS) as socket:
        started_s = time.monotonic()
        while lifeline.holds:
            if socket.poll(POLL_MS):
                _hear(socket, speech)
            while not results.empty():
                speech.take(results.get())
            running_s = time.monotonic() - started_s
            if _report(options, lifeline, speech, why_silent, running_s):
                return


def _hear(socket: zmq.Socket[bytes], speech: Speech) -> None:
    newest: Cue | None = None
    for topic, payload in drain(socket):
        if topic == "vocabulary":
            speech.learn(payload.phrases)
        elif payload.spoken:
            newest = payload
    if newest is not None and not is_stale(newest, datetime.now(UTC)):
        speech.say(newest.text)


def _report(
    options: Options,
    lifeline: Lifeline,
    speech: Speech,
    why_silent: str | None,
    running_s: float,
) -> bool:
    """Tell the daemon what has changed; return whether the voice has no more to do."""
    if FIRST_PHRASE in speech.faults:
        reason = speech.faults[FIRST_PHRASE]
        lifeline.say("unavailable", f"cues are shown and logged, not spoken: {reason}")
        return True
    if FIRST_PHRASE not in speech.done:
        return False
    if why_silent is None:
        if speech.settled or running_s < VOCABULARY_WAIT_S:
            lifeline.say("ready", speech.summary(options.cache))
        return False
    complete = speech.settled and (len(speech.wanted) > 1 or running_s > VOCABULARY_WAIT_S)
    if complete or running_s > SILENT_LIMIT_S:
        lifeline.say(
            "unavailable",
            f"{why_silent}: cues are shown and logged, not spoken; "
            f"rendered phrases are in {options.cache}",
        )
        return True
    return False


def _open(volume: float) -> tuple[Player | None, str | None, bool]:
    try:
        return open_player(volume), None, False
    except SystemFaultError as fault:
        return None, str(fault), isinstance(fault, DeviceHangsError)


def _parse(argv: Sequence[str] | None) -> Options:
    parser = argparse.ArgumentParser(prog="python -m canticle_overlay.speech", description=__doc__)
    parser.add_argument("--bus", required=True, help="the daemon's PUB endpoint")
    parser.add_argument("--rate", type=int, default=165, metavar="WPM", help="words per minute")
    parser.add_argument("--voice", default="", metavar="NAME", help="the engine's voice id")
    parser.add_argument("--volume", type=float, default=0.8, metavar="V", help="0 to 1")
    parser.add_argument("--cache", type=Path, default=default_cache_dir(), metavar="DIR")
    given = parser.parse_args(argv)
    settings = VoiceSettings(given.voice or default_voice(), given.rate)
    return Options(given.bus, settings, min(max(given.volume, 0.0), 1.0), given.cache)
