"""What the command refuses: one line on standard error, the right exit status, no traceback."""

from __future__ import annotations

import os
import socket
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest
import zmq
from runtime.rig import FREE_PORTS, SILENT, Canticle, Nursery, track_file, types_of

pytestmark = pytest.mark.io


class Refusals:
    """Runs commands that are refused, each in a process forked from one that has begun."""

    def __init__(self, nursery: Nursery, home: Path) -> None:
        self._nursery, self._home = nursery, home

    def of(self, *arguments: str | Path) -> str:
        """Return the one line that a command gives."""
        status, printed, complaints = self._nursery.run(self._home, *arguments)
        assert (status, printed) == (2, ""), complaints
        (line,) = complaints.splitlines()
        assert line.startswith("canticle: ")
        assert "Traceback" not in line
        return line

    def of_run(self, *arguments: str | Path) -> str:
        own = self._home / "session"
        return self.of("run", *FREE_PORTS, *SILENT, "--session", own, *arguments)


@pytest.fixture(scope="module")
def nursery() -> Iterator[Nursery]:
    with Nursery() as made:
        yield made


@pytest.fixture
def refusal(nursery: Nursery, tmp_path: Path) -> Refusals:
    return Refusals(nursery, tmp_path)


@pytest.fixture
def udp_holder() -> Iterator[str]:
    with socket.socket(socket.AF_INET, socket.SOCK_DGRAM) as holder:
        holder.bind(("127.0.0.1", 0))
        yield f"127.0.0.1:{holder.getsockname()[1]}"


class TestPorts:
    def test_a_udp_port_in_use_names_its_holder(
        self, tmp_path: Path, refusal: Refusals, udp_holder: str
    ) -> None:
        line = refusal.of_run("--bind", udp_holder)
        assert f"input.bind: udp port {udp_holder} is in use by" in line
        assert f"(process {os.getpid()})" in line
        assert not (tmp_path / "session").exists()

    def test_a_bus_port_in_use_names_its_holder(self, tmp_path: Path, refusal: Refusals) -> None:
        with socket.socket() as holder:
            holder.bind(("127.0.0.1", 0))
            holder.listen()
            endpoint = f"tcp://127.0.0.1:{holder.getsockname()[1]}"
            line = refusal.of_run("--publish", endpoint)
        assert f"bus.publish: {endpoint} is in use by" in line
        assert f"(process {os.getpid()})" in line
        assert not (tmp_path / "session").exists()

    def test_a_bus_port_held_by_another_daemon_too(self, tmp_path: Path, refusal: Refusals) -> None:
        with zmq.Context() as context, context.socket(zmq.PUB) as holder:
            holder.bind("tcp://127.0.0.1:*")
            endpoint = holder.last_endpoint.decode()
            assert "is in use by" in refusal.of_run("--publish", endpoint)

    @pytest.mark.parametrize(
        ("option", "value", "words"),
        [
            ("--bind", "47800", "input.bind: '47800' is not HOST:PORT"),
            ("--bind", "127.0.0.1:99999", "is not HOST:PORT"),
            ("--bind", "nowhere.invalid:1", "host 'nowhere.invalid' is not known"),
            ("--publish", "127.0.0.1:5", "bus.publish: '127.0.0.1:5' is not an endpoint"),
            ("--publish", "tcp://127.0.0.1:99999", "is not an endpoint"),
        ],
    )
    def test_an_address_that_is_none(
        self, tmp_path: Path, refusal: Refusals, option: str, value: str, words: str
    ) -> None:
        assert words in refusal.of_run(option, value)

    def test_the_own_port_as_a_forward_target(self, tmp_path: Path, refusal: Refusals) -> None:
        with socket.socket(socket.AF_INET, socket.SOCK_DGRAM) as free:
            free.bind(("127.0.0.1", 0))
            own = f"127.0.0.1:{free.getsockname()[1]}"
        config = tmp_path / "config.toml"
        config.write_text(f'[input]\nforward = ["{own}"]\n')
        line = refusal.of_run("--config", config, "--bind", own)
        assert f"input.forward: {own} is the daemon's own port" in line


class TestConfig:
    @pytest.mark.parametrize(
        ("text", "words"),
        [
            ("[input\n", "is not valid TOML: "),
            ("[input]\nbimd = 'x'\n", "unknown key 'input.bimd' (did you mean 'bind'?)"),
            ("[voize]\n", "unknown key 'voize' (did you mean 'voice'?)"),
            ("[coach]\ntolerance_m = -1\n", "coach.tolerance_m: "),
            ("[coach]\nwindow_m = nan\n", "coach.window_m: "),
            ("[bus]\nestimate_hz = 0\n", "bus.estimate_hz: "),
            ("input = 3\n", "input: "),
            ("[input]\nadapter = 'jason'\n", "no adapter named 'jason'; known: json, packed, rec"),
            ("[track]\nfile = 'none.toml'\n", "none.toml: cannot be read: No such file"),
            ("[coach]\ntargets = 'none.toml'\n", "need a track file"),
        ],
    )
    def test_what_is_wrong_and_where(
        self, tmp_path: Path, refusal: Refusals, text: str, words: str
    ) -> None:
        config = tmp_path / "config.toml"
        config.write_text(text)
        line = refusal.of_run("--config", config)
        assert words in line
        assert not (tmp_path / "session").exists()

    def test_all_faults_come_at_once(self, tmp_path: Path, refusal: Refusals) -> None:
        config = tmp_path / "config.toml"
        config.write_text("[input]\nbimd = 'x'\n[coach]\nrun_laps = 0\n")
        line = refusal.of_run("--config", config)
        assert "input.bimd" in line
        assert "coach.run_laps" in line
        assert str(config) in line

    @pytest.mark.parametrize("option", ["--config", "--track", "--car"])
    def test_a_missing_file_is_named(self, tmp_path: Path, refusal: Refusals, option: str) -> None:
        line = refusal.of_run(option, tmp_path / "missing.toml")
        assert f"{tmp_path / 'missing.toml'}: cannot be read: No such file or directory" in line

    def test_a_folder_is_no_file(self, tmp_path: Path, refusal: Refusals) -> None:
        line = refusal.of_run("--config", tmp_path)
        assert f"{tmp_path}: cannot be read: Is a directory" in line


class TestFiles:
    @pytest.mark.parametrize(
        ("old", "new", "words"),
        [
            ("length_m = 2000.0", "length_m = nan", "length_m"),
            ("[10.0, 4.0", "[5.0, 4.0", "station 5 does not rise"),
            ("exit_m = 850.0", "exit_m = 310.0", "North"),
            ("transition_end_m = 400.0", "transition_end_m = 250.0", "North"),
            ("length_m = 2000.0", "length_m = 2000.0\nlenth_m = 1.0", "'lenth_m' (did you mean"),
            ("curvature", "curvature", ""),
        ],
    )
    def test_an_impossible_track_is_refused_by_file_and_key(
        self, tmp_path: Path, refusal: Refusals, old: str, new: str, words: str
    ) -> None:
        track = track_file(tmp_path)
        text = track.read_text()
        if words:
            assert old in text
            track.write_text(text.replace(old, new, 1))
        else:  # the lap does not close: every bend is straightened
            lines = [line for line in text.splitlines() if "0.0069" not in line]
            track.write_text("\n".join(lines))
            words = "close"
        line = refusal.of_run("--track", track)
        assert str(track) in line
        assert words in line

    def test_an_impossible_car(self, tmp_path: Path, refusal: Refusals) -> None:
        car = tmp_path / "car.toml"
        car.write_text("mass_kg = -5\nwheelbase = 2.8\n")
        line = refusal.of_run("--car", car)
        assert "mass_kg" in line
        assert "unknown key 'wheelbase' (did you mean 'wheelbase_m'?)" in line

    def test_targets_for_a_corner_that_is_not_there(
        self, tmp_path: Path, refusal: Refusals
    ) -> None:
        targets = tmp_path / "targets.toml"
        targets.write_text('[targets]\n"Turn 9" = 5.0\n')
        line = refusal.of_run("--track", track_file(tmp_path), "--targets", targets)
        assert str(targets) in line
        assert "Turn 9" in line

    def test_a_layout_for_an_adapter_that_takes_none(self, refusal: Refusals) -> None:
        line = refusal.of_run("--layout", "layout.toml")
        assert line.endswith("--layout: adapter 'json' takes none (--adapter packed does)")

    def test_a_wrong_option_points_to_the_help_of_its_command(self, refusal: Refusals) -> None:
        assert refusal.of("rehearse", "--lap", "3").endswith("(see canticle rehearse --help)")
        assert refusal.of("rehears").endswith("(see canticle --help)")

    def test_an_adapter_that_is_not_known(self, tmp_path: Path, refusal: Refusals) -> None:
        line = refusal.of_run("--adapter", "telepathy")
        assert line.endswith("no adapter named 'telepathy'; known: json, packed, recording")

    def test_packed_without_a_layout(self, tmp_path: Path, refusal: Refusals) -> None:
        line = refusal.of_run("--adapter", "packed")
        assert "adapter 'packed' needs a layout file (--layout FILE)" in line


class TestSessionFolder:
    def test_one_that_is_not_empty(self, tmp_path: Path, refusal: Refusals) -> None:
        (tmp_path / "session").mkdir()
        (tmp_path / "session" / "notes.txt").write_text("mine")
        assert "is not empty; name a new one" in refusal.of_run()
        assert [path.name for path in (tmp_path / "session").iterdir()] == ["notes.txt"]

    def test_one_that_is_a_file(self, tmp_path: Path, refusal: Refusals) -> None:
        (tmp_path / "session").write_text("mine")
        assert "cannot be made: it is a file" in refusal.of_run()

    def test_an_empty_one_is_taken(self, tmp_path: Path) -> None:
        (tmp_path / "session").mkdir()
        session = tmp_path / "session"
        with Canticle(tmp_path, "run", *FREE_PORTS, *SILENT, "--session", session) as run:
            while not types_of(session):
                assert run.process.poll() is None

    @pytest.mark.parametrize("option", ["--session", "--sessions"])
    def test_a_parent_that_takes_no_folder(
        self, tmp_path: Path, refusal: Refusals, option: str
    ) -> None:
        # /proc takes no new folder from anybody, root included (proc(5)).
        line = refusal.of("run", *FREE_PORTS, *SILENT, option, "/proc/canticle/session")
        assert "session folder /proc/canticle/session cannot be made: " in line


class TestUsage:
    @pytest.mark.parametrize(
        ("arguments", "words"),
        [
            (["run", "--bogus"], "No such option: --bogus"),
            (["run", "--run-laps", "0"], "coach.run_laps"),
            (["run", "--run-laps", "x"], "'--run-laps'"),
            (["run", "--bind"], "--bind"),
            (["run", "extra"], "extra"),
            (["rehearse", "--laps", "0"], "'--laps'"),
            (["rehearse", "--rate", "x"], "'--rate'"),
            (["rehearse", "--rate", "5"], "'--rate'"),
            (["rehearse", "--pace", "0"], "--pace: '0' is neither a factor"),
            (["rehearse", "--pace", "nan"], "--pace: 'nan' is neither"),
            (["rehearse", "--seed", "1.5"], "'--seed'"),
            (["replay"], "RECORDING"),
            (["replay", "missing.jsonl"], "missing.jsonl: cannot be read: No such file"),
            (["replay", "missing.jsonl", "--pace", "fast"], "--pace: 'fast' is neither"),
            (["replay", "missing.jsonl", "--adapter", "packed"], "needs a layout"),
            (["fly"], "No such command 'fly'"),
        ],
    )
    def test_a_wrong_command_line_is_one_line(
        self, tmp_path: Path, refusal: Refusals, arguments: list[str], words: str
    ) -> None:
        assert words in refusal.of(*arguments)

    def test_nothing_asked_is_help(self, tmp_path: Path) -> None:
        with Canticle(tmp_path) as run:
            assert run.status() == 0
            assert "rehearse" in run.printed
            assert run.complaints == ""

    def test_the_installed_command_knows_its_version(self, tmp_path: Path) -> None:
        with Canticle(tmp_path, "--version") as run:
            assert run.status() == 0
            assert run.printed.startswith("canticle 0.")
        assert Path(sys.executable).with_name("canticle").exists()
