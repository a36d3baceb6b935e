"""`canticle replay`: a recorded stream through the same pipeline."""

from __future__ import annotations

import time
from itertools import islice
from pathlib import Path
from typing import Annotated

import typer

from canticle_daemon.cli import options
from canticle_daemon.cli.options import settings
from canticle_daemon.cli.rehearse import _check_pace
from canticle_daemon.runtime.bus import Bus
from canticle_daemon.runtime.console import Console
from canticle_daemon.runtime.engine import Engine, Result
from canticle_daemon.runtime.session import EstimatePublisher, Session
from canticle_daemon.runtime.setup import gather, start_children
from canticle_daemon.runtime.signals import StopRequest
from canticle_daemon.runtime.supervisor import close_all

BLOCK = 1024


def replay(
    recording: Annotated[Path, typer.Argument(help="A .jsonl file of native datagrams.")],
    pace: Annotated[
        str, typer.Option("--pace", help="1 is real time; max is as fast as can be.")
    ] = "max",
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
    """Put a recorded stream through the same pipeline; at pace max no estimates are published."""
    _check_pace(pace)
    console = Console()
    fast = pace == "max"
    parts = gather(
        settings(
            config, bind=bind, adapter=adapter or "recording", layout=layout, track=track, car=car,
            targets=targets, run_laps=run_laps, voice=False if voice is None else voice,
            overlay=False if overlay is None else overlay,
            publish=publish or "tcp://127.0.0.1:0", sessions=sessions,
        ),
        console,
    )  # fmt: skip
    datagrams = parts.adapter.read(recording)
    bus = Bus(parts.config.bus.publish)
    children = start_children(parts, bus.endpoint)
    try:
        with StopRequest() as stop:
            folder = parts.session_folder(session)
            opened = Session(folder, parts.facts(), None, bus, console)
            console.line(f"session {folder}")
            engine = parts.engine()
            publisher = EstimatePublisher(bus, parts.config.bus.estimate_hz)
            publishing = not fast or publish is not None
            started = time.perf_counter()
            first_s = None
            reason = "fault"
            try:
                while not stop.is_set:
                    block = list(islice(datagrams, BLOCK if fast else 1))
                    if not block:
                        break
                    result = engine.process(block, [time.perf_counter_ns()] * len(block))
                    if result is None:
                        continue
                    if not fast:
                        first_s = engine.time_s if first_s is None else first_s
                        _wait(started + (engine.time_s - first_s) / float(pace), stop)
                    opened.take(result, publisher if publishing else _say_nothing)
                reason = stop.reason or "the recording is over"
            finally:
                console.close()
                opened.close(reason, frames=engine.frame_count, bad_datagrams=engine.bad_datagrams)
            console.line(_summary(engine, time.perf_counter() - started))
    finally:
        close_all(children)
        bus.close()


def _wait(until: float, stop: StopRequest) -> None:
    while not stop.is_set and (left := until - time.perf_counter()) > 0.0:
        time.sleep(min(left, 0.05))


def _say_nothing(_result: Result) -> None:
    """Publish nothing: nobody listens to a replay at full speed."""


def _summary(engine: Engine, seconds: float) -> str:
    bad = f", {engine.bad_datagrams} bad ({engine.fault})" if engine.bad_datagrams else ""
    return f"{engine.frame_count} frames in {seconds:.1f} s{bad}"
