"""Asks to end: Ctrl-C, SIGTERM, a closed console window, log-off."""

from __future__ import annotations

import contextlib
import signal
import socket
import sys
import threading
from types import FrameType
from typing import Any

CONSOLE_GRACE_S = 4.0
_CONSOLE_EVENTS = {0, 1, 2, 5, 6}  # Ctrl-C, Ctrl-Break, close, log-off, shutdown


class StopRequest:
    """A flag set by the system's asks to end, with a descriptor that wakes a poller.

    Use as a context manager; the old handlers come back at the end.
    """

    def __init__(self) -> None:
        self.reason = ""
        self._done = threading.Event()
        self._reader, self._writer = socket.socketpair()
        self._reader.setblocking(False)
        self._writer.setblocking(False)
        self._old: dict[signal.Signals, Any] = {}
        self._console: Any = None

    def __enter__(self) -> StopRequest:
        for name in ("SIGINT", "SIGTERM", "SIGHUP", "SIGBREAK"):
            number = getattr(signal, name, None)
            if number is None or threading.current_thread() is not threading.main_thread():
                continue
            if name == "SIGHUP" and signal.getsignal(number) is signal.SIG_IGN:
                continue  # started under nohup: the user wants it to outlive the terminal
            self._old[number] = signal.signal(number, self._on_signal)
        if sys.platform == "win32":
            self._listen_to_console()
        return self

    def __exit__(self, *_: object) -> None:
        for number, handler in self._old.items():
            signal.signal(number, handler)
        self._done.set()
        self._reader.close()
        self._writer.close()

    @property
    def is_set(self) -> bool:
        """Tell whether an end was asked for."""
        return bool(self.reason)

    def set(self, reason: str) -> None:
        """Ask to end; the first reason stays."""
        self.reason = self.reason or reason
        with contextlib.suppress(OSError):
            self._writer.send(b"!")

    def fileno(self) -> int:
        """Return the descriptor that becomes readable."""
        return self._reader.fileno()

    def _on_signal(self, number: int, _frame: FrameType | None) -> None:
        self.set(signal.Signals(number).name)

    def _listen_to_console(self) -> None:
        """Windows ends the process when this handler returns, so wait for the session to close."""
        import ctypes

        def handler(event: int) -> bool:
            if event not in _CONSOLE_EVENTS:
                return False
            self.set("console closed" if event else "SIGINT")
            if event >= 2:
                self._done.wait(CONSOLE_GRACE_S)
            return True

        prototype = ctypes.WINFUNCTYPE(ctypes.c_int, ctypes.c_uint32)  # type: ignore[attr-defined]
        self._console = prototype(handler)
        ctypes.windll.kernel32.SetConsoleCtrlHandler(self._console, 1)  # type: ignore[attr-defined]
