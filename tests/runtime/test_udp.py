"""The UDP port on real loopback sockets. Kernel facts are those of Linux's socket(7), udp(7)."""

from __future__ import annotations

import random
import select
import socket
import sys
import time
from collections.abc import Iterator
from contextlib import closing

import pytest

from canticle_daemon.errors import ConfigError
from canticle_daemon.runtime import udp
from canticle_daemon.runtime.udp import Datagram, UdpInput, parse_address, reachable

pytestmark = pytest.mark.io
ANY = "127.0.0.1:0"


@pytest.fixture
def sender() -> Iterator[socket.socket]:
    with socket.socket(socket.AF_INET, socket.SOCK_DGRAM) as made:
        yield made


@pytest.fixture
def other() -> Iterator[socket.socket]:
    with socket.socket(socket.AF_INET, socket.SOCK_DGRAM) as made:
        yield made


def address_of(port: UdpInput) -> tuple[str, int]:
    return parse_address(port.endpoint, "test")


def take(
    port: UdpInput, count: int, *, confirm: bool = True, wait_s: float = 2.0
) -> list[Datagram]:
    """Drain until so many datagrams are there, as the daemon's loop does."""
    taken: list[Datagram] = []
    while len(taken) < count and select.select([port.fileno()], [], [], wait_s)[0]:
        new = port.drain()
        taken += new
        if new and confirm:
            port.confirm()
    return taken


def nothing_more(port: UdpInput) -> bool:
    """Whether what waits in the socket, if anything, is all ignored."""
    while select.select([port.fileno()], [], [], 0.05)[0]:
        if port.drain():
            return False
    return True


def test_the_receive_buffer_is_a_mebibyte_or_more() -> None:
    with closing(UdpInput(ANY)) as port:
        # Linux doubles what was asked for (socket(7)), so the half of it is what counts.
        assert port.receive_buffer_bytes / 2 >= 1024 * 1024


def test_a_burst_is_drained_in_order_at_one_wake(sender: socket.socket) -> None:
    with closing(UdpInput(ANY)) as port:
        sender.sendto(b"first", address_of(port))
        take(port, 1)
        for number in range(500):
            sender.sendto(str(number).encode(), address_of(port))
        assert [datagram.data for datagram in port.drain()] == [b"%d" % n for n in range(500)]
        assert port.drain() == []


def test_a_burst_of_two_thousand_datagrams_fits_the_buffer(sender: socket.socket) -> None:
    # The default buffer holds about 166 packets; a hitch of a second at 1000 Hz must fit ours.
    with closing(UdpInput(ANY)) as port:
        for _ in range(2000):
            sender.sendto(b"x" * 450, address_of(port))
        assert len(take(port, 2000)) == 2000
        assert port.dropped == 0


def test_receive_times_lie_between_send_and_drain(sender: socket.socket) -> None:
    with closing(UdpInput(ANY)) as port:
        sent = []
        for _ in range(20):
            sent.append(time.perf_counter_ns())
            sender.sendto(b"x", address_of(port))
            time.sleep(0.002)
        taken = take(port, 20)
        drained = time.perf_counter_ns()
        assert all(datagram.received_ns <= drained for datagram in taken)
        late_ms = [
            (datagram.received_ns - at) / 1e6 for datagram, at in zip(taken, sent, strict=True)
        ]
        # Loopback takes microseconds; a stamp of the drain would be up to 40 ms late.
        assert sorted(late_ms)[10] < 2.0
        if sys.platform == "linux":
            assert min(late_ms) > -0.5


def test_without_kernel_stamps_the_drain_is_the_receipt(
    sender: socket.socket, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(udp.sys, "platform", "other")
    with closing(UdpInput(ANY)) as port:
        before = time.perf_counter_ns()
        sender.sendto(b"x", address_of(port))
        (datagram,) = take(port, 1)
        assert before <= datagram.received_ns <= time.perf_counter_ns()


def test_datagrams_that_find_the_buffer_full_are_counted(sender: socket.socket) -> None:
    with closing(UdpInput(ANY, receive_buffer_bytes=4096)) as port:
        for _ in range(300):
            sender.sendto(b"x" * 500, address_of(port))
        taken = take(port, 300, wait_s=0.1)
        assert len(taken) < 300
        sender.sendto(b"last", address_of(port))  # the count comes with the next datagram
        taken += take(port, 1)
        if sys.platform == "linux":
            assert len(taken) + port.dropped == 301


def test_loopback_alone_listens_by_default() -> None:
    from canticle_daemon.config import Config

    assert Config().input.bind.startswith("127.0.0.1:")
    assert Config().bus.publish.startswith("tcp://127.0.0.1:")


@pytest.mark.parametrize("size", [0, 1, 1500, 65507])
def test_any_size_of_datagram_arrives_whole(sender: socket.socket, size: int) -> None:
    # 65,507 bytes is the largest UDP payload over IPv4 (65,535 less 20 and 8 of headers).
    data = random.Random(size).randbytes(size)
    with closing(UdpInput(ANY)) as port:
        sender.sendto(data, address_of(port))
        assert [datagram.data for datagram in take(port, 1)] == [data]


class TestForward:
    def test_raw_bytes_go_on_to_every_target_whatever_they_are(self, sender: socket.socket) -> None:
        with (
            socket.socket(socket.AF_INET, socket.SOCK_DGRAM) as one,
            socket.socket(socket.AF_INET, socket.SOCK_DGRAM) as two,
        ):
            for target in (one, two):
                target.bind(("127.0.0.1", 0))
                target.settimeout(2.0)
            targets = [f"127.0.0.1:{target.getsockname()[1]}" for target in (one, two)]
            with closing(UdpInput(ANY, targets)) as port:
                sent = [b'{"time_s": 1}', b"", b"\x00\xff" * 700, b"not JSON {{{"]
                for data in sent:
                    sender.sendto(data, address_of(port))
                take(port, len(sent))
                for target in (one, two):
                    assert [target.recv(65536) for _ in sent] == sent

    def test_a_closed_port_costs_nothing(self, sender: socket.socket) -> None:
        with socket.socket(socket.AF_INET, socket.SOCK_DGRAM) as gone:
            gone.bind(("127.0.0.1", 0))
            target = f"127.0.0.1:{gone.getsockname()[1]}"
        with closing(UdpInput(ANY, [target])) as port:
            for number in range(20):
                sender.sendto(b"%d" % number, address_of(port))
                assert [datagram.data for datagram in take(port, 1)] == [b"%d" % number]

    def test_what_a_second_sender_says_is_passed_on_too(
        self, sender: socket.socket, other: socket.socket
    ) -> None:
        with socket.socket(socket.AF_INET, socket.SOCK_DGRAM) as target:
            target.bind(("127.0.0.1", 0))
            target.settimeout(2.0)
            with closing(UdpInput(ANY, [f"127.0.0.1:{target.getsockname()[1]}"])) as port:
                sender.sendto(b"first", address_of(port))
                take(port, 1)
                other.sendto(b"second", address_of(port))
                assert nothing_more(port)
                assert [target.recv(100) for _ in range(2)] == [b"first", b"second"]

    def test_an_ipv6_target_is_reached_from_an_ipv4_port(self, sender: socket.socket) -> None:
        with socket.socket(socket.AF_INET6, socket.SOCK_DGRAM) as target:
            target.bind(("::1", 0))
            target.settimeout(2.0)
            with closing(UdpInput(ANY, [f"[::1]:{target.getsockname()[1]}"])) as port:
                sender.sendto(b"x", address_of(port))
                take(port, 1)
                assert target.recv(100) == b"x"

    @pytest.mark.parametrize(
        ("bind", "target"),
        [
            ("127.0.0.1", "127.0.0.1"),
            ("127.0.0.1", "localhost"),
            ("0.0.0.0", "127.0.0.1"),
            ("127.0.0.1", "0.0.0.0"),
        ],
    )
    def test_the_own_port_is_refused_as_a_target(self, bind: str, target: str) -> None:
        with socket.socket(socket.AF_INET, socket.SOCK_DGRAM) as free:
            free.bind(("127.0.0.1", 0))
            number = free.getsockname()[1]
        with pytest.raises(ConfigError, match=r"input\.forward: .* own port"):
            UdpInput(f"{bind}:{number}", [f"{target}:{number}"])
        # and the port is let go of
        UdpInput(f"127.0.0.1:{number}").close()

    def test_the_same_port_of_another_machine_is_none_of_ours(self) -> None:
        with closing(UdpInput("0.0.0.0:0")) as port:
            number = address_of(port)[1]
        # 192.0.2.0/24 is for documentation (RFC 5737): no card of ours has it.
        UdpInput(f"0.0.0.0:{number}", [f"192.0.2.7:{number}"]).close()


class TestSenders:
    def test_a_second_sender_is_ignored_while_the_first_is_alive(
        self, sender: socket.socket, other: socket.socket
    ) -> None:
        with closing(UdpInput(ANY)) as port:
            sender.sendto(b"mine", address_of(port))
            take(port, 1)
            for _ in range(3):
                other.sendto(b"theirs", address_of(port))
            sender.sendto(b"mine again", address_of(port))
            assert [datagram.data for datagram in take(port, 1)] == [b"mine again"]
            assert port.foreign == 3
            host, number = "127.0.0.1", other.getsockname()[1]
            assert port.newest_foreign == f"{host}:{number}"

    def test_it_takes_over_when_the_first_is_silent(
        self, sender: socket.socket, other: socket.socket, monkeypatch: pytest.MonkeyPatch
    ) -> None:
        monkeypatch.setattr(udp, "SENDER_ALIVE_S", 0.04)
        with closing(UdpInput(ANY)) as port:
            sender.sendto(b"mine", address_of(port))
            take(port, 1)
            other.sendto(b"too early", address_of(port))
            assert nothing_more(port)
            time.sleep(0.05)
            other.sendto(b"theirs", address_of(port))
            assert [datagram.data for datagram in take(port, 1)] == [b"theirs"]
            sender.sendto(b"back", address_of(port))
            assert nothing_more(port)

    def test_only_a_datagram_that_makes_sense_takes_the_port(
        self, sender: socket.socket, other: socket.socket
    ) -> None:
        with closing(UdpInput(ANY)) as port:
            for _ in range(3):
                other.sendto(b"junk", address_of(port))
            assert len(take(port, 3, confirm=False)) == 3
            sender.sendto(b"good", address_of(port))
            assert [datagram.data for datagram in take(port, 1)] == [b"good"]
            other.sendto(b"junk", address_of(port))
            assert nothing_more(port)
            assert port.foreign == 1

    def test_only_from_takes_one_host_and_port(
        self, sender: socket.socket, other: socket.socket
    ) -> None:
        sender.bind(("127.0.0.1", 0))
        wanted = f"localhost:{sender.getsockname()[1]}"
        with closing(UdpInput(ANY, only_from=wanted)) as port:
            other.sendto(b"theirs", address_of(port))
            assert nothing_more(port)
            sender.sendto(b"mine", address_of(port))
            assert [datagram.data for datagram in take(port, 1)] == [b"mine"]
            assert port.foreign == 1

    def test_only_from_a_host_takes_any_port_of_it(
        self, sender: socket.socket, other: socket.socket
    ) -> None:
        # All of 127.0.0.0/8 is this machine (RFC 1122), so 127.0.0.2 is another host of ours.
        other.bind(("127.0.0.2", 0))
        with closing(UdpInput(ANY, only_from="127.0.0.1")) as port:
            other.sendto(b"theirs", address_of(port))
            sender.sendto(b"mine", address_of(port))
            assert [datagram.data for datagram in take(port, 1)] == [b"mine"]
            assert port.foreign == 1


class TestAddresses:
    @pytest.mark.parametrize(
        "text",
        [
            "",
            "127.0.0.1",
            ":47800",
            "127.0.0.1:",
            "h:65536",
            "h:-1",
            "h:4.0",
            "h:٣",
            "h:" + "9" * 5000,
        ],
    )
    def test_what_is_no_address_is_refused_by_name(self, text: str) -> None:
        with pytest.raises(ConfigError, match=r"input\.bind: .* is not HOST:PORT"):
            UdpInput(text)

    @pytest.mark.parametrize("host", ["no-such-host.invalid", "a" * 300, "..", "300.1.1.1"])
    def test_an_unknown_host_is_refused_by_name(self, host: str) -> None:
        # .invalid never resolves (RFC 2606).
        with pytest.raises(ConfigError, match=r"input\.bind: host .* is not known"):
            UdpInput(f"{host}:47800")

    @pytest.mark.parametrize("option", ["forward", "only_from"])
    def test_the_faulty_key_is_named(self, option: str) -> None:
        wrong: dict[str, object] = {"forward": ["nowhere"], "only_from": "a b c:1"}
        with pytest.raises(ConfigError, match=rf"input\.{option}: "):
            UdpInput(ANY, **{option: wrong[option]})  # type: ignore[arg-type]

    def test_an_address_of_another_machine_cannot_be_bound(self) -> None:
        with pytest.raises(ConfigError, match=r"192\.0\.2\.7:47800 cannot be bound"):
            UdpInput("192.0.2.7:47800")

    def test_ipv6_is_spoken_in_brackets(self) -> None:
        with closing(UdpInput("[::1]:0")) as port:
            assert port.endpoint.startswith("[::1]:")

    def test_everybody_s_address_is_reached_by_loopback(self) -> None:
        assert reachable("0.0.0.0:5") == "127.0.0.1:5"
        assert reachable("tcp://[::]:5") == "tcp://[::1]:5"
        assert reachable("tcp://127.0.0.1:5") == "tcp://127.0.0.1:5"
