"""The first coach: one word at a late turn-in, the detail on the next straight, else silence.

Silence means good. A verdict within the measurement's own error of its limit is withheld as
`uncertain`; only free entries teach. Every cue is a fact of its own: it says whether it was
spoken, and if not, why.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass, field

from canticle_daemon.coach.phrasing import Lengths, label_of, late_detail, vocabulary
from canticle_daemon.config import CoachSection
from canticle_daemon.messages import Corner, Cue, Discontinuity, Entry, Event, TurnIn
from canticle_daemon.track.profile import CornerPlan, Track


@dataclass(slots=True)
class Coach:
    """Turns events into cues.

    Parameters
    ----------
    track
        The track, for the limits of each corner.
    settings
        The ``[coach]`` table.
    car_length_m
        For lengths in car lengths.
    silence
        Returns why nothing can be spoken just now (``no voice``, ``muted``), or None.
    """

    track: Track
    settings: CoachSection
    car_length_m: float
    silence: Callable[[], str | None]
    _details: dict[str, tuple[str, str | None]] = field(default_factory=dict)

    def phrases(self) -> tuple[str, ...]:
        """Return all that this coach can say here."""
        labels = [label_of(corner.name) for corner in self.track.corners]
        return tuple(vocabulary(labels, self._lengths))

    def process(self, events: Iterable[Event]) -> list[Cue]:
        """Return the cues that these events call for, in order."""
        cues: list[Cue] = []
        for event in events:
            if isinstance(event, TurnIn):
                cues += self._moment(event)
            elif isinstance(event, Entry):
                self._remember(event)
            elif isinstance(event, Corner):
                cues += self._straight(event)
            elif isinstance(event, Discontinuity):
                self._details.clear()
        return cues

    @property
    def _lengths(self) -> Lengths:
        return self.settings.lengths

    def _moment(self, turn_in: TurnIn) -> Iterable[Cue]:
        if turn_in.verdict != "late":
            return
        station, std = turn_in.turn_in_station_m, turn_in.turn_in_std_m
        free = turn_in.context == "free"
        withheld = self._doubt(turn_in.corner, station, std) if free else "context"
        if withheld is None and self.settings.speak != "all":
            withheld = f"speak = {self.settings.speak}"
        yield self._cue(turn_in, "late", "late", withheld)

    def _remember(self, entry: Entry) -> None:
        """Keep what is to be said of an entry until its corner is over."""
        self._details.pop(entry.corner, None)
        station, std = entry.turn_in_station_m, entry.turn_in_std_m
        if entry.verdict != "late" or station is None or std is None:
            return
        withheld = "context" if entry.context != "free" else self._doubt(entry.corner, station, std)
        if withheld is None and self.settings.speak not in ("all", "straights"):
            withheld = f"speak = {self.settings.speak}"
        past_mark = self._past_limit_m(entry.corner, station, to_mark=True)
        # A window may close before the mark: then what counts is how far past its end.
        late_m = max(past_mark, self._past_limit_m(entry.corner, station, to_mark=False))
        text = late_detail(entry.corner, late_m, self._lengths, self.car_length_m)
        self._details[entry.corner] = (text, withheld)

    def _straight(self, corner: Corner) -> Iterable[Cue]:
        detail = self._details.pop(corner.corner, None)
        if detail is not None:
            text, withheld = detail
            if corner.context != "free":
                withheld = "context"
            yield self._cue(corner, "late detail", text, withheld)

    def _cue(self, event: TurnIn | Corner, kind: str, text: str, withheld: str | None) -> Cue:
        if withheld is None:
            withheld = self.silence()
        return Cue(
            time_s=event.time_s, lap=event.lap, run=event.run, kind=kind, text=text,
            corner=event.corner, spoken=withheld is None, withheld=withheld,
        )  # fmt: skip

    def _doubt(self, corner: str, station_m: float, std_m: float) -> str | None:
        past = self._past_limit_m(corner, station_m, to_mark=False)
        return "uncertain" if past < std_m else None

    def _past_limit_m(self, name: str, station_m: float, *, to_mark: bool) -> float:
        """Return how far a station lies past the mark, or past the limit that makes it late."""
        corner = self._corner(name)
        past = self.track.difference_m(station_m, corner.target_m)
        if to_mark:
            return past
        if corner.window_m is not None:
            return self.track.difference_m(station_m, corner.window_m[1])
        return past - self.settings.tolerance_m

    def _corner(self, name: str) -> CornerPlan:
        return next(corner for corner in self.track.corners if corner.name == name)
