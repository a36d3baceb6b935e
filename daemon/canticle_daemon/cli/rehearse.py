"""`canticle rehearse`: the whole tool with no simulator."""

from __future__ import annotations

from importlib.resources import as_file, files
from pathlib import Path
from typing import Annotated

import typer

from canticle_daemon.cli import options
from canticle_daemon.cli.options import settings
from canticle_daemon.errors import ConfigError, SystemFaultError
from canticle_daemon.runtime.console import Console
from canticle_daemon.runtime.setup import gather, running, show_cautions
from canticle_daemon.runtime.signals import StopRequest
from canticle_daemon.runtime.supervisor import Child
from canticle_daemon.runtime.udp import reachable

SENDER = "canticle_adapters.rehearsal"
TRACK = "track.toml"


def rehearse(
    laps: Annotated[
        int | None, typer.Option("--laps", min=1, help="Laps to drive; default: until Ctrl-C.")
    ] = None,
    pace: Annotated[
        str, typer.Option("--pace", help="1 is real time; max is as fast as nothing is lost.")
    ] = "1",
    seed: Annotated[int, typer.Option("--seed", help="The same seed gives the same laps.")] = 1,
    rate: Annotated[
        float, typer.Option("--rate", min=10, max=1000, help="Datagrams a second.")
    ] = 60.0,
    truth: Annotated[
        Path | None, typer.Option("--truth", help="Write the true turn-ins and tire forces here.")
    ] = None,
    config: options.ConfigOption = None,
    bind: options.BindOption = None,
    adapter: options.AdapterOption = None,
    layout: options.LayoutOption = None,
    track: options.TrackOption = None,
    car: options.CarOption = None,
    targets: options.TargetsOption = None,
    run_laps: options.RunLapsOption = None,
    voice: options.VoiceOption = None,
    overlay: options.OverlayOption = None,
    publish: options.PublishOption = None,
    sessions: options.SessionsOption = None,
    session: options.SessionOption = None,
) -> None:
    """Drive a synthetic car round a made-up oval and coach it."""
    check_pace(pace)
    console = Console()
    with as_file(files(SENDER) / TRACK) as own_track:
        parts = gather(
            settings(
                config, bind=bind, adapter=adapter or "json", layout=layout, track=track, car=car,
                targets=targets, run_laps=run_laps, voice=voice, overlay=overlay,
                publish=publish, sessions=sessions,
                defaults={
                    "input.bind": "127.0.0.1:0",
                    "bus.publish": "tcp://127.0.0.1:0",
                    "track.file": own_track,
                },
            ),
            console,
        )  # fmt: skip
    with (
        StopRequest() as stop,
        running(parts, session, open_now=True, stop=stop) as daemon,
    ):
        show_cautions(console)
        port, bus = daemon.port.endpoint, daemon.bus
        console.line(f"rehearsing by UDP on {port}, publishing on {bus.endpoint}")
        if parts.config.track.file != own_track:
            console.line(f"the car laps its own oval, judged by {parts.config.track.file}")
        arguments = ["--to", reachable(port), "--bus", reachable(bus.endpoint), "--pace", pace]
        arguments += ["--seed", str(seed), "--rate", str(rate), "--with-parent"]
        arguments += [] if laps is None else ["--laps", str(laps)]
        arguments += [] if truth is None else ["--truth", str(truth)]
        sender = Child("rehearsal", SENDER, arguments, restart=False)
        daemon.sender = sender
        daemon.children.append(sender)
        reason = daemon.run(stop)
    if not stop.is_set and sender.state == "failed":
        raise SystemFaultError(f"the rehearsal failed: {sender.last_words or reason}")


def check_pace(pace: str) -> None:
    """Refuse a pace that is none.

    Raises
    ------
    ConfigError
        It is neither a factor nor ``max``.
    """
    if pace == "max":
        return
    try:
        good = 0.0 < float(pace) <= 1000.0
    except ValueError:
        good = False
    if not good:
        raise ConfigError(f"--pace: {pace!r} is neither a factor above 0 nor max")
