"""The layout file of a packed stream: what it may say, and what is refused.

``configs/`` holds two layouts explained line by line. In short: each ``[[packet]]`` is one
kind of datagram, recognized by its size and its constant bytes; each ``[[packet.field]]``
takes a number from a byte offset to a target. A target is a field of the frame, or one of
`VECTORS`, a quaternion or ``lap_fraction``, from which frame fields are derived.

The value of a number is ``sign · (raw · scale + bias)`` in the unit named.
"""

from __future__ import annotations

import difflib
import struct
from collections.abc import Iterable, Iterator
from itertools import combinations
from typing import Literal, TypeAlias

from pydantic import Field, model_validator

from canticle_adapters.attitude import AxisMap
from canticle_adapters.units import UNITS, dimension_of, factor_to_si
from canticle_daemon.config import Section
from canticle_daemon.frame import FLAGS, WHEEL_FIELDS, Frame

ByteOrder: TypeAlias = Literal["little", "big"]
NumberType: TypeAlias = Literal["u8", "u16", "u32", "u64", "i8", "i16", "i32", "i64", "f32", "f64"]
CODES: dict[str, str] = {
    "u8": "B",
    "u16": "H",
    "u32": "I",
    "u64": "Q",
    "i8": "b",
    "i16": "h",
    "i32": "i",
    "i64": "q",
    "f32": "f",
    "f64": "d",
}
"""Letter of `struct` for each number type."""

VECTORS: dict[str, str] = {
    "position": "length",
    "velocity": "speed",
    "acceleration": "acceleration",
    "rotation_rate": "angular rate",
    "forward": "ratio",
    "left": "ratio",
    "right": "ratio",
    "up": "ratio",
}
"""Targets of three numbers, in the simulator's axes, with their dimensions."""

TEXTS: tuple[str, ...] = ("tire_set", "driver", "car_name", "track_name")
FOURS: tuple[str, ...] = (*WHEEL_FIELDS, "quaternion")
TARGETS: tuple[str, ...] = (*Frame.__struct_fields__, *VECTORS, "quaternion", "lap_fraction")
WHEEL_ORDER = ("FL", "FR", "RL", "RR")
QUATERNION_ORDER = ("w", "x", "y", "z")
MAX_DATAGRAM = 65507


def order_sign(byte_order: ByteOrder) -> str:
    """Return the mark of a byte order in `struct`, without alignment."""
    return "<" if byte_order == "little" else ">"


class Constant(Section):
    """Bytes that are always the same in one kind of packet."""

    offset: int = Field(ge=0)
    type: NumberType | None = None
    value: int | float | None = None
    hex: str | None = None
    text: str | None = None

    @model_validator(mode="after")
    def _one_form(self) -> Constant:
        forms = (self.value is not None, self.hex is not None, self.text is not None)
        if sum(forms) != 1 or (self.type is not None) != (self.value is not None):
            raise ValueError("give type and value, or hex, or text")
        self.content("little")
        return self

    def content(self, byte_order: ByteOrder) -> bytes:
        """Return the bytes looked for."""
        if self.hex is not None:
            return bytes.fromhex(self.hex)
        if self.text is not None:
            return self.text.encode()
        code = CODES[self.type or "u8"]
        try:
            return struct.pack(order_sign(byte_order) + code, self.value)
        except (struct.error, OverflowError) as error:
            raise ValueError(f"{self.value!r} is no {self.type}: {error}") from error


class Counter(Section):
    """Where a packet holds the number of the simulation step it belongs to."""

    offset: int = Field(ge=0)
    type: Literal["u8", "u16", "u32", "u64", "i8", "i16", "i32", "i64"] = "u32"


class FieldSpec(Section):
    """One ``[[packet.field]]``."""

    to: str
    offset: int | None = Field(None, ge=0)
    offsets: tuple[int, ...] | None = None
    stride: int | None = Field(None, ge=1)
    type: NumberType | Literal["text"]
    length: int | None = Field(None, ge=1)
    encoding: Literal["utf-8", "latin-1", "utf-16-le", "utf-16-be"] = "utf-8"
    unit: str | None = None
    scale: float = 1.0
    bias: float = 0.0
    sign: Literal[1, -1] = 1
    order: tuple[str, ...] | None = None
    frame: Literal["body", "world"] | None = None
    inverse: bool = False
    mask: int | None = Field(None, gt=0)
    equals: int | None = None
    invert: bool = False
    missing: float | tuple[float, ...] | None = None

    @property
    def count(self) -> int:
        """How many numbers the target takes."""
        return 3 if self.to in VECTORS else 4 if self.to in FOURS else 1

    @property
    def width(self) -> int:
        """Bytes of one item."""
        return self.length or 1 if self.type == "text" else struct.calcsize("<" + CODES[self.type])

    @property
    def places(self) -> tuple[int, ...]:
        """Offset of each item."""
        if self.offsets is not None:
            return self.offsets
        step = self.stride or self.width
        return tuple((self.offset or 0) + i * step for i in range(self.count))

    @property
    def end(self) -> int:
        """Offset after the last byte."""
        return max(self.places) + self.width

    @property
    def factor(self) -> float:
        """What a value in the field's unit is multiplied by to be SI, sign included."""
        dimension = self.dimension
        unit = self.unit or next(iter(UNITS[dimension]))
        return self.sign * factor_to_si(unit, dimension)

    @property
    def dimension(self) -> str:
        """Dimension of the target."""
        return VECTORS.get(self.to) or dimension_of(self.to)

    @property
    def sentinels(self) -> tuple[float, ...]:
        """Raw values that mean the number is missing."""
        if self.missing is None:
            return ()
        return self.missing if isinstance(self.missing, tuple) else (self.missing,)

    @model_validator(mode="after")
    def _consistent(self) -> FieldSpec:
        for fault in self._faults():
            raise ValueError(f"field {self.to!r}: {fault}")
        return self

    def _faults(self) -> Iterator[str]:
        if self.to not in TARGETS:
            close = difflib.get_close_matches(self.to, TARGETS, n=1)
            yield "is no target" + (f" (did you mean {close[0]!r}?)" if close else "")
        yield from self._place_faults()
        yield from self._type_faults()
        yield from self._array_faults()
        yield from self._misplaced_keys()
        try:
            factor_to_si(self.unit or next(iter(UNITS[self.dimension])), self.dimension)
        except ValueError as error:
            yield str(error)

    def _place_faults(self) -> Iterator[str]:
        if (self.offset is None) == (self.offsets is None):
            yield "give offset or offsets"
        if self.offsets is not None:
            if len(self.offsets) != self.count or min(self.offsets) < 0:
                yield f"offsets must be {self.count} numbers from 0"
            if self.stride is not None:
                yield "stride goes with offset, not with offsets"

    def _type_faults(self) -> Iterator[str]:
        if self.type == "text" and self.to not in TEXTS:
            yield "a text cannot become a number"
        if (self.type == "text") != (self.length is not None):
            yield 'length goes with type = "text", and the two are given together'
        if self.type in ("f32", "f64") and self.to in TEXTS:
            yield "only a text or a whole number can become a text"
        if self.type in ("f32", "f64") and self.mask is not None:
            yield "a mask needs a whole number"

    def _array_faults(self) -> Iterator[str]:
        if self.order is None:
            return
        if self.to not in FOURS:
            yield "order goes with four wheels or a quaternion"
        names = QUATERNION_ORDER if self.to == "quaternion" else WHEEL_ORDER
        if sorted(self.order) != sorted(names):
            yield f"order must name {', '.join(names)} once each, as they stand in the packet"

    def _misplaced_keys(self) -> Iterator[str]:
        used = self.model_fields_set
        allowed = {
            "mask": FLAGS,
            "equals": FLAGS,
            "invert": FLAGS,
            "inverse": ("quaternion",),
            "stride": (*FOURS, *VECTORS),
            "frame": ("velocity", "acceleration", "rotation_rate"),
        }
        for key, targets in allowed.items():
            if key in used and self.to not in targets:
                yield f"{key} does not apply here (only to {', '.join(targets)})"
        if self.to in (*FLAGS, *TEXTS) and used & {"unit", "scale", "bias", "sign"}:
            yield "unit, scale, bias and sign apply to numbers only"
        if self.to in ("velocity", "acceleration", "rotation_rate") and self.frame is None:
            yield 'say frame = "body" or "world"'


class Packet(Section):
    """One kind of datagram."""

    name: str = Field(min_length=1)
    size: int | None = Field(None, ge=1, le=MAX_DATAGRAM)
    byte_order: ByteOrder | None = None
    recognize: tuple[Constant, ...] = ()
    counter: Counter | None = None
    optional: bool = False
    field: tuple[FieldSpec, ...] = Field(min_length=1)

    @property
    def min_size(self) -> int:
        """The fewest bytes that hold all that is read."""
        ends = [spec.end for spec in self.field]
        ends += [constant.offset + len(constant.content("little")) for constant in self.recognize]
        if self.counter is not None:
            ends.append(self.counter.offset + struct.calcsize("<" + CODES[self.counter.type]))
        return max(ends)

    @model_validator(mode="after")
    def _fits(self) -> Packet:
        names = [spec.to for spec in self.field]
        for name in names:
            if names.count(name) > 1:
                raise ValueError(f"packet {self.name!r}: {name!r} is given twice")
        for spec in self.field:
            if self.size is not None and spec.end > self.size:
                raise ValueError(
                    f"packet {self.name!r}: field {spec.to!r} ends at byte {spec.end}, "
                    f"beyond the packet's size of {self.size}"
                )
        if self.min_size > (self.size or MAX_DATAGRAM):
            raise ValueError(
                f"packet {self.name!r}: {self.min_size} bytes are read, "
                f"beyond its size of {self.size or MAX_DATAGRAM}"
            )
        return self

    def constants(self, byte_order: ByteOrder) -> tuple[tuple[int, bytes], ...]:
        """Return the offsets and bytes by which the packet is known."""
        order = self.byte_order or byte_order
        return tuple((one.offset, one.content(order)) for one in self.recognize)


class Axes(Section):
    """Which of the simulator's axes are our x, y and z."""

    world: tuple[str, str, str] = ("x", "y", "z")
    body: tuple[str, str, str] = ("x", "y", "z")

    @model_validator(mode="after")
    def _same_handedness(self) -> Axes:
        if AxisMap.parse(self.world).handedness != AxisMap.parse(self.body).handedness:
            raise ValueError(
                "world and body: one is right-handed, the other left-handed; a sign is wrong"
            )
        return self


class Join(Section):
    """How several kinds of packet become one frame."""

    by: Literal["counter", "latest"]
    emit_on: str | None = None
    max_age_s: float = Field(0.5, gt=0)


class LayoutFile(Section):
    """A layout file as it stands."""

    name: str = Field(min_length=1)
    byte_order: ByteOrder = "little"
    lap_length_m: float | None = Field(None, gt=0)
    accelerations_include_gravity: bool | None = None
    gravity_mps2: float = Field(9.80665, gt=9.7, lt=9.9)
    axes: Axes = Axes()
    join: Join | None = None
    packet: tuple[Packet, ...] = Field(min_length=1)

    @property
    def targets(self) -> dict[str, FieldSpec]:
        """Every target that some packet fills."""
        return {spec.to: spec for packet in self.packet for spec in packet.field}

    @model_validator(mode="after")
    def _consistent(self) -> LayoutFile:
        for fault in (*self._packet_faults(), *self._join_faults(), *self._frame_faults()):
            raise ValueError(fault)
        return self

    def _packet_faults(self) -> Iterator[str]:
        names = [packet.name for packet in self.packet]
        for one, other in combinations(self.packet, 2):
            if one.name == other.name:
                yield f"two packets are named {one.name!r}"
            if self._alike(one, other):
                yield (
                    f"packets {one.name!r} and {other.name!r} cannot be told apart; "
                    "give each a size of its own, or constant bytes in recognize"
                )
        if all(packet.optional for packet in self.packet):
            yield f"all packets are optional ({', '.join(names)})"

    def _alike(self, one: Packet, other: Packet) -> bool:
        if one.size is not None and other.size is not None and one.size != other.size:
            return False
        if one.size is not None and one.size < other.min_size:
            return False
        if other.size is not None and other.size < one.min_size:
            return False
        known = _byte_map(one.constants(self.byte_order))
        return all(
            known.get(place, value) == value
            for place, value in _byte_map(other.constants(self.byte_order)).items()
        )

    def _join_faults(self) -> Iterator[str]:
        names = [packet.name for packet in self.packet]
        if self.join is None:
            if len(names) > 1:
                yield 'several packets need [join] with by = "counter" or "latest"'
            return
        if self.join.by == "counter":
            for packet in self.packet:
                if packet.counter is None:
                    yield f"packet {packet.name!r}: join by counter needs its counter"
        elif self.join.emit_on not in names:
            yield f"join.emit_on must name a packet ({', '.join(names)})"

    def _frame_faults(self) -> Iterator[str]:
        has = self.targets.keys()
        attitude = has_attitude(has)
        if "time_s" not in has:
            yield "no field gives 'time_s'"
        if not has & {"speed_mps", "velocity", "vel_x_mps"}:
            yield "no field gives 'speed_mps' or 'velocity'"
        if not has & {"yaw_rate_radps", "rotation_rate"} and not attitude:
            yield "no field gives 'yaw_rate_radps', and no whole attitude from which to derive it"
        if not has & {"accel_y_mps2", "acceleration"}:
            yield "no field gives 'accel_y_mps2' or 'acceleration'"
        yield from self._place_faults()
        yield from self._attitude_faults()
        if self.accelerations_include_gravity is None:
            yield "accelerations_include_gravity must be true or false"
        for name in ("acceleration", "rotation_rate"):
            spec = self.targets.get(name)
            if spec is not None and spec.frame == "world" and not attitude:
                yield f"{name!r} in world axes needs an attitude"

    def _place_faults(self) -> Iterator[str]:
        has = self.targets.keys()
        if "lap_fraction" in has and self.lap_length_m is None:
            yield "'lap_fraction' needs lap_length_m"
        placed = has & {"station_m", "lap_fraction", "position"} or {"pos_x_m", "pos_y_m"} <= has
        if not placed:
            yield "no field gives 'station_m', 'lap_fraction' or 'position'"

    def _attitude_faults(self) -> Iterator[str]:
        has = self.targets.keys()
        sides = sorted(has & {"left", "right", "up"})
        kinds = ("quaternion" in has, bool(has & {"roll_rad", "pitch_rad", "yaw_rad"}))
        if sum((*kinds, "forward" in has)) > 1:
            yield "the attitude is given twice; keep angles, quaternion or directions"
        if len(sides) > 1 or bool(sides) != ("forward" in has):
            yield "directions: give 'forward' and one of 'up', 'left', 'right'"


def has_attitude(targets: Iterable[str]) -> bool:
    """Whether those targets describe the whole attitude."""
    has = set(targets)
    return (
        "quaternion" in has
        or {"roll_rad", "pitch_rad", "yaw_rad"} <= has
        or ("forward" in has and bool(has & {"up", "left", "right"}))
    )


def _byte_map(constants: tuple[tuple[int, bytes], ...]) -> dict[int, int]:
    return {offset + i: value for offset, content in constants for i, value in enumerate(content)}
