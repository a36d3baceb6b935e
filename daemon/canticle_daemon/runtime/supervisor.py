"""Keeps the overlay and the voice running, each in a process of its own.

A thread a process starts it, reads its state lines and restarts it with a growing pause, so
that neither its start nor its end ever takes time from the daemon's loop. A child lives as
long as its standard input is open: should the daemon be killed, the children see the end of
file and go.
"""

from __future__ import annotations

import contextlib
import json
import subprocess
import sys
import threading
import time
from collections.abc import Sequence
from typing import IO

BACKOFF_S = (1.0, 2.0, 4.0, 8.0, 15.0, 30.0)
STEADY_S = 60.0
"""A child that ran so long starts again with the shortest pause."""
END_S = 0.6
TERMINATE_S = 0.3
KILL_S = 0.3
CLOSED_BY_USER = 3
LINES_PER_S = 50
LONGEST_LINE = 4096


class Child:
    """One supervised process, ``python -m MODULE ARGUMENT…``.

    Its standard output carries one JSON object a line with `state` and `detail`. It ends with 0
    when it cannot work here (or is done, if it is never restarted) and with 3 when the user
    closed it: then it is left in peace.

    Parameters
    ----------
    name, module, arguments
        What it is called here, and what to run.
    restart
        Whether to start it again when it fails.
    backoff_s
        Pauses before the first, second, … restart; the last one repeats.

    Attributes
    ----------
    state
        `starting`, what the child says of itself, `done`, `failed`, or `closed`.
    detail
        One plain sentence.
    last_words
        The newest line it wrote that was no state, for the fault report.
    """

    def __init__(
        self,
        name: str,
        module: str,
        arguments: Sequence[str],
        *,
        restart: bool = True,
        backoff_s: Sequence[float] = BACKOFF_S,
    ) -> None:
        self.name = name
        self._restart = restart
        self._backoff_s = backoff_s
        self.state = "starting"
        self.detail = ""
        self.last_words = ""
        self.restarts = 0
        self._command = [sys.executable, "-m", module, *arguments]
        self._process: subprocess.Popen[bytes] | None = None
        self._stop = threading.Event()
        self._lock = threading.Lock()
        self._thread = threading.Thread(target=self._keep, name=name, daemon=True)
        self._thread.start()

    @property
    def pid(self) -> int | None:
        """Return the process number while it runs."""
        process = self._process
        return process.pid if process is not None and process.poll() is None else None

    def ask_to_end(self) -> None:
        """Close the process's standard input, at which it ends by itself."""
        self._stop.set()
        with self._lock:
            process = self._process
        if process is not None and process.stdin is not None:
            with contextlib.suppress(OSError):
                process.stdin.close()

    def insist(self, *, kill: bool) -> None:
        """Terminate the process, or kill it, if it still runs."""
        process = self._process
        if process is not None:
            with contextlib.suppress(OSError):
                (process.kill if kill else process.terminate)()

    def join(self, until: float) -> bool:
        """Wait for the process and its thread until a time of `time.monotonic`."""
        self._thread.join(max(until - time.monotonic(), 0.0))
        return not self._thread.is_alive()

    def _keep(self) -> None:
        tries = 0
        while not self._stop.is_set():
            begun = time.monotonic()
            code = self._run_once()
            if self._stop.is_set():
                break
            if code in (0, CLOSED_BY_USER) or not self._restart:
                self.state = self._last_state(code)
                return
            if time.monotonic() - begun > STEADY_S:
                tries = 0
            self._note_failure(code)
            self._stop.wait(self._backoff_s[min(tries, len(self._backoff_s) - 1)])
            tries += 1

    def _last_state(self, code: int | None) -> str:
        if code == CLOSED_BY_USER:
            return "closed"
        if code == 0:
            return "unavailable" if self._restart else "done"
        return "failed"

    def _note_failure(self, code: int | None) -> None:
        how = "could not be started" if code is None else f"ended with status {code}"
        said = f" ({self.last_words})" if self.last_words else ""
        self.state, self.detail = "failed", f"{how}{said}; starting again"
        self.restarts += 1

    def _run_once(self) -> int | None:
        """Run the process to its end and return its status; None if it did not start."""
        with self._lock:
            if self._stop.is_set():
                return None
            try:
                process = subprocess.Popen(
                    self._command, stdin=subprocess.PIPE, stdout=subprocess.PIPE,
                    stderr=subprocess.STDOUT,
                )  # fmt: skip
            except OSError as error:
                self.last_words = error.strerror or str(error)
                return None
            self._process = process
        assert process.stdout is not None
        assert process.stdin is not None
        with process.stdout as lines:
            self._read(lines)
        code = process.wait()
        with contextlib.suppress(OSError):
            process.stdin.close()
        return code

    def _read(self, lines: IO[bytes]) -> None:
        """Read what the child says, at a pace at which a flood costs the daemon nothing."""
        second, count = 0.0, 0
        while line := lines.readline(LONGEST_LINE):
            self._hear(line)
            now = time.monotonic()
            if now - second >= 1.0:
                second, count = now, 0
            count += 1
            if count >= LINES_PER_S:
                self._stop.wait(second + 1.0 - now)

    def _hear(self, line: bytes) -> None:
        try:
            said = json.loads(line)
        except (ValueError, RecursionError):
            said = None
        if isinstance(said, dict) and isinstance(said.get("state"), str):
            self.state = said["state"]
            self.detail = str(said.get("detail", ""))
        else:
            self.last_words = line.decode(errors="replace").strip() or self.last_words


def close_all(children: Sequence[Child]) -> None:
    """End all children, side by side: first ask, then terminate, then kill."""
    for child in children:
        child.ask_to_end()
    alive = _left(children, END_S)
    for child in alive:
        child.insist(kill=False)
    alive = _left(alive, TERMINATE_S)
    for child in alive:
        child.insist(kill=True)
    _left(alive, KILL_S)


def _left(children: Sequence[Child], seconds: float) -> list[Child]:
    until = time.monotonic() + seconds
    return [child for child in children if not child.join(until)]
