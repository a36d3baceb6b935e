"""Datagram to estimate, through the real daemon, beside a bare loop that only republishes.

    python tests/bench/bench_latency.py [--seconds N] [--rates 60,360,1000] [--slice N]

Prints one JSON object. At each rate the same sender drives in turn, slice by slice, the daemon
(`canticle run` with a track file, no overlay, no voice) and a bare process that polls, receives
and publishes a message of the estimate's size; so a disturbed moment of the machine falls on
both. Latency is from `sendto` to the message in this process's SUB socket. Target: the daemon's
p99 at most 3 × max(bare p99, 400 µs).
"""

from __future__ import annotations

import argparse
import json
import os
import socket
import subprocess
import sys
import tempfile
import threading
import time
from contextlib import ExitStack
from dataclasses import dataclass, field
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parents[1]))

import msgspec
import numpy as np
import zmq
from runtime.rig import Live, track_file
from streams import Drive, oval_file

from canticle_daemon.track.profile import Track

TARGET, FLOOR_US = 3.0, 400.0
WARM_S = 1.0
BARE = """
import socket, sys, zmq
port = socket.socket(socket.AF_INET, socket.SOCK_DGRAM)
port.setsockopt(socket.SOL_SOCKET, socket.SO_RCVBUF, 4 << 20)
port.bind(("127.0.0.1", 0))
port.setblocking(False)
bus = zmq.Context().socket(zmq.PUB)
bus.linger = 0
bus.bind("tcp://127.0.0.1:*")
print(port.getsockname()[1], bus.last_endpoint.decode(), flush=True)
poller = zmq.Poller()
poller.register(port.fileno(), zmq.POLLIN)
message = b"estimate " + b"x" * int(sys.argv[1])
while True:
    poller.poll()
    try:
        while True:
            port.recv(65536)
            bus.send(message, zmq.DONTWAIT)
    except BlockingIOError:
        pass
"""


@dataclass
class Way:
    """One way from a datagram to a message, and how long each one took."""

    address: tuple[str, int]
    endpoint: str
    context: zmq.Context[zmq.Socket[bytes]]
    took_us: list[float] = field(default_factory=list)
    lost: int = 0
    sent_at: int = 0

    def connect(self) -> None:
        """Connect, and send until messages come: then the subscription stands."""
        self.ear = self.context.socket(zmq.SUB)
        self.ear.linger, self.ear.rcvhwm = 0, 0
        self.ear.subscribe(b"estimate ")
        self.ear.connect(self.endpoint)

    def drive(self, stream: list[bytes], rate_hz: float, sender: socket.socket) -> None:
        """Send each datagram on its time; messages are stamped in a thread of their own."""
        arrived: list[int] = []
        listener = threading.Thread(target=self._listen, args=(len(stream), arrived))
        listener.start()
        sent = []
        begun = time.perf_counter()
        for count, datagram in enumerate(stream):
            due = begun + count / rate_hz
            while (ahead := due - time.perf_counter()) > 0.0:
                time.sleep(ahead)
            sent.append(time.perf_counter_ns())
            sender.sendto(datagram, self.address)
        listener.join()
        self.lost += len(sent) - len(arrived)
        if len(arrived) == len(sent):
            self.took_us += [(at - by) / 1e3 for at, by in zip(arrived, sent, strict=True)]

    def _listen(self, count: int, arrived: list[int]) -> None:
        ear = self.ear
        while len(arrived) < count and ear.poll(2000):
            ear.recv()
            arrived.append(time.perf_counter_ns())

    def figures(self) -> dict[str, float]:
        """Return quantiles in microseconds."""
        took = np.array(self.took_us)
        shares = {"p50_us": 0.5, "p99_us": 0.99, "p999_us": 0.999}
        found = {name: round(float(np.quantile(took, share)), 1) for name, share in shares.items()}
        return found | {"count": len(took), "lost": self.lost}


def measure(rate_hz: float, seconds: float, slice_s: float, size: int) -> dict[str, object]:
    """Drive both ways at one rate."""
    track = Track(oval_file())
    laps = int((seconds + WARM_S) * 60.0 / 2000.0) + 2
    stream = [
        msgspec.json.encode(frame) for frame in Drive(track, laps=laps, rate_hz=rate_hz).frames()
    ]
    with ExitStack() as stack:
        home = Path(stack.enter_context(tempfile.TemporaryDirectory()))
        live = stack.enter_context(Live(home, "--track", track_file(home)))
        bare = stack.enter_context(
            subprocess.Popen([sys.executable, "-c", BARE, str(size)], stdout=subprocess.PIPE)
        )
        stack.callback(bare.kill)
        assert bare.stdout is not None
        port, endpoint = bare.stdout.readline().decode().split()
        context = stack.enter_context(zmq.Context())
        sender = stack.enter_context(socket.socket(socket.AF_INET, socket.SOCK_DGRAM))
        daemon = Way(live.address, live.publish, context)
        loop = Way(("127.0.0.1", int(port)), endpoint, context)
        for way in (daemon, loop):
            way.connect()
            stack.enter_context(way.ear)
        time.sleep(0.5)
        length = max(int(slice_s * rate_hz), 1)
        warm = int(WARM_S * rate_hz)
        daemon.drive(stream[:warm], rate_hz, sender)
        loop.drive(stream[:warm], rate_hz, sender)
        daemon.took_us, loop.took_us = [], []
        for at in range(warm, warm + int(seconds * rate_hz), length):
            daemon.drive(stream[at : at + length], rate_hz, sender)
            loop.drive(stream[at : at + length], rate_hz, sender)
    mine, other = daemon.figures(), loop.figures()
    ratio = mine["p99_us"] / max(other["p99_us"], FLOOR_US)
    return {"daemon": mine, "bare": other, "ratio": round(ratio, 2), "reached": ratio <= TARGET}


def main() -> None:
    """Measure and print."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--seconds", type=float, default=20.0, help="for each way and rate")
    parser.add_argument("--slice", type=float, default=2.0, help="seconds before the ways change")
    parser.add_argument("--rates", default="60,360,1000")
    parser.add_argument("--size", type=int, default=560, help="bytes the bare loop publishes")
    given = parser.parse_args()
    sys.setswitchinterval(1e-4)  # the listener must not wait for the sender's turn to end
    rates = {
        rate: measure(float(rate), given.seconds, given.slice, given.size)
        for rate in given.rates.split(",")
    }
    load = os.getloadavg()[0] if hasattr(os, "getloadavg") else None
    print(json.dumps({"target_ratio": TARGET, "load_average": load, "rates_hz": rates}))


if __name__ == "__main__":
    main()
