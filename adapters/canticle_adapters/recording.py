"""Recordings as text: a ``.jsonl`` file of native datagrams, one a line.

The reader hands lines on as datagrams and leaves it to the adapter to judge each one, so a
replay counts bad datagrams as the live stream did. It refuses only a file that is no such
recording at all.
"""

from __future__ import annotations

from codecs import BOM_UTF8
from collections.abc import Iterator
from itertools import islice
from pathlib import Path

from canticle_adapters.json_datagram import JsonAdapter
from canticle_daemon.errors import DecodeError, LogFormatError

PROBE_BYTES = 1 << 20
"""The first good datagram must lie within this much of the file."""
PROBE_LINES = 100
"""And within this many lines."""


class RecordingAdapter(JsonAdapter):
    """Decodes one line of a recording; a line is a native datagram."""

    name = "recording"

    def read(self, path: Path) -> Iterator[bytes]:
        """Return the datagrams of a file of JSON lines; see `read_datagrams`."""
        return read_datagrams(path)


def read_datagrams(path: Path) -> Iterator[bytes]:
    """Return the datagrams of a recording, read as they are asked for.

    Windows line ends, a byte order mark, blank lines and a torn last line are tolerated.

    Raises
    ------
    LogFormatError
        The file cannot be read or is no such recording; the text names file and line.
    """
    _check_head(path)
    return _lines_of(path)


def _lines_of(path: Path) -> Iterator[bytes]:
    try:
        with path.open("rb") as file:
            if file.read(len(BOM_UTF8)) != BOM_UTF8:
                file.seek(0)
            for line in file:
                datagram = line.strip()
                if datagram and (line[-1] == 10 or _is_whole(datagram)):
                    yield datagram
    except OSError as error:
        raise _unreadable(path, error) from error


def _is_whole(datagram: bytes) -> bool:
    """Whether a last line without a line end is a datagram, not one torn by a crash."""
    try:
        RecordingAdapter().decode(datagram)
    except DecodeError:
        return False
    return True


def _check_head(path: Path) -> None:
    if path.is_dir():
        raise LogFormatError(f"{path}: is a folder; name a .jsonl file of native datagrams")
    try:
        with path.open("rb") as file:
            head = file.read(PROBE_BYTES)
    except OSError as error:
        raise _unreadable(path, error) from error
    if b"\0" in head:
        raise LogFormatError(f"{path}: is a binary file, not a recording of JSON lines")
    adapter, first_fault = RecordingAdapter(), ""
    lines = enumerate(head.removeprefix(BOM_UTF8).split(b"\n"), start=1)
    filled = ((number, line.strip()) for number, line in lines if line.strip())
    for number, line in islice(filled, PROBE_LINES):
        try:
            adapter.decode(line)
        except DecodeError as error:
            first_fault = first_fault or f"line {number} {error}"
        else:
            return
    reason = first_fault or "it is empty"
    raise LogFormatError(f"{path}: is not a recording of native datagrams: {reason}")


def _unreadable(path: Path, error: OSError) -> LogFormatError:
    return LogFormatError(f"{path}: cannot be read: {error.strerror or error}")
