"""The UDP port: drains the socket, stamps each datagram, and minds who is sending."""

from __future__ import annotations

import contextlib
import errno
import socket
import struct
import sys
import time
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import psutil

from canticle_daemon.errors import ConfigError, SystemFaultError

RECEIVE_BUFFER_BYTES = 4 * 1024 * 1024
MOST_A_WAKE = 2048
LARGEST_DATAGRAM = 65_536
SENDER_ALIVE_S = 2.0
# Linux numbers; Python's socket module does not name them (asm-generic/socket.h).
_SO_TIMESTAMPNS = 35
_SO_RXQ_OVFL = 40
_TIMESPEC = struct.Struct("@qq")
_COUNT = struct.Struct("@I")

Address = tuple[str, int]


@dataclass(frozen=True, slots=True)
class Datagram:
    """One datagram and the `time.perf_counter_ns` at which it was received."""

    data: bytes
    received_ns: int


def parse_address(text: str, what: str) -> Address:
    """Read HOST:PORT; IPv6 hosts in brackets.

    Raises
    ------
    ConfigError
        The text is no such thing; it names `what`.
    """
    host, colon, port = text.rpartition(":")
    if not colon or not host or not port.isdecimal() or int(port) > 65_535:
        raise ConfigError(f"{what}: {text!r} is not HOST:PORT, for example 127.0.0.1:47800")
    return host.strip("[]"), int(port)


class UdpInput:
    """A bound UDP socket.

    Parameters
    ----------
    bind
        HOST:PORT; port 0 takes any free one.
    forward
        HOST:PORT of programs that get every raw datagram too.
    only_from
        HOST or HOST:PORT whose datagrams alone are taken.

    Attributes
    ----------
    dropped
        Datagrams the kernel threw away because its buffer was full (where it tells).
    foreign
        Datagrams of a second sender, ignored while the first was alive.
    """

    def __init__(
        self, bind: str, forward: Sequence[str] = (), only_from: str | None = None
    ) -> None:
        self._targets = [_resolve(target, "input.forward") for target in forward]
        self._only_from = only_from
        self._socket = _bound(_resolve(bind, "input.bind"))
        self.endpoint = _text_of(self._socket.getsockname())
        if self._socket.getsockname()[:2] in [target[:2] for target in self._targets]:
            self._socket.close()
            raise ConfigError(f"input.forward: {self.endpoint} is the daemon's own port")
        self._out = socket.socket(self._socket.family, socket.SOCK_DGRAM)
        self._out.setblocking(False)
        self._stamped = self._ask_for_stamps()
        self._sender: Address | None = None
        self._sender_seen = -1e9
        self.dropped = 0
        self.foreign = 0
        self.newest_foreign: str | None = None

    def fileno(self) -> int:
        """Return the descriptor to poll."""
        return self._socket.fileno()

    def close(self) -> None:
        """Let go of the port."""
        self._socket.close()
        self._out.close()

    def drain(self) -> list[Datagram]:
        """Return what waits in the socket, oldest first, without blocking."""
        taken: list[Datagram] = []
        # One offset a wake: kernel stamps are on the wall clock, estimates on the other.
        offset_ns = time.perf_counter_ns() - time.time_ns()
        for data, stamp_ns, address in self._receive():
            for target in self._targets:
                with contextlib.suppress(OSError):
                    self._out.sendto(data, target)
            if self._accept(address):
                received = stamp_ns + offset_ns if stamp_ns else time.perf_counter_ns()
                taken.append(Datagram(data, received))
        return taken

    def _receive(self) -> Iterator[tuple[bytes, int, Address]]:
        for _ in range(MOST_A_WAKE):
            try:
                if self._stamped:
                    data, notes, _, address = self._socket.recvmsg(LARGEST_DATAGRAM, 128)
                    yield data, self._read_notes(notes), address[:2]
                else:
                    data, address = self._socket.recvfrom(LARGEST_DATAGRAM)
                    yield data, 0, address[:2]
            except (BlockingIOError, InterruptedError):
                return
            except OSError as error:
                # Windows tells here that a program we forwarded to has closed its port.
                if error.errno not in (errno.ECONNRESET, errno.ECONNREFUSED, errno.EMSGSIZE):
                    raise

    def _read_notes(self, notes: list[tuple[int, int, bytes]]) -> int:
        stamp_ns = 0
        for level, kind, data in notes:
            if level != socket.SOL_SOCKET:
                continue
            if kind == _SO_TIMESTAMPNS:
                seconds, nanoseconds = _TIMESPEC.unpack_from(data)
                stamp_ns = seconds * 1_000_000_000 + nanoseconds
            elif kind == _SO_RXQ_OVFL:
                self.dropped = _COUNT.unpack_from(data)[0]
        return stamp_ns

    def _accept(self, address: Address) -> bool:
        if self._only_from is not None and self._only_from not in (address[0], _text_of(address)):
            return self._refuse(address)
        if address == self._sender:
            self._sender_seen = time.monotonic()
            return True
        now = time.monotonic()
        if self._sender is not None and now - self._sender_seen < SENDER_ALIVE_S:
            return self._refuse(address)
        self._sender, self._sender_seen = address, now
        return True

    def _refuse(self, address: Address) -> bool:
        self.foreign += 1
        self.newest_foreign = _text_of(address)
        return False

    def _ask_for_stamps(self) -> bool:
        if sys.platform != "linux":
            return False
        try:
            self._socket.setsockopt(socket.SOL_SOCKET, _SO_TIMESTAMPNS, 1)
            self._socket.setsockopt(socket.SOL_SOCKET, _SO_RXQ_OVFL, 1)
        except OSError:
            return False
        return True


def _resolve(text: str, what: str) -> Address:
    host, port = parse_address(text, what)
    try:
        info = socket.getaddrinfo(host, port, type=socket.SOCK_DGRAM)
    except OSError as error:
        raise ConfigError(f"{what}: host {host!r} is not known: {error.strerror}") from error
    address = info[0][4]
    return str(address[0]), int(address[1])


def _bound(address: Address) -> socket.socket:
    family = socket.AF_INET6 if ":" in address[0] else socket.AF_INET
    bound = socket.socket(family, socket.SOCK_DGRAM)
    try:
        if sys.platform == "win32":
            bound.setsockopt(socket.SOL_SOCKET, socket.SO_EXCLUSIVEADDRUSE, 1)
        bound.setsockopt(socket.SOL_SOCKET, socket.SO_RCVBUF, RECEIVE_BUFFER_BYTES)
        bound.bind(address)
        bound.setblocking(False)
    except OSError as error:
        bound.close()
        raise _port_fault(address, "udp", "input.bind", error) from error
    return bound


def _port_fault(address: Address, kind: str, what: str, error: OSError) -> Exception:
    where = f"{what}: {kind} port {_text_of(address)}"
    if error.errno == errno.EADDRINUSE:
        return ConfigError(
            f"{where} is in use{owner_of(address[1], kind)}; close that program or choose "
            "another port"
        )
    if error.errno in (errno.EADDRNOTAVAIL, errno.EACCES):
        return ConfigError(f"{where} cannot be bound: {error.strerror}")
    return SystemFaultError(f"{where} cannot be bound: {error.strerror or error}")


def owner_of(port: int, kind: str) -> str:
    """Return " by NAME (process N)" for a port's holder, or nothing where the system is mum."""
    try:
        for connection in psutil.net_connections(kind):
            if connection.laddr and connection.laddr.port == port and connection.pid:
                return f" by {psutil.Process(connection.pid).name()} (process {connection.pid})"
    except (psutil.Error, OSError):
        pass
    return ""


def _text_of(address: tuple[str | int, ...]) -> str:
    host, port = address[:2]
    return f"[{host}]:{port}" if ":" in str(host) else f"{host}:{port}"
