"""The session folder: what ran, and every event the moment it happens.

`events.jsonl` is opened for appending without a buffer of ours: an event is with the operating
system before it is published, so a killed daemon loses nothing that was reported.
"""

from __future__ import annotations

import contextlib
import errno
import os
import platform
import re
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import msgspec

from canticle_daemon import __version__
from canticle_daemon.errors import ConfigError, SystemFaultError
from canticle_daemon.messages import Event, encode

_NUMBERS = re.compile(rb"\[\n[\s\d.,eE+-]*\]")
"""A list of numbers: a track's profile is easier to read a row a line."""


# On Windows a descriptor would turn each line end into two characters.
APPEND = os.O_WRONLY | os.O_CREAT | os.O_EXCL | os.O_APPEND | getattr(os, "O_BINARY", 0)


def wall_time() -> str:
    """Return now as ISO 8601 UTC with milliseconds."""
    return datetime.now(UTC).isoformat(timespec="milliseconds").replace("+00:00", "Z")


class Recorder:
    """One open session folder.

    Parameters
    ----------
    folder
        Its own folder; created, and it must not exist or be empty.
    facts
        What goes into `session.json`.

    Raises
    ------
    ConfigError
        The folder holds something, or cannot be made.
    """

    def __init__(self, folder: Path, facts: dict[str, Any]) -> None:
        self.folder = folder
        self._facts = {
            "version": __version__,
            "python": platform.python_version(),
            "system": platform.platform(),
            "started": wall_time(),
            **facts,
        }
        try:
            make_folder(folder)
            if any(folder.iterdir()):
                raise ConfigError(f"session folder {folder} is not empty; name a new one")
            self._write_facts()
            self._file = os.open(folder / "events.jsonl", APPEND, 0o644)
        except OSError as error:
            raise ConfigError(
                f"session folder {folder} cannot be made: {error.strerror or error}"
            ) from error
        self._size = 0

    def record(self, event: Event) -> None:
        """Stamp an event and append it.

        Raises
        ------
        SystemFaultError
            The disk refused it.
        """
        event.wall_time = wall_time()
        line = encode(event) + b"\n"
        try:
            self._append(line)
        except OSError as error:
            with contextlib.suppress(OSError):
                os.ftruncate(self._file, self._size)  # whole lines only
            raise SystemFaultError(
                f"{self.folder / 'events.jsonl'} cannot be written: {error.strerror or error}"
            ) from error
        self._size += len(line)

    def _append(self, line: bytes) -> None:
        left = line
        while left:
            written = os.write(self._file, left)
            if not written:
                raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))
            left = left[written:]  # a disk that fills up takes a part, and then says why

    def close(self, **facts: Any) -> None:
        """Complete `session.json` and let go of the files.

        Raises
        ------
        SystemFaultError
            The disk refused it.
        """
        self._facts |= {"ended": wall_time(), **facts}
        try:
            self._write_facts()
        except OSError as error:
            raise SystemFaultError(
                f"{self.folder / 'session.json'} cannot be written: {error.strerror or error}"
            ) from error
        finally:
            os.close(self._file)

    def _write_facts(self) -> None:
        """Replace `session.json` in one step, so that no reader ever sees half of it."""
        path = self.folder / "session.json"
        partial = path.with_suffix(".json.part")
        text = msgspec.json.format(msgspec.json.encode(self._facts, enc_hook=str), indent=2)
        text = _NUMBERS.sub(lambda row: b" ".join(row[0].split()), text)
        partial.write_bytes(text + b"\n")
        partial.replace(path)


def make_folder(folder: Path) -> None:
    """Make a folder and those above it, where they are missing.

    Raises
    ------
    ConfigError
        It cannot be made, or is a file, or takes no files.
    """
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        reason = "it is a file" if folder.is_file() else error.strerror or str(error)
        raise ConfigError(f"session folder {folder} cannot be made: {reason}") from error
    if not os.access(folder, os.W_OK | os.X_OK):
        raise ConfigError(f"session folder {folder} cannot be written to")


def new_session_folder(parent: Path) -> Path:
    """Return a folder name under `parent` that is free, named by the local time."""
    stem = datetime.now().astimezone().strftime("%Y-%m-%dT%H-%M-%S")
    folder, count = parent / stem, 2
    while folder.exists():
        folder, count = parent / f"{stem}-{count}", count + 1
    return folder
