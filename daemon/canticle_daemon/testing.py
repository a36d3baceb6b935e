"""Batteries that anyone may run against a part of their own.

An adapter, built-in or a stranger's, passes when::

    from canticle_daemon.testing import check_adapter

    def test_it_keeps_the_contract():
        check_adapter(MyAdapter(), samples)

A battery raises AssertionError with a sentence that says what was broken and by what.
"""

from __future__ import annotations

import copy
import math
import random
from collections.abc import Iterator, Sequence
from typing import Any

from canticle_daemon.adapter_api import API_VERSION, Adapter
from canticle_daemon.errors import DecodeError
from canticle_daemon.frame import FLAGS, SCALARS, WHEEL_FIELDS, Frame

# --- adapters ---------------------------------------------------------------------------------

REQUIRED = ("time_s", "speed_mps", "yaw_rate_radps", "accel_y_mps2")
RANDOM_DATAGRAMS = 300
FLIPS_A_SAMPLE = 100
MAX_PREFIXES = 2000
_LIMITS = {
    "speed_mps": 200.0,
    "vel_x_mps": 200.0,
    "vel_y_mps": 200.0,
    "yaw_rate_radps": 20.0,
    "accel_x_mps2": 200.0,
    "accel_y_mps2": 200.0,
    "accel_z_mps2": 200.0,
    "roll_rad": 2.0 * math.pi,
    "pitch_rad": 2.0 * math.pi,
    "steer_rad": 8.0 * math.pi,
    "pos_x_m": 1e6,
    "pos_y_m": 1e6,
    "pos_z_m": 1e5,
    "station_m": 1e5,
    "lateral_m": 1e3,
    "fuel_kg": 1e3,
    "wheel_load_n": 1e5,
    "wheel_slip_angle_rad": 2.0 * math.pi,
    "wheel_slip_ratio": 100.0,
}
"""Beyond these a sample is in some other unit, not merely fast."""


def check_adapter(adapter: Adapter, samples: Sequence[bytes], *, seed: int = 1) -> None:
    """Check that an adapter keeps its contract.

    Parameters
    ----------
    adapter
        As made for a user; it is copied, and left as it was.
    samples
        Datagrams of its kind in the order of a stream, with no padding at their end; at least
        one must give a frame, and those that give None must be parts of one.
    seed
        Of the random bytes and flipped bits.

    Raises
    ------
    AssertionError
        The contract is broken; the text says where.
    """
    assert samples, "check_adapter needs at least one sample"
    _check_declaration(adapter)
    fresh = copy.deepcopy(adapter)
    fresh.reset()
    fresh.bad_fields = 0
    frames = _decode_samples(copy.deepcopy(fresh), samples)
    for frame in frames:
        _check_frame(frame, adapter)
    _check_memory(fresh, samples, frames)
    _check_bad_input(fresh, samples, seed)


def _check_declaration(adapter: Adapter) -> None:
    name = getattr(adapter, "name", None)
    assert isinstance(name, str), "an adapter needs a name"
    assert name, "an adapter's name is empty"
    assert adapter.api_version == API_VERSION, (
        f"{name}: written for contract {adapter.api_version}, not {API_VERSION}"
    )
    unknown = set(adapter.provides) - set(Frame.__struct_fields__)
    assert not unknown, f"{name}: provides names no frame has: {sorted(unknown)}"
    assert all(isinstance(note, str) and note for note in adapter.notes), (
        f"{name}: notes must be sentences"
    )


def _decode_samples(adapter: Adapter, samples: Sequence[bytes]) -> list[Frame]:
    frames = []
    for number, sample in enumerate(samples):
        try:
            frame = adapter.decode(sample)
        except DecodeError as error:
            raise AssertionError(f"sample {number} does not decode: {error}") from error
        assert frame is None or isinstance(frame, Frame), (
            f"sample {number}: decode returned {type(frame).__name__}, not a Frame or None"
        )
        if frame is not None:
            frames.append(frame)
    assert frames, "no sample gave a frame"
    assert not adapter.bad_fields, f"{adapter.bad_fields} fields of the samples were bad"
    return frames


def _check_frame(frame: Frame, adapter: Adapter) -> None:
    _check_types(frame)
    given = dict(_given(frame))
    beyond = given.keys() - adapter.provides if adapter.provides else ()
    assert not beyond, f"fields are given but not in provides: {sorted(beyond)}"
    for name, limit in _LIMITS.items():
        numbers = given.get(name, 0.0)
        for number in numbers if isinstance(numbers, tuple) else (numbers,):
            assert abs(number) <= limit, f"{name} = {numbers} is not plausible in SI units"


def _check_types(frame: Frame) -> None:
    """Check what any frame must be, however odd the bytes it came from."""
    for name, value in _given(frame):
        if name in SCALARS:
            assert isinstance(value, float), f"{name} = {value!r} is no float"
            assert math.isfinite(value), f"{name} = {value} is not finite"
        elif name in WHEEL_FIELDS:
            assert isinstance(value, tuple), f"{name} = {value!r} is no tuple"
            assert len(value) == 4, f"{name} has {len(value)} numbers, not 4"
            assert all(map(math.isfinite, value)), f"{name} = {value} is not finite"
        elif name in FLAGS:
            assert isinstance(value, bool), f"{name} = {value!r} is no flag"
        else:
            assert isinstance(value, str), f"{name} = {value!r} is no text"
            written = value.encode("utf-8", "replace").decode()
            assert written == value, f"{name} = {value!r} cannot be written as UTF-8"
    _check_needs(frame)


def _check_needs(frame: Frame) -> None:
    given = dict(_given(frame)).keys()
    for name in REQUIRED:
        assert name in given, f"required {name} is missing"
    assert "station_m" in given or {"pos_x_m", "pos_y_m"} <= given, (
        "neither station_m nor pos_x_m with pos_y_m is given"
    )
    for name in ("throttle", "brake"):
        share = getattr(frame, name)
        assert name not in given or 0.0 <= share <= 1.0, f"{name} = {share} is not in 0…1"


def _check_memory(fresh: Adapter, samples: Sequence[bytes], frames: list[Frame]) -> None:
    used = copy.deepcopy(fresh)
    _decode_samples(used, samples)
    if type(fresh).reset is not Adapter.reset:
        used.reset()
        again = _decode_samples(used, samples)
        assert _same(again, frames), "after reset() the same samples give other frames"
        return
    backwards = _decode_samples(used, samples[::-1])
    assert _same(backwards[::-1], frames), (
        "decode remembers earlier datagrams, yet there is no reset() of its own"
    )


def _check_bad_input(fresh: Adapter, samples: Sequence[bytes], seed: int) -> None:
    adapter = copy.deepcopy(fresh)
    for prefix in _prefixes(samples):
        frame = _decode_bad(adapter, "a sample cut short", prefix)
        assert frame is None, f"a sample cut to {len(prefix)} bytes gave a frame: {prefix!r:.200}"
    for what, datagram in _disturbed(samples, random.Random(seed)):
        frame = _decode_bad(adapter, what, datagram)
        if frame is not None:
            try:
                _check_types(frame)
            except AssertionError as error:
                raise AssertionError(f"{what}: {error}: {datagram!r:.200}") from error


def _decode_bad(adapter: Adapter, what: str, datagram: bytes) -> Frame | None:
    try:
        return adapter.decode(datagram)
    except DecodeError:
        return None
    except Exception as error:
        fault = f"{type(error).__name__} ({error}), not DecodeError"
        raise AssertionError(f"{what} raised {fault}: {datagram!r:.200}") from error


def _prefixes(samples: Sequence[bytes]) -> Iterator[bytes]:
    for sample in samples[: 1 + MAX_PREFIXES // (1 + len(samples[0]))]:
        for length in range(len(sample)):
            yield sample[:length]


def _disturbed(samples: Sequence[bytes], chance: random.Random) -> Iterator[tuple[str, bytes]]:
    for _ in range(RANDOM_DATAGRAMS):
        size = chance.choice((1, 7, 64, len(samples[0]), 1472))
        yield "random bytes", chance.randbytes(size)
    for sample in samples[:20]:
        yield "a sample with a byte after it", sample + b"\0"
        for _ in range(FLIPS_A_SAMPLE):
            yield "a sample with flipped bits", _flipped(sample, chance)
        for start in (0, 8, len(sample) // 2):
            tail = chance.randbytes(max(0, len(sample) - start))
            yield "a sample with random bytes in it", sample[:start] + tail


def _flipped(sample: bytes, chance: random.Random) -> bytes:
    flipped = bytearray(sample)
    for _ in range(chance.randint(1, 4)):
        bit = chance.randrange(8 * len(sample))
        flipped[bit // 8] ^= 1 << bit % 8
    return bytes(flipped)


def _given(frame: Frame) -> Iterator[tuple[str, Any]]:
    """Yield the fields that are there: NaN and None mark absence."""
    for name in Frame.__struct_fields__:
        value = getattr(frame, name)
        if value is not None and value == value:
            yield name, value


def _same(one: Sequence[Frame], other: Sequence[Frame]) -> bool:
    return [dict(_given(frame)) for frame in one] == [dict(_given(frame)) for frame in other]


# --- estimators -------------------------------------------------------------------------------
