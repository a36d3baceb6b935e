"""Starts a display process as the daemon does and plays the daemon's bus to it."""

from __future__ import annotations

import json
import os
import subprocess
import sys
import threading
import time
from collections.abc import Mapping
from queue import Empty, SimpleQueue
from types import TracebackType

import msgspec
import zmq

from canticle_daemon.messages import bus_message, encode


class Companion:
    """A running process, its state lines, and a PUB socket that it listens to."""

    def __init__(self, module: str, *options: str, **environment: str | None) -> None:
        self._context = zmq.Context()
        self._bus = self._context.socket(zmq.PUB)
        self._bus.linger = 0
        self._bus.bind("tcp://127.0.0.1:*")
        endpoint = self._bus.last_endpoint.decode()
        self.process = subprocess.Popen(
            [sys.executable, "-m", module, "--bus", endpoint, *options],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            stderr=subprocess.PIPE,
            env=_environment(environment),
        )
        self._lines: SimpleQueue[bytes] = SimpleQueue()
        self._reader = threading.Thread(target=self._read)
        self._reader.start()

    def __enter__(self) -> Companion:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.process.kill()
        self.process.wait()
        self._reader.join()
        for stream in (self.process.stdin, self.process.stdout, self.process.stderr):
            if stream is not None:
                stream.close()
        self._context.destroy()

    def send(self, topic: str, payload: msgspec.Struct) -> None:
        self._bus.send(bus_message(topic, encode(payload)))

    def send_raw(self, message: bytes) -> None:
        self._bus.send(message)

    def state(self, timeout_s: float = 30) -> dict[str, str]:
        """The next state line, which is JSON and nothing else."""
        line: dict[str, str] = json.loads(self._lines.get(timeout=timeout_s))
        return line

    def no_state(self) -> bool:
        return self._lines.empty()

    def let_go(self) -> float:
        """Close standard input; return how long the process took to end."""
        assert self.process.stdin is not None
        begun_s = time.monotonic()
        self.process.stdin.close()
        self.process.wait(10)
        return time.monotonic() - begun_s

    def repeat_until(
        self, topic: str, payload: msgspec.Struct, words: str, timeout_s: float = 30
    ) -> dict[str, str]:
        """Publish every 20 ms, as for late subscribers, until a state with these words comes."""
        end_s = time.monotonic() + timeout_s
        state = {"detail": "nothing"}
        while time.monotonic() < end_s and self.process.poll() is None:
            self.send(topic, payload)
            try:
                state = self.state(0.02)
            except Empty:
                continue
            if words in state["detail"]:
                return state
        ended = self.process.poll()
        raise AssertionError(f"no state with {words!r} but {state}; exit status {ended}")

    def _read(self) -> None:
        assert self.process.stdout is not None
        for line in self.process.stdout:
            self._lines.put(line)


def _environment(changes: Mapping[str, str | None]) -> dict[str, str]:
    environment = {**os.environ, **{key: value for key, value in changes.items() if value}}
    for key, value in changes.items():
        if value is None:
            environment.pop(key, None)
    return environment
