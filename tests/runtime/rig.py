"""Runs the `canticle` command as its users do: a process, real sockets, a folder of its own."""

from __future__ import annotations

import contextlib
import json
import os
import select
import signal
import socket
import subprocess
import sys
import time
from collections.abc import Callable, Iterator, Mapping
from pathlib import Path
from types import TracebackType
from typing import Any

import msgspec
import zmq
from streams import Drive, oval_file

from canticle_daemon.frame import Frame
from canticle_daemon.track.profile import Track

COMMAND = (
    sys.executable, "-W", "error", "-c",
    "from canticle_daemon.cli.main import entry_point; entry_point()",
)  # fmt: skip
PATIENCE_S = 30.0
FREE_PORTS = ("--bind", "127.0.0.1:0", "--publish", "tcp://127.0.0.1:0")
SILENT = ("--no-voice", "--no-overlay")


def until(condition: Callable[[], Any], what: str, seconds: float = PATIENCE_S) -> Any:
    """Wait for a condition that holds soon; return what it gave."""
    end = time.monotonic() + seconds
    while not (found := condition()):
        assert time.monotonic() < end, f"waited {seconds} s for {what}"
        time.sleep(0.01)
    return found


def environment(home: Path, **changes: str | None) -> dict[str, str]:
    """The test's environment with a home of its own and no display or sound card."""
    kept = {
        key: value
        for key, value in os.environ.items()
        if key not in ("DISPLAY", "WAYLAND_DISPLAY", "PYTHONIOENCODING")
    }
    kept |= {"HOME": str(home), "XDG_DATA_HOME": str(home), "XDG_CACHE_HOME": str(home)}
    kept |= {"SDL_AUDIODRIVER": "dummy"}
    for key, value in changes.items():
        kept.pop(key, None)
        if value is not None:
            kept[key] = value
    return kept


def events_of(session: Path) -> list[dict[str, Any]]:
    """Every event of a session; a line that is not whole fails."""
    path = session / "events.jsonl"
    if not path.exists():
        return []
    return [json.loads(line) for line in path.read_text("utf-8").splitlines()]


def types_of(session: Path) -> list[str]:
    return [event["type"] for event in events_of(session)]


class Canticle:
    """A running command; what it prints goes to files, so that it never waits for us."""

    def __init__(
        self,
        home: Path,
        *arguments: str | Path,
        env: Mapping[str, str | None] | None = None,
        **popen: Any,
    ) -> None:
        self._files = contextlib.ExitStack()
        self.out, self.err = home / "stdout.txt", home / "stderr.txt"
        streams: dict[str, Any] = {
            "stdin": subprocess.DEVNULL,
            "stdout": self._files.enter_context(self.out.open("wb")),
            "stderr": self._files.enter_context(self.err.open("wb")),
        }
        self.process = subprocess.Popen(
            [*COMMAND, *map(str, arguments)],
            env=environment(home, **(env or {})),
            **(streams | popen),
        )

    def __enter__(self) -> Canticle:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.process.kill()
        self.process.wait()
        for stream in (self.process.stdin, self.process.stdout, self.process.stderr):
            if stream is not None:
                stream.close()
        self._files.close()

    def end(self, number: int = signal.SIGTERM, within_s: float = 10.0) -> tuple[int, float]:
        """Send a signal; return the exit status and how long the end took."""
        begun = time.monotonic()
        self.process.send_signal(number)
        status = self.process.wait(within_s)
        return status, time.monotonic() - begun

    def status(self, within_s: float = PATIENCE_S) -> int:
        """Wait for the end by itself."""
        return self.process.wait(within_s)

    @property
    def printed(self) -> str:
        return self.out.read_text("utf-8")

    @property
    def complaints(self) -> str:
        return self.err.read_text("utf-8")


NURSERY = """
import json, os, sys
from canticle_daemon.cli.main import entry_point
for line in sys.stdin:
    request = json.loads(line)
    child = os.fork()
    if child == 0:
        for number, path in ((0, os.devnull), (1, request["out"]), (2, request["err"])):
            os.dup2(os.open(path, os.O_RDWR | os.O_CREAT | os.O_TRUNC), number)
        os.environ.clear()
        os.environ.update(request["env"])
        sys.argv = ["canticle", *request["arguments"]]
        entry_point()
    print(os.waitstatus_to_exitcode(os.waitpid(child, 0)[1]), flush=True)
"""


class Nursery:
    """A process that has imported the command and forks for each use of it.

    What a use sees is a process of its own with real streams, without a second of imports.
    """

    def __init__(self) -> None:
        self._process = subprocess.Popen(
            [sys.executable, "-W", "error", "-c", NURSERY],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
        )

    def __enter__(self) -> Nursery:
        return self

    def __exit__(self, *_: object) -> None:
        self._process.kill()
        self._process.communicate()

    def run(self, home: Path, *arguments: str | Path) -> tuple[int, str, str]:
        """Run a command that ends by itself; return status, standard output and error."""
        out, err = home / "stdout.txt", home / "stderr.txt"
        request = {
            "arguments": [*map(str, arguments)], "out": str(out), "err": str(err),
            "env": environment(home),
        }  # fmt: skip
        assert self._process.stdin is not None
        assert self._process.stdout is not None
        self._process.stdin.write(json.dumps(request).encode() + b"\n")
        self._process.stdin.flush()
        assert select.select([self._process.stdout], [], [], PATIENCE_S)[0], "it does not end"
        status = int(self._process.stdout.readline())
        return status, out.read_text("utf-8"), err.read_text("utf-8")


class Live(Canticle):
    """`canticle run` with a session of its own, ready, on free ports."""

    def __init__(
        self,
        home: Path,
        *options: str | Path,
        env: Mapping[str, str | None] | None = None,
        silent: bool = True,
        **popen: Any,
    ) -> None:
        self.session = home / "session"
        quiet = SILENT if silent else ()
        super().__init__(
            home, "run", *FREE_PORTS, *quiet, "--session", self.session, *options, env=env, **popen
        )
        started = self.wait_for("session_started")
        host, port = started["bind"].rsplit(":", 1)
        self.address = (host, int(port))
        self.publish: str = started["publish"]

    def wait_for(self, kind: str, seconds: float = PATIENCE_S) -> dict[str, Any]:
        """Wait until an event of that type is in the log."""

        def look() -> dict[str, Any] | None:
            assert self.process.poll() is None, self.err.read_text()
            found = [event for event in whole_events(self.session) if event["type"] == kind]
            return found[0] if found else None

        return until(look, kind, seconds)


def whole_events(session: Path) -> list[dict[str, Any]]:
    """The events of a log that is still being written."""
    path = session / "events.jsonl"
    text = path.read_bytes() if path.exists() else b""
    return [json.loads(line) for line in text.splitlines(keepends=True) if line.endswith(b"\n")]


class Ear:
    """A subscriber that is sure to be connected before it returns from `listen`."""

    def __init__(self, endpoint: str, *topics: str, conflate: bool = False) -> None:
        self._context = zmq.Context()
        self._socket = self._context.socket(zmq.SUB)
        self._socket.linger = 0
        self._socket.rcvhwm = 0
        if conflate:
            self._socket.conflate = True
        for topic in topics:
            self._socket.subscribe(topic + " ")
        self._socket.connect(endpoint)
        self._at = self._wait_connected(endpoint)

    def _wait_connected(self, endpoint: str) -> float:
        """A second socket connected later hears the status of each second: so do we by then."""
        with self._context.socket(zmq.SUB) as probe:
            probe.linger = 0
            probe.subscribe("status ")
            probe.connect(endpoint)
            assert probe.poll(int(PATIENCE_S * 1000)), "no status on the bus"
        return time.monotonic()

    def __enter__(self) -> Ear:
        return self

    def __exit__(self, *_: object) -> None:
        self._context.destroy()

    def hear(self, seconds: float = PATIENCE_S) -> tuple[str, dict[str, Any]]:
        """The next message: topic and payload."""
        assert self._socket.poll(int(seconds * 1000)), "nothing on the bus"
        topic, payload = self._socket.recv().split(b" ", 1)
        return topic.decode(), json.loads(payload)

    def hear_until(self, topic: str, seconds: float = PATIENCE_S) -> list[tuple[str, Any]]:
        """Every message up to the first of a topic."""
        heard = [self.hear(seconds)]
        while heard[-1][0] != topic:
            heard.append(self.hear(seconds))
        return heard

    def rest(self, quiet_s: float = 0.5) -> Iterator[tuple[str, dict[str, Any]]]:
        """Every message until it has been quiet for a while."""
        while self._socket.poll(int(quiet_s * 1000)):
            topic, payload = self._socket.recv().split(b" ", 1)
            yield topic.decode(), json.loads(payload)


def track_file(folder: Path) -> Path:
    """Write the ruler's oval as a track file."""
    made = oval_file()
    lines = [f'name = "{made.name}"', f"length_m = {made.length_m}", "profile = ["]
    lines += [f"  [{s}, {bank}, {curve}]," for s, bank, curve in made.profile]
    lines.append("]")
    for corner in made.corner:
        lines += ["[[corner]]", f'name = "{corner.name}"']
        for key in ("transition_start_m", "transition_end_m", "apex_m", "exit_m"):
            lines.append(f"{key} = {getattr(corner, key)}")
    path = folder / "track.toml"
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")
    return path


def drive(laps: int = 3, **options: Any) -> list[Frame]:
    """Frames of the ruler's car on that oval."""
    return Drive(Track(oval_file()), laps=laps, **options).frames()


def datagrams(frames: list[Frame]) -> list[bytes]:
    return [msgspec.json.encode(frame) for frame in frames]


def send(
    stream: list[bytes],
    address: tuple[str, int],
    rate_hz: float,
    sender: socket.socket | None = None,
) -> None:
    """Send datagrams at a rate, catching up after a pause of ours."""
    with contextlib.ExitStack() as stack:
        if sender is None:
            sender = stack.enter_context(socket.socket(socket.AF_INET, socket.SOCK_DGRAM))
        begun = time.perf_counter()
        for count, datagram in enumerate(stream):
            ahead = begun + count / rate_hz - time.perf_counter()
            if ahead > 0.001:
                time.sleep(ahead)
            sender.sendto(datagram, address)
