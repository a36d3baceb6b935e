"""The daemon's bus as a display process reads it: what does not fit is ignored."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import msgspec
import zmq

from canticle_daemon.errors import SystemFaultError
from canticle_daemon.messages import read_bus_message

MAX_MESSAGES_A_DRAIN = 1000


def subscribe(
    context: zmq.Context[zmq.Socket[bytes]],
    endpoint: str,
    topics: tuple[str, ...],
    *,
    newest_only: bool = False,
) -> zmq.Socket[bytes]:
    """Open a SUB socket for whole topics; with `newest_only` older messages are dropped.

    Raises
    ------
    SystemFaultError
        The endpoint is not one that ZeroMQ understands.
    """
    socket = context.socket(zmq.SUB)
    socket.linger = 0
    if newest_only:
        socket.conflate = True
    for topic in topics:
        socket.subscribe(topic.encode() + b" ")
    try:
        socket.connect(endpoint)
    except zmq.ZMQError as error:
        socket.close()
        raise SystemFaultError(f"cannot join the bus at {endpoint}: {error}") from error
    return socket


def drain(socket: zmq.Socket[bytes]) -> Iterator[tuple[str, Any]]:
    """Yield what waits on the socket, never blocking and never endlessly."""
    for _ in range(MAX_MESSAGES_A_DRAIN):
        try:
            message = socket.recv(zmq.NOBLOCK)
        except zmq.Again:
            return
        try:
            yield read_bus_message(message)
        except (KeyError, UnicodeDecodeError, RecursionError, msgspec.MsgspecError):
            continue
