"""The engine: datagrams in, events and estimates out. Live, replay and bench run this."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field

import numpy as np

from canticle_daemon.adapter_api import Adapter
from canticle_daemon.coach.judge import Coach
from canticle_daemon.errors import DecodeError
from canticle_daemon.frame import Frame, FrameBlock, IntArray
from canticle_daemon.messages import Cue, Entry, Event, TurnIn
from canticle_daemon.stream.pipeline import Estimates, Pipeline


@dataclass(frozen=True, slots=True)
class Result:
    """What a handful of datagrams gave. `estimates` has a row for each of `frames`."""

    frames: Sequence[Frame]
    received_ns: IntArray
    events: list[Event]
    estimates: Estimates | None


@dataclass(slots=True)
class Engine:
    """Adapter, pipeline and coach in a row.

    Parameters
    ----------
    adapter
        Turns datagrams into frames.
    new_pipeline
        Makes a pipeline with nothing learned, for every session.
    coach
        None where turn-ins cannot be judged.

    Attributes
    ----------
    time_s
        The newest stream time, NaN before the first frame.
    frame_count, bad_datagrams
        How many were decoded, and how many were malformed.
    fault
        What was wrong with the newest malformed datagram.
    """

    adapter: Adapter
    new_pipeline: Callable[[], Pipeline]
    coach: Coach | None
    time_s: float = math.nan
    frame_count: int = 0
    bad_datagrams: int = 0
    fault: str = ""
    _pipeline: Pipeline = field(init=False)

    def __post_init__(self) -> None:
        self._pipeline = self.new_pipeline()

    def restart(self) -> None:
        """Forget all that was learned; a new session begins."""
        self._pipeline = self.new_pipeline()
        self.adapter.reset()
        self.time_s = math.nan

    def process(
        self,
        datagrams: Sequence[bytes],
        received_ns: Sequence[int],
        early: Callable[[Result], None] | None = None,
    ) -> Result | None:
        """Take in datagrams; None when no frame was in them.

        `early` gets the result as soon as its estimates are there, before its events are.
        """
        frames: list[Frame] = []
        times: list[int] = []
        decode = self.adapter.decode
        for datagram, received in zip(datagrams, received_ns, strict=True):
            try:
                frame = decode(datagram)
            except DecodeError as error:
                self._refuse(str(error))
                continue
            except Exception as error:  # a plug-in's own fault must not stop the daemon either
                self._refuse(f"adapter {self.adapter.name!r}: {type(error).__name__}: {error}")
                continue
            if frame is not None:
                frames.append(frame)
                times.append(received)
        if not frames:
            return None
        self.frame_count += len(frames)
        block = FrameBlock.from_frames(frames, times)
        self.time_s = float(block.time_s[-1])
        # A sender's absurd number must not write warnings over the terminal.
        with np.errstate(over="ignore", invalid="ignore", divide="ignore"):
            measured = self._pipeline.measure(block)
            result = Result(frames, block.received_ns, [], measured.estimates)
            if early is not None:
                early(result)
            events = self._pipeline.judge(measured)
        result.events.extend(self._with_cues(events))
        return result

    def _refuse(self, fault: str) -> None:
        self.bad_datagrams += 1
        self.fault = " ".join(fault.split())

    def _with_cues(self, events: list[Event]) -> list[Event]:
        """Put each cue behind the event that called for it."""
        if self.coach is None or not events:
            return events
        told: list[Event] = []
        for event in events:
            told.append(event)
            cues: list[Cue] = self.coach.process([event])
            told.extend(cues)
        return told


def summary_of(event: Event) -> str:
    """Return a turn-in or an entry in a few words for the terminal."""
    if isinstance(event, Entry | TurnIn) and event.margin_m is not None:
        return f"{event.corner}: {event.verdict} {round(event.margin_m):+d} m"
    return ""
