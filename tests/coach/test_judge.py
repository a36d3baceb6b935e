"""What the coach says, when, and why it keeps silent."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import msgspec
import pytest
from streams import Drive, cut, oval_file

from canticle_daemon.coach.judge import Coach
from canticle_daemon.config import CoachSection
from canticle_daemon.messages import Corner, Cue, Discontinuity, Entry, Event, TurnIn
from canticle_daemon.physics.car import CarFile
from canticle_daemon.stream.pipeline import Pipeline
from canticle_daemon.track.profile import Track, TrackFile


def renamed_track(**corner: Any) -> Track:
    """The ruler's oval, its corners numbered; "Turn 1" begins to bank at 300 m."""
    data = oval_file().model_dump()
    data["corner"] = [dict(item) for item in data["corner"]]
    data["corner"][0] |= {"name": "Turn 1"} | corner
    data["corner"][1] |= {"name": "Turn 3"}
    return Track(TrackFile.model_validate(data))


def coach(
    track: Track | None = None, silence: Callable[[], str | None] = lambda: None, **settings: Any
) -> Coach:
    return Coach(track or renamed_track(), CoachSection(**settings), 5.0, silence)


def turn_in(station: float, verdict: str, std: float = 0.5, **more: Any) -> TurnIn:
    return TurnIn(**{
        "time_s": 105.0, "lap": 2, "run": 1, "corner": "Turn 1", "turn_in_station_m": station,
        "turn_in_std_m": std, "transition_margin_m": 300.0 - station, "phase": "in",
        "target_station_m": 300.0, "margin_m": 300.0 - station, "margin_s": 0.0,
        "verdict": verdict, "target_source": "transition", "context": "free",
        "detection_delay_s": 0.3, **more,
    })  # fmt: skip


def entry(station: float | None, verdict: str, std: float | None = 0.5, **more: Any) -> Entry:
    margin = None if station is None else 300.0 - station
    return Entry(**{
        "time_s": 109.0, "lap": 2, "run": 1, "corner": "Turn 1", "turn_in_station_m": station,
        "turn_in_std_m": std, "transition_margin_m": margin, "phase": "in",
        "target_station_m": 300.0, "margin_m": margin, "margin_s": margin, "verdict": verdict,
        "target_source": "transition", "context": "free", "bank_deg": 4.0, "lateral_m": None,
        "entry_speed_mps": 60.0, "demand_at_turn_in": 0.1, "peak_demand": 0.8,
        "peak_utilization": 0.7, "entry_energy_j": (0.0,) * 4, "entry_time_s": 7.0, **more,
    })  # fmt: skip


def corner(**more: Any) -> Corner:
    return Corner(**{
        "time_s": 114.0, "lap": 2, "run": 1, "corner": "Turn 1", "context": "free",
        "corner_energy_j": (0.0,) * 4, "corner_time_s": 12.0, "lift_station_m": None,
        "brake_station_m": None, "min_speed_mps": 55.0, "throttle_station_m": None,
        "exit_speed_mps": 60.0, **more,
    })  # fmt: skip


def brief(cues: list[Cue]) -> list[tuple[str, str, bool, str | None]]:
    return [(cue.kind, cue.text, cue.spoken, cue.withheld) for cue in cues]


def test_a_late_turn_in_is_one_word_at_the_moment() -> None:
    (cue,) = coach().process([turn_in(341.0, "late")])
    assert brief([cue]) == [("late", "late", True, None)]
    assert (cue.time_s, cue.lap, cue.run, cue.corner) == (105.0, 2, 1, "Turn 1")


def test_the_detail_comes_on_the_next_straight() -> None:
    told = coach()
    assert told.process([entry(341.0, "late")]) == []
    (cue,) = told.process([corner()])
    assert brief([cue]) == [("late detail", "One, forty late.", True, None)]
    assert cue.time_s == 114.0


@pytest.mark.parametrize("verdict", ["on", "early", "not judged"])
def test_silence_means_good(verdict: str) -> None:
    station = None if verdict == "not judged" else 290.0
    events: list[Event] = [entry(station, verdict, None if station is None else 0.5), corner()]
    if station is not None:
        events.insert(0, turn_in(station, verdict))
    assert coach().process(events) == []


def test_every_cue_is_given_once() -> None:
    told = coach()
    events: list[Event] = [turn_in(341.0, "late"), entry(341.0, "late"), corner(), corner()]
    assert [cue.kind for cue in told.process(events)] == ["late", "late detail"]
    assert told.process([corner()]) == []


def test_another_corner_s_exit_does_not_bring_the_detail() -> None:
    told = coach()
    assert told.process([entry(341.0, "late"), corner(corner="Turn 3")]) == []
    assert len(told.process([corner()])) == 1


@pytest.mark.parametrize(("std", "withheld"), [(5.5, None), (6.5, "uncertain")])
def test_a_verdict_within_its_own_error_is_withheld(std: float, withheld: str | None) -> None:
    """311 m is 6 m past the limit, which lies 5 m of tolerance past the mark at 300 m."""
    cues = coach().process([turn_in(311.0, "late", std), entry(311.0, "late", std), corner()])
    assert [(cue.spoken, cue.withheld) for cue in cues] == [(withheld is None, withheld)] * 2


def test_a_window_of_the_file_is_the_limit_in_force() -> None:
    track = renamed_track(window_m=(270.0, 308.0), target_m=305.0)
    events: list[Event] = [turn_in(311.0, "late", 2.5), entry(311.0, "late", 3.5), corner()]
    cues = coach(track).process(events)
    assert [cue.withheld for cue in cues] == [None, "uncertain"]
    assert cues[1].text == "One, five late."


def test_a_window_that_closes_before_the_mark() -> None:
    """Turned in at 290 m with a window to 270 m and the transition, the mark, at 300 m."""
    track = renamed_track(window_m=(240.0, 270.0))
    cues = coach(track).process([entry(290.0, "late"), corner()])
    assert brief(cues) == [("late detail", "One, twenty late.", True, None)]


@pytest.mark.parametrize("context", ["traffic", "caution", "pit", "restart", "slow", "incident"])
def test_only_free_entries_teach(context: str) -> None:
    cues = coach().process([entry(341.0, "late", context=context), corner(context=context)])
    assert [(cue.spoken, cue.withheld) for cue in cues] == [(False, "context")]


def test_a_caution_that_comes_out_in_the_corner_silences_the_detail() -> None:
    cues = coach().process([entry(341.0, "late"), corner(context="caution")])
    assert [(cue.spoken, cue.withheld) for cue in cues] == [(False, "context")]


@pytest.mark.parametrize(
    ("speak", "word", "detail"),
    [("all", True, True), ("straights", False, True), ("summaries", False, False),
     ("none", False, False)],
)  # fmt: skip
def test_the_driver_says_what_is_spoken(speak: str, word: bool, detail: bool) -> None:
    events: list[Event] = [turn_in(341.0, "late"), entry(341.0, "late"), corner()]
    cues = coach(speak=speak).process(events)
    assert [cue.spoken for cue in cues] == [word, detail]
    for cue in cues:
        assert cue.withheld == (None if cue.spoken else f"speak = {speak}")


def test_without_a_voice_the_cue_is_still_a_fact() -> None:
    events: list[Event] = [turn_in(341.0, "late"), entry(341.0, "late"), corner()]
    cues = coach(silence=lambda: "no voice").process(events)
    assert [(cue.text, cue.spoken, cue.withheld) for cue in cues] == [
        ("late", False, "no voice"),
        ("One, forty late.", False, "no voice"),
    ]


@pytest.mark.parametrize("reason", ["no voice", "muted"])
def test_what_counts_is_whether_there_is_a_voice_when_it_would_speak(reason: str) -> None:
    now: list[str | None] = [reason]
    told = coach(silence=lambda: now[0])
    told.process([entry(341.0, "late")])
    now[0] = None
    assert [cue.spoken for cue in told.process([corner()])] == [True]
    told.process([entry(341.0, "late")])
    now[0] = reason
    assert [cue.withheld for cue in told.process([corner()])] == [reason]


def test_a_break_in_between_drops_the_detail() -> None:
    cut_off = Discontinuity(time_s=110.0, reason="jump", detail="")
    assert coach().process([entry(341.0, "late"), cut_off, corner()]) == []


@pytest.mark.parametrize(
    ("lengths", "text"),
    [("meters", "One, forty late."), ("feet", "One, one hundred fifty late."),
     ("car lengths", "One, eight lengths late.")],
)  # fmt: skip
def test_lengths_in_the_driver_s_unit(lengths: str, text: str) -> None:
    """41 m are 134.5 feet and 8.2 lengths of 5 m, each said as the nearest step."""
    (cue,) = coach(lengths=lengths).process([entry(341.0, "late"), corner()])
    assert cue.text == text


def test_the_target_of_a_cue_is_across_the_start_line_too() -> None:
    track = Track(oval_file(start_m=310.0))  # the transition starts at 1990 m
    name = track.corners[-1].name
    event = msgspec.structs.replace(entry(31.0, "late"), corner=name)
    (cue,) = Coach(track, CoachSection(), 5.0, lambda: None).process([event, corner(corner=name)])
    assert cue.text.endswith(", forty late.")


@pytest.mark.parametrize("lengths", ["meters", "feet", "car lengths"])
def test_on_a_whole_drive_all_that_is_said_was_in_the_vocabulary(lengths: str) -> None:
    track = renamed_track()
    told = coach(track, lengths=lengths)
    phrases = told.phrases()
    pipeline = Pipeline(track, CarFile())
    frames = Drive(track, laps=12, mean_margin_m=-15.0, scatter_m=15.0).frames()
    events: list[Event] = []
    for block in cut(frames, [300]):
        for event in pipeline.process(block).events:
            events += [event, *told.process([event])]
    cues = [event for event in events if isinstance(event, Cue)]
    late = [e for e in events if isinstance(e, TurnIn) and e.verdict == "late"]
    assert len([cue for cue in cues if cue.kind == "late"]) == len(late) > 5
    details = [cue for cue in cues if cue.kind == "late detail"]
    assert len(details) > 5
    assert {cue.text for cue in cues} <= set(phrases)
    keys = [(cue.lap, cue.corner, cue.kind) for cue in cues]
    assert len(keys) == len(set(keys))
    for cue in cues:
        assert cue.spoken == (cue.withheld is None)
    assert [event.time_s for event in events] == sorted(event.time_s for event in events)
