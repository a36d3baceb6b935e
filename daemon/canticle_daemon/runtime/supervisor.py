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
from collections.abc import Sequence
from typing import IO

BACKOFF_S = (1.0, 2.0, 4.0, 8.0, 15.0, 30.0)
CLOSE_S = 0.5
CLOSED_BY_USER = 3


class Child:
    """One supervised process, ``python -m MODULE ARGUMENT…``.

    Its standard output carries one JSON object a line with `state` and `detail`. It ends with 0
    when it cannot work here and with 3 when the user closed it: then it is left in peace.

    Attributes
    ----------
    state
        `starting`, what the child says of itself, `failed`, or `closed`.
    detail
        One plain sentence.
    last_words
        The newest line it wrote that was no state, for the fault report.
    """

    def __init__(
        self, name: str, module: str, arguments: Sequence[str], *, restart: bool = True
    ) -> None:
        self.name = name
        self._restart = restart
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

    def close(self) -> None:
        """Ask the process to end, and see that it does."""
        self.ask_to_end()
        process = self._process
        if process is not None:
            for last_resort in (process.terminate, process.kill):
                with contextlib.suppress(subprocess.TimeoutExpired):
                    process.wait(CLOSE_S)
                    break
                last_resort()
        self._thread.join(CLOSE_S)

    def _keep(self) -> None:
        tries = 0
        while not self._stop.is_set():
            code = self._run_once()
            if self._stop.is_set():
                break
            if code in (0, CLOSED_BY_USER):
                self.state = "unavailable" if code == 0 else "closed"
                return
            if not self._restart:
                self.state = "failed"
                return
            self.state, self.detail = "failed", f"ended with status {code}; starting again"
            self.restarts += 1
            self._stop.wait(BACKOFF_S[min(tries, len(BACKOFF_S) - 1)])
            tries += 1

    def _run_once(self) -> int:
        with self._lock:
            if self._stop.is_set():
                return 0
            process = subprocess.Popen(
                self._command, stdin=subprocess.PIPE, stdout=subprocess.PIPE,
                stderr=subprocess.STDOUT,
            )  # fmt: skip
            self._process = process
        assert process.stdout is not None
        self._read(process.stdout)
        code = process.wait()
        process.stdout.close()
        with contextlib.suppress(OSError):
            if process.stdin is not None:
                process.stdin.close()
        return code

    def _read(self, lines: IO[bytes]) -> None:
        for line in lines:
            try:
                said = json.loads(line)
                self.state = str(said.get("state", self.state))
                self.detail = str(said.get("detail", ""))
            except (ValueError, AttributeError):
                self.last_words = line.decode(errors="replace").strip() or self.last_words


def close_all(children: Sequence[Child]) -> None:
    """End all children, side by side."""
    for child in children:
        child.ask_to_end()
    for child in children:
        child.close()
