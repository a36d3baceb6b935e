"""`canticle replay`: the same events as live, whatever the pace; recordings that are torn."""

from __future__ import annotations

import json
import socket
import time
from pathlib import Path
from typing import Any

import msgspec
import pytest
from runtime.rig import (
    SILENT,
    Canticle,
    Ear,
    Live,
    datagrams,
    drive,
    events_of,
    track_file,
    types_of,
    until,
)

pytestmark = pytest.mark.io

ANOTHER_S = 50.0


@pytest.fixture(scope="module")
def stream() -> list[bytes]:
    """Three laps; in the second the clock skips, in the third it goes back."""
    made = drive(3, seed=7)
    late = [
        msgspec.structs.replace(frame, time_s=frame.time_s + ANOTHER_S) for frame in made[2500:]
    ]
    again = [msgspec.structs.replace(frame, time_s=frame.time_s - 20.0) for frame in late[2000:]]
    return datagrams(made[:2500] + late[:2000] + again)


def recording_of(folder: Path, stream: list[bytes]) -> Path:
    path = folder / "stream.jsonl"
    path.write_bytes(b"".join(datagram + b"\n" for datagram in stream))
    return path


def facts_of(session: Path) -> list[dict[str, Any]]:
    """The events that do not depend on receive time, the wall clock, or a voice."""
    by_receipt = ("session_started", "session_ended", "stream_lost", "stream_resumed")
    facts = []
    for event in events_of(session):
        if event["type"] in by_receipt or event.get("reason") == "pause":
            continue
        apart = {"wall_time", "spoken", "withheld"}
        facts.append({key: value for key, value in event.items() if key not in apart})
    return facts


def replay(home: Path, recording: Path, *options: str | Path, status: int = 0) -> Path:
    """Replay into a new session; return its folder."""
    session = home / f"replay-{len(list(home.glob('replay-*')))}"
    with Canticle(home, "replay", recording, "--session", session, *options) as run:
        assert run.status() == status, run.complaints
        if status == 0:
            assert run.complaints == ""
    return session


def test_a_replay_tells_what_the_live_run_told(tmp_path: Path, stream: list[bytes]) -> None:
    track = track_file(tmp_path)
    with Live(tmp_path, "--track", track) as live, Ear(live.publish, "status") as ear:
        with socket.socket(socket.AF_INET, socket.SOCK_DGRAM) as sender:
            for count, datagram in enumerate(stream):
                sender.sendto(datagram, live.address)
                if count % 50 == 49:
                    time.sleep(0.02)
        while ear.hear()[1]["frames"] < len(stream):
            pass
        assert live.end()[0] == 0
        told = facts_of(live.session)
    kinds = [fact["type"] for fact in told]
    assert {"turn_in", "entry", "corner", "lap_completed", "discontinuity"} <= set(kinds)
    assert [fact["reason"] for fact in told if fact["type"] == "discontinuity"] == ["gap", "rewind"]
    recording = recording_of(tmp_path, stream)
    assert facts_of(replay(tmp_path, recording, "--track", track)) == told
    # One frame a block, and every estimate published: the same facts.
    paced = replay(tmp_path, recording, "--track", track, "--pace", "1000")
    assert facts_of(paced) == told
    # The adapter of the live run may be named.
    named = replay(tmp_path, recording, "--track", track, "--adapter", "json")
    assert facts_of(named) == told


def test_a_replay_is_a_session_of_its_own(tmp_path: Path, stream: list[bytes]) -> None:
    session = replay(tmp_path, recording_of(tmp_path, stream[:600]))
    assert types_of(session)[0] == "session_started"
    ended = events_of(session)[-1]
    assert ended["type"] == "session_ended"
    assert ended["reason"] == "the recording is over"
    facts = json.loads((session / "session.json").read_text())
    assert facts["frames"] == 600
    assert facts["bind"] is None


def test_the_pace_is_kept_and_a_gap_in_the_clock_is_not_waited_for(
    tmp_path: Path, stream: list[bytes]
) -> None:
    part = stream[2440:2561]  # 2 s of the stream's clock, with the skip of 50 s in them
    recording = recording_of(tmp_path, part)
    sessions = [replay(tmp_path, recording, "--pace", pace) for pace in ("4", "max")]
    seconds = [_seconds_of(session) for session in sessions]
    assert 0.45 < seconds[0] < 3.0
    assert seconds[1] < seconds[0]


def _seconds_of(session: Path) -> float:
    from datetime import datetime

    first, *_, last = (datetime.fromisoformat(at["wall_time"]) for at in events_of(session))
    return (last - first).total_seconds()


def test_at_a_pace_estimates_are_published(tmp_path: Path, stream: list[bytes]) -> None:
    recording = recording_of(tmp_path, stream[:1200])
    session = tmp_path / "session"
    with Canticle(tmp_path, "replay", recording, "--session", session, "--pace", "5") as run:
        until(lambda: types_of(session), "the start")
        publish = events_of(session)[0]["publish"]
        import zmq

        with zmq.Context() as context, context.socket(zmq.SUB) as ear:
            ear.linger = 0
            ear.subscribe("estimate ")
            ear.connect(publish)
            assert ear.poll(10_000)
        begun = time.monotonic()
        assert run.end()[0] == 0
        assert time.monotonic() - begun < 2.0
    assert events_of(session)[-1]["reason"] == "SIGTERM"


def test_the_config_s_own_keys_count(tmp_path: Path, stream: list[bytes]) -> None:
    track_file(tmp_path)
    config = tmp_path / "live.toml"
    config.write_text('[input]\nadapter = "packed"\n[track]\nfile = "track.toml"\n')
    session = replay(tmp_path, recording_of(tmp_path, stream[:600]), "--config", config, *SILENT)
    facts = json.loads((session / "session.json").read_text())
    assert facts["track"]["name"] == "Ruler Oval"
    assert facts["frames"] == 600


@pytest.mark.parametrize("tear", [1, 100])
def test_a_torn_last_line_is_left_out(tmp_path: Path, stream: list[bytes], tear: int) -> None:
    recording = recording_of(tmp_path, stream[:100])
    recording.write_bytes(recording.read_bytes()[: -1 - tear])
    facts = json.loads((replay(tmp_path, recording) / "session.json").read_text())
    assert (facts["frames"], facts["bad_datagrams"]) == (99, 0)


def test_bad_lines_within_are_counted(tmp_path: Path, stream: list[bytes]) -> None:
    recording = recording_of(tmp_path, [*stream[:50], b"junk", b"{}", *stream[50:100]])
    facts = json.loads((replay(tmp_path, recording) / "session.json").read_text())
    assert (facts["frames"], facts["bad_datagrams"]) == (100, 2)


@pytest.mark.parametrize(
    ("content", "words"),
    [
        (b"", "it is empty"),
        (b"hello\n", "line 1 "),
        (b"\x00\x01\x02", "binary"),
        (b"{}\n", "line 1 "),
    ],
)
def test_what_is_no_recording_is_refused_before_a_session_begins(
    tmp_path: Path, content: bytes, words: str
) -> None:
    recording = tmp_path / "wrong.jsonl"
    recording.write_bytes(content)
    session = replay(tmp_path, recording, status=2)
    assert not session.exists()
    (line,) = (tmp_path / "stderr.txt").read_text().splitlines()
    assert line.startswith(f"canticle: {recording}: ")
    assert words in line


@pytest.mark.parametrize("where", ["option", "config"])
def test_who_listens_at_a_named_endpoint_hears_all_of_a_fast_replay(
    tmp_path: Path, stream: list[bytes], where: str
) -> None:
    import zmq

    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        endpoint = f"tcp://127.0.0.1:{probe.getsockname()[1]}"
    config = tmp_path / "config.toml"
    config.write_text(f'[bus]\npublish = "{endpoint}"\n')
    given = ("--publish", endpoint) if where == "option" else ("--config", config)
    session = tmp_path / "session"
    recording = recording_of(tmp_path, stream[:1500])
    with zmq.Context() as context, context.socket(zmq.SUB) as ear:
        ear.linger = 0
        ear.rcvhwm = 100  # less than there will be: the replay keeps to its listener's pace
        ear.subscribe("")
        ear.connect(endpoint)
        with Canticle(tmp_path, "replay", recording, "--session", session, *given) as run:
            heard = []
            while not heard or not heard[-1].startswith(b"session_ended"):
                assert ear.poll(20_000), run.complaints
                heard.append(ear.recv())
            assert run.status() == 0
    topics = [message.split(b" ", 1)[0] for message in heard]
    assert topics[0] == b"session_started"
    assert topics.count(b"estimate") == topics.count(b"frame") == 1500
