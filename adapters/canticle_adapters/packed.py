"""Fixed binary datagrams, described by a layout file.

Three steps, a module each: read a packet (`packed_reader`), join the kinds of packet
(`packed_join`), derive and build the frame (`packed_frame`). What a layout may say is in
`packed_layout`; two explained layouts are in ``configs/``.
"""

from __future__ import annotations

from pathlib import Path

from canticle_adapters.packed_frame import FrameBuilder
from canticle_adapters.packed_join import joiner_of
from canticle_adapters.packed_layout import LayoutFile
from canticle_adapters.packed_reader import PacketReader
from canticle_daemon.adapter_api import Adapter, AdapterOptions
from canticle_daemon.config import load_toml
from canticle_daemon.errors import ConfigError, DecodeError
from canticle_daemon.frame import Frame


class PackedOptions(AdapterOptions):
    """Settings of the packed adapter."""

    layout: Path | None = None


class PackedAdapter(Adapter):
    """Decodes datagrams of one layout.

    Raises
    ------
    ConfigError
        No layout is named, or it is wrong; the text names file and key.
    """

    name = "packed"
    Options = PackedOptions

    def __init__(self, options: AdapterOptions | None = None) -> None:
        super().__init__(options)
        path = getattr(self.options, "layout", None)
        if path is None:
            raise ConfigError(
                "adapter 'packed' needs a layout file: --layout FILE, or layout in [input]"
            )
        self.layout = load_toml(path, LayoutFile)
        order = self.layout.byte_order
        self._readers = [PacketReader(packet, order) for packet in self.layout.packet]
        self._joiner = joiner_of(self.layout)
        self._builder = FrameBuilder(self.layout)

    @property
    def provides(self) -> frozenset[str]:
        """Names of the frame fields that the layout gives, derived ones included."""
        return self._builder.provides

    @property
    def notes(self) -> tuple[str, ...]:
        """Limits of the layout."""
        return self._builder.notes

    def decode(self, datagram: bytes) -> Frame | None:
        """Return the frame that this datagram completes, if it does.

        Raises
        ------
        DecodeError
            It is cut short, or a required field is missing or not finite.
        """
        reader = self._reader_of(datagram)
        if reader is None:
            return None
        bad: list[str] = []
        values, counter = reader.read(datagram, bad)
        joined = self._joiner.add(reader.name, counter, values)
        frame = None if joined is None else self._builder.build(joined, bad)
        self.bad_fields += len(bad)
        return frame

    def reset(self) -> None:
        """Forget pending packets and the last attitude."""
        self._joiner.reset()
        self._builder.reset()

    def _reader_of(self, datagram: bytes) -> PacketReader | None:
        for reader in self._readers:
            if reader.fits(datagram) and reader.recognizes(datagram):
                return reader
        for reader in self._readers:
            if reader.is_marked and reader.recognizes(datagram):
                raise DecodeError(
                    f"is marked as packet {reader.name!r} but has {len(datagram)} bytes"
                )
        return None
