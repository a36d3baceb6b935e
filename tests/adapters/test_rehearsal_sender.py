"""The sender over real sockets: pace, flow control, signals and closed ports."""

from __future__ import annotations

import json
import signal
import socket
import subprocess
import sys
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import closing
from pathlib import Path

import pytest
import zmq

from canticle_adapters.rehearsal import __main__ as command
from canticle_adapters.rehearsal import sender
from canticle_adapters.rehearsal.sender import ClockPacer, Stop
from canticle_adapters.rehearsal.telemetry import Options, Rehearsal

pytestmark = pytest.mark.io
MODULE = [sys.executable, "-m", "canticle_adapters.rehearsal"]


class FakeDaemon(threading.Thread):
    """Receives datagrams and publishes an estimate every so many, as slowly as told."""

    def __init__(self, every: int = 1, nap_s: float = 0.0, mute: bool = False) -> None:
        super().__init__(daemon=True)
        self.every, self.nap_s, self.mute = every, nap_s, mute
        self.times: list[float] = []
        self.datagrams: list[bytes] = []
        self.done = threading.Event()
        self.port = socket.socket(socket.AF_INET, socket.SOCK_DGRAM)
        self.port.bind(("127.0.0.1", 0))
        self.port.settimeout(0.02)
        self.address = f"127.0.0.1:{self.port.getsockname()[1]}"
        self.context = zmq.Context()
        self.bus = self.context.socket(zmq.PUB)
        self.endpoint = f"tcp://127.0.0.1:{self.bus.bind_to_random_port('tcp://127.0.0.1')}"

    def run(self) -> None:
        while not self.done.is_set():
            try:
                datagram = self.port.recv(65536)
            except TimeoutError:
                continue
            self.datagrams.append(datagram)
            self.times.append(json.loads(datagram)["time_s"])
            if self.nap_s:
                time.sleep(self.nap_s)
            if not self.mute and len(self.times) % self.every == 0:
                answer = json.dumps({"time_s": self.times[-1], "lap": 1, "demand": None})
                self.bus.send(b"estimate " + answer.encode())

    def close(self) -> None:
        self.done.set()
        self.join()
        self.port.close()
        self.context.destroy(linger=0)


@pytest.fixture
def daemon(request: pytest.FixtureRequest) -> Iterator[FakeDaemon]:
    fake = FakeDaemon(**getattr(request, "param", {}))
    fake.start()
    with closing(fake):
        yield fake


def run(*arguments: str, timeout: float = 30.0) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [*MODULE, *arguments], capture_output=True, text=True, timeout=timeout, check=False
    )


def expected_times(laps: int) -> list[float]:
    frames = Rehearsal(Options(laps=laps, seed=3)).frames()
    return [truth["time_s"] for _, truth in frames]


def test_pace_max_loses_nothing(daemon: FakeDaemon, tmp_path: Path) -> None:
    truth = tmp_path / "truth.jsonl"
    began = time.perf_counter()
    result = run(
        *("--to", daemon.address, "--bus", daemon.endpoint, "--pace", "max"),
        *("--laps", "1", "--seed", "3", "--truth", str(truth)),
    )
    assert (result.returncode, result.stdout, result.stderr) == (0, "", "")
    assert daemon.times == expected_times(1)
    assert daemon.times[-1] / (time.perf_counter() - began) > 5.0
    records = [json.loads(line) for line in truth.read_text().splitlines()]
    frames = [record for record in records if record["kind"] == "frame"]
    assert [record["time_s"] for record in frames] == daemon.times
    turn_ins = [record for record in records if record["kind"] == "turn_in"]
    assert [record["corner"] for record in turn_ins] == ["Turn 1", "Turn 3"]
    assert frames[-1]["lap"] == 2
    assert frames[-1]["station_m"] == pytest.approx(120.0, abs=1.5)


@pytest.mark.parametrize("daemon", [{"every": 75}], indirect=True)
def test_seldom_estimates_do_not_stall_it(daemon: FakeDaemon) -> None:
    """A bus with a lowered estimate rate answers less than once a window."""
    stop = Stop()
    drive = Rehearsal(Options(laps=None, seed=3))
    watcher = threading.Thread(
        target=lambda: wait_for(lambda: len(daemon.times) > 300) and stop.set()
    )
    watcher.start()
    host, port = daemon.address.split(":")
    assert sender.rehearse(drive, (host, int(port)), None, daemon.endpoint, stop) == 0
    watcher.join()
    assert daemon.times[:300] == expected_times(1)[:300]


def wait_for(condition: Callable[[], object], limit_s: float = 20.0) -> bool:
    end = time.perf_counter() + limit_s
    while not condition() and time.perf_counter() < end:
        time.sleep(0.01)
    return True


@pytest.mark.parametrize("daemon", [{"nap_s": 0.002}], indirect=True)
def test_a_slow_daemon_sets_the_pace(daemon: FakeDaemon) -> None:
    stop = Stop()
    drive = Rehearsal(Options(laps=None, seed=3))
    timer = threading.Timer(1.0, stop.set)
    timer.start()
    host, port = daemon.address.split(":")
    most = []
    pacer = sender.BusPacer(daemon.endpoint)
    with pacer:
        original = pacer.wait

        def wait(time_s: float, stop: Stop) -> None:
            original(time_s, stop)
            most.append(len(pacer._sent))

        pacer.wait = wait  # type: ignore[method-assign]
        sender.send(drive, (host, int(port)), pacer, stop)
    timer.join()
    assert max(most) <= sender.IN_FLIGHT + 8  # and a probe each time the answer took too long
    assert wait_for(lambda: len(daemon.times) >= len(most) - 1)
    assert daemon.times == expected_times(1)[: len(daemon.times)]


@pytest.mark.parametrize("daemon", [{"mute": True}], indirect=True)
def test_a_mute_bus_ends_it_with_one_line(
    daemon: FakeDaemon, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.setattr(sender, "SILENCE_S", 0.3)
    argv = ["--to", daemon.address, "--bus", daemon.endpoint, "--pace", "max"]
    handlers = {name: signal.getsignal(name) for name in (signal.SIGINT, signal.SIGTERM)}
    try:
        assert command.main(argv) == 1
    finally:
        for name, handler in handlers.items():
            signal.signal(name, handler)
    complaint = capsys.readouterr().err
    assert complaint.count("\n") == 1
    assert daemon.endpoint in complaint


def test_closed_port_does_not_stop_it() -> None:
    with socket.socket(socket.AF_INET, socket.SOCK_DGRAM) as port:
        port.bind(("127.0.0.1", 0))
        free = port.getsockname()[1]
    result = run("--to", f"127.0.0.1:{free}", "--pace", "max", "--laps", "1")
    assert (result.returncode, result.stderr) == (0, "")


@pytest.mark.parametrize("name", ["SIGINT", "SIGTERM"])
@pytest.mark.parametrize("pace", ["1", "max"])
def test_signals_end_it_quietly(daemon: FakeDaemon, name: str, pace: str) -> None:
    arguments = ["--to", daemon.address, "--bus", daemon.endpoint, "--pace", pace]
    with subprocess.Popen([*MODULE, *arguments], stderr=subprocess.PIPE) as process:
        wait_for(lambda: daemon.times)
        asked = time.perf_counter()
        process.send_signal(getattr(signal, name))
        _, complaint = process.communicate(timeout=5)
        assert time.perf_counter() - asked < 0.5
        assert (process.returncode, complaint) == (0, b"")


def test_ends_with_its_parent(daemon: FakeDaemon) -> None:
    arguments = ["--to", daemon.address, "--with-parent"]
    with subprocess.Popen([*MODULE, *arguments], stdin=subprocess.PIPE) as process:
        wait_for(lambda: daemon.times)
        assert process.stdin is not None
        process.stdin.close()
        assert process.wait(timeout=2) == 0


def test_clock_pacer_keeps_absolute_deadlines() -> None:
    now = [100.0]
    pacer = ClockPacer(2.0, clock=lambda: now[0])
    pacer.wait(10.0, Stop())
    now[0] = 101.0  # late by half a second at stream time 11
    pacer.wait(11.0, Stop())
    began = time.perf_counter()
    stop = Stop()
    threading.Timer(0.03, stop.set).start()
    pacer.wait(13.0, stop)  # due at 101.5 of this clock, which stands still
    assert time.perf_counter() - began >= 0.03


@pytest.mark.parametrize(
    "arguments",
    [
        ["--to", "nowhere"],
        ["--to", "127.0.0.1:0"],
        ["--to", "127.0.0.1:1", "--pace", "0"],
        ["--to", "127.0.0.1:1", "--pace", "nan"],
        ["--to", "127.0.0.1:1", "--rate", "5"],
        ["--to", "127.0.0.1:1", "--laps", "0"],
    ],
)
def test_wrong_requests_exit_with_2(
    arguments: list[str], capsys: pytest.CaptureFixture[str]
) -> None:
    with pytest.raises(SystemExit) as caught:
        command.main(arguments)
    assert caught.value.code == 2
    assert "Traceback" not in capsys.readouterr().err


def test_unwritable_truth_is_one_line(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    drive = Rehearsal(Options(laps=1))
    truth = tmp_path / "no" / "truth.jsonl"
    assert sender.rehearse(drive, ("127.0.0.1", 9), 1.0, None, Stop(), truth) == 1
    assert capsys.readouterr().err.count("\n") == 1


def test_no_destination_is_a_usage_fault(capsys: pytest.CaptureFixture[str]) -> None:
    assert command.main([]) == 2
    assert "--to" in capsys.readouterr().err
