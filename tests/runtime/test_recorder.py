"""The session folder on a real disk."""

from __future__ import annotations

import json
import os
from datetime import UTC, datetime
from pathlib import Path

import pytest
from runtime.rig import events_of

from canticle_daemon.errors import ConfigError, SystemFaultError
from canticle_daemon.messages import StreamLost
from canticle_daemon.runtime import recorder
from canticle_daemon.runtime.recorder import Recorder, make_folder, new_session_folder


def lost(time_s: float) -> StreamLost:
    return StreamLost(time_s=time_s, silence_s=2.0)


def test_an_event_is_on_disk_when_record_returns(tmp_path: Path) -> None:
    made = Recorder(tmp_path / "new" / "deep", {})
    for count in range(3):
        made.record(lost(float(count)))
        assert len(events_of(made.folder)) == count + 1
    made.close()


def test_an_event_says_its_type_and_both_times(tmp_path: Path) -> None:
    made = Recorder(tmp_path, {})
    before = datetime.now(UTC)
    made.record(lost(12.5))
    made.close()
    (event,) = events_of(tmp_path)
    assert event["type"] == "stream_lost"
    assert event["time_s"] == 12.5
    assert event["wall_time"].endswith("Z")
    stamp = datetime.fromisoformat(event["wall_time"])
    assert abs((stamp - before).total_seconds()) < 1.0


def test_session_json_tells_what_ran_and_when_it_ended(tmp_path: Path) -> None:
    made = Recorder(tmp_path, {"adapter": "json", "place": tmp_path})
    facts = json.loads((tmp_path / "session.json").read_text())
    assert facts["adapter"] == "json"
    assert facts["place"] == str(tmp_path)
    assert "ended" not in facts
    made.close(frames=5)
    facts = json.loads((tmp_path / "session.json").read_text())
    assert facts["frames"] == 5
    assert facts["started"] <= facts["ended"]
    assert sorted(path.name for path in tmp_path.iterdir()) == ["events.jsonl", "session.json"]


def test_session_json_has_a_row_of_numbers_on_a_line(tmp_path: Path) -> None:
    facts = {"profile": [[0.0, 4.5, 1e-6], [5.0, -4.5, 0.0]], "note": "[1,  2]", "none": []}
    Recorder(tmp_path, facts).close()
    text = (tmp_path / "session.json").read_text()
    assert json.loads(text).items() >= facts.items()
    assert "[ 5.0, -4.5, 0.0 ]" in text


def test_a_folder_that_holds_something_is_refused_and_left_alone(tmp_path: Path) -> None:
    (tmp_path / "mine.txt").write_text("keep")
    with pytest.raises(ConfigError, match="is not empty"):
        Recorder(tmp_path, {})
    assert [path.name for path in tmp_path.iterdir()] == ["mine.txt"]


def test_a_file_in_the_way_is_named(tmp_path: Path) -> None:
    (tmp_path / "taken").write_text("")
    with pytest.raises(ConfigError, match="taken cannot be made: it is a file"):
        make_folder(tmp_path / "taken")
    with pytest.raises(ConfigError, match="cannot be made: Not a directory"):
        make_folder(tmp_path / "taken" / "below")


def test_new_folders_of_the_same_second_differ(tmp_path: Path) -> None:
    names = set()
    for _ in range(3):
        folder = new_session_folder(tmp_path)
        folder.mkdir()
        names.add(folder.name)
    assert len(names) == 3


@pytest.mark.parametrize("fits", [[0], [10, 0]])
def test_a_full_disk_is_told_and_leaves_whole_lines(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, fits: list[int]
) -> None:
    # write(2): a disk that fills up takes a part of the bytes first, and fails at the next call.
    made = Recorder(tmp_path, {})
    made.record(lost(1.0))
    write, left = os.write, list(fits)
    monkeypatch.setattr(recorder.os, "write", lambda file, data: write(file, data[: left.pop(0)]))
    with pytest.raises(SystemFaultError, match=r"events\.jsonl cannot be written: No space"):
        made.record(lost(2.0))
    monkeypatch.undo()
    made.record(lost(3.0))
    made.close()
    assert [event["time_s"] for event in events_of(tmp_path)] == [1.0, 3.0]


def test_a_line_the_disk_takes_in_parts_is_whole(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    made = Recorder(tmp_path, {})
    write = os.write
    monkeypatch.setattr(recorder.os, "write", lambda file, data: write(file, data[:7]))
    made.record(lost(1.0))
    monkeypatch.undo()
    made.close()
    assert [event["time_s"] for event in events_of(tmp_path)] == [1.0]
