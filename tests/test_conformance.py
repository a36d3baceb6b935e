"""The adapter battery: the built-in adapters pass it, and it catches each way of failing."""

import json
import struct
from pathlib import Path

import pytest

from canticle_adapters.json_datagram import JsonAdapter
from canticle_adapters.packed import PackedAdapter, PackedOptions
from canticle_adapters.recording import RecordingAdapter
from canticle_daemon.adapter_api import Adapter
from canticle_daemon.errors import DecodeError
from canticle_daemon.frame import Frame
from canticle_daemon.testing import check_adapter

CONFIGS = Path(__file__).parents[1] / "configs"
NATIVE = [
    json.dumps(
        {
            "time_s": 100.0 + i / 60,
            "speed_mps": 61.5,
            "yaw_rate_radps": 0.24,
            "accel_y_mps2": 11.0,
            "station_m": 500.0 + i,
            "throttle": 0.8,
            "wheel_load_n": [4000.0, 5000.5, 3000.0, 6000.0],
            "driver": "Åsa",
            "caution": False,
        },
        ensure_ascii=False,
    ).encode()
    for i in range(5)
]


def single(i: int) -> bytes:
    packet = bytearray(160)
    struct.pack_into("<4sH2sIf", packet, 0, b"SPRW", 3, b"\n\r", 5000 + 16 * i, 140.0)
    struct.pack_into("<ffff", packet, 16, -10.0, 0.1, 1.1, 1.6)
    struct.pack_into("<f", packet, 32, 1500.0)
    struct.pack_into("<4f", packet, 44, -0.17, 0.0, 0.0, 0.98)
    return bytes(packet)


def joined(i: int) -> list[bytes]:
    motion = struct.pack(
        ">B3xId3f3f3f3f3f2f4x", 1, i, i / 100, 1, 0, 0, 0, 1, 0, 5, 0, 6, 200, 0, 0, 1, 0, 0, 1, 1
    )
    lap = struct.pack(">B3xIfHBxf", 2, i, 0.25, 3, 0, -1.0)
    controls = struct.pack(">B3xIhHHB9x", 3, i, -105, 800, 0, 2)
    return [controls, lap, motion]


def packed(name: str) -> PackedAdapter:
    return PackedAdapter(PackedOptions(layout=CONFIGS / f"layout-{name}.toml"))


@pytest.mark.parametrize(
    ("adapter", "samples"),
    [
        (JsonAdapter(), NATIVE),
        (RecordingAdapter(), NATIVE),
        (packed("single"), [single(i) for i in range(5)]),
        (packed("joined"), [packet for i in range(5) for packet in joined(i)]),
    ],
    ids=["json", "recording", "packed single", "packed joined"],
)
def test_the_built_in_adapters_keep_the_contract(adapter: Adapter, samples: list[bytes]):
    check_adapter(adapter, samples)


class Doubles(Adapter):
    """A sound adapter to spoil: six doubles."""

    name = "doubles"

    def decode(self, datagram: bytes) -> Frame | None:
        return self.frame_of(self.numbers_of(datagram))

    def numbers_of(self, datagram: bytes) -> tuple[float, ...]:
        if len(datagram) != 40:
            raise DecodeError("has not 40 bytes")
        numbers = struct.unpack("<5d", datagram)
        if not all(abs(number) < 1e300 for number in numbers):
            raise DecodeError("holds numbers that are not finite")
        return numbers

    def frame_of(self, numbers: tuple[float, ...]) -> Frame | None:
        time_s, speed, yaw_rate, accel, station = numbers
        return Frame(time_s, speed, yaw_rate, accel, station_m=station)


class Miles(Doubles):
    def frame_of(self, numbers: tuple[float, ...]) -> Frame | None:
        time_s, speed, *rest = numbers
        return super().frame_of((time_s, speed * 3.6, *rest))


class ShortOnBytes(Doubles):
    def numbers_of(self, datagram: bytes) -> tuple[float, ...]:
        return struct.unpack("<5d", datagram)


class Padder(Doubles):
    def numbers_of(self, datagram: bytes) -> tuple[float, ...]:
        return super().numbers_of(datagram.ljust(40, b"\0"))


class NotFinite(Doubles):
    def numbers_of(self, datagram: bytes) -> tuple[float, ...]:
        if len(datagram) != 40:
            raise DecodeError("has not 40 bytes")
        return struct.unpack("<5d", datagram)


class Rememberer(Doubles):
    last_s = 0.0

    def frame_of(self, numbers: tuple[float, ...]) -> Frame | None:
        numbers = (numbers[0] + self.last_s, *numbers[1:])
        self.last_s = 1.0
        return super().frame_of(numbers)


class HalfReset(Rememberer):
    def reset(self) -> None:
        self.last_s = self.last_s / 2


class Placeless(Doubles):
    def frame_of(self, numbers: tuple[float, ...]) -> Frame | None:
        return Frame(*numbers[:4])


class Pretender(Doubles):
    @property
    def provides(self) -> frozenset[str]:
        return frozenset({"time_s", "velocity_kmh"})


class Understated(Doubles):
    @property
    def provides(self) -> frozenset[str]:
        return frozenset({"time_s", "speed_mps", "yaw_rate_radps", "accel_y_mps2"})


class Silent(Doubles):
    def decode(self, datagram: bytes) -> Frame | None:
        return None


class Nameless(Doubles):
    name = ""


class Old(Doubles):
    api_version = 0


class Pedals(Doubles):
    def frame_of(self, numbers: tuple[float, ...]) -> Frame | None:
        return Frame(*numbers[:4], station_m=numbers[4], throttle=80.0)


class Loose(Doubles):
    def frame_of(self, numbers: tuple[float, ...]) -> Frame | None:
        return Frame(*numbers[:4], station_m=numbers[4], wheel_load_n=[1.0] * 4)  # type: ignore[arg-type]


class Counting(Doubles):
    def frame_of(self, numbers: tuple[float, ...]) -> Frame | None:
        self.bad_fields += 1
        return super().frame_of(numbers)


SAMPLES = [struct.pack("<5d", 10.0 + i, 60.0 + i, 0.2, 11.0, 100.0 + i) for i in range(3)]


def test_a_sound_adapter_of_a_stranger_passes():
    check_adapter(Doubles(), SAMPLES)


@pytest.mark.parametrize(
    ("adapter", "match"),
    [
        (Miles(), "speed_mps = 216.0 is not plausible"),
        (ShortOnBytes(), "cut short raised error .*not DecodeError"),
        (Padder(), "cut to 0 bytes gave a frame"),
        (NotFinite(), "is missing|is not finite"),
        (Rememberer(), "remembers earlier datagrams"),
        (HalfReset(), "after reset"),
        (Placeless(), "neither station_m nor pos_x_m"),
        (Pretender(), "velocity_kmh"),
        (Understated(), r"not in provides: \['station_m'\]"),
        (Silent(), "no sample gave a frame"),
        (Nameless(), "name is empty"),
        (Old(), "contract 0, not 1"),
        (Pedals(), "throttle = 80.0 is not in 0…1"),
        (Loose(), "wheel_load_n = .* is no tuple"),
        (Counting(), "3 fields of the samples were bad"),
    ],
    ids=lambda value: type(value).__name__ if isinstance(value, Adapter) else "",
)
def test_each_way_of_failing_is_named(adapter: Adapter, match: str):
    with pytest.raises(AssertionError, match=match):
        check_adapter(adapter, SAMPLES)


def test_samples_that_do_not_decode_are_named():
    with pytest.raises(AssertionError, match="sample 1 does not decode: has not 40 bytes"):
        check_adapter(Doubles(), [SAMPLES[0], b"short"])
    with pytest.raises(AssertionError, match="at least one sample"):
        check_adapter(Doubles(), [])


def test_the_adapter_is_left_as_it_was():
    adapter = packed("joined")
    check_adapter(adapter, [packet for i in range(3) for packet in joined(i)])
    assert adapter.bad_fields == 0
    assert adapter.decode(joined(7)[0]) is None
