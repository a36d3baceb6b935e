"""What is shown, as a function of what the bus told and of the clock."""

from collections.abc import Callable, Iterable

import pytest

from canticle_daemon.messages import (
    Cue,
    Discontinuity,
    Entry,
    Estimate,
    LapCompleted,
    SessionStarted,
    Status,
    StreamLost,
    TrackView,
)
from canticle_overlay.state import Display, Scene, is_shown, known

MakeEstimate = Callable[..., Estimate]
MakeEntry = Callable[..., Entry]


def status(bad: int) -> Status:
    return Status("running", "here", 1, bad, 0, 0, 0, "ready", "ready")


def cue(text: str = "late", spoken: bool = True, withheld: str | None = None) -> Cue:
    return Cue(
        time_s=1, lap=1, run=1, kind="x", text=text, corner=None, spoken=spoken, withheld=withheld
    )


@pytest.fixture
def display(track: TrackView) -> Display:
    shown = Display()
    shown.fold("track", track, 0.0)
    return shown


def drive(display: Display, estimates: Iterable[Estimate], now_s: float = 1.0) -> None:
    for one in estimates:
        display.fold("estimate", one, now_s)


def shown_corner(display: Display) -> str:
    ribbon = display.scene(1.0).ribbon
    assert ribbon is not None
    return ribbon.corner.corner


def test_nothing_told_is_no_data() -> None:
    assert Display().scene(5.0) == Scene("no data")


def test_an_estimate_counts_for_half_a_second(display: Display, estimate: MakeEstimate) -> None:
    display.fold("estimate", estimate(500), 10.0)
    fresh = display.scene(10.49)
    assert (fresh.condition, fresh.front, fresh.rear, fresh.lap) == ("live", 0.4, 0.2, 3)
    stale = display.scene(10.5)
    assert stale.condition == "no data"
    assert (stale.front, stale.rear, stale.lap) == (None, None, None)
    assert stale.energy_j == stale.last_lap_j == (None,) * 4
    assert not stale.ribbon or not stale.ribbon.demand


def test_what_cannot_be_computed_is_none(display: Display, estimate: MakeEstimate) -> None:
    nan = float("nan")
    display.fold("estimate", estimate(500, demand=nan, energy_j=(1.0, nan, 3.0, nan)), 1.0)
    scene = display.scene(1.0)
    assert (scene.front, scene.rear) == (None, None)
    assert scene.energy_j == (1.0, None, 3.0, None)
    assert known(float("inf")) is None


def test_conditions(display: Display, estimate: MakeEstimate) -> None:
    display.fold("estimate", estimate(500, status="warming_up"), 1.0)
    assert display.scene(1.0).condition == "learning"
    assert display.scene(1.0).detail == "warming up"
    display.fold("estimate", estimate(500), 1.0)
    display.fold("status", status(bad=7), 1.0)
    assert display.scene(1.0).condition == "live", "bad datagrams of before are no news"
    display.fold("status", status(bad=8), 1.2)
    assert display.scene(1.2).condition == "bad data"
    display.fold("estimate", estimate(500), 4.3)
    assert display.scene(4.3).condition == "live"


def test_bad_datagrams_alone_are_named(display: Display) -> None:
    display.fold("status", status(bad=0), 1.0)
    display.fold("status", status(bad=60), 2.0)
    scene = display.scene(2.1)
    assert (scene.condition, scene.detail) == ("no data", "datagrams come, but are bad")


def test_without_a_track_it_is_learning(estimate: MakeEstimate) -> None:
    shown = Display()
    shown.fold("estimate", estimate(500), 1.0)
    scene = shown.scene(1.0)
    assert (scene.condition, scene.ribbon, scene.front) == ("learning", None, 0.4)


@pytest.mark.parametrize(
    ("station_m", "name"),
    [(2300, "Turn 1"), (50, "Turn 1"), (600, "Turn 1"), (1200, "Turn 3"), (1900, "Turn 3")],
)
def test_the_ribbon_is_of_the_corner_ahead_or_underfoot(
    display: Display, estimate: MakeEstimate, station_m: float, name: str
) -> None:
    display.fold("estimate", estimate(station_m), 1.0)
    assert shown_corner(display) == name


def test_it_stands_still_until_the_exit_and_then_shows_the_entry(
    display: Display, estimate: MakeEstimate, entry: MakeEntry
) -> None:
    drive(display, [estimate(2400)])
    before = display.scene(1.0).ribbon
    drive(display, [estimate(at % 2500) for at in range(2400, 2900, 2)])
    display.fold("entry", entry("Turn 1"), 1.0)
    drive(display, [estimate(at, demand=0.6) for at in range(400, 690, 2)])
    assert display.scene(1.0).ribbon == before
    drive(display, [estimate(691)])
    after = display.scene(1.0).ribbon
    assert after is not None
    assert after.corner.corner == "Turn 1"
    assert [one.turn_in_m for one in after.passes] == [90.0]
    assert len(after.demand) > 150
    assert after.demand[0][0] == 2450
    assert after.demand[-1][0] <= 370


def test_the_review_lasts_half_the_straight(
    display: Display, estimate: MakeEstimate, entry: MakeEntry
) -> None:
    drive(display, [estimate(600)])
    display.fold("entry", entry("Turn 1"), 1.0)
    drive(display, [estimate(at) for at in range(690, 1020, 5)])
    assert shown_corner(display) == "Turn 1"
    drive(display, [estimate(1025)])
    assert shown_corner(display) == "Turn 3"


def test_an_entry_that_comes_after_the_exit_still_counts(
    display: Display, estimate: MakeEstimate, entry: MakeEntry
) -> None:
    drive(display, [estimate(600), estimate(695)])
    display.fold("entry", entry("Turn 1"), 1.0)
    ribbon = display.scene(1.0).ribbon
    assert ribbon is not None
    assert len(ribbon.passes) == 1


def test_five_turn_ins_are_kept_newest_first(
    display: Display, estimate: MakeEstimate, entry: MakeEntry
) -> None:
    for lap in range(7):
        drive(display, [estimate(2400), estimate(200)])
        display.fold("entry", entry("Turn 1", turn_in_station_m=80.0 + lap), 1.0)
        drive(display, [estimate(600), estimate(700)])
    ribbon = display.scene(1.0).ribbon
    assert ribbon is not None
    assert [one.turn_in_m for one in ribbon.passes] == [86, 85, 84, 83, 82]


def test_a_break_in_the_stream_drops_the_entry_in_progress(
    display: Display, estimate: MakeEstimate, entry: MakeEntry
) -> None:
    drive(display, [estimate(200)])
    display.fold("entry", entry("Turn 1"), 1.0)
    broken = Discontinuity(time_s=1, reason="jump", detail="to the pits")
    display.fold("discontinuity", broken, 1.0)
    drive(display, [estimate(1300)])
    assert shown_corner(display) == "Turn 3"
    drive(display, [estimate(2000), estimate(100)])
    ribbon = display.scene(1.0).ribbon
    assert ribbon is not None
    assert ribbon.passes == ()


def test_a_new_session_starts_clean(
    display: Display, estimate: MakeEstimate, entry: MakeEntry
) -> None:
    drive(display, [estimate(600)])
    display.fold("entry", entry(), 1.0)
    drive(display, [estimate(700)])
    started = SessionStarted(time_s=0, version="1", bind=None, publish="", session="")
    display.fold("session_started", started, 1.0)
    drive(display, [estimate(600)])
    ribbon = display.scene(1.0).ribbon
    assert ribbon is not None
    assert (ribbon.passes, ribbon.demand) == ((), ())


def test_another_track_starts_clean_and_the_same_one_again_changes_nothing(
    display: Display, estimate: MakeEstimate, entry: MakeEntry, track: TrackView
) -> None:
    drive(display, [estimate(600)])
    display.fold("entry", entry(), 1.0)
    drive(display, [estimate(700)])
    same = display.scene(1.0)
    display.fold("track", track, 1.0)
    assert display.scene(1.0) == same
    display.fold("track", TrackView("Other", 900.0, ()), 1.0)
    assert display.scene(1.0).ribbon is None


def test_a_lap_leaves_its_account_behind(display: Display, estimate: MakeEstimate) -> None:
    for valid, joules in ((True, 5.0), (False, 9.0)):
        lap = LapCompleted(
            time_s=1,
            lap=1,
            run=1,
            lap_time_s=40,
            valid=valid,
            context="free",
            tire_energy_j=(joules,) * 4,
            peak_demand=1,
        )
        display.fold("lap_completed", lap, 1.0)
    display.fold("estimate", estimate(5), 1.0)
    assert display.scene(1.0).last_lap_j == (5.0,) * 4


def test_a_cue_stays_four_seconds(display: Display) -> None:
    display.fold("cue", cue("late"), 10.0)
    assert display.scene(13.9).cue == "late"
    assert display.scene(14.0).cue == ""


def test_withheld_cues_are_shown_only_for_want_of_a_voice() -> None:
    assert is_shown(cue())
    assert is_shown(cue(spoken=False, withheld="no voice"))
    assert not is_shown(cue(spoken=False, withheld="uncertain"))
    assert not is_shown(cue(spoken=False))


def test_other_topics_change_nothing(display: Display, estimate: MakeEstimate) -> None:
    display.fold("estimate", estimate(500), 1.0)
    before = display.scene(1.0)
    display.fold("stream_lost", StreamLost(time_s=1, silence_s=1), 1.0)
    display.fold("unheard", object(), 1.0)
    assert display.scene(1.0) == before
