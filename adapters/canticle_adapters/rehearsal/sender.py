"""Sends the rehearsal's datagrams: at a pace, or as fast as the daemon keeps up.

At pace `max` with a bus, the newest `estimate` (its `time_s` is the frame's own) tells how far
the daemon has come, and only so many frames are on their way that no buffer overflows.
"""

from __future__ import annotations

import os
import socket
import sys
import threading
import time
from collections import deque
from collections.abc import Callable, Iterator
from contextlib import ExitStack, suppress
from pathlib import Path
from types import TracebackType
from typing import Protocol, Self

import msgspec
import zmq

from canticle_adapters.rehearsal.telemetry import Rehearsal, Values

IN_FLIGHT = 64
"""Two thirds of what Linux's default receive buffer holds of our datagrams (measured: 93)."""
TOPIC = b"estimate "
PROBE_S = 0.02
SILENCE_S = 5.0
LONGEST_SLEEP_S = 0.05
BLIND_BATCH = 16
BLIND_SLEEP_S = 0.004


class NoProgressError(Exception):
    """The daemon stopped answering at pace max."""


class Stop:
    """Whether to end; set by a signal, by the parent's end, or by a test."""

    def __init__(self) -> None:
        self.is_set = False

    def set(self, *_: object) -> None:
        """Ask the sender to end; fit to be a signal handler."""
        self.is_set = True

    def when_ends(self, descriptor: int) -> None:
        """Set this when a pipe comes to its end, watched by a thread of its own.

        It reads the descriptor itself: a thread that holds the lock of `sys.stdin` would keep
        the interpreter from ending.
        """

        def watch() -> None:
            with suppress(OSError):
                while os.read(descriptor, 1024):
                    pass
            self.set()

        threading.Thread(target=watch, daemon=True).start()


class Pacer(Protocol):
    """Decides when the next frame may go."""

    def wait(self, time_s: float, stop: Stop) -> None:
        """Return when the frame of that stream time may be sent, or when stopped."""


class ClockPacer:
    """Keeps to deadlines on the wall clock, so that a late frame does not shift the rest."""

    def __init__(self, pace: float, clock: Callable[[], float] = time.perf_counter) -> None:
        self._pace, self._clock = pace, clock
        self._start: float | None = None

    def wait(self, time_s: float, stop: Stop) -> None:
        """Sleep until the frame is due."""
        if self._start is None:
            self._start = self._clock() - time_s / self._pace
        due = self._start + time_s / self._pace
        while not stop.is_set and (left := due - self._clock()) > 0.0:
            time.sleep(min(left, LONGEST_SLEEP_S))


class BlindPacer:
    """Without a bus to listen to: small batches with a short sleep between."""

    def __init__(self) -> None:
        self._count = 0

    def wait(self, time_s: float, stop: Stop) -> None:
        """Let a batch pass, then rest."""
        self._count += 1
        if self._count % BLIND_BATCH == 0:
            time.sleep(BLIND_SLEEP_S)


class _Answer(msgspec.Struct):
    time_s: float


class BusPacer:
    """Keeps at most `IN_FLIGHT` frames on their way to the daemon.

    Until the first answer only one frame goes each `PROBE_S`: the subscription may not be in
    force yet. The same trickle goes on whenever the daemon answers more seldom than the window
    (a lowered estimate rate).
    """

    def __init__(self, endpoint: str) -> None:
        self._context = zmq.Context()
        self._socket = self._context.socket(zmq.SUB)
        self._socket.setsockopt(zmq.LINGER, 0)
        self._socket.setsockopt(zmq.CONFLATE, 1)
        self._socket.setsockopt(zmq.SUBSCRIBE, TOPIC)
        self._poller = zmq.Poller()
        self._poller.register(self._socket, zmq.POLLIN)
        self._decoder = msgspec.json.Decoder(_Answer)
        self._sent: deque[float] = deque()
        self._window = 1
        self._heard_at = self._passed_at = time.perf_counter()
        try:
            self._socket.connect(endpoint)
        except zmq.ZMQError:
            self.close()
            raise

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.close()

    def close(self) -> None:
        """Close the subscription."""
        self._context.destroy(linger=0)

    def wait(self, time_s: float, stop: Stop) -> None:
        """Wait for room in the window.

        Raises
        ------
        NoProgressError
            Nothing was heard for `SILENCE_S`.
        """
        self._listen(0.0)
        while len(self._sent) >= self._window and not stop.is_set:
            now = time.perf_counter()
            if now - self._heard_at > SILENCE_S:
                raise NoProgressError
            if now - max(self._passed_at, self._heard_at) > PROBE_S:
                break
            self._listen(PROBE_S)
        self._sent.append(time_s)
        self._passed_at = time.perf_counter()

    def finish(self, stop: Stop) -> None:
        """Wait until the last frame was answered, though not longer than a silence."""
        while self._sent and not stop.is_set:
            if time.perf_counter() - self._heard_at > 1.0:
                return
            self._listen(PROBE_S)

    def _listen(self, wait_s: float) -> None:
        if not self._poller.poll(round(1000.0 * wait_s)):
            return
        message = self._socket.recv()
        with suppress(msgspec.MsgspecError):
            answered = self._decoder.decode(message[len(TOPIC) :]).time_s
            self._note(answered)

    def _note(self, answered_s: float) -> None:
        sent = self._sent
        if not sent or not sent[0] <= answered_s <= sent[-1]:
            return
        while sent and sent[0] <= answered_s:
            sent.popleft()
        self._window = IN_FLIGHT
        self._heard_at = time.perf_counter()


class Truth:
    """Writes the truth file, a JSON object a line, flushed."""

    def __init__(self, path: Path) -> None:
        self._file = path.open("wb")
        self._written = self._happened = 0
        self._encoder = msgspec.json.Encoder()

    def close(self) -> None:
        """Close the file."""
        self._file.close()

    def write(self, drive: Rehearsal, record: Values) -> None:
        """Write the turn-ins and happenings that are new, then the frame's record."""
        for turn_in in drive.turn_ins[self._written :]:
            self._line(drive.turn_in_record(turn_in))
        self._written = len(drive.turn_ins)
        self.write_happenings(drive)
        self._line(record)
        self._file.flush()

    def write_happenings(self, drive: Rehearsal) -> None:
        """Write what happened since; once more after the last frame."""
        happenings = drive.happenings
        for happening in happenings[self._happened :]:
            self._line(drive.happening_record(happening))
        self._happened = len(happenings)

    def _line(self, record: Values) -> None:
        self._file.write(self._encoder.encode(record) + b"\n")


def send(
    drive: Rehearsal, to: tuple[str, int], pacer: Pacer, stop: Stop, truth: Truth | None = None
) -> int:
    """Send a drive's datagrams; returns how many went out.

    Raises
    ------
    NoProgressError
        The daemon stopped answering.
    OSError
        The address cannot be used.
    """
    family, kind, protocol, _, address = socket.getaddrinfo(*to, type=socket.SOCK_DGRAM)[0]
    count = 0
    with socket.socket(family, kind, protocol) as port:
        for datagram, record in _until(stop, drive.datagrams()):
            pacer.wait(record["time_s"], stop)
            if stop.is_set:
                break
            with suppress(ConnectionError):  # a closed port is told by the next send on it
                port.sendto(datagram, address)
            count += 1
            if truth is not None:
                truth.write(drive, record)
    if truth is not None:
        truth.write_happenings(drive)
    return count


def _until(stop: Stop, datagrams: Iterator[tuple[bytes, Values]]) -> Iterator[tuple[bytes, Values]]:
    for pair in datagrams:
        if stop.is_set:
            return
        yield pair


def rehearse(
    drive: Rehearsal,
    to: tuple[str, int],
    pace: float | None,
    bus: str | None,
    stop: Stop,
    truth_path: Path | None = None,
) -> int:
    """Drive and send to the end; `pace` None is as fast as can be. Returns the exit status."""
    with ExitStack() as stack:
        truth = None
        try:
            if truth_path is not None:
                truth = Truth(truth_path)
                stack.callback(truth.close)
            pacer = _pacer(pace, bus, stack)
            send(drive, to, pacer, stop, truth)
            if isinstance(pacer, BusPacer):
                pacer.finish(stop)
        except NoProgressError:
            return _fail(f"nothing heard from {bus} for {SILENCE_S:g} s; is the daemon running?")
        except OSError as error:
            return _fail(str(error))
    return 0


def _pacer(pace: float | None, bus: str | None, stack: ExitStack) -> Pacer:
    if pace is not None:
        return ClockPacer(pace)
    return BlindPacer() if bus is None else stack.enter_context(BusPacer(bus))


def _fail(reason: str) -> int:
    sys.stderr.write(f"rehearsal: {reason}\n")
    return 1
