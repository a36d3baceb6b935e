"""The bus: one ZeroMQ PUB socket for everything that is said."""

from __future__ import annotations

import errno
import re

import msgspec
import zmq

from canticle_daemon.errors import ConfigError
from canticle_daemon.messages import bus_message, encode
from canticle_daemon.runtime.udp import owner_of

QUEUED_MESSAGES = 50_000
PATIENCE_MS = 1000


class Bus:
    """A bound PUB socket.

    Parameters
    ----------
    endpoint
        For example ``tcp://127.0.0.1:47801``; port 0 takes any free one.

    Raises
    ------
    ConfigError
        The endpoint is malformed or in use.
    """

    def __init__(self, endpoint: str) -> None:
        # A port above 65,535 ZeroMQ would quietly take modulo 65,536.
        form = re.fullmatch(r"tcp://\S+:(?:(\d{1,5})|\*)|ipc://\S+|inproc://\S+", endpoint)
        if not form or int(form[1] or 0) > 65_535:
            raise ConfigError(
                f"bus.publish: {endpoint!r} is not an endpoint such as tcp://127.0.0.1:47801"
            )
        self.context = zmq.Context(io_threads=1)
        # A PUB socket that also tells of its subscribers.
        self._socket = self.context.socket(zmq.XPUB)
        self._flags = zmq.DONTWAIT
        # Exit must never hang on a subscriber that does not read.
        self._socket.setsockopt(zmq.LINGER, 200)
        self._socket.setsockopt(zmq.SNDHWM, QUEUED_MESSAGES)
        try:
            self._socket.bind(re.sub(r":0$", ":*", endpoint))
        except zmq.ZMQError as error:
            self.close()
            raise ConfigError(_fault(endpoint, error)) from error
        self.endpoint = self._socket.getsockopt_string(zmq.LAST_ENDPOINT).rstrip("\0")

    def publish(self, topic: str, payload: msgspec.Struct) -> None:
        """Send one message."""
        try:
            self._socket.send(bus_message(topic, encode(payload)), self._flags)
        except zmq.Again:  # a subscriber that no longer reads: from now on it loses messages
            self._flags = zmq.DONTWAIT
            self._socket.setsockopt(zmq.XPUB_NODROP, 0)

    def wait_for_listeners(self, seconds: float) -> None:
        """Give subscribers some time to join, and from now on to keep up: for replays alone."""
        self._socket.poll(int(1000 * seconds))
        self._flags = zmq.Flag(0)
        self._socket.setsockopt(zmq.XPUB_NODROP, 1)
        self._socket.setsockopt(zmq.SNDTIMEO, PATIENCE_MS)
        self._socket.setsockopt(zmq.LINGER, PATIENCE_MS)

    def close(self) -> None:
        """Let go of the port."""
        self._socket.close()
        self.context.term()


def _fault(endpoint: str, error: zmq.ZMQError) -> str:
    if error.errno == errno.EADDRINUSE or error.errno == zmq.EADDRINUSE:
        port = re.search(r":(\d+)$", endpoint)
        owner = owner_of(int(port[1]), "tcp") if port else ""
        return f"bus.publish: {endpoint} is in use{owner}; close that program or choose another"
    return f"bus.publish: {endpoint} cannot be bound: {error.strerror}"
