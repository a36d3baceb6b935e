import json
from pathlib import Path

import pytest

from canticle_adapters.recording import RecordingAdapter, read_datagrams
from canticle_daemon.errors import LogFormatError


def line(time_s: float) -> bytes:
    data = {"time_s": time_s, "speed_mps": 60.0, "yaw_rate_radps": 0.2, "accel_y_mps2": 11.0}
    return json.dumps({**data, "station_m": 10.0}).encode()


def written(folder: Path, content: bytes) -> Path:
    path = folder / "laps.jsonl"
    path.write_bytes(content)
    return path


def test_lines_come_back_as_datagrams_in_order(tmp_path: Path):
    lines = [line(0.1), line(0.2), line(0.3)]
    path = written(tmp_path, b"\n".join(lines) + b"\n")
    assert list(read_datagrams(path)) == lines
    adapter = RecordingAdapter()
    frames = [adapter.decode(datagram) for datagram in read_datagrams(path)]
    assert [frame.time_s for frame in frames if frame] == [0.1, 0.2, 0.3]


@pytest.mark.parametrize(
    "content",
    [
        line(1) + b"\r\n" + line(2) + b"\r\n",
        b"\xef\xbb\xbf" + line(1) + b"\n" + line(2) + b"\n",
        b"\n\n" + line(1) + b"\n  \n\r\n" + line(2) + b"\n\n",
        line(1) + b"\n" + line(2),
        line(1) + b"\n" + line(2) + b"\n" + line(3)[:-5],
        line(1) + b"\n" + line(2) + b"\n{",
    ],
    ids=["crlf", "byte order mark", "blank lines", "no last line end", "torn", "torn early"],
)
def test_harmless_oddities_are_tolerated(tmp_path: Path, content: bytes):
    assert list(read_datagrams(written(tmp_path, content))) == [line(1), line(2)]


def test_a_bad_line_is_left_to_the_adapter_to_count(tmp_path: Path):
    path = written(tmp_path, b"{bad\n" + line(1) + b"\nworse\n" + line(2) + b"\n")
    assert list(read_datagrams(path)) == [b"{bad", line(1), b"worse", line(2)]


def test_it_is_read_as_it_is_asked_for(tmp_path: Path):
    path = written(tmp_path, b"".join(line(i) + b"\n" for i in range(1000)))
    datagrams = read_datagrams(path)
    assert next(datagrams) == line(0)
    datagrams.close()  # type: ignore[attr-defined]


@pytest.mark.parametrize(
    ("content", "match"),
    [
        (b"", "it is empty"),
        (b"\n\n", "it is empty"),
        (b"\x89MCAP0\r\n\x00\x01", "binary file"),
        (b"time,speed\n1,2\n", "line 1 is not valid JSON"),
        (b"\n[1, 2]\n", "line 2 is not a JSON object"),
        (b'{"type": "session_started"}\n', "line 1 required key 'time_s' .*missing"),
        (b"\xff\xfe{\n", "line 1 is not UTF-8"),
    ],
)
def test_another_kind_of_file_is_refused_by_name_and_line(
    tmp_path: Path, content: bytes, match: str
):
    path = written(tmp_path, content)
    with pytest.raises(LogFormatError, match=match) as caught:
        read_datagrams(path)
    assert str(path) in str(caught.value)
    assert "\n" not in str(caught.value)


def test_a_missing_file_and_a_folder_are_named_at_once(tmp_path: Path):
    for path, match in ((tmp_path / "none.jsonl", "cannot be read"), (tmp_path, "is a folder")):
        with pytest.raises(LogFormatError, match=match):
            read_datagrams(path)
