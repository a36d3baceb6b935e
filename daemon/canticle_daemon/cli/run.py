"""`canticle run`: the daemon beside a simulator."""

from __future__ import annotations

from canticle_daemon.cli import options
from canticle_daemon.cli.options import settings
from canticle_daemon.runtime.console import Console
from canticle_daemon.runtime.setup import gather, running, show_cautions
from canticle_daemon.runtime.signals import StopRequest


def run(
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
    """Listen to a simulator until Ctrl-C or SIGTERM."""
    console = Console()
    parts = gather(
        settings(
            config, bind=bind, adapter=adapter, layout=layout, track=track, car=car,
            targets=targets, run_laps=run_laps, voice=voice, overlay=overlay, publish=publish,
            sessions=sessions,
        ),
        console,
    )  # fmt: skip
    with (
        StopRequest() as stop,
        running(parts, session, open_now=session is not None, stop=stop) as daemon,
    ):
        show_cautions(console)
        console.line(f"listening on {daemon.port.endpoint}, publishing on {daemon.bus.endpoint}")
        for limit in parts.abilities()[1]:
            console.line(limit)
        daemon.run(stop)
