"""One kind of packet: from bytes to named values in SI units.

All numbers of a packet are unpacked by one precompiled `struct`, overlapping ones by a
second, and all scalars are scaled in one pass; only when their sum is not finite is each one
looked at by itself.
"""

from __future__ import annotations

import math
import struct
from collections.abc import Callable, Iterable
from typing import Any, NamedTuple, TypeAlias

from canticle_adapters.packed_layout import (
    CODES,
    QUATERNION_ORDER,
    TEXTS,
    WHEEL_ORDER,
    ByteOrder,
    FieldSpec,
    Packet,
    order_sign,
)
from canticle_daemon.frame import FLAGS

Values: TypeAlias = dict[str, Any]
Read: TypeAlias = tuple[int, str]
"""An offset and a `struct` code."""
Unpack: TypeAlias = Callable[..., tuple[Any, ...]]


class _Group(NamedTuple):
    """Several numbers that make one target, by their slice of the scaled numbers."""

    to: str
    start: int
    stop: int


class _Flag(NamedTuple):
    to: str
    place: int
    mask: int | None
    equals: int | None
    invert: bool

    def of(self, raw: Any) -> bool:
        if self.mask is not None:
            raw &= self.mask
        state = raw == self.equals if self.equals is not None else raw != 0
        return bool(state) is not self.invert


class PacketReader:
    """Recognizes and reads the packets of one kind."""

    def __init__(self, packet: Packet, byte_order: ByteOrder) -> None:
        self.name = packet.name
        self.optional = packet.optional
        self._constants = packet.constants(byte_order)
        self._sizes = (packet.size or packet.min_size, packet.size or math.inf)
        order = order_sign(packet.byte_order or byte_order)
        self._unpackers, self._index = _lay_out(_reads_of(packet), order)
        self._scaling: list[tuple[int, float, float]] = []
        self._names: list[str] = []
        self._groups: list[_Group] = []
        self._flags: list[_Flag] = []
        self._texts: list[tuple[str, int, str]] = []
        self._missing: list[tuple[str, tuple[int, ...], tuple[float, ...]]] = []
        for spec in sorted(packet.field, key=lambda spec: spec.count):
            self._plan(spec)
        self._counter = None
        if packet.counter is not None:
            self._counter = self._index[packet.counter.offset, CODES[packet.counter.type]]

    def recognizes(self, datagram: bytes) -> bool:
        """Whether the constant bytes are there."""
        for offset, content in self._constants:
            if not datagram.startswith(content, offset):
                return False
        return True

    def fits(self, datagram: bytes) -> bool:
        """Whether the size is right."""
        return self._sizes[0] <= len(datagram) <= self._sizes[1]

    @property
    def is_marked(self) -> bool:
        """Whether constant bytes tell this kind, not size alone."""
        return bool(self._constants)

    def read(self, datagram: bytes, bad: list[str]) -> tuple[Values, float]:
        """Return the packet's values and its counter; what is bad is left out and named."""
        raw: tuple[Any, ...] = ()
        for unpack in self._unpackers:
            raw += unpack(datagram)
        numbers = [raw[i] * slope + bias for i, slope, bias in self._scaling]
        values: Values = dict(zip(self._names, numbers, strict=False))  # single ones come first
        for to, start, stop in self._groups:
            values[to] = tuple(numbers[start:stop])
        if not math.isfinite(sum(numbers)):
            _drop_bad(values, bad)
        for flag in self._flags:
            values[flag.to] = flag.of(raw[flag.place])
        for to, index, encoding in self._texts:
            _read_text(to, raw[index], encoding, values, bad)
        for to, indices, sentinels in self._missing:
            if any(raw[i] in sentinels for i in indices):
                values.pop(to, None)
        return values, 0.0 if self._counter is None else raw[self._counter]

    def _plan(self, spec: FieldSpec) -> None:
        indices = tuple(self._index[read] for read in _reads_of_field(spec))
        slope, bias = spec.factor * spec.scale, spec.factor * spec.bias
        if spec.sentinels:
            self._missing.append((spec.to, indices, spec.sentinels))
        if spec.to in FLAGS:
            flag = _Flag(spec.to, indices[0], spec.mask, spec.equals, spec.invert)
            self._flags.append(flag)
        elif spec.to in TEXTS:
            self._texts.append((spec.to, indices[0], spec.encoding))
        else:
            start = len(self._scaling)
            self._scaling += [(i, slope, bias) for i in indices]
            if spec.count > 1:
                self._groups.append(_Group(spec.to, start, start + spec.count))
            else:
                self._names.append(spec.to)


def _reads_of_field(spec: FieldSpec) -> list[Read]:
    """Return the field's reads in our order of wheels or quaternion parts."""
    code = f"{spec.length}s" if spec.type == "text" else CODES[spec.type]
    places = spec.places
    if spec.order is not None:
        ours = QUATERNION_ORDER if spec.to == "quaternion" else WHEEL_ORDER
        places = tuple(places[spec.order.index(name)] for name in ours)
    return [(place, code) for place in places]


def _reads_of(packet: Packet) -> set[Read]:
    reads = {read for spec in packet.field for read in _reads_of_field(spec)}
    if packet.counter is not None:
        reads.add((packet.counter.offset, CODES[packet.counter.type]))
    return reads


def _lay_out(reads: Iterable[Read], order: str) -> tuple[list[Unpack], dict[Read, int]]:
    """Pack the reads into as few `struct` formats as their overlaps allow.

    Returns
    -------
    The unpackers, and each read's place in what they yield one after the other.
    """
    left = sorted(reads)
    unpackers: list[Unpack] = []
    index: dict[Read, int] = {}
    while left:
        form, end, overlapping = order, 0, []
        for offset, code in left:
            if offset < end:
                overlapping.append((offset, code))
                continue
            form += f"{offset - end}x{code}"
            end = offset + struct.calcsize("<" + code)
            index[offset, code] = len(index)
        unpackers.append(struct.Struct(form).unpack_from)
        left = overlapping
    return unpackers, index


def _drop_bad(values: Values, bad: list[str]) -> None:
    """Leave out what is not finite: infinity is a fault, NaN the usual mark of "no value"."""
    for to, value in tuple(values.items()):
        numbers = value if isinstance(value, tuple) else (value,)
        if not all(map(math.isfinite, numbers)):
            del values[to]
            if any(map(math.isinf, numbers)):
                bad.append(to)


def _read_text(to: str, raw: Any, encoding: str, values: Values, bad: list[str]) -> None:
    if not isinstance(raw, bytes):
        values[to] = str(raw)
        return
    text = raw.decode(encoding, "replace").partition("\0")[0].rstrip("\ufffd").strip()
    if "\ufffd" in text:
        bad.append(to)
    elif text:
        values[to] = text
