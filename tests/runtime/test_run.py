"""`canticle run` as its users see it: a process beside a sender on the same machine."""

from __future__ import annotations

import itertools
import json
import os
import random
import signal
import socket
import time
from collections.abc import Iterator
from pathlib import Path

import msgspec
import psutil
import pytest
from runtime.rig import (
    FREE_PORTS,
    SILENT,
    Canticle,
    Ear,
    Live,
    datagrams,
    drive,
    events_of,
    send,
    track_file,
    types_of,
    until,
    whole_events,
)

from canticle_daemon.messages import TOPICS

pytestmark = pytest.mark.io


@pytest.fixture
def sender() -> Iterator[socket.socket]:
    with socket.socket(socket.AF_INET, socket.SOCK_DGRAM) as made:
        yield made


def frames(count: int, start_s: float = 100.0, **changes: object) -> list[bytes]:
    """A car on a straight at 60 Hz."""
    made = []
    for number in range(count):
        time_s = start_s + number / 60.0
        row: dict[str, object] = {
            "time_s": time_s, "speed_mps": 50.0, "yaw_rate_radps": 0.0, "accel_y_mps2": 0.0,
            "accel_x_mps2": 0.2, "accel_z_mps2": 9.81, "station_m": 900.0 + 50.0 * number / 60.0,
        }  # fmt: skip
        made.append(msgspec.json.encode(row | changes))
    return made


class TestReady:
    def test_the_session_opens_at_once_with_the_endpoints_in_use(self, tmp_path: Path) -> None:
        with Live(tmp_path) as live:
            (started,) = events_of(live.session)
            assert started["type"] == "session_started"
            assert live.address[0] == "127.0.0.1"
            assert live.address[1] > 0
            assert live.publish.startswith("tcp://127.0.0.1:")
            assert not live.publish.endswith(":0")
            facts = json.loads((live.session / "session.json").read_text())
            assert (facts["bind"], facts["publish"]) == (started["bind"], started["publish"])
            with pytest.raises(OSError, match="in use"), socket.socket(type=socket.SOCK_DGRAM) as s:
                s.bind(live.address)
            with socket.create_connection(("127.0.0.1", int(live.publish.rsplit(":")[-1]))):
                pass

    def test_without_a_session_it_waits_for_a_first_good_datagram(
        self, tmp_path: Path, sender: socket.socket
    ) -> None:
        parent = tmp_path / "sessions"
        with Canticle(tmp_path, "run", *FREE_PORTS, *SILENT, "--sessions", parent) as run:
            until(lambda: "listening on" in run.printed, "listening")
            line = next(at for at in run.printed.splitlines() if "listening on" in at)
            host, port = line.split()[2].rstrip(",").rsplit(":", 1)
            for _ in range(3):
                sender.sendto(b"junk", (host, int(port)))
            until(lambda: "bad datagram" in run.printed, "the report")
            assert list(parent.iterdir()) == []
            send(frames(10), (host, int(port)), 500, sender)
            (session,) = until(lambda: list(parent.iterdir()), "a session")
            until(lambda: types_of(session) == ["session_started"], "its start")
            assert run.end()[0] == 0
            assert types_of(session) == ["session_started", "session_ended"]
            assert 100.0 <= events_of(session)[0]["time_s"] <= 100.0 + 9 / 60.0
            assert run.complaints == ""

    def test_another_car_or_track_opens_another_session(
        self, tmp_path: Path, sender: socket.socket
    ) -> None:
        parent = tmp_path / "sessions"
        with Canticle(tmp_path, "run", *FREE_PORTS, *SILENT, "--sessions", parent) as run:
            until(lambda: "listening on" in run.printed, "listening")
            line = next(at for at in run.printed.splitlines() if "listening on" in at)
            address = ("127.0.0.1", int(line.split()[2].rstrip(",").rsplit(":", 1)[1]))
            send(frames(10, car_name="one", track_name="here"), address, 500, sender)
            until(lambda: len(list(parent.iterdir())) == 1, "a session")
            send(frames(10, 200.0, car_name="two", track_name="here"), address, 500, sender)
            until(lambda: len(list(parent.iterdir())) == 2, "a second one")
            assert run.end()[0] == 0
            ends = [events_of(session)[-1] for session in sorted(parent.iterdir())]
            assert [end["type"] for end in ends] == ["session_ended"] * 2
            assert [end["reason"] for end in ends] == ["the car or the track changed", "SIGTERM"]


class TestEstimates:
    def test_one_estimate_and_one_frame_a_datagram_stamped_by_this_machine_s_clock(
        self, tmp_path: Path, sender: socket.socket
    ) -> None:
        with Live(tmp_path) as live, Ear(live.publish, "estimate", "frame") as ear:
            stream = frames(120)
            # time.perf_counter counts from the machine's start on Linux (CLOCK_MONOTONIC), so
            # two processes may compare it.
            before = time.perf_counter_ns()
            send(stream, live.address, 400, sender)
            after = time.perf_counter_ns()
            heard = list(ear.rest())
            estimates = [payload for topic, payload in heard if topic == "estimate"]
            sent = [msgspec.json.decode(datagram)["time_s"] for datagram in stream]
            assert [estimate["time_s"] for estimate in estimates] == sent
            assert [payload["time_s"] for topic, payload in heard if topic == "frame"] == sent
            stamps = [estimate["received_ns"] for estimate in estimates]
            assert stamps == sorted(stamps)
            assert before - 1e6 < stamps[0] < stamps[-1] < after + 50e6

    def test_every_field_of_the_contract_is_there(
        self, tmp_path: Path, sender: socket.socket
    ) -> None:
        contract = {
            "time_s", "lap", "station_m", "bank_rad", "demand", "side_demand", "utilization",
            "front_utilization", "rear_utilization", "received_ns",
        }  # fmt: skip
        fours = {"load_n", "force_n", "sliding_power_w", "energy_j"}
        with Live(tmp_path) as live, Ear(live.publish, "estimate") as ear:
            send(frames(3), live.address, 100, sender)
            _, estimate = ear.hear()
            assert contract | fours <= estimate.keys()
            assert all(len(estimate[key]) == 4 for key in fours)

    def test_a_conflating_subscriber_has_the_newest(
        self, tmp_path: Path, sender: socket.socket
    ) -> None:
        with Live(tmp_path) as live, Ear(live.publish, "estimate", conflate=True) as ear:
            send(frames(200), live.address, 1000, sender)
            until(lambda: _frames_seen(live) == 200, "all frames")
            (only,) = ear.rest(0.2)
            assert only[1]["time_s"] == pytest.approx(100.0 + 199 / 60.0)

    @pytest.mark.parametrize(("rate", "expected"), [(20.0, 60), (60.0, 180), (1000.0, 180)])
    def test_estimate_hz_thins_by_the_stream_s_clock(
        self, tmp_path: Path, sender: socket.socket, rate: float, expected: int
    ) -> None:
        config = tmp_path / "config.toml"
        config.write_text(f"[bus]\nestimate_hz = {rate}\n")
        with (
            Live(tmp_path, "--config", config) as live,
            Ear(live.publish, "estimate") as ear,
        ):
            send(frames(180), live.address, 600, sender)
            assert abs(len(list(ear.rest())) - expected) <= 1

    def test_a_busy_subscriber_that_never_reads_holds_nobody_up(
        self, tmp_path: Path, sender: socket.socket
    ) -> None:
        with Live(tmp_path) as live, Ear(live.publish, "estimate", "frame"):
            send(frames(3000), live.address, 3000, sender)
            until(lambda: _frames_seen(live) == 3000, "all frames")
            status, seconds = live.end()
            assert (status, seconds < 2.0) == (0, True)


def _frames_seen(live: Live) -> int:
    with Ear(live.publish, "status") as ear:
        return int(ear.hear()[1]["frames"])


class TestEvents:
    def test_what_is_published_is_in_the_log_before(self, tmp_path: Path) -> None:
        track = track_file(tmp_path)
        with Live(tmp_path, "--track", track) as live, Ear(live.publish, *_events()) as ear:
            with socket.socket(socket.AF_INET, socket.SOCK_DGRAM) as sender:
                stream = datagrams(drive(2))
                send(stream, live.address, 2000, sender)
            heard = []
            for topic, payload in ear.rest():
                assert payload in whole_events(live.session), topic
                heard.append(topic)
            assert {"turn_in", "entry", "corner", "lap_completed"} <= set(heard)
            assert heard == types_of(live.session)[1:]

    def test_the_whole_lap_is_told_in_the_terminal(self, tmp_path: Path) -> None:
        track = track_file(tmp_path)
        with Live(tmp_path, "--track", track) as live:
            send(datagrams(drive(2)), live.address, 2000)
            live.wait_for("lap_completed")
            until(lambda: "lap   1" in live.printed, "the line")
            line = next(at for at in live.printed.splitlines() if at.startswith("lap"))
            assert "33.333 s" in line  # 2,000 m at 60 m/s
            assert "North: " in line
            assert "South: " in line

    def test_killed_it_leaves_every_published_event_and_whole_lines(self, tmp_path: Path) -> None:
        track = track_file(tmp_path)
        with Live(tmp_path, "--track", track) as live, Ear(live.publish, *_events()) as ear:
            with socket.socket(socket.AF_INET, socket.SOCK_DGRAM) as sender:
                for datagram in datagrams(drive(4)):
                    sender.sendto(datagram, live.address)
                    if len(whole_events(live.session)) > 6:
                        break
                    time.sleep(0.0002)
            live.process.kill()
            live.process.wait()
            logged = events_of(live.session)
            assert len(logged) > 6
            for _, payload in ear.rest(0.2):
                assert payload in logged
            text = (live.session / "events.jsonl").read_bytes()
            assert text.endswith(b"\n")


def _events() -> list[str]:
    return [topic.name for topic in TOPICS.values() if topic.in_log]


class TestSilence:
    def test_a_lost_stream_is_told_and_its_return_too(
        self, tmp_path: Path, sender: socket.socket
    ) -> None:
        with Live(tmp_path) as live:
            stream = frames(400)
            send(stream[:60], live.address, 300, sender)
            lost = live.wait_for("stream_lost")
            assert lost["time_s"] == pytest.approx(100.0 + 59 / 60.0)
            assert 2.0 <= lost["silence_s"] < 3.0
            # What goes on in the stream's clock as if nothing had been is a pause.
            send(stream[60:120], live.address, 300, sender)
            resumed = live.wait_for("stream_resumed")
            assert resumed["silence_s"] > 2.0
            assert (lost["reason"], resumed["reason"]) == ("pause", "pause")
            assert live.wait_for("discontinuity")["reason"] == "pause"
            assert types_of(live.session).count("stream_lost") == 1

    @pytest.mark.parametrize(("step_s", "reason"), [(30.0, "gap"), (-30.0, "rewind")])
    def test_a_stream_that_resumes_elsewhere_says_how(
        self, tmp_path: Path, sender: socket.socket, step_s: float, reason: str
    ) -> None:
        with Live(tmp_path) as live:
            send(frames(60), live.address, 300, sender)
            live.wait_for("stream_lost")
            send(frames(5, start_s=101.0 + step_s), live.address, 300, sender)
            assert live.wait_for("stream_resumed")["reason"] == reason
            assert live.wait_for("discontinuity")["reason"] == reason

    def test_a_clock_that_stands_still_is_a_pause(
        self, tmp_path: Path, sender: socket.socket
    ) -> None:
        with Live(tmp_path) as live:
            send(frames(30), live.address, 300, sender)
            send([frames(30)[-1]] * 100, live.address, 100, sender)
            pause = live.wait_for("discontinuity")
            assert pause["reason"] == "pause"
            send(frames(60)[30:], live.address, 300, sender)
            assert live.end()[0] == 0
            assert types_of(live.session) == ["session_started", "discontinuity", "session_ended"]


class TestBadInput:
    def test_positions_that_no_origin_places_are_told_once(
        self, tmp_path: Path, sender: socket.socket
    ) -> None:
        row = {
            "speed_mps": 50.0, "yaw_rate_radps": 0.0, "accel_y_mps2": 0.0, "pos_y_m": 3.0,
            "accel_x_mps2": 0.2, "accel_z_mps2": 9.81,
        }  # fmt: skip
        stream = [
            msgspec.json.encode(row | {"time_s": n / 60.0, "pos_x_m": n * 50.0 / 60.0})
            for n in range(150)
        ]
        track = track_file(tmp_path)
        with Live(tmp_path, "--track", track) as live, Ear(live.publish, "estimate") as ear:
            send(stream, live.address, 60, sender)
            estimates = [estimate for _, estimate in ear.rest()]
            assert live.end()[0] == 0
            assert live.printed.count("the track file has no origin") == 1
        assert len(estimates) == 150
        assert {estimate["station_m"] for estimate in estimates} == {None}
        assert all(estimate["demand"] > 0.0 for estimate in estimates)

    def test_nothing_a_stranger_sends_stops_it(self, tmp_path: Path, sender: socket.socket) -> None:
        rng = random.Random(5)
        good = frames(20)
        bad = [rng.randbytes(rng.randrange(1, 1500)) for _ in range(40)]
        bad += [b"", rng.randbytes(65_507), b"{" * 30_000, b"[" * 30_000, b'{"time_s": 1e999}']
        bad += [good[0][:cut] for cut in range(1, len(good[0]), 10)]
        bad += [good[0].replace(b"50.0", word) for word in (b"NaN", b"null", b'"x"', b"[]")]
        with Live(tmp_path) as live, Ear(live.publish, "estimate") as ear:
            for one, other in zip(itertools.cycle(good), bad, strict=False):
                sender.sendto(other, live.address)
                if one is good[0]:
                    send(good, live.address, 1000, sender)
            send(frames(5, 200.0), live.address, 100, sender)
            heard = list(ear.rest())
            assert heard[-1][1]["time_s"] == pytest.approx(200.0 + 4 / 60.0)
            assert live.end()[0] == 0
            facts = json.loads((live.session / "session.json").read_text())
            assert facts["bad_datagrams"] == len(bad)
            assert live.complaints == ""

    def test_finite_but_absurd_numbers_pass_through_in_silence(
        self, tmp_path: Path, sender: socket.socket
    ) -> None:
        keys = ("speed_mps", "yaw_rate_radps", "accel_y_mps2", "accel_x_mps2", "accel_z_mps2",
                "station_m", "time_s", "lap")  # fmt: skip
        huge = [
            datagram
            for key in keys
            for value in (1e308, -1e308, 1e-308, 9e15)
            for datagram in frames(2, **{key: value})
        ]
        with Live(tmp_path, "--track", track_file(tmp_path)) as live:
            send(huge, live.address, 500, sender)
            send(frames(5), live.address, 100, sender)
            until(lambda: _frames_seen(live) > len(huge) / 2, "most of the frames")
            assert live.end()[0] == 0
            assert live.complaints == ""

    def test_a_second_sender_is_ignored_and_told_once(
        self, tmp_path: Path, sender: socket.socket
    ) -> None:
        with (
            Live(tmp_path) as live,
            Ear(live.publish, "estimate", "status") as ear,
            socket.socket(socket.AF_INET, socket.SOCK_DGRAM) as other,
        ):
            mine, theirs = frames(250), frames(250, 5000.0)
            for one, two in zip(mine, theirs, strict=True):
                sender.sendto(one, live.address)
                time.sleep(0.005)
                other.sendto(two, live.address)
                time.sleep(0.005)
            heard = list(itertools.takewhile(lambda item: not _complete(item), ear.rest(3.0)))
            times = [payload["time_s"] for topic, payload in heard if topic == "estimate"]
            assert len(times) == 250
            assert max(times) < 1000.0
            assert live.end()[0] == 0
            assert live.printed.count("a second sender") == 1
            facts = json.loads((live.session / "session.json").read_text())
            assert facts["foreign"] == 250

    def test_only_from_is_told_as_such(self, tmp_path: Path, sender: socket.socket) -> None:
        config = tmp_path / "config.toml"
        config.write_text('[input]\nonly_from = "127.0.0.2"\n')
        with Live(tmp_path, "--config", config) as live:
            send(frames(3), live.address, 100, sender)
            until(lambda: "is ignored (only_from is 127.0.0.2:0)" in live.printed, "the report")


def _complete(item: tuple[str, dict[str, object]]) -> bool:
    return item[0] == "status" and item[1]["foreign"] == 250


class TestEnd:
    @pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGINT, signal.SIGHUP])
    def test_an_ask_to_end_ends_it_cleanly(
        self, tmp_path: Path, sender: socket.socket, number: signal.Signals
    ) -> None:
        with Live(tmp_path) as live:
            send(frames(30), live.address, 300, sender)
            status, seconds = live.end(number)
            assert status == 0
            assert seconds < 2.0
            last = events_of(live.session)[-1]
            assert last["type"] == "session_ended"
            assert last["reason"] == number.name
            assert last["bind"] == "127.0.0.1:" + str(live.address[1])
            assert live.complaints == ""
            facts = json.loads((live.session / "session.json").read_text())
            assert facts["frames"] == 30

    def test_a_second_ask_changes_nothing(self, tmp_path: Path) -> None:
        with Live(tmp_path) as live:
            live.process.send_signal(signal.SIGINT)
            live.process.send_signal(signal.SIGTERM)
            assert live.status(5.0) == 0
            assert types_of(live.session)[-1] == "session_ended"

    def test_in_the_middle_of_a_flood_too(self, tmp_path: Path, sender: socket.socket) -> None:
        with Live(tmp_path) as live:
            for datagram in frames(5000):
                sender.sendto(datagram, live.address)
            status, seconds = live.end()
            assert status == 0
            assert seconds < 2.0
            assert types_of(live.session)[-1] == "session_ended"

    @pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGINT])
    def test_with_overlay_and_voice(self, tmp_path: Path, number: signal.Signals) -> None:
        with Live(tmp_path, silent=False, env={"SDL_VIDEODRIVER": "dummy"}) as live:
            with Ear(live.publish, "status") as ear:
                ready = {"voice": "ready", "overlay": "ready"}
                while not ready.items() <= ear.hear()[1].items():
                    pass
            children = psutil.Process(live.process.pid).children(recursive=True)
            assert len(children) >= 2
            status, seconds = live.end(number)
            assert status == 0
            assert seconds < 2.0
            assert types_of(live.session)[-1] == "session_ended"
            assert live.complaints == ""
            _, alive = psutil.wait_procs(children, 3.0)
            assert alive == []

    def test_with_children_that_hang(self, tmp_path: Path) -> None:
        with Live(tmp_path, silent=False, env={"SDL_VIDEODRIVER": "dummy"}) as live:
            with Ear(live.publish, "status") as ear:
                while ear.hear()[1]["overlay"] != "ready":
                    pass
            children = psutil.Process(live.process.pid).children()
            for child in children:
                child.suspend()
            status, seconds = live.end()
            assert status == 0
            assert seconds < 2.0
            assert types_of(live.session)[-1] == "session_ended"

    def test_killed_it_takes_overlay_and_voice_along(self, tmp_path: Path) -> None:
        with Live(tmp_path, silent=False, env={"SDL_VIDEODRIVER": "dummy"}) as live:
            with Ear(live.publish, "status") as ear:
                while ear.hear()[1]["overlay"] != "ready":
                    pass
            children = psutil.Process(live.process.pid).children(recursive=True)
            live.process.kill()
            _, alive = psutil.wait_procs(children, 5.0)
            assert alive == []


class TestNoScreenNoSound:
    def test_no_display_is_said_once_and_the_rest_goes_on(
        self, tmp_path: Path, sender: socket.socket
    ) -> None:
        with (
            Live(tmp_path, "--no-voice", silent=False, env={"SDL_VIDEODRIVER": None}) as live,
            Ear(live.publish, "status", "estimate") as ear,
        ):
            until(lambda: "no display" in live.printed, "the line")
            heard = ear.hear()
            while heard[1].get("overlay") != "unavailable":
                heard = ear.hear()
            send(frames(5), live.address, 100, sender)
            assert any(topic == "estimate" for topic, _ in ear.rest(0.3))
            assert live.end()[0] == 0
            assert live.printed.count("no display") == 1


class TestTerminal:
    def test_a_reader_that_leaves_does_not_end_it(
        self, tmp_path: Path, sender: socket.socket
    ) -> None:
        reader, writer = os.pipe()
        with Live(tmp_path, "--track", track_file(tmp_path), stdout=writer) as live:
            os.close(reader)
            os.close(writer)
            send(datagrams(drive(2)), live.address, 2000, sender)
            live.wait_for("lap_completed")
            assert live.end()[0] == 0
            assert types_of(live.session)[-1] == "session_ended"
            assert live.complaints == ""

    def test_a_reader_that_does_not_read_does_not_hold_it_up(
        self, tmp_path: Path, sender: socket.socket
    ) -> None:
        reader, writer = os.pipe()
        os.set_blocking(writer, False)
        while True:
            try:
                os.write(writer, b"x" * 4096)
            except BlockingIOError:
                break
        os.set_blocking(writer, True)
        with Live(tmp_path, stdout=writer) as live:
            send(frames(30), live.address, 300, sender)
            status, seconds = live.end()
            assert status == 0
            assert seconds < 2.0
        os.close(reader)
        os.close(writer)

    @pytest.mark.parametrize("closed", ["<&-", ">&-", "2>&-", "<&- >&- 2>&-"])
    def test_closed_standard_streams_do_not_matter(
        self, tmp_path: Path, sender: socket.socket, closed: str
    ) -> None:
        session = tmp_path / "session"
        script = tmp_path / "canticle.sh"
        code = "from canticle_daemon.cli.main import entry_point; entry_point()"
        script.write_text(
            f'exec "{os.sys.executable}" -c "{code}" run {" ".join(FREE_PORTS)} '  # type: ignore[attr-defined]
            f'--no-voice --session "{session}" {closed}\n'
        )
        with Shell(tmp_path, script) as run:
            until(lambda: types_of(session), "the start")
            started = events_of(session)[0]
            host, port = started["bind"].rsplit(":", 1)
            send(frames(30), (host, int(port)), 300, sender)
            assert run.end()[0] == 0
            assert types_of(session)[-1] == "session_ended"

    @pytest.mark.parametrize(
        "env",
        [
            {"LANG": "C", "LC_ALL": "C", "PYTHONUTF8": "0", "PYTHONCOERCECLOCALE": "0"},
            {"PYTHONIOENCODING": "ascii"},
            {"PYTHONIOENCODING": "cp1252"},
        ],
    )
    def test_a_terminal_of_few_letters_does_not_matter(
        self, tmp_path: Path, sender: socket.socket, env: dict[str, str]
    ) -> None:
        with Live(tmp_path, "--track", track_file(tmp_path), env=env) as live:
            send(datagrams(drive(2)), live.address, 2000, sender)
            live.wait_for("lap_completed")
            until(lambda: b"lap   1" in live.out.read_bytes(), "the line")
            assert live.end()[0] == 0
            assert live.complaints == ""


class Shell(Canticle):
    """The command started by a shell, which may close what Python's subprocess cannot."""

    def __init__(self, home: Path, script: Path) -> None:
        from runtime import rig

        command, rig.COMMAND = rig.COMMAND, ("/bin/sh", str(script))
        try:
            super().__init__(home)
        finally:
            rig.COMMAND = command


def test_a_full_disk_ends_it_with_one_line(tmp_path: Path, sender: socket.socket) -> None:
    import resource

    def limit() -> None:
        # Python ignores SIGXFSZ, so a write beyond the limit fails as on a full disk.
        resource.setrlimit(resource.RLIMIT_FSIZE, (20_000, 20_000))

    with Live(tmp_path, preexec_fn=limit) as live:
        for turn in range(400):
            send(frames(1, 1000.0 * (turn % 2)), live.address, 1000, sender)
            if live.process.poll() is not None:
                break
        assert live.status() == 1
        (line,) = live.complaints.splitlines()
        assert line.startswith("canticle: ")
        assert "events.jsonl cannot be written: File too large" in line
        assert all(event["type"] for event in events_of(live.session))
