"""The daemon's one loop: wait for datagrams, drain them, step, tell.

Everything slow lives elsewhere: overlay and voice in their own processes, their care in
threads. The loop wakes for the UDP socket, for an ask to end, and ten times a second to look
after the stream's silence and the status.
"""

from __future__ import annotations

import gc
import math
import time
from collections.abc import Callable
from dataclasses import dataclass, field

import zmq

from canticle_daemon.messages import (
    Discontinuity,
    Reason,
    Status,
    StreamLost,
    StreamResumed,
    TrackView,
    Vocabulary,
)
from canticle_daemon.runtime.bus import Bus
from canticle_daemon.runtime.console import Console
from canticle_daemon.runtime.engine import Engine, Result
from canticle_daemon.runtime.session import EstimatePublisher, Session
from canticle_daemon.runtime.signals import StopRequest
from canticle_daemon.runtime.supervisor import Child
from canticle_daemon.runtime.udp import UdpInput

TICK_MS = 100
STATUS_S = 1.0
LOST_S = 2.0
PAUSE_S = 0.5
CLOSE_AFTER_S = 600.0
QUIET_END_S = 0.4


@dataclass(slots=True)
class Daemon:
    """The parts of a running daemon.

    Parameters
    ----------
    port, bus, engine, console
        What it listens to, speaks on, thinks with and shows.
    open_session
        Opens the next session, at a time of the stream's clock.
    session
        The session already open, with `--session`; then it is the only one.
    children
        Overlay, voice, and in a rehearsal the synthetic car.
    sender
        That car; the daemon ends when it has.
    track_view, vocabulary
        Repeated on the bus every second.
    """

    port: UdpInput
    bus: Bus
    engine: Engine
    console: Console
    open_session: Callable[[float], Session]
    publisher: EstimatePublisher
    session: Session | None
    children: list[Child] = field(default_factory=list)
    sender: Child | None = None
    track_view: TrackView | None = None
    vocabulary: Vocabulary | None = None
    _keeps_session: bool = field(init=False)
    _heard: float = field(init=False)
    _moved: float = field(init=False)
    _status_due: float = 0.0
    _lost: bool = False
    _paused: bool = False
    _bad_told: int = 0
    _foreign_told: int = 0
    _unplaced_told: bool = False
    _newest: Result | None = None
    _children_told: set[str] = field(default_factory=set)
    _names: tuple[str | None, str | None] = (None, None)

    def __post_init__(self) -> None:
        self._keeps_session = self.session is not None
        self._heard = self._moved = time.monotonic()

    def run(self, stop: StopRequest) -> str:
        """Serve until asked to end; return why it ended."""
        poller = zmq.Poller()
        poller.register(self.port.fileno(), zmq.POLLIN)
        poller.register(stop.fileno(), zmq.POLLIN)
        # What lives now lives for good: a full collection would cost tens of milliseconds.
        gc.collect()
        gc.freeze()
        while not stop.is_set:
            ready = dict(poller.poll(TICK_MS))
            if self.port.fileno() in ready:
                self._serve()
            now = time.monotonic()
            self._watch(now)
            if now >= self._status_due:
                self._status_due = now + STATUS_S
                self._tell_status()
            if self._sender_done(now):
                return "the rehearsal is over"
        return stop.reason

    def _serve(self) -> None:
        """Take in what waits in the socket."""
        taken = self.port.drain()
        if not taken:
            return
        before = self.engine.time_s
        result = self.engine.process(
            [datagram.data for datagram in taken],
            [datagram.received_ns for datagram in taken],
            self._take_early,
        )
        now = time.monotonic()
        if result is None:
            return
        assert self.session is not None
        self._note_flow(now, before)
        self.session.take(result)
        self._newest = result
        if not self._keeps_session:
            self._mind_names(result)

    def _take_early(self, result: Result) -> None:
        """Publish the estimates, before the events of the same datagrams are looked for."""
        self.port.confirm()
        if self.session is None:
            self.session = self.open_session(result.frames[0].time_s)
        self.publisher(result)

    def _mind_names(self, result: Result) -> None:
        """Close the session when another car or track comes; the next datagram opens one."""
        newest = result.frames[-1]
        names = (newest.car_name or self._names[0], newest.track_name or self._names[1])
        known, self._names = self._names, names
        if any(old is not None and old != new for old, new in zip(known, names, strict=True)):
            self._close_session("the car or the track changed")

    def _close_session(self, reason: str) -> None:
        assert self.session is not None
        session, self.session = self.session, None
        session.close(reason, **self.end_facts())
        self._newest, self._lost, self._paused = None, False, False
        self.engine.restart()

    def _note_flow(self, now: float, before: float) -> None:
        """Tell of silence that has ended and of a clock that stands still."""
        assert self.session is not None
        newest = self.engine.time_s
        silence = now - self._heard
        self._heard = now
        if self._lost:
            self._lost = False
            reason = _silence_reason(newest - before)
            self.session.tell(
                StreamResumed(time_s=newest, silence_s=round(silence, 3), reason=reason)
            )
            if reason == "pause":
                self._tell_pause(newest, silence)
        if newest != before:
            self._moved, self._paused = now, False
        elif now - self._moved > PAUSE_S and not self._paused:
            self._paused = True
            self._tell_pause(newest, now - self._moved)

    def _tell_pause(self, time_s: float, seconds: float) -> None:
        assert self.session is not None
        detail = f"the stream's clock stood still for {seconds:.1f} s"
        self.session.tell(Discontinuity(time_s=time_s, reason="pause", detail=detail))

    def _watch(self, now: float) -> None:
        """Notice a silent stream, and close a session that nobody feeds."""
        silence = now - self._heard
        if self.session is None or self._newest is None:
            return
        if silence > LOST_S and not self._lost:
            self._lost = True
            self.session.tell(StreamLost(time_s=self.engine.time_s, silence_s=round(silence, 3)))
        if silence > CLOSE_AFTER_S and not self._keeps_session:
            self._close_session("ten minutes without telemetry")

    def _sender_done(self, now: float) -> bool:
        sender = self.sender
        if sender is None or sender.state not in ("done", "closed", "failed"):
            return False
        return now - self._heard > QUIET_END_S or self._newest is None

    def _tell_status(self) -> None:
        status = self.status()
        self.bus.publish("status", status)
        if self.track_view is not None:
            self.bus.publish("track", self.track_view)
        if self.vocabulary is not None:
            self.bus.publish("vocabulary", self.vocabulary)
        self._tell_faults(status)
        self._tell_children()
        self.console.status(self._status_line(status))

    def _tell_faults(self, status: Status) -> None:
        count = status.bad_datagrams - self._bad_told
        if count:
            plural = "" if count == 1 else "s"
            self.console.line(f"{count} bad datagram{plural} dropped; newest: {self.engine.fault}")
            self._bad_told = status.bad_datagrams
        if status.foreign and not self._foreign_told:
            only = self.port.only_from
            why = "while the first is alive" if only is None else f"(only_from is {only})"
            who = "a second sender" if only is None else "a sender"
            self.console.line(f"{who}, {self.port.newest_foreign}, is ignored {why}")
        self._foreign_told = status.foreign
        self._tell_unplaced()

    def _tell_unplaced(self) -> None:
        """Say once that the map cannot be used, where neither stream nor track file places us."""
        newest = self._newest
        if self._unplaced_told or self.track_view is None or newest is None:
            return
        if newest.estimates is not None and math.isnan(float(newest.estimates.station_m[-1])):
            self._unplaced_told = True
            self.console.line(
                "the stream has positions but no station_m, and the track file has no origin: "
                "the car cannot be placed on the lap, so no lap or turn-in is told"
            )

    def _tell_children(self) -> None:
        """Say once of each process that it cannot work, until it works again."""
        for child in self.children:
            if child.state == "ready":
                self._children_told.discard(child.name)
            elif child.state in ("unavailable", "failed") and child is not self.sender:
                if child.name not in self._children_told:
                    self._children_told.add(child.name)
                    self.console.line(f"{child.name}: {child.detail or child.state}")

    def status(self) -> Status:
        """Return the daemon's state."""
        states = {child.name: child.state for child in self.children}
        return Status(
            state=self._state(),
            session=str(self.session.folder) if self.session is not None else "",
            frames=self.engine.frame_count,
            bad_datagrams=self.engine.bad_datagrams,
            bad_fields=self.engine.adapter.bad_fields,
            dropped=self.port.dropped,
            foreign=self.port.foreign,
            voice=states.get("voice", "off"),
            overlay=states.get("overlay", "off"),
        )

    def end_facts(self) -> dict[str, object]:
        """Return what `session.json` says at the end."""
        status = self.status()
        return {
            "frames": status.frames,
            "bad_datagrams": status.bad_datagrams,
            "bad_fields": status.bad_fields,
            "dropped": status.dropped,
            "foreign": status.foreign,
            "processes": {
                child.name: {
                    "state": child.state,
                    "detail": child.detail,
                    "restarts": child.restarts,
                }
                for child in self.children
            },
        }

    def _state(self) -> str:
        if self._newest is None:
            return "waiting"
        if self._lost:
            return "no data"
        return "paused" if self._paused else "running"

    def _status_line(self, status: Status) -> str:
        if self._newest is None or self._newest.estimates is None or status.state != "running":
            return f"{status.state} · {self.port.endpoint}"
        estimates, frame = self._newest.estimates, self._newest.frames[-1]
        demand = float(estimates.demand[-1])
        asked = f"{demand:.2f}" if math.isfinite(demand) else "–"
        lost = f" · {status.dropped} dropped" if status.dropped else ""
        return (
            f"lap {int(estimates.lap[-1])} · {frame.speed_mps:.0f} m/s · demand {asked} · "
            f"{status.frames} frames{lost} · voice {status.voice} · overlay {status.overlay}"
        )


def _silence_reason(step_s: float) -> Reason:
    """Return what a silence was, by the step of the stream's clock over it."""
    if step_s < 0.0:
        return "rewind"
    return "pause" if step_s < PAUSE_S else "gap"
