"""What the daemon says in the terminal: a line a lap, and a status line where one can stand.

The terminal may be slow, stopped, or gone, and may know no letters but ASCII: none of it may
hold up the daemon. So text is handed over only when the system would take it at once; what
waits too long is dropped, the oldest first.
"""

from __future__ import annotations

import contextlib
import os
import select
import sys
import time
from collections import deque
from typing import TextIO

from canticle_daemon.messages import Entry, Event, LapCompleted
from canticle_daemon.runtime.engine import summary_of

WAITING_TEXTS = 200
CLOSE_WAIT_S = 0.2
KEY_ECHO = "^C"
"""What a terminal writes behind the status line when it is asked to end."""
WIDTH = 80
"""Columns of a terminal that does not tell."""
PIECE = 1000
"""A pipe that is ready takes 4,096 bytes (POSIX: PIPE_BUF is at least 512; Linux, macOS more)."""


class Console:
    """Writes lines, and one line that is written over.

    Parameters
    ----------
    stream
        Where to; the status line appears only on a terminal.
    """

    def __init__(self, stream: TextIO | None = None) -> None:
        self._stream = sys.stdout if stream is None else stream
        self._live = self._stream.isatty()
        self._waits: deque[str] = deque(maxlen=WAITING_TEXTS)
        self._asked = self._status = ""
        self._longest = 0  # on this row: after a narrower and a wider window all of it shows again
        self._entries: list[str] = []

    def line(self, text: str) -> None:
        """Write a line that stays."""
        self._write(self._erased() + text + "\n" + self._status)
        self._longest = len(self._status)

    def status(self, text: str) -> None:
        """Replace the status line."""
        if self._live and text != self._asked:
            self._asked = text
            shown = text[: self._columns() - 1 - len(KEY_ECHO)]
            self._write(self._erased() + shown)
            self._status, self._longest = shown, max(len(shown), self._longest)
        elif self._waits:
            self._hand_over()

    def event(self, event: Event) -> None:
        """Gather a lap's entries and write them at its end."""
        if isinstance(event, Entry):
            self._entries.append(summary_of(event) or f"{event.corner}: {event.verdict}")
        elif isinstance(event, LapCompleted):
            time_s = f"{event.lap_time_s:7.3f} s" if event.lap_time_s is not None else "   part  "
            spent = sum(event.tire_energy_j) / 1000.0
            entries = " · ".join(self._entries)
            said = f"lap {event.lap:>3}  {time_s}  tires {spent:5.0f} kJ  {entries}"
            self.line(said.rstrip())
            self._entries.clear()

    def close(self) -> None:
        """Leave the terminal on a fresh line, and give a slow one a last chance."""
        self._write(self._erased())
        self._asked = self._status = ""
        until = time.monotonic() + CLOSE_WAIT_S
        while self._waits and time.monotonic() < until:
            time.sleep(0.01)
            self._hand_over()

    def _erased(self) -> str:
        if not self._status:
            return ""
        width = min(self._longest + len(KEY_ECHO), self._columns() - 1)
        return "\r" + " " * width + "\r"

    def _columns(self) -> int:
        """Return the terminal's width now: a longer status line would not stay on its row."""
        try:
            return os.get_terminal_size(self._stream.fileno()).columns or WIDTH
        except (OSError, ValueError):
            return WIDTH

    def _write(self, text: str) -> None:
        self._waits.extend(text[at : at + PIECE] for at in range(0, len(text), PIECE))
        self._hand_over()

    def _hand_over(self) -> None:
        """Write what waits, as far as the system takes it without a pause."""
        try:
            while self._waits and self._takes():
                self._stream.write(self._writable(self._waits[0]))
                self._stream.flush()
                self._waits.popleft()
        except (OSError, ValueError):  # the terminal has gone; the daemon has not
            self._live = False
            self._waits.clear()
            self._let_go()

    def _takes(self) -> bool:
        if sys.platform == "win32":
            return True
        try:
            poll = select.poll()
            poll.register(self._stream.fileno(), select.POLLOUT)
        except (OSError, ValueError):  # no descriptor: a text in memory
            return True
        # An error or a hang-up counts as ready: the write will say what it is.
        return bool(poll.poll(0))

    def _writable(self, text: str) -> str:
        """Replace what the terminal's encoding does not have."""
        encoding = self._stream.encoding or "utf-8"
        return text.encode(encoding, "replace").decode(encoding)

    def _let_go(self) -> None:
        """Point a broken standard output at nothing, or Python's own last flush would fail."""
        with contextlib.suppress(OSError, ValueError, AttributeError):
            sink = os.open(os.devnull, os.O_WRONLY)
            try:
                os.dup2(sink, self._stream.fileno())
            finally:
                os.close(sink)
