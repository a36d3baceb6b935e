"""Pure: what the bus has told, folded into what is to be shown now.

The ribbon belongs to one corner at a time. It stands still while the driver approaches and
drives the corner; once the exit is passed it shows that entry (the turn-in among the last
ones, the demand over the bank) for half the straight, and then turns to the next corner.
Times are the caller's monotonic clock: an estimate older than half a second is not shown.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any, Literal, TypeAlias

from canticle_daemon.messages import (
    CornerView,
    Cue,
    Entry,
    Estimate,
    LapCompleted,
    Status,
    TrackView,
)

Condition: TypeAlias = Literal["no data", "bad data", "learning", "live"]
Point: TypeAlias = tuple[float, float]

FRESH_S = 0.5
BAD_DATA_SHOWN_S = 3.0
CUE_SHOWN_S = 4.0
TICKS = 5
TRACE_STEP_M = 1.0
TRACE_POINTS = 2000


@dataclass(frozen=True, slots=True)
class Pass:
    """One finished entry into a corner: where the driver turned in, and how that went."""

    turn_in_m: float | None
    verdict: str
    margin_m: float | None
    peak_demand: float | None


@dataclass(frozen=True, slots=True)
class Ribbon:
    """The corner that is shown and what is known of it; `passes` has the newest first."""

    corner: CornerView
    lap_length_m: float
    passes: tuple[Pass, ...] = ()
    demand: tuple[Point, ...] = ()


@dataclass(frozen=True, slots=True)
class Scene:
    """All that a picture needs. None is a number that is not known now."""

    condition: Condition
    detail: str = ""
    lap: int | None = None
    ribbon: Ribbon | None = None
    cue: str = ""
    front: float | None = None
    rear: float | None = None
    saturated: bool = False
    energy_j: tuple[float | None, ...] = (None,) * 4
    last_lap_j: tuple[float | None, ...] = (None,) * 4


class Display:
    """Folds messages in, gives scenes out; it keeps at most five passes for each corner."""

    def __init__(self) -> None:
        self._track: TrackView | None = None
        self._estimate: Estimate | None = None
        self._estimate_at_s = -math.inf
        self._bad_count: int | None = None
        self._bad_until_s = -math.inf
        self._cue = ""
        self._cue_until_s = -math.inf
        self._last_lap_j: tuple[float | None, ...] = (None,) * 4
        self._forget_session()

    def fold(self, topic: str, payload: Any, now_s: float) -> None:
        """Take in one bus message.

        Parameters
        ----------
        topic
            Its topic; unknown ones are ignored.
        payload
            Its payload from `canticle_daemon.messages`.
        now_s
            The caller's monotonic clock.
        """
        match payload:
            case Estimate():
                self._estimate, self._estimate_at_s = payload, now_s
                self._follow(payload)
            case TrackView():
                self._take_track(payload)
            case Status():
                self._take_status(payload, now_s)
            case Entry():
                self._take_entry(payload)
            case LapCompleted() if payload.valid:
                self._last_lap_j = tuple(map(known, payload.tire_energy_j))
            case Cue() if is_shown(payload):
                self._cue, self._cue_until_s = payload.text, now_s + CUE_SHOWN_S
            case _ if topic == "discontinuity":
                self._lose_place()
            case _ if topic == "session_started":
                self._forget_session()
            case _:
                pass

    def scene(self, now_s: float) -> Scene:
        """Return what to show now.

        Parameters
        ----------
        now_s
            The caller's monotonic clock.
        """
        condition, detail = self._condition(now_s)
        cue = self._cue if now_s < self._cue_until_s else ""
        estimate = self._estimate
        if condition == "no data" or estimate is None:
            # Turn-ins are history and stay; every figure of the moment goes.
            return Scene(condition, detail, None, self._ribbon(with_demand=False), cue)
        return Scene(
            condition,
            detail,
            estimate.lap,
            self._ribbon(with_demand=True),
            cue,
            known(estimate.front_utilization),
            known(estimate.rear_utilization),
            estimate.saturated,
            tuple(map(known, estimate.energy_j)),
            self._last_lap_j,
        )

    def _forget_session(self) -> None:
        self._passes: dict[str, tuple[Pass, ...]] = {}
        self._traces: dict[str, tuple[Point, ...]] = {}
        self._last_lap_j = (None,) * 4
        self._lose_place()

    def _lose_place(self) -> None:
        self._ahead: CornerView | None = None
        self._reviewed: CornerView | None = None
        self._pending: dict[str, Pass] = {}
        self._trace: list[Point] = []

    def _take_track(self, track: TrackView) -> None:
        if track == self._track:
            return
        if self._track is None or track.name != self._track.name:
            self._forget_session()
        else:
            self._lose_place()
        self._track = track

    def _take_status(self, status: Status, now_s: float) -> None:
        count = status.bad_datagrams + status.bad_fields
        if self._bad_count is not None and count > self._bad_count:
            self._bad_until_s = now_s + BAD_DATA_SHOWN_S
        self._bad_count = count

    def _take_entry(self, entry: Entry) -> None:
        done = Pass(
            entry.turn_in_station_m, entry.verdict, entry.margin_m, known(entry.peak_demand)
        )
        if self._reviewed is not None and self._reviewed.corner == entry.corner:
            self._add_pass(entry.corner, done)
        else:
            self._pending[entry.corner] = done

    def _add_pass(self, corner: str, done: Pass) -> None:
        self._passes[corner] = (done, *self._passes.get(corner, ()))[:TICKS]

    def _follow(self, estimate: Estimate) -> None:
        track = self._track
        if track is None or not track.corners or not math.isfinite(estimate.station_m):
            return
        station_m = estimate.station_m
        ahead = min(track.corners, key=lambda corner: self._after(station_m, corner.exit_m))
        if self._ahead is not None and ahead.corner != self._ahead.corner:
            self._finish(self._ahead)
        self._ahead = ahead
        self._record(ahead, station_m, known(estimate.demand))
        if self._reviewed is not None and self._is_over(self._reviewed, ahead, station_m):
            self._reviewed = None

    def _after(self, from_m: float, to_m: float) -> float:
        length_m = self._track.length_m if self._track is not None else math.inf
        return (to_m - from_m) % length_m

    def _finish(self, corner: CornerView) -> None:
        name = corner.corner
        done = self._pending.pop(name, None)
        self._pending.clear()
        if done is not None:
            self._add_pass(name, done)
        self._traces[name] = tuple(self._trace)
        self._trace = []
        self._reviewed = corner

    def _record(self, corner: CornerView, station_m: float, demand: float | None) -> None:
        if demand is None or not corner.profile or len(self._trace) >= TRACE_POINTS:
            return
        first_m, last_m = corner.profile[0][0], corner.profile[-1][0]
        if self._after(first_m, station_m) > self._after(first_m, last_m):
            return
        if self._trace and self._after(self._trace[-1][0], station_m) < TRACE_STEP_M:
            return
        self._trace.append((station_m, demand))

    def _is_over(self, reviewed: CornerView, ahead: CornerView, station_m: float) -> bool:
        straight_m = self._after(reviewed.exit_m, ahead.transition_start_m)
        return self._after(reviewed.exit_m, station_m) > straight_m / 2

    def _ribbon(self, *, with_demand: bool) -> Ribbon | None:
        track = self._track
        if track is None or not track.corners:
            return None
        corner = self._reviewed or self._ahead or track.corners[0]
        return Ribbon(
            corner,
            track.length_m,
            self._passes.get(corner.corner, ()),
            self._traces.get(corner.corner, ()) if with_demand else (),
        )

    def _condition(self, now_s: float) -> tuple[Condition, str]:
        bad = now_s < self._bad_until_s
        if self._estimate is None or now_s - self._estimate_at_s >= FRESH_S:
            return "no data", "datagrams come, but are bad" if bad else ""
        if bad:
            return "bad data", ""
        if self._track is None or not self._track.corners:
            return "learning", "no track yet"
        if self._estimate.status != "valid":
            return "learning", self._estimate.status.replace("_", " ")
        return "live", ""


def is_shown(cue: Cue) -> bool:
    """Return whether a cue belongs on the screen: spoken, or unspoken only for want of a voice.

    Parameters
    ----------
    cue
        The cue as logged.
    """
    return cue.spoken or "voice" in (cue.withheld or "").lower()


def known(value: float) -> float | None:
    """Return a number, or None for one that could not be computed.

    Parameters
    ----------
    value
        Any number, NaN included.
    """
    return value if math.isfinite(value) else None
