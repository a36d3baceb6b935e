"""The child process that renders phrases: it alone loads the speech engine.

An engine may hang, crash or print; here it can do so without harm. It is given one phrase at a
time, because engines lose phrases that are queued.
"""

from __future__ import annotations

import ctypes
import importlib.util
import os
import signal
import sys
import threading
import wave
from collections.abc import Callable
from dataclasses import dataclass
from multiprocessing import parent_process
from multiprocessing.connection import Connection
from pathlib import Path
from typing import Any, TypeAlias

import numpy as np

from canticle_overlay.speech.sound import SAMPLE_RATE_HZ, prepare


@dataclass(frozen=True, slots=True)
class VoiceSettings:
    """How the engine speaks; an empty voice means the engine's own."""

    voice: str = ""
    rate_wpm: int = 165


@dataclass(frozen=True, slots=True)
class Job:
    """One phrase and the file that it becomes."""

    text: str
    path: Path


DEFAULT_VOICES = {"linux": "en-us+f3"}
"""Where the engine's own voice is hard to understand, the one that is used instead."""


ADVICE = "install Canticle again, or your system's espeak-ng"
"""For a user without an engine; Windows and macOS bring their own."""


def default_voice() -> str:
    """Return the voice of a user who chose none; empty for the engine's own."""
    return DEFAULT_VOICES.get(sys.platform, "")


Reply: TypeAlias = str | None
"""None when the file is there, else why not."""
Serve: TypeAlias = Callable[[Any, VoiceSettings], None]


def serve(pipe: Connection[Reply, Job], settings: VoiceSettings) -> None:
    """Render what comes down the pipe until the parent is gone."""
    _leave_the_terminal_alone()
    threading.Thread(target=_end_with_parent, daemon=True).start()
    speaker: Speaker | None = None
    while True:
        try:
            job = pipe.recv()
        except EOFError:
            return
        try:
            speaker = speaker or Speaker(settings)
        except Exception as error:  # the plug-in boundary: an engine may raise anything
            pipe.send(f"there is no speech engine ({_said(error)}); {ADVICE}")
            continue
        try:
            speaker.render(job)
            pipe.send(None)
        except Exception as error:  # as above
            speaker = None  # set up anew, or a wrong voice would fail only once
            pipe.send(f"the speech engine failed ({_said(error)})")


class Speaker:
    """A speech engine, set up once."""

    def __init__(self, settings: VoiceSettings) -> None:
        load_bundled_library()
        import pyttsx3

        self._engine = pyttsx3.init()
        self._finished = threading.Event()
        self._fault: Exception | None = None
        self._engine.connect("finished-utterance", self._on_finished)
        self._engine.connect("error", self._on_error)
        self._engine.setProperty("rate", settings.rate_wpm)
        if settings.voice:
            self._engine.setProperty("voice", settings.voice)

    def render(self, job: Job) -> None:
        """Write the phrase as 48 kHz 16-bit mono; the file appears whole or not at all.

        Raises
        ------
        OSError, EOFError, wave.Error, ValueError
            The engine left no sound.
        """
        raw = job.path.with_suffix(f".{os.getpid()}.raw")
        part = job.path.with_suffix(f".{os.getpid()}.part")
        try:
            self._speak_into(job.text, raw)
            _write_wav(part, prepare(*_read_wav(raw)))
            os.replace(part, job.path)
        finally:
            raw.unlink(missing_ok=True)
            part.unlink(missing_ok=True)

    def _speak_into(self, text: str, raw: Path) -> None:
        self._finished.clear()
        self._engine.save_to_file(text, str(raw))
        self._engine.runAndWait()
        # The first runAndWait of an engine may return early.
        if not self._finished.is_set() and self._fault is None:
            self._engine.runAndWait()
        if self._fault is not None:
            fault, self._fault = self._fault, None
            raise fault

    def _on_finished(self, name: str | None, completed: bool) -> None:
        self._finished.set()

    def _on_error(self, name: str | None, exception: Exception) -> None:
        self._fault = exception


def load_bundled_library() -> None:
    """Make the pip-installed espeak-ng the one that pyttsx3 finds, where there is one."""
    if importlib.util.find_spec("espeakng_loader") is None:
        return
    import espeakng_loader

    os.environ.setdefault("ESPEAK_DATA_PATH", espeakng_loader.get_data_path())
    ctypes.CDLL(espeakng_loader.get_library_path(), mode=ctypes.RTLD_GLOBAL)


def _said(error: Exception) -> str:
    return f"{type(error).__name__}: {error}" if str(error) else type(error).__name__


def _leave_the_terminal_alone() -> None:
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    quiet = os.open(os.devnull, os.O_RDWR)
    for stream in (0, 1, 2):  # engines print; the parent's output is for states only
        os.dup2(quiet, stream)
    os.close(quiet)


def _end_with_parent() -> None:
    parent = parent_process()
    if parent is not None:
        parent.join()
        os._exit(1)


def _read_wav(path: Path) -> tuple[np.ndarray[Any, np.dtype[np.float64]], int]:
    with wave.open(str(path), "rb") as file:
        channels, width, rate_hz = file.getnchannels(), file.getsampwidth(), file.getframerate()
        data = file.readframes(file.getnframes())
    if width != 2:
        raise ValueError(f"the engine wrote {8 * width}-bit samples, not 16-bit")
    samples = np.frombuffer(data, dtype="<i2").reshape(-1, channels).mean(axis=1) / 32768
    return samples, rate_hz


def _write_wav(path: Path, samples: np.ndarray[Any, np.dtype[np.int16]]) -> None:
    with wave.open(str(path), "wb") as file:
        file.setnchannels(1)
        file.setsampwidth(2)
        file.setframerate(SAMPLE_RATE_HZ)
        file.writeframes(samples.astype("<i2").tobytes())
