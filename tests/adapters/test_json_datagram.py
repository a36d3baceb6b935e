import json
import math
import struct
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from canticle_adapters.json_datagram import OVERSHOOT, JsonAdapter
from canticle_daemon.errors import DecodeError
from canticle_daemon.frame import FLAGS, SCALARS, WHEEL_FIELDS, Frame

REQUIRED: dict[str, Any] = {
    "time_s": 12.345678901234567,
    "speed_mps": 61,
    "yaw_rate_radps": 0.24,
    "accel_y_mps2": 11.0,
    "station_m": 512.25,
}
OPTIONAL: dict[str, Any] = {
    **dict.fromkeys((name for name in SCALARS if name not in REQUIRED), 1.0),
    **{name: [0.25, 0.5, 0.75, 1] for name in WHEEL_FIELDS},
    **dict.fromkeys(FLAGS, True),
    **dict.fromkeys(("tire_set", "driver", "car_name", "track_name"), "Überholer №1"),
}


def decode(changes: dict[str, Any] | None = None, without: str = "") -> tuple[Frame, int]:
    data = {**REQUIRED, **(changes or {})}
    data.pop(without, None)
    adapter = JsonAdapter()
    frame = adapter.decode(json.dumps(data).encode())
    assert frame is not None
    return frame, adapter.bad_fields


def decode_text(text: str) -> tuple[Frame, int]:
    """Put raw JSON text for keys beside the required ones, which json.dumps could not write."""
    adapter = JsonAdapter()
    frame = adapter.decode((json.dumps(REQUIRED)[:-1] + "," + text + "}").encode())
    assert frame is not None
    return frame, adapter.bad_fields


def test_every_key_arrives_unrounded():
    frame, bad = decode(OPTIONAL)
    assert bad == 0
    for name, value in {**REQUIRED, **OPTIONAL}.items():
        assert getattr(frame, name) == (tuple(value) if isinstance(value, list) else value)


def test_what_is_not_sent_is_absent():
    frame, _ = decode()
    assert math.isnan(frame.steer_rad)
    assert frame.wheel_load_n is None
    assert frame.in_car is None
    assert frame.driver is None


@pytest.mark.parametrize("key", ["time_s", "speed_mps", "yaw_rate_radps", "accel_y_mps2"])
@pytest.mark.parametrize("value", ["1", None, True, [1], {"a": 1}, math.nan, math.inf])
def test_a_required_key_must_be_a_finite_number(key: str, value: object):
    with pytest.raises(DecodeError, match=key):
        decode({key: value})
    with pytest.raises(DecodeError, match=key):
        decode(without=key)


def test_position_stands_in_for_the_station():
    frame, _ = decode({"pos_x_m": 1.0, "pos_y_m": 2.0}, without="station_m")
    assert math.isnan(frame.station_m)
    with pytest.raises(DecodeError, match=r"station_m.*pos_x_m"):
        decode({"pos_x_m": 1.0}, without="station_m")
    with pytest.raises(DecodeError, match="pos_y_m"):
        decode({"pos_x_m": 1.0, "pos_y_m": "far"}, without="station_m")


def test_a_bad_station_beside_a_position_costs_only_the_station():
    frame, bad = decode({"pos_x_m": 1.0, "pos_y_m": 2.0, "station_m": "far"})
    assert math.isnan(frame.station_m)
    assert (frame.pos_x_m, bad) == (1.0, 1)


WRONG = {
    **{name: ["1", True, [1.0], {}] for name in SCALARS if name not in REQUIRED},
    **{
        name: [1.0, [1.0] * 3, [1.0] * 5, [1, 1, 1, None], [1, 1, 1, True]] for name in WHEEL_FIELDS
    },
    **{name: [1, 0.0, "true", []] for name in FLAGS},
    **{name: [1, True, ["a"]] for name in ("tire_set", "driver", "car_name", "track_name")},
}


@pytest.mark.parametrize("key", OPTIONAL)
def test_a_bad_optional_key_is_left_out_and_counted(key: str):
    for value in WRONG[key]:
        frame, bad = decode({**OPTIONAL, key: value})
        absent = getattr(frame, key)
        assert absent is None or math.isnan(absent)
        assert bad == 1
        assert frame.speed_mps == 61.0


@pytest.mark.parametrize("key", OPTIONAL)
def test_null_is_absence_and_no_fault(key: str):
    frame, bad = decode({key: None})
    absent = getattr(frame, key)
    assert absent is None or math.isnan(absent)
    assert bad == 0


@pytest.mark.parametrize(
    "number", ["1e999", "-1e999", "NaN", "Infinity", "-Infinity", "1" + "0" * 400, "1" * 5000]
)
def test_a_number_beyond_a_double_is_bad_not_fatal(number: str):
    frame, bad = decode_text(f'"steer_rad": {number}')
    assert math.isnan(frame.steer_rad)
    assert bad == 1
    with pytest.raises(DecodeError, match="speed_mps"):
        decode_text(f'"speed_mps": {number}')
    frame, bad = decode_text(f'"of_no_interest": {number}')
    assert bad == 0


def test_unknown_keys_are_ignored_whatever_they_hold():
    frame, bad = decode({"gear": 4, "notes": {"deep": [1, {"er": None}]}, "": "\ud800"})
    assert (frame.speed_mps, bad) == (61.0, 0)


def test_the_last_of_a_repeated_key_counts():
    assert decode_text('"lap": 3, "lap": 4')[0].lap == 4.0
    frame, bad = decode_text('"lap": "x", "lap": 4')
    assert (frame.lap, bad) == (4.0, 0)


@pytest.mark.parametrize(
    ("value", "expected"),
    [(-OVERSHOOT, 0.0), (1.004, 1.0), (0.5, 0.5), (-0.02, None), (1.02, None), (100, None)],
)
def test_shares_are_clamped_a_little_and_refused_beyond(value: float, expected: float | None):
    for key in ("throttle", "brake"):
        frame, bad = decode({key: value})
        got = getattr(frame, key)
        assert math.isnan(got) and bad == 1 if expected is None else (got, bad) == (expected, 0)
    frame, bad = decode({"tire_tread": [value, 0.0, 0.0, 0.0]})
    assert frame.tire_tread == (None if expected is None else (expected, 0.0, 0.0, 0.0))


@pytest.mark.parametrize("lap", [-1, 2.5, -0.5])
def test_a_lap_is_a_whole_number_from_zero(lap: float):
    frame, bad = decode({"lap": lap})
    assert math.isnan(frame.lap)
    assert bad == 1
    assert decode({"lap": 0})[0].lap == 0.0


def test_a_car_rolling_back_is_no_fault():
    assert decode({"speed_mps": -1.5})[0].speed_mps == -1.5


def test_a_text_that_could_not_be_written_again_is_bad():
    frame, bad = decode_text('"driver": "\\ud800"')
    assert frame.driver is None
    assert bad == 1


@pytest.mark.parametrize(
    "datagram",
    [
        b"",
        b" ",
        b"null",
        b"[]",
        b"17",
        b'"text"',
        b"{",
        b"{}",
        b"{}{}",
        b"[" * 60_000,
        b'{"a":' * 12_000,
        b"\xff\xfe{}",
        b"\xef\xbb\xbf{}",
        json.dumps(REQUIRED).encode("utf-16"),
        json.dumps(REQUIRED).encode() + b"}",
        json.dumps(REQUIRED).encode()[:-1] + b',"driver":"\xe9"}',
        json.dumps(REQUIRED).encode()[:-1] + b',"unknown":"\xe9"}',
        struct.pack("<8d", *range(8)),
    ],
)
def test_what_is_no_datagram_is_refused_in_one_line(datagram: bytes):
    with pytest.raises(DecodeError) as caught:
        JsonAdapter().decode(datagram)
    assert "\n" not in str(caught.value)


JSON = st.recursive(
    st.none() | st.booleans() | st.floats() | st.integers() | st.text(max_size=5),
    lambda inner: st.lists(inner, max_size=5) | st.dictionaries(st.text(max_size=3), inner),
    max_leaves=5,
)


@settings(max_examples=150, deadline=None, derandomize=True)
@given(st.dictionaries(st.sampled_from(Frame.__struct_fields__), JSON))
def test_any_object_gives_a_frame_of_finite_numbers_or_a_decode_error(changes: dict[str, Any]):
    try:
        frame, _ = decode(changes)
    except DecodeError:
        return
    for name in SCALARS:
        number = getattr(frame, name)
        assert math.isfinite(number) or (math.isnan(number) and name not in REQUIRED)
    for name in WHEEL_FIELDS:
        four = getattr(frame, name)
        assert four is None or (len(four) == 4 and all(map(math.isfinite, four)))


@settings(max_examples=100, deadline=None, derandomize=True)
@given(st.binary(max_size=200))
def test_any_bytes_give_a_decode_error_at_worst(datagram: bytes):
    with pytest.raises(DecodeError):
        JsonAdapter().decode(datagram)
