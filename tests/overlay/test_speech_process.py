"""The voice as its own process, heard through SDL's disk driver: the PCM really mixed."""

from __future__ import annotations

import os
import signal
import time
import wave
from pathlib import Path

import numpy as np
import psutil
import pytest
from overlay.companion import Companion
from scipy.signal import correlate

from canticle_daemon.coach.phrasing import vocabulary
from canticle_daemon.messages import Cue, Vocabulary
from canticle_overlay.speech.engine import VoiceSettings, default_voice
from canticle_overlay.speech.render import PhraseCache

pytestmark = pytest.mark.io

MODULE = "canticle_overlay.speech"
PHRASES = tuple(vocabulary(["One"]))
DETAIL = "One, forty late."


def cue(text: str, spoken: bool = True) -> Cue:
    return Cue(time_s=1, lap=1, run=1, kind="x", text=text, corner=None, spoken=spoken)


@pytest.fixture(scope="module")
def cache(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return tmp_path_factory.mktemp("cache") / "voice"


@pytest.fixture
def pcm(tmp_path: Path) -> Path:
    return tmp_path / "heard.raw"


def audible(cache: Path, pcm: Path) -> Companion:
    disk = {"SDL_AUDIODRIVER": "disk", "SDL_DISKAUDIOFILE": str(pcm)}
    return Companion(MODULE, "--rate", "165", "--volume", "0.8", "--cache", str(cache), **disk)


def wait_ready(voice: Companion) -> None:
    voice.repeat_until("vocabulary", Vocabulary(PHRASES), f"{len(PHRASES)} phrases in")


def wait_for_file(cache: Path, pattern: str, limit_s: float = 15) -> None:
    end_s = time.monotonic() + limit_s
    while not list(cache.glob(pattern)):
        assert time.monotonic() < end_s, f"no {pattern} within {limit_s} s"
        time.sleep(0.02)


def clip(cache: Path, words: str) -> np.ndarray:
    [path] = cache.glob(f"{words}-????????????.wav")
    with wave.open(str(path), "rb") as file:
        return np.frombuffer(file.readframes(file.getnframes()), "<i2").astype(float)


def heard(pcm: Path) -> np.ndarray:
    mono = np.fromfile(pcm, "<i2").reshape(-1, 2).mean(axis=1)
    return np.concatenate((mono, np.zeros(2 * 48000)))  # room for a clip longer than the rest


def find(sound: np.ndarray, sample: np.ndarray) -> tuple[float, float]:
    """Return the best normalized correlation, and its onset in seconds."""
    dots = correlate(sound, sample, "valid", "fft")
    energy = np.concatenate(([0.0], np.cumsum(sound**2)))
    windows = np.sqrt(np.maximum(energy[len(sample) :] - energy[: -len(sample)], 1e3))
    scores = dots / windows / np.linalg.norm(sample)
    best = int(scores.argmax())
    return float(scores[best]), best / 48000


def test_a_cue_is_heard_word_for_word(cache: Path, pcm: Path) -> None:
    with audible(cache, pcm) as voice:
        wait_ready(voice)
        voice.send("cue", cue("late"))
        time.sleep(0.6)
        voice.send("cue", cue(DETAIL))
        time.sleep(1.8)
        assert voice.let_go() < 0.5
        assert voice.process.returncode == 0
    sound = heard(pcm)
    word, word_s = find(sound, clip(cache, "late"))
    detail, detail_s = find(sound, clip(cache, "one-forty-late"))
    other, _ = find(sound, clip(cache, "one-ninety-late"))
    assert word > 0.98
    assert detail > 0.98
    assert other < 0.8
    assert detail_s - word_s == pytest.approx(0.6, abs=0.15)


def test_of_a_burst_only_the_newest_is_heard(cache: Path, pcm: Path) -> None:
    with audible(cache, pcm) as voice:
        wait_ready(voice)
        os.kill(voice.process.pid, signal.SIGSTOP)
        for words in ("ten", "twenty", "thirty"):
            voice.send("cue", cue(f"One, {words} late."))
        voice.send("cue", cue("late"))
        voice.send("cue", cue("One, fifty late.", spoken=False))
        time.sleep(0.05)
        os.kill(voice.process.pid, signal.SIGCONT)
        time.sleep(0.6)
        voice.let_go()
    sound = heard(pcm)
    assert find(sound, clip(cache, "late"))[0] > 0.98
    for words in ("one-ten-late", "one-thirty-late", "one-fifty-late"):
        assert find(sound, clip(cache, words))[0] < 0.8


def test_a_newer_cue_takes_over_with_a_short_fade(cache: Path, pcm: Path) -> None:
    with audible(cache, pcm) as voice:
        wait_ready(voice)
        voice.send("cue", cue(DETAIL))
        time.sleep(0.3)
        voice.send("cue", cue("late"))
        time.sleep(0.6)
        voice.let_go()
    sound = heard(pcm)
    long = clip(cache, "one-forty-late")
    score, onset_s = find(sound, clip(cache, "late"))
    assert score > 0.95
    assert find(sound, long[:9600])[0] > 0.9, "the old one had begun"
    _, old_s = find(sound, long[:9600])
    assert 0.1 < onset_s - old_s < 0.6
    after = sound[round((onset_s + 0.02) * 48000) :]
    new = clip(cache, "late")[960:]
    gain = float(np.dot(after[: len(new)], new) / np.dot(new, new))
    left_over = after[: len(new)] - gain * new
    assert np.abs(left_over).max() < 0.01 * 32768, "nothing of the old one after 20 ms"


def test_a_text_outside_the_vocabulary_is_rendered_on_the_fly(cache: Path, pcm: Path) -> None:
    with audible(cache, pcm) as voice:
        wait_ready(voice)
        # The first wakes the renderer, which may take longer than a cue keeps; the second is due.
        for text, files in (("Wake up.", "wake-up-*.wav"), ("Good.", "good-*.wav")):
            voice.send("cue", cue(text))
            wait_for_file(cache, files)
        time.sleep(0.6)
        voice.let_go()
    assert find(heard(pcm), clip(cache, "good"))[0] > 0.98


def test_malformed_messages_are_ignored(cache: Path, pcm: Path) -> None:
    with audible(cache, pcm) as voice:
        wait_ready(voice)
        for junk in (b"cue ", b"cue {", b"cue {}", b"cue \xff", b"vocabulary 3", b"cue [[[["):
            voice.send_raw(junk)
        voice.send("cue", cue("late"))
        time.sleep(0.6)
        assert voice.process.poll() is None
        voice.let_go()
    assert find(heard(pcm), clip(cache, "late"))[0] > 0.98


def test_an_interrupt_is_left_to_the_daemon_and_terminate_ends_it(cache: Path, pcm: Path) -> None:
    with audible(cache, pcm) as voice:
        wait_ready(voice)
        voice.process.send_signal(signal.SIGINT)
        time.sleep(0.2)
        assert voice.process.poll() is None
        voice.process.terminate()
        assert voice.process.wait(2) == 0


def test_without_a_sound_device_the_phrases_are_rendered_all_the_same(tmp_path: Path) -> None:
    folder = tmp_path / "voice"
    with Companion(MODULE, "--cache", str(folder), SDL_AUDIODRIVER="no-such-driver") as voice:
        state = voice.repeat_until("vocabulary", Vocabulary(PHRASES), "no sound device")
        assert state["state"] == "unavailable"
        assert str(folder) in state["detail"]
        assert voice.process.wait(5) == 0
        assert voice.process.stderr is not None
        assert voice.process.stderr.read() == b""
    assert len(list(folder.glob("*.wav"))) == len(PHRASES)


def test_a_broken_file_in_the_cache_is_replaced(pcm: Path, tmp_path: Path) -> None:
    settings = VoiceSettings(default_voice(), 165)
    file = PhraseCache(tmp_path, settings).path("late")
    file.write_bytes(b"RIFF, but no sound")
    with audible(tmp_path, pcm) as voice:
        voice.repeat_until("vocabulary", Vocabulary(("late",)), "1 phrase in")
    assert len(clip(tmp_path, "late")) > 4800


def test_an_unusable_cache_folder_is_named(pcm: Path, tmp_path: Path) -> None:
    (tmp_path / "file").write_text("in the way")
    with audible(tmp_path / "file", pcm) as voice:
        state = voice.state()
        assert state["state"] == "unavailable"
        assert str(tmp_path / "file") in state["detail"]
        assert voice.process.wait(5) == 0


def test_without_a_speech_engine_it_says_so(tmp_path: Path, pcm: Path) -> None:
    for module in ("pyttsx3", "espeakng_loader"):
        (tmp_path / f"{module}.py").write_text("raise ImportError('not installed here')\n")
    with Companion(
        *(MODULE, "--cache", str(tmp_path / "voice")),
        SDL_AUDIODRIVER="disk",
        SDL_DISKAUDIOFILE=str(pcm),
        PYTHONPATH=str(tmp_path),
    ) as voice:
        state = voice.state()
        assert state["state"] == "unavailable"
        assert "no speech engine" in state["detail"]
        assert "not installed here" in state["detail"]
        assert voice.process.wait(5) == 0


def test_a_killed_voice_leaves_no_renderer_behind(cache: Path, pcm: Path, tmp_path: Path) -> None:
    with Companion(
        *(MODULE, "--cache", str(tmp_path / "fresh")),
        SDL_AUDIODRIVER="disk",
        SDL_DISKAUDIOFILE=str(pcm),
    ) as voice:
        wait_ready(voice)
        children = psutil.Process(voice.process.pid).children(recursive=True)
        assert children
        voice.process.kill()
        voice.process.wait()
        _, alive = psutil.wait_procs(children, timeout=3)
        assert alive == []
