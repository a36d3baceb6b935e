"""What the daemon says in the terminal: a line a lap, and a status line where one can stand."""

from __future__ import annotations

import sys
from typing import TextIO

from canticle_daemon.messages import Entry, Event, LapCompleted
from canticle_daemon.runtime.engine import summary_of


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
        self._status = ""
        self._entries: list[str] = []

    def line(self, text: str) -> None:
        """Write a line that stays."""
        self._write(self._erased() + text + "\n" + self._status)

    def status(self, text: str) -> None:
        """Replace the status line."""
        if self._live and text != self._status:
            self._write(self._erased() + text)
            self._status = text

    def event(self, event: Event) -> None:
        """Gather a lap's entries and write them at its end."""
        if isinstance(event, Entry):
            self._entries.append(summary_of(event) or f"{event.corner}: {event.verdict}")
        elif isinstance(event, LapCompleted):
            time = f"{event.lap_time_s:7.3f} s" if event.lap_time_s is not None else "   part  "
            spent = sum(event.tire_energy_j) / 1000.0
            entries = " · ".join(self._entries)
            self.line(f"lap {event.lap:>3}  {time}  tires {spent:5.0f} kJ  {entries}")
            self._entries.clear()

    def close(self) -> None:
        """Leave the terminal on a fresh line."""
        self._write(self._erased())
        self._status = ""

    def _erased(self) -> str:
        return "\r" + " " * len(self._status) + "\r" if self._status else ""

    def _write(self, text: str) -> None:
        try:
            self._stream.write(text)
            self._stream.flush()
        except (OSError, ValueError):  # the terminal has gone; the daemon has not
            self._live = False
        except UnicodeEncodeError:
            self._stream.write(text.encode("ascii", "replace").decode())
