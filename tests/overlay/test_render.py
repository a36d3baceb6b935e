"""The renderer's child: real speech, and children that die, hang or are frozen."""

from __future__ import annotations

import os
import queue
import signal
import sys
import time
import wave
from collections.abc import Iterator
from pathlib import Path

import pytest
from overlay.naughty_engine import write_text

from canticle_overlay.speech.engine import VoiceSettings, default_voice
from canticle_overlay.speech.render import Child, Limits, PhraseCache, Rendered, Renderer

pytestmark = pytest.mark.io

QUICK = Limits(first_s=2.0, later_s=0.3)


class Rig:
    def __init__(self, folder: Path, child: Child, limits: Limits) -> None:
        self.cache = PhraseCache(folder, VoiceSettings())
        self.child = child
        self.results: queue.SimpleQueue[Rendered] = queue.SimpleQueue()
        self.renderer = Renderer(self.cache, child, self.results.put, limits)

    def result(self) -> Rendered:
        return self.results.get(timeout=30)


@pytest.fixture
def rig(tmp_path: Path) -> Iterator[Rig]:
    made = Rig(tmp_path / "voice", Child(VoiceSettings(), write_text), QUICK)
    yield made
    made.renderer.close()


def test_real_speech_is_rendered_into_playable_files(tmp_path: Path) -> None:
    rig = Rig(tmp_path, Child(VoiceSettings(default_voice())), Limits())
    texts = ("late", "One, forty late.")
    rig.renderer.request(texts)
    try:
        results = [rig.result() for _ in texts]
    finally:
        rig.renderer.close()
    assert [(one.text, one.fault) for one in results] == [(text, None) for text in texts]
    lengths_s = []
    for one in results:
        with wave.open(str(one.path), "rb") as file:
            assert (file.getframerate(), file.getsampwidth(), file.getnchannels()) == (48000, 2, 1)
            lengths_s.append(file.getnframes() / 48000)
    # Common practice, no source: about three words a second, and a word is no blip.
    assert 0.15 < lengths_s[0] < 0.8
    assert lengths_s[0] < lengths_s[1] < 2.5
    assert {path.suffix for path in tmp_path.iterdir()} == {".wav"}


def test_an_unknown_voice_is_said_not_replaced(tmp_path: Path) -> None:
    rig = Rig(tmp_path, Child(VoiceSettings("no-such-voice")), Limits())
    rig.renderer.request(["late"])
    try:
        result = rig.result()
    finally:
        rig.renderer.close()
    assert "no-such-voice" in (result.fault or "")
    assert list(tmp_path.iterdir()) == []


def test_a_cached_phrase_needs_no_child(rig: Rig) -> None:
    path = rig.cache.path("late")
    path.parent.mkdir()
    path.write_text("kept")
    rig.renderer.request(["late"])
    assert rig.result() == Rendered("late", path, None)
    assert rig.child.pid is None


def test_urgent_phrases_jump_the_queue(rig: Rig) -> None:
    rig.renderer.request(["hang", *(f"phrase {number}" for number in range(5))])
    rig.renderer.request(["now"], urgent=True)
    order = [rig.result().text for _ in range(7)]
    assert "now" in order[:2], "at most the phrase in hand comes first"


def test_a_phrase_is_rendered_once(rig: Rig) -> None:
    rig.renderer.request(["a", "a", "b"])
    rig.renderer.request(["a"])
    assert [rig.result().text for _ in range(2)] == ["a", "b"]
    assert rig.results.empty()


@pytest.mark.parametrize(
    ("text", "fault"),
    [("die", "ended unexpectedly"), ("hang", "did not answer"), ("refuse", "refused")],
)
def test_a_bad_child_costs_its_phrase_only(rig: Rig, text: str, fault: str) -> None:
    rig.renderer.request(["before", text, "after"])
    results = [rig.result() for _ in range(3)]
    assert [one.fault is None for one in results] == [True, False, True]
    assert fault in (results[1].fault or "")
    assert {path.suffix for path in rig.cache.folder.iterdir()} == {".wav"}, "no halves are left"


def test_a_killed_child_is_replaced(rig: Rig) -> None:
    rig.renderer.request(["one"])
    assert rig.result().fault is None
    pid = rig.child.pid
    assert pid is not None
    os.kill(pid, signal.SIGTERM if sys.platform == "win32" else signal.SIGKILL)
    rig.renderer.request(["two"])
    assert rig.result().fault is None
    assert rig.child.pid not in (None, pid)


def test_closing_does_not_wait_for_a_hanging_child(rig: Rig) -> None:
    rig.renderer.request(["hang"])
    end_s = time.monotonic() + 5
    while rig.child.pid is None and time.monotonic() < end_s:
        time.sleep(0.01)
    begun_s = time.monotonic()
    rig.renderer.close()
    assert time.monotonic() - begun_s < 1.0
    assert rig.child.pid is None


def test_a_frozen_child_does_not_hold_the_close(rig: Rig) -> None:
    rig.renderer.request(["one"])
    rig.result()
    pid = rig.child.pid
    assert pid is not None
    if hasattr(signal, "SIGSTOP"):
        os.kill(pid, signal.SIGSTOP)
    begun_s = time.monotonic()
    rig.renderer.close()
    assert time.monotonic() - begun_s < 1.0


def test_a_folder_that_cannot_be_made_is_a_fault(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("in the way")
    rig = Rig(tmp_path / "file" / "voice", Child(VoiceSettings(), write_text), QUICK)
    rig.renderer.request(["late"])
    try:
        assert str(tmp_path) in (rig.result().fault or "")
    finally:
        rig.renderer.close()
