"""The tie between a display process and the daemon that started it.

The daemon holds the other ends of standard input and output. Input carries nothing: its end
means that the daemon is gone. Output carries one line of JSON per change of state. Ctrl-C goes
to the whole group of a terminal, so it is left to the daemon, which then closes the input.
"""

from __future__ import annotations

import contextlib
import os
import signal
import sys
import threading
from types import FrameType
from typing import Literal, TypeAlias

import msgspec

State: TypeAlias = Literal["ready", "unavailable"]

EXIT_DONE = 0
EXIT_FAULT = 1
EXIT_CLOSED_BY_USER = 3


class Lifeline:
    """Watches the daemon and reports to it; made once, on the main thread."""

    def __init__(self) -> None:
        self._gone = threading.Event()
        self._last: tuple[State, str] | None = None
        signal.signal(signal.SIGINT, signal.SIG_IGN)
        signal.signal(signal.SIGTERM, self._on_signal)
        threading.Thread(target=self._watch_input, name="lifeline", daemon=True).start()

    @property
    def holds(self) -> bool:
        """Whether the daemon is there and wants this process."""
        return not self._gone.is_set()

    def wait(self, seconds: float) -> bool:
        """Sleep until the time is over or the daemon is gone; return `holds`."""
        return not self._gone.wait(seconds)

    def say(self, state: State, detail: str) -> None:
        """Tell the daemon, unless it was told just this."""
        if (state, detail) == self._last:
            return
        self._last = (state, detail)
        line = msgspec.json.encode({"state": state, "detail": " ".join(detail.split())})
        with contextlib.suppress(OSError):
            sys.stdout.buffer.write(line + b"\n")
            sys.stdout.buffer.flush()

    def _on_signal(self, number: int, frame: FrameType | None) -> None:
        self._gone.set()

    def _watch_input(self) -> None:
        # Unbuffered: a buffered reader blocked here would hold its lock at exit.
        with contextlib.suppress(OSError):
            while os.read(0, 4096):
                pass
        self._gone.set()
