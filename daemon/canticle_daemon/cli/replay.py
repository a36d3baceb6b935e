"""`canticle replay`: a recorded stream through the same pipeline."""

from __future__ import annotations

import math
import time
from collections.abc import Iterator
from contextlib import ExitStack
from itertools import islice
from pathlib import Path
from typing import Annotated

import typer

from canticle_daemon.cli import options
from canticle_daemon.cli.options import settings
from canticle_daemon.cli.rehearse import check_pace
from canticle_daemon.runtime.bus import Bus
from canticle_daemon.runtime.console import Console
from canticle_daemon.runtime.engine import Engine, Result
from canticle_daemon.runtime.session import EstimatePublisher, Session
from canticle_daemon.runtime.setup import Parts, gather, start_children
from canticle_daemon.runtime.signals import StopRequest
from canticle_daemon.runtime.supervisor import close_all

BLOCK = 1024
LONGEST_WAIT_S = 2.0
"""A longer gap in the recording's clock is not waited for."""
READER = "recording"
ANY_PORT = "tcp://127.0.0.1:0"
JOIN_S = 0.5
"""Subscribers look for a new endpoint about ten times a second."""


def replay(
    recording: Annotated[
        Path, typer.Argument(metavar="RECORDING", help="A .jsonl file of native datagrams.")
    ],
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
    """Put a recorded stream through the same pipeline.

    At pace max estimates are published only where --publish or the settings name an endpoint;
    the replay then waits for those who listen there.
    """
    check_pace(pace)
    console = Console()
    # The settings for a live stream name its adapter; a file of native datagrams has its own.
    own_reader = READER if adapter in (None, "json") else adapter
    parts = gather(
        settings(
            config, bind=bind, adapter=own_reader, layout=layout, track=track, car=car,
            targets=targets, run_laps=run_laps, voice=voice, overlay=overlay, publish=publish,
            sessions=sessions,
            defaults={
                "voice.enabled": False,
                "overlay.enabled": False,
                "bus.publish": ANY_PORT,
            },
        ),
        console,
    )  # fmt: skip
    datagrams = parts.adapter.read(recording)
    fast = pace == "max"
    with ExitStack() as stack:
        stop = stack.enter_context(StopRequest())
        bus = Bus(parts.config.bus.publish)
        stack.callback(bus.close)
        publisher = EstimatePublisher(bus, parts.config.bus.estimate_hz)
        asked = parts.config.bus.publish != ANY_PORT
        if asked:
            bus.wait_for_listeners(JOIN_S)
        player = _Player(
            parts, parts.engine(), stop, None if fast else float(pace),
            publisher if asked or not fast else None,
        )  # fmt: skip
        opened = Session(parts.session_folder(session), parts.facts(), None, bus, console)
        children = start_children(parts, bus.endpoint)
        stack.callback(lambda: close_all(children))
        player.play(datagrams, opened, console)


class _Player:
    """Puts datagrams through the engine, as fast as can be or by the stream's own clock."""

    def __init__(
        self,
        parts: Parts,
        engine: Engine,
        stop: StopRequest,
        pace: float | None,
        publisher: EstimatePublisher | None,
    ) -> None:
        self._console = parts.console
        self._engine = engine
        self._stop = stop
        self._pace = pace
        self._publisher = publisher
        self._due_s = -math.inf
        self._stream_s = math.nan

    def play(self, datagrams: Iterator[bytes], session: Session, console: Console) -> None:
        """Play all, and close the session whatever happens."""
        engine, started_s, reason = self._engine, time.perf_counter(), "fault"
        console.line(f"session {session.folder}")
        try:
            while not self._stop.is_set:
                block = list(islice(datagrams, BLOCK if self._pace is None else 1))
                if not block:
                    break
                received_ns = [time.perf_counter_ns()] * len(block)
                result = engine.process(block, received_ns, self._take_early)
                if result is not None:
                    session.take(result)
            reason = self._stop.reason or "the recording is over"
        finally:
            session.close(
                reason,
                frames=engine.frame_count,
                bad_datagrams=engine.bad_datagrams,
                bad_fields=engine.adapter.bad_fields,
            )
            console.line(self._summary(time.perf_counter() - started_s))
            console.close()

    def _take_early(self, result: Result) -> None:
        self._wait()
        if self._publisher is not None:
            self._publisher(result)

    def _wait(self) -> None:
        """Let as much time pass as the stream's clock says, over the pace."""
        if self._pace is None:
            return
        now, step = time.perf_counter(), self._engine.time_s - self._stream_s
        self._stream_s = self._engine.time_s
        on_time = 0.0 <= step <= LONGEST_WAIT_S
        self._due_s = max(self._due_s, now - LONGEST_WAIT_S) + step / self._pace if on_time else now
        while not self._stop.is_set and (left := self._due_s - time.perf_counter()) > 0.0:
            time.sleep(min(left, 0.05))

    def _summary(self, seconds: float) -> str:
        engine = self._engine
        bad = f", {engine.bad_datagrams} bad ({engine.fault})" if engine.bad_datagrams else ""
        return f"{engine.frame_count} frames in {seconds:.1f} s{bad}"
