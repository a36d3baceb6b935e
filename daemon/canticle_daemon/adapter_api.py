"""What an adapter is, and the registry that finds adapters.

An adapter is a codec: one datagram in, one `Frame` or nothing out. The daemon owns the
socket, so an adapter needs no thread and no clock. Third parties add one through the
entry-point group ``canticle.adapters``; the built-in ones are registered the same way.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from importlib.metadata import EntryPoint, entry_points
from pathlib import Path
from typing import ClassVar

from pydantic import BaseModel, ConfigDict

from canticle_daemon.errors import AdapterError, AdapterLoadError
from canticle_daemon.frame import Frame

GROUP = "canticle.adapters"
API_VERSION = 1


class AdapterOptions(BaseModel):
    """Settings of an adapter; unknown keys are refused. Subclass it to add some."""

    model_config = ConfigDict(extra="forbid", frozen=True)


class Adapter(ABC):
    """Turns datagrams of one kind into frames.

    Attributes
    ----------
    name
        The name the user gives (`--adapter`); equal to the entry point's name.
    api_version
        The version of this contract that the adapter was written for.
    Options
        Its settings, read from ``[adapter.<name>]`` of the config file.
    bad_fields
        How many optional fields were of the wrong kind so far and were left out.
    """

    name: ClassVar[str]
    api_version: ClassVar[int] = API_VERSION
    Options: ClassVar[type[AdapterOptions]] = AdapterOptions

    def __init__(self, options: AdapterOptions | None = None) -> None:
        self.options = options if options is not None else self.Options()
        self.bad_fields = 0

    @abstractmethod
    def decode(self, datagram: bytes) -> Frame | None:
        """Return the frame in a datagram, or None when it is not this adapter's or incomplete.

        Raises
        ------
        DecodeError
            The datagram is malformed. Nothing else may be raised, whatever the bytes.
        """

    @property
    def provides(self) -> frozenset[str]:
        """Names of the frame fields this source can carry; empty when it cannot know."""
        return frozenset()

    @property
    def notes(self) -> tuple[str, ...]:
        """Limits of this source the user should know, one sentence each."""
        return ()

    def read(self, path: Path) -> Iterator[bytes]:
        """Return the datagrams in a file, for adapters whose source is one.

        Raises
        ------
        AdapterError
            This adapter reads no files.
        LogFormatError
            The file is no recording of this kind.
        """
        raise AdapterError(f"adapter {self.name!r} reads no files; {path} cannot be replayed")

    def reset(self) -> None:  # noqa: B027 - most adapters remember nothing
        """Forget all that earlier datagrams left behind."""


@dataclass(frozen=True, slots=True)
class AdapterRecord:
    """What became of one registered adapter: `status` is `ready`, `broken` or `duplicate`."""

    name: str
    origin: str
    status: str
    reason: str = ""
    adapter: type[Adapter] | None = None


def load_adapters(points: Iterable[EntryPoint] | None = None) -> list[AdapterRecord]:
    """Load every registered adapter; one that fails becomes a record, never an exception."""
    found = list(entry_points(group=GROUP) if points is None else points)
    names = [point.name for point in found]
    return [
        _load(point, duplicate=names.count(point.name) > 1)
        for point in sorted(found, key=lambda point: (point.name, point.value))
    ]


def find_adapter(name: str, records: Iterable[AdapterRecord] | None = None) -> type[Adapter]:
    """Return the adapter class of that name.

    Raises
    ------
    AdapterLoadError
        There is none, or it is broken, or two distributions claim the name.
    """
    known = load_adapters() if records is None else list(records)
    for record in known:
        if record.name == name:
            if record.adapter is not None:
                return record.adapter
            raise AdapterLoadError(
                f"adapter {name!r} ({record.origin}) is {record.status}: {record.reason}"
            )
    names = ", ".join(sorted({record.name for record in known})) or "none"
    raise AdapterLoadError(f"no adapter named {name!r}; known: {names}")


def _load(point: EntryPoint, *, duplicate: bool) -> AdapterRecord:
    origin = f"{point.dist.name if point.dist else 'unknown'}: {point.value}"
    if duplicate:
        reason = "two distributions register this name; uninstall one"
        return AdapterRecord(point.name, origin, "duplicate", reason)
    try:
        adapter = point.load()
        reason = _fault_of(adapter, point.name)
    except Exception as error:  # a plug-in may fail in any way; it must not stop the rest
        return AdapterRecord(point.name, origin, "broken", f"{type(error).__name__}: {error}")
    if reason:
        return AdapterRecord(point.name, origin, "broken", reason)
    return AdapterRecord(point.name, origin, "ready", adapter=adapter)


def _fault_of(adapter: object, name: str) -> str:
    if not (isinstance(adapter, type) and issubclass(adapter, Adapter)):
        return "it is not a subclass of canticle_daemon.adapter_api.Adapter"
    if getattr(adapter, "name", None) != name:
        return f"its name is {getattr(adapter, 'name', None)!r}, not {name!r}"
    if adapter.api_version != API_VERSION:
        return f"it was written for adapter contract {adapter.api_version}, not {API_VERSION}"
    return ""
