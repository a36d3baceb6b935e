"""The options that `run`, `rehearse` and `replay` share; each wins over its config key."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Annotated, Any

import typer

from canticle_daemon.config import Config, load_config
from canticle_daemon.errors import ConfigError

ConfigOption = Annotated[
    Path | None, typer.Option("--config", help="Settings file; options win over it.")
]
BindOption = Annotated[
    str | None, typer.Option("--bind", metavar="HOST:PORT", help="UDP port to listen on.")
]
AdapterOption = Annotated[
    str | None,
    typer.Option(
        "--adapter", metavar="NAME", help="Telemetry format: json, packed, or one of your own."
    ),
]
LayoutOption = Annotated[
    Path | None, typer.Option("--layout", help="Layout file of the packed adapter.")
]
TrackOption = Annotated[Path | None, typer.Option("--track", help="Track file.")]
CarOption = Annotated[Path | None, typer.Option("--car", help="Car file.")]
TargetsOption = Annotated[Path | None, typer.Option("--targets", help="A coach's turn-in marks.")]
RunLapsOption = Annotated[
    int | None, typer.Option("--run-laps", help="Laps that a set of tires must last.")
]
VoiceOption = Annotated[bool | None, typer.Option("--voice/--no-voice", help="Spoken cues.")]
OverlayOption = Annotated[
    bool | None, typer.Option("--overlay/--no-overlay", help="The overlay window.")
]
PublishOption = Annotated[
    str | None, typer.Option("--publish", metavar="ENDPOINT", help="ZeroMQ endpoint to publish on.")
]
SessionsOption = Annotated[
    Path | None, typer.Option("--sessions", help="Folder in which each session gets its own.")
]
SessionOption = Annotated[
    Path | None, typer.Option("--session", help="The very folder for this session, new or empty.")
]


def settings(
    config: Path | None,
    *,
    bind: str | None = None,
    adapter: str | None = None,
    layout: Path | None = None,
    track: Path | None = None,
    car: Path | None = None,
    targets: Path | None = None,
    run_laps: int | None = None,
    voice: bool | None = None,
    overlay: bool | None = None,
    publish: str | None = None,
    sessions: Path | None = None,
    defaults: Mapping[str, Any] | None = None,
) -> Config:
    """Merge the config file with the options, and with a command's own `defaults`.

    Raises
    ------
    ConfigError
        One of them is wrong.
    """
    options: dict[str, Any] = {
        "input.bind": bind,
        "input.adapter": adapter,
        "input.layout": layout,
        "track.file": track,
        "car.file": car,
        "coach.targets": targets,
        "coach.run_laps": run_laps,
        "voice.enabled": voice,
        "overlay.enabled": overlay,
        "bus.publish": publish,
        "log.sessions": sessions,
    }
    merged = load_config(config, options, defaults)
    name = merged.input.adapter
    if layout is not None and name in ("json", "recording"):
        raise ConfigError(f"--layout: adapter {name!r} takes none (--adapter packed does)")
    return merged
