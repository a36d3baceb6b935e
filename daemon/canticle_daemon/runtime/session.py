"""A session: its folder, and the order in which everything is told.

An event is recorded, then published, then shown; an estimate is only published.
"""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

from canticle_daemon import __version__
from canticle_daemon.messages import Event, SessionEnded, SessionStarted, topic_of
from canticle_daemon.runtime.bus import Bus
from canticle_daemon.runtime.console import Console
from canticle_daemon.runtime.engine import Result
from canticle_daemon.runtime.recorder import Recorder


class Session:
    """One open session.

    Parameters
    ----------
    folder
        Its own folder.
    facts
        For `session.json`.
    bind
        The UDP endpoint in use, None in a replay.
    bus, console
        Where else events go.
    time_s
        The stream's clock, 0 before the first datagram.
    """

    def __init__(
        self,
        folder: Path,
        facts: dict[str, Any],
        bind: str | None,
        bus: Bus,
        console: Console,
        time_s: float = 0.0,
    ) -> None:
        self.folder = folder
        self._bind, self._bus, self._console = bind, bus, console
        self._recorder = Recorder(folder, {"bind": bind, "publish": bus.endpoint, **facts})
        self._time_s = time_s
        self.tell(
            SessionStarted(
                time_s=time_s,
                version=__version__,
                bind=bind,
                publish=bus.endpoint,
                session=str(folder),
                computes=tuple(facts.get("computes", ())),
                cannot=tuple(facts.get("cannot", ())),
            )
        )

    def tell(self, event: Event) -> None:
        """Record, publish and show one event."""
        if math.isfinite(event.time_s):
            self._time_s = event.time_s
        self._recorder.record(event)
        self._bus.publish(topic_of(event), event)
        self._console.event(event)

    def take(self, result: Result) -> None:
        """Tell the events of one wake."""
        for event in result.events:
            self.tell(event)
        self._time_s = result.frames[-1].time_s

    def close(self, reason: str, **facts: Any) -> None:
        """Write the last event and complete the folder."""
        last = SessionEnded(
            time_s=self._time_s, bind=self._bind, publish=self._bus.endpoint, reason=reason
        )
        try:
            self.tell(last)
        finally:
            self._recorder.close(reason=reason, **facts)


class EstimatePublisher:
    """Publishes frames and estimates, at the stream's rate or a lower one.

    Parameters
    ----------
    bus
        Where to.
    estimate_hz
        The lower rate by the stream's clock, or None for every frame.
    """

    def __init__(self, bus: Bus, estimate_hz: float | None) -> None:
        self._bus = bus
        self._period_s = 0.0 if estimate_hz is None else 1.0 / estimate_hz
        self._due_s = -math.inf

    def __call__(self, result: Result) -> None:
        """Publish what is due of a result."""
        if result.estimates is None:
            return
        publish = self._bus.publish
        messages = result.estimates.messages(result.received_ns)
        for frame, message in zip(result.frames, messages, strict=True):
            if self._period_s:
                time_s = message.time_s
                if self._due_s - self._period_s <= time_s < self._due_s:
                    continue
                self._due_s = time_s + self._period_s * (1.0 - 1e-6)
            publish("estimate", message)
            publish("frame", frame)
