"""Several kinds of packet become one set of values."""

from __future__ import annotations

from collections.abc import Sequence
from typing import NamedTuple, Protocol

from canticle_adapters.packed_layout import LayoutFile
from canticle_adapters.packed_reader import Values

MAX_PENDING = 8
"""Steps that may be incomplete at once when packets arrive out of order."""


class Joiner(Protocol):
    """Takes packets one by one and gives joined values when a set is complete."""

    def add(self, name: str, counter: float, values: Values) -> Values | None:
        """Take one packet's values; return the joined ones when it completed them."""

    def reset(self) -> None:
        """Forget all packets."""


class Alone:
    """One kind of packet: each is complete by itself."""

    def add(self, name: str, counter: float, values: Values) -> Values | None:
        """Return the values as they are."""
        return values

    def reset(self) -> None:
        """Nothing is kept."""


class CounterJoin:
    """Packets with the same counter belong together; the last required one completes them.

    A step still incomplete when a later one is done is given up. Optional packets count if
    they came before the step was complete.
    """

    def __init__(self, required: Sequence[str]) -> None:
        self._required = frozenset(required)
        self._pending: dict[float, dict[str, Values]] = {}

    def add(self, name: str, counter: float, values: Values) -> Values | None:
        """Take one packet's values; return the joined ones when it completed its step."""
        packets = self._pending.setdefault(counter, {})
        packets[name] = values
        if not packets.keys() >= self._required:
            if len(self._pending) > MAX_PENDING:
                del self._pending[next(iter(self._pending))]
            return None
        joined: Values = {}
        for part in packets.values():
            joined |= part
        while counter in self._pending:
            del self._pending[next(iter(self._pending))]
        return joined

    def reset(self) -> None:
        """Forget all packets."""
        self._pending.clear()


class _Kept(NamedTuple):
    time_s: float | None
    values: Values


class LatestJoin:
    """One kind of packet gives the beat; the others lend it their latest values.

    A packet's age is judged on the stream's clock: its own `time_s` if it has one, else that
    of the beat before it. Too old, a required packet withholds the frame and an optional one
    its values.
    """

    def __init__(self, emit_on: str, others: dict[str, bool], max_age_s: float) -> None:
        self._emit_on = emit_on
        self._others = others
        self._max_age_s = max_age_s
        self._kept: dict[str, _Kept] = {}
        self._time_s: float | None = None

    def add(self, name: str, counter: float, values: Values) -> Values | None:
        """Take one packet's values; return the joined ones when it gives the beat."""
        if name != self._emit_on:
            self._kept[name] = _Kept(values.get("time_s", self._time_s), values)
            return None
        now = values.get("time_s")
        if now is None:
            now = max((k.time_s for k in self._kept.values() if k.time_s is not None), default=0.0)
        self._time_s = now
        return self._joined(now, values)

    def _joined(self, now: float, values: Values) -> Values | None:
        joined: Values = {}
        for name, optional in self._others.items():
            kept = self._kept.get(name)
            if kept is not None and self._is_fresh(kept, now):
                joined |= kept.values
            elif not optional:
                return None
        return joined | values

    def _is_fresh(self, kept: _Kept, now: float) -> bool:
        return kept.time_s is None or abs(now - kept.time_s) <= self._max_age_s

    def reset(self) -> None:
        """Forget all packets."""
        self._kept.clear()
        self._time_s = None


def joiner_of(layout: LayoutFile) -> Joiner:
    """Return the joiner that a layout asks for."""
    if layout.join is None or len(layout.packet) == 1:
        return Alone()
    if layout.join.by == "counter":
        return CounterJoin([packet.name for packet in layout.packet if not packet.optional])
    emit_on = layout.join.emit_on or ""
    others = {p.name: p.optional for p in layout.packet if p.name != emit_on}
    return LatestJoin(emit_on, others, layout.join.max_age_s)
