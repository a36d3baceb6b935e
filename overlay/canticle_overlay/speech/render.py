"""Phrases as files: a cache of rendered WAVs and the thread that fills it through a child.

A phrase is kept under the text, the voice, the rate and the versions that made it. The child
may hang or die; it is then killed after a bounded time and the next phrase gets a fresh one.
"""

from __future__ import annotations

import contextlib
import hashlib
import importlib.metadata
import multiprocessing
import queue
import re
import sys
import threading
from collections.abc import Callable, Iterable
from dataclasses import dataclass, field
from multiprocessing.connection import Connection
from multiprocessing.context import SpawnProcess
from pathlib import Path

import platformdirs

from canticle_overlay.speech.engine import Job, Reply, Serve, VoiceSettings, serve

PROCESSING = "1"
"""Raised when `sound.prepare` changes, so that old files are rendered again."""
FRESH_CHILD_EACH_PHRASE = sys.platform == "win32"  # its engine speaks only the first utterance
ATTEMPTS = 2


def default_cache_dir() -> Path:
    """Return the folder of the rendered phrases."""
    return Path(platformdirs.user_cache_dir("canticle", appauthor=False)) / "voice"


class PhraseCache:
    """Where a phrase is, or will be, on disk."""

    def __init__(self, folder: Path, settings: VoiceSettings) -> None:
        self.folder = folder
        self._made_by = "|".join(
            (settings.voice, str(settings.rate_wpm), PROCESSING, sys.platform, *_engine_versions())
        )

    def path(self, text: str) -> Path:
        """Return the phrase's file: readable words, then the key's hash."""
        key = hashlib.sha256(f"{text}|{self._made_by}".encode()).hexdigest()[:12]
        words = re.sub(r"[^a-z0-9]+", "-", text.lower()).strip("-")[:48]
        return self.folder / f"{words or 'phrase'}-{key}.wav"


@dataclass(frozen=True, slots=True)
class Limits:
    """How long the child may take: for its first phrase, with the start-up, and for later ones."""

    first_s: float = 20.0
    later_s: float = 5.0


class Child:
    """The renderer process, started when needed and killed when it does not answer."""

    def __init__(self, settings: VoiceSettings, target: Serve = serve) -> None:
        self._settings = settings
        self._target = target
        self._lock = threading.Lock()
        self._process: SpawnProcess | None = None
        self._pipe: Connection[Job, Reply] | None = None
        self._closed = False

    @property
    def pid(self) -> int | None:
        """The process's id while it runs."""
        process = self._process
        return process.pid if process is not None else None

    def render(self, job: Job, limits: Limits) -> Reply:
        """Have one phrase rendered; return None, or why it was not."""
        fresh = self._process is None
        pipe = self._start()
        if pipe is None:
            return "the voice is closing"
        try:
            pipe.send(job)
            if not pipe.poll(limits.first_s if fresh else limits.later_s):
                self._drop(job)
                return "the speech engine did not answer and was stopped"
            reply = pipe.recv()
        except (EOFError, OSError):
            self._drop(job)
            return "the speech engine ended unexpectedly"
        if FRESH_CHILD_EACH_PHRASE:
            self._drop(job)
        return reply

    def close(self) -> None:
        """Kill the child; nothing is rendered after this."""
        self._closed = True
        self._kill()

    def _start(self) -> Connection[Job, Reply] | None:
        with self._lock:
            if self._closed:
                return None
            if self._process is None:
                context = multiprocessing.get_context("spawn")
                ours, theirs = context.Pipe()
                process = context.Process(
                    target=self._target, args=(theirs, self._settings), daemon=True
                )
                process.start()
                theirs.close()
                self._process, self._pipe = process, ours
            return self._pipe

    def _drop(self, job: Job) -> None:
        pid = self._kill()
        for left in job.path.parent.glob(f"*.{pid}.*"):
            left.unlink(missing_ok=True)

    def _kill(self) -> int | None:
        with self._lock:
            process, pipe = self._process, self._pipe
            self._process = self._pipe = None
            if process is None or pipe is None:
                return None
            pid = process.pid
            process.kill()  # not terminate: a frozen process would never see it
            process.join()
            process.close()
            with contextlib.suppress(OSError):
                pipe.close()
            return pid


@dataclass(order=True, frozen=True, slots=True)
class _Request:
    rank: int
    number: int
    text: str = field(compare=False)


@dataclass(frozen=True, slots=True)
class Rendered:
    """What became of a phrase: `fault` is None when the file is there."""

    text: str
    path: Path
    fault: Reply


class Renderer:
    """Fills the cache in the background, urgent phrases first; tells each result once."""

    def __init__(
        self,
        cache: PhraseCache,
        child: Child,
        on_result: Callable[[Rendered], None],
        limits: Limits = Limits(),
    ) -> None:
        self._cache = cache
        self._child = child
        self._on_result = on_result
        self._limits = limits
        self._wanted: queue.PriorityQueue[_Request] = queue.PriorityQueue()
        self._asked: set[str] = set()
        self._number = 0
        self._closing = threading.Event()
        self._thread = threading.Thread(target=self._work, name="renderer", daemon=True)
        self._thread.start()

    def request(self, texts: Iterable[str], *, urgent: bool = False) -> None:
        """Ask for phrases; one that was asked for already is not rendered twice."""
        for text in texts:
            if text not in self._asked or urgent:
                self._asked.add(text)
                self._number += 1
                self._wanted.put(_Request(0 if urgent else 1, self._number, text))

    def close(self) -> None:
        """Stop at once, killing the child."""
        self._closing.set()
        self._child.close()
        self._wanted.put(_Request(-1, 0, ""))
        self._thread.join(2.0)

    def _work(self) -> None:
        while True:
            request = self._wanted.get()
            if self._closing.is_set():
                return
            result = self._obtain(request.text)
            if not self._closing.is_set():
                self._on_result(result)

    def _obtain(self, text: str) -> Rendered:
        path = self._cache.path(text)
        fault: Reply = None
        if path.is_file():
            return Rendered(text, path, None)
        try:
            path.parent.mkdir(parents=True, exist_ok=True)
        except OSError as error:
            return Rendered(text, path, f"{path.parent}: {error.strerror or error}")
        for _ in range(ATTEMPTS):
            fault = self._child.render(Job(text, path), self._limits)
            if fault is None or self._closing.is_set():
                break
        return Rendered(text, path, fault)


def _engine_versions() -> Iterable[str]:
    for package in ("pyttsx3", "espeakng-loader"):
        try:
            yield f"{package} {importlib.metadata.version(package)}"
        except importlib.metadata.PackageNotFoundError:
            yield f"{package} absent"
