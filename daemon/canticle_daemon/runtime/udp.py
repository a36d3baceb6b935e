"""The UDP port: drains the socket, stamps each datagram, and minds who is sending."""

from __future__ import annotations

import contextlib
import errno
import math
import socket
import struct
import sys
import time
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from ipaddress import ip_address

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


def reachable(endpoint: str) -> str:
    """Return where a program on this machine finds an endpoint that is bound to all addresses."""
    return endpoint.replace("0.0.0.0", "127.0.0.1").replace("[::]", "[::1]")


def parse_address(text: str, what: str) -> Address:
    """Read HOST:PORT; IPv6 hosts in brackets.

    Raises
    ------
    ConfigError
        The text is no such thing; it names `what`.
    """
    host, colon, port = text.rpartition(":")
    number = port.isascii() and port.isdecimal() and len(port) <= 5
    if not colon or not host or not number or int(port) > 65_535:
        raise ConfigError(f"{what}: {text!r} is not HOST:PORT, for example 127.0.0.1:47800")
    return host.strip("[]"), int(port)


class UdpInput:
    """A bound UDP socket.

    The first sender of a datagram that makes sense has the port until it has been silent for
    `SENDER_ALIVE_S`; what others send meanwhile is counted and ignored. Whether a datagram made
    sense the caller tells by `confirm`; until then datagrams are handed out one at a time.

    Parameters
    ----------
    bind
        HOST:PORT; port 0 takes any free one.
    forward
        HOST:PORT of programs that get every raw datagram too.
    only_from
        HOST or HOST:PORT whose datagrams alone are taken.
    receive_buffer_bytes
        What to ask of the system.

    Attributes
    ----------
    endpoint
        HOST:PORT in use.
    dropped
        Datagrams the kernel threw away because its buffer was full (where it tells).
    foreign
        Datagrams that were ignored because of who sent them.
    newest_foreign
        Who sent the newest of them.

    Raises
    ------
    ConfigError
        An address is wrong or the port is in use.
    """

    def __init__(
        self,
        bind: str,
        forward: Sequence[str] = (),
        only_from: str | None = None,
        receive_buffer_bytes: int = RECEIVE_BUFFER_BYTES,
    ) -> None:
        targets = [_resolve(target, "input.forward") for target in forward]
        self._only_from = None if only_from is None else _resolve_sender(only_from)
        self._socket = _bound(_resolve(bind, "input.bind"), receive_buffer_bytes)
        own = self._socket.getsockname()[:2]
        self.endpoint = _text_of(own)
        for target in targets:
            if _is_own(target, own):
                self._socket.close()
                raise ConfigError(f"input.forward: {_text_of(target)} is the daemon's own port")
        self._targets = [(_sender_socket(target), target) for target in targets]
        self._stamped = self._ask_for_stamps()
        self._buffer = bytearray(LARGEST_DATAGRAM)
        self._sender: Address | None = None
        self._sender_seen = -math.inf
        self._newest: Address | None = None
        self.dropped = 0
        self.foreign = 0
        self.newest_foreign: str | None = None

    @property
    def receive_buffer_bytes(self) -> int:
        """Return what the system gave; Linux counts its own bookkeeping in and doubles it."""
        return self._socket.getsockopt(socket.SOL_SOCKET, socket.SO_RCVBUF)

    @property
    def only_from(self) -> str | None:
        """Return whose datagrams alone are taken, if that was asked for."""
        return None if self._only_from is None else _text_of(self._only_from)

    def fileno(self) -> int:
        """Return the descriptor to poll."""
        return self._socket.fileno()

    def close(self) -> None:
        """Let go of the port."""
        self._socket.close()
        for out, _ in self._targets:
            out.close()

    def drain(self) -> list[Datagram]:
        """Return what waits in the socket, oldest first, without blocking."""
        taken: list[Datagram] = []
        # One offset a wake: kernel stamps are on the wall clock, estimates on the other.
        now_ns = time.perf_counter_ns()
        offset_ns = now_ns - time.time_ns()
        now_s = now_ns * 1e-9
        if now_s - self._sender_seen > SENDER_ALIVE_S:
            self._sender = None
        most = MOST_A_WAKE if self._sender is not None else 1
        for data, stamp_ns, address in self._receive(most):
            for out, target in self._targets:
                with contextlib.suppress(OSError):
                    out.sendto(data, target)
            if self._accept(address, now_s):
                received = stamp_ns + offset_ns if stamp_ns else time.perf_counter_ns()
                # A wall clock set back meanwhile must not move a receipt into the future.
                taken.append(Datagram(data, min(received, time.perf_counter_ns())))
        return taken

    def confirm(self) -> None:
        """Say that the newest datagram made sense: its sender has the port now."""
        if self._sender is None:
            self._sender, self._sender_seen = self._newest, time.perf_counter()

    def _receive(self, most: int) -> Iterator[tuple[bytes, int, Address]]:
        view = memoryview(self._buffer)
        for _ in range(most):
            try:
                if self._stamped:
                    size, notes, _, address = self._socket.recvmsg_into([view], 128)
                    yield bytes(view[:size]), self._read_notes(notes), address[:2]
                else:
                    size, address = self._socket.recvfrom_into(view)
                    yield bytes(view[:size]), 0, address[:2]
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

    def _accept(self, address: Address, now_s: float) -> bool:
        if address == self._sender:
            self._sender_seen = now_s
            return True
        only = self._only_from
        wanted = only is None or (address[0] == only[0] and only[1] in (0, address[1]))
        if wanted and self._sender is None:
            self._newest = address
            return True
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
    except (OSError, ValueError) as error:  # ValueError: no host name can look like this
        reason = getattr(error, "strerror", None) or "no such name can be"
        raise ConfigError(f"{what}: host {host!r} is not known: {reason}") from error
    address = info[0][4]
    return str(address[0]), int(address[1])


def _resolve_sender(text: str) -> Address:
    """Read HOST or HOST:PORT; port 0 stands for any."""
    bare = text.count(":") != 1 and not text.startswith("[")
    return _resolve(f"{text}:0" if bare else text, "input.only_from")


def _is_own(target: Address, own: Address) -> bool:
    """Whether a datagram to `target` would come back in at `own`."""
    if target[1] != own[1]:
        return False
    to, at = ip_address(target[0]), ip_address(own[0])
    return to == at or to.is_unspecified or (at.is_unspecified and _is_local(target[0]))


def _is_local(host: str) -> bool:
    names = (address.address for card in psutil.net_if_addrs().values() for address in card)
    return ip_address(host).is_loopback or host in names


def _family(address: Address) -> socket.AddressFamily:
    return socket.AF_INET6 if ":" in address[0] else socket.AF_INET


def _sender_socket(target: Address) -> socket.socket:
    out = socket.socket(_family(target), socket.SOCK_DGRAM)
    out.setblocking(False)
    return out


def _bound(address: Address, buffer_bytes: int) -> socket.socket:
    bound = socket.socket(_family(address), socket.SOCK_DGRAM)
    try:
        if sys.platform == "win32":
            bound.setsockopt(socket.SOL_SOCKET, socket.SO_EXCLUSIVEADDRUSE, 1)
        bound.setsockopt(socket.SOL_SOCKET, socket.SO_RCVBUF, buffer_bytes)
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
