"""Batteries that anyone may run against a part of their own.

An adapter, built-in or a stranger's, passes when::

    from canticle_daemon.testing import check_adapter

    def test_it_keeps_the_contract():
        check_adapter(MyAdapter(), samples)

A stage of the pipeline, or a whole one, passes when `check_stage` returns::

    check_stage(lambda: Pipeline(track, car), frames)

A battery raises AssertionError with a sentence that says what was broken and by what.
"""

from __future__ import annotations

import copy
import math
import random
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import fields, is_dataclass
from typing import Any, Protocol

import msgspec
import numpy as np

from canticle_daemon.adapter_api import API_VERSION, Adapter
from canticle_daemon.errors import DecodeError
from canticle_daemon.frame import FLAGS, NAN, SCALARS, WHEEL_FIELDS, Frame, FrameBlock

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


# --- stages -----------------------------------------------------------------------------------

OFFSET_S = 4096.0
"""A whole number of every window that a stage may keep by the clock."""
OFFSET_TOLERANCE = 1e-6
EVENT_TOLERANCE = 5e-3
"""With another zero of the clock a frame may fall on the other side of a window's edge."""
CUTS = 6
OPTIONAL = tuple(name for name in SCALARS if name not in (*REQUIRED, "station_m"))


class Stage(Protocol):
    """What takes in blocks: a stage of the pipeline, or a chain of them."""

    def process(self, block: FrameBlock) -> Any:
        """Return a dataclass or mapping of columns (last axis: frames) and lists of events."""


def check_stage(make: Callable[[], Stage], frames: Sequence[Frame], *, seed: int = 1) -> None:
    """Check that a stage keeps the laws of the pipeline.

    It leaves its inputs alone; gives the same again; gives the same to the bit however the
    stream is cut, and from a deep copy taken anywhere; after `reset`, where it has one, it is
    as new; the clock's zero does not matter; missing fields, gaps, repeats and a stream that
    runs backward do not stop it.

    Parameters
    ----------
    make
        Makes a fresh stage.
    frames
        A stream that shows what the stage does, a few hundred frames or more.
    seed
        Of the cuts.

    Raises
    ------
    AssertionError
        A law is broken; the text says which.
    """
    assert (type(make()).__doc__ or "").strip(), f"{type(make()).__name__} has no docstring"
    chance = random.Random(seed)
    whole = _run(make(), frames, [len(frames)])
    _check_untouched(make(), frames)
    _alike(_run(make(), frames, [len(frames)]), whole, "a second fresh stage")
    for _ in range(CUTS):
        sizes = [chance.choice((1, 2, 7, 40, 300)) for _ in range(9)]
        _alike(_run(make(), frames, sizes), whole, f"blocks of {sizes}")
    for at in (1, len(frames) // 3, len(frames) - 1):
        _check_copy(make(), frames, at, whole)
    _check_reset(make(), frames, whole)
    later = [msgspec.structs.replace(f, time_s=f.time_s + OFFSET_S) for f in frames]
    shifted = _run(make(), later, [len(frames)])
    moved = _clock_moved(shifted, -OFFSET_S)
    _alike(moved, whole, "another zero of the clock", OFFSET_TOLERANCE, EVENT_TOLERANCE)
    for what, stream in _mishaps(list(frames)):
        _check_survives(make(), what, stream)


def _run(stage: Stage, frames: Sequence[Frame], sizes: Sequence[int]) -> dict[str, Any]:
    """Feed a stream in blocks of the sizes over and over; join what comes out."""
    parts: list[dict[str, Any]] = []
    start = 0
    while start < len(frames):
        stop = start + sizes[len(parts) % len(sizes)]
        block = FrameBlock.from_frames(frames[start:stop])
        parts.append(_columns(stage.process(block), len(block)))
        start = stop
    return _joined(parts)


def _columns(output: Any, count: int, prefix: str = "") -> dict[str, Any]:
    """Flatten what a stage returned: name to column or to list of events."""
    found: dict[str, Any] = {}
    if is_dataclass(output):
        output = {item.name: getattr(output, item.name) for item in fields(output)}
    assert isinstance(output, Mapping), f"a stage returned {type(output).__name__}"
    for name, value in output.items():
        if isinstance(value, np.ndarray):
            assert value.shape[-1:] == (count,), f"{name} has shape {value.shape} for {count} rows"
            found[prefix + name] = value.copy()
        elif isinstance(value, list):
            found[prefix + name] = msgspec.to_builtins(value)
        elif value is not None:
            found |= _columns(value, count, f"{prefix}{name}.")
    return found


def _joined(parts: Sequence[Mapping[str, Any]]) -> dict[str, Any]:
    assert all(part.keys() == parts[0].keys() for part in parts), "columns come and go"
    return {
        name: [event for part in parts for event in part[name]]
        if isinstance(first, list)
        else np.concatenate([part[name] for part in parts], axis=-1)
        for name, first in parts[0].items()
    }


def _alike(
    one: Mapping[str, Any],
    other: Mapping[str, Any],
    what: str,
    tol: float = 0.0,
    loose: float = 0.0,
) -> None:
    """Compare columns within `tol`, events within `loose`, both to the bit by default."""
    assert one.keys() == other.keys(), f"{what} gives other columns"
    for name, value in one.items():
        if isinstance(value, list):
            same = _near(value, other[name], loose)
        elif value.dtype.kind == "f":
            same = np.allclose(value, other[name], rtol=tol, atol=tol, equal_nan=True)
        else:
            same = np.array_equal(value, other[name])
        assert same, f"{what} gives another {name}"


def _near(one: Any, other: Any, tol: float) -> bool:
    if isinstance(one, Mapping):
        return one.keys() == other.keys() and all(_near(one[k], other[k], tol) for k in one)
    if isinstance(one, list | tuple):
        alike = (_near(a, b, tol) for a, b in zip(one, other, strict=True))
        return len(one) == len(other) and all(alike)
    if isinstance(one, float) and isinstance(other, float):
        both_nan = one != one and other != other
        return both_nan or one == other or abs(one - other) <= tol * (1.0 + abs(one))
    return bool(one == other)


def _check_untouched(stage: Stage, frames: Sequence[Frame]) -> None:
    block = FrameBlock.from_frames(frames)
    before = block.scalars.copy()
    stage.process(block)
    assert np.array_equal(block.scalars, before, equal_nan=True), "the stage writes into its input"


def _check_copy(stage: Stage, frames: Sequence[Frame], at: int, whole: Mapping[str, Any]) -> None:
    first = _run(stage, frames[:at], [at])
    twin = copy.deepcopy(stage)
    _run(stage, frames[at:], [len(frames)])  # the original goes on and must not disturb the copy
    rest = _run(twin, frames[at:], [len(frames)])
    _alike(_joined([first, rest]), whole, f"a deep copy taken after {at} frames")


def _check_reset(stage: Stage, frames: Sequence[Frame], whole: Mapping[str, Any]) -> None:
    reset = getattr(stage, "reset", None)
    if reset is not None:
        _run(stage, frames, [len(frames)])
        reset()
        _alike(_run(stage, frames, [len(frames)]), whole, "a stage that was reset")


def _clock_moved(result: Mapping[str, Any], by_s: float) -> dict[str, Any]:
    moved = dict(result)
    for name, value in result.items():
        if isinstance(value, list):
            moved[name] = [event | {"time_s": event["time_s"] + by_s} for event in value]
        elif name.split(".")[-1] == "time_s":
            moved[name] = value + by_s
    return moved


def _mishaps(frames: list[Frame]) -> Iterator[tuple[str, list[Frame]]]:
    middle = len(frames) // 2
    for name in OPTIONAL:
        blank = [msgspec.structs.replace(f, **{name: NAN}) for f in frames[middle:]]
        yield f"{name} missing from the middle on", frames[:middle] + blank
    bare = [msgspec.structs.replace(f, **dict.fromkeys(OPTIONAL, NAN)) for f in frames]
    yield "nothing but the required fields", bare
    gone = msgspec.structs.replace(frames[middle], speed_mps=NAN, yaw_rate_radps=NAN)
    yield "a required number missing", [*frames[:middle], gone, *frames[middle + 1 :]]
    yield "a gap", frames[:middle] + frames[middle + 60 :]
    yield "every frame twice", [frame for frame in frames for _ in range(2)]
    yield "a stream that runs backward", frames[::-1]
    yield "a single frame", frames[:1]


def _check_survives(stage: Stage, what: str, stream: list[Frame]) -> None:
    try:
        _run(stage, stream, [1, 50, 3, len(stream)])
    except AssertionError:
        raise
    except Exception as error:
        fault = f"{type(error).__name__} ({error})"
        raise AssertionError(f"{what} raised {fault}") from error
