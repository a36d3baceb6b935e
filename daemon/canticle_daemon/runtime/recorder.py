"""The session folder: what ran, and every event the moment it happens.

`events.jsonl` is opened for appending without a buffer of ours: an event is with the operating
system before it is published, so a killed daemon loses nothing that was reported.
"""

from __future__ import annotations

import os
import platform
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import msgspec

from canticle_daemon import __version__
from canticle_daemon.errors import ConfigError, SystemFaultError
from canticle_daemon.messages import Event, encode


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
        try:
            folder.mkdir(parents=True, exist_ok=True)
            if any(folder.iterdir()):
                raise ConfigError(f"session folder {folder} is not empty; name a new one")
            self._file = os.open(
                folder / "events.jsonl", os.O_WRONLY | os.O_CREAT | os.O_EXCL | os.O_APPEND, 0o644
            )
        except OSError as error:
            raise ConfigError(
                f"session folder {folder} cannot be made: {error.strerror or error}"
            ) from error
        self._facts = {
            "version": __version__,
            "python": platform.python_version(),
            "system": platform.platform(),
            "started": wall_time(),
            **facts,
        }
        self._write_facts()

    def record(self, event: Event) -> None:
        """Stamp an event and append it.

        Raises
        ------
        SystemFaultError
            The disk refused it.
        """
        event.wall_time = wall_time()
        try:
            os.write(self._file, encode(event) + b"\n")
        except OSError as error:
            raise SystemFaultError(
                f"{self.folder / 'events.jsonl'} cannot be written: {error.strerror or error}"
            ) from error

    def close(self, **facts: Any) -> None:
        """Complete `session.json` and let go of the files."""
        self._facts |= {"ended": wall_time(), **facts}
        self._write_facts()
        os.close(self._file)

    def _write_facts(self) -> None:
        """Replace `session.json` in one step, so that no reader ever sees half of it."""
        path = self.folder / "session.json"
        partial = path.with_suffix(".json.part")
        text = msgspec.json.format(msgspec.json.encode(self._facts, enc_hook=str), indent=2)
        partial.write_bytes(text + b"\n")
        partial.replace(path)


def new_session_folder(parent: Path) -> Path:
    """Return a folder name under `parent` that is free, named by the local time."""
    stem = datetime.now().astimezone().strftime("%Y-%m-%dT%H-%M-%S")
    folder, count = parent / stem, 2
    while folder.exists():
        folder, count = parent / f"{stem}-{count}", count + 1
    return folder
