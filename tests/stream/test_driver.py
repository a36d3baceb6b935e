"""What is learned of a driver, and what a detector makes of it."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from streams import oval_file

from canticle_daemon.messages import TurnIn
from canticle_daemon.physics.car import CarFile
from canticle_daemon.stream.driver import CalmWindows, Driver
from canticle_daemon.stream.knots import Knot
from canticle_daemon.stream.passes import Pass
from canticle_daemon.track.profile import Track

TRACK = Track(oval_file())
TRACE = np.zeros((9, 601))
TRACE[0] = 100.0 + np.arange(601) / 60.0  # time; the way is 60 m/s of it, the transition at 105 s
TRACE[1] = 60.0 * (TRACE[0] - 105.0)
TRACE[3] = 60.0
KNOT = Knot(x=0.0, std=0.2, level=0.0, slope=0.005)


def alarm(time_s: float) -> TurnIn:
    unimportant: Any = None
    fields = dict.fromkeys(TurnIn.__struct_fields__, unimportant)
    return TurnIn(**fields | {"time_s": time_s})


def passed(time_s: float, score: float = 1e-4, way_m: float = 0.0) -> Pass:
    here = Pass(0, 101.0, alarm=alarm(time_s), alarm_score=score)
    here.alarm_way_m = way_m
    return here


def fresh() -> Driver:
    return Driver(TRACK, CarFile())


def test_before_anything_is_seen_the_road_tells() -> None:
    driver = fresh()
    assert np.isnan(driver.rest_rad(0))
    # 1.3 × what a car without slip steers: ratio × wheelbase × curvature.
    peak = float(np.max(TRACK.curvature_1pm(np.arange(0.0, 2000.0, 2.0))))
    assert driver.height_rad(0) == pytest.approx(1.3 * 12.0 * 2.79 * peak, rel=1e-3)
    assert driver.live_error_m(0) == (0.0, 0.0)


@pytest.mark.parametrize("found", [None, (KNOT, 0.3)])
def test_a_false_alarm_raises_the_threshold(found: tuple[Knot, float] | None) -> None:
    """One with no turn-in after it, and one long before the turn-in."""
    driver = fresh()
    before = driver.threshold
    score = 20.0 * before
    driver.learn(passed(104.0, score), found, TRACE, slow=False)
    driver.aim(0.0)
    # Slope and threshold are learned together; only the false alarm can have raised it so.
    assert driver.threshold >= score
    assert driver.live_error_m(0) == (0.0, 0.0)


def test_a_turn_in_without_an_alarm_teaches_ramp_and_speed() -> None:
    driver = fresh()
    driver.learn(Pass(0, 101.0), (KNOT, 0.25), TRACE, slow=False)
    assert driver.height_rad(0) == 0.25
    assert driver.usual_mps(0) == 60.0
    assert driver.slope_prior(0) == pytest.approx((0.3, 0.15))
    driver.learn(Pass(0, 101.0), None, TRACE / 2.0, slow=True)
    assert driver.usual_mps(0) == 60.0


def test_the_live_bias_counts_where_it_is_sure() -> None:
    """Four misses of about 2 m are a bias; four of 2 m either way are none."""
    sure, unsure = fresh(), fresh()
    for step in (0.05, -0.05, 0.1, -0.1):
        sure.learn(passed(105.2, way_m=2.0 + step), (KNOT, 0.3), TRACE, slow=False)
        unsure.learn(passed(105.2, way_m=2.0 + 60.0 * step), (KNOT, 0.3), TRACE, slow=False)
    bias, scatter = sure.live_error_m(0)
    assert bias == pytest.approx(2.0, abs=0.02)
    assert scatter < 0.15
    bias, scatter = unsure.live_error_m(0)
    assert abs(bias) < 0.5
    assert scatter > 4.0


def test_two_misses_are_all_scatter() -> None:
    driver = fresh()
    for way in (3.0, -4.0):
        driver.learn(passed(105.2, way_m=way), (KNOT, 0.3), TRACE, slow=False)
    assert driver.live_error_m(0) == (0.0, pytest.approx(np.sqrt(12.5)))


def test_calm_windows_are_half_seconds_of_the_stream_s_clock() -> None:
    calm = CalmWindows()
    calm.quiet_until_s = 10.6
    time = 10.0 + np.arange(200) / 60.0  # to 13.32 s
    score = np.where((time >= 12.0) & (time < 12.1), np.inf, time)
    calm.watch(time, score, 0.1 * time, 1)
    found = calm.drop()
    # From 11.0, 11.5 and 12.5; 10.0 and 10.5 were too soon, 12.0 saw a corner, 13.0 is open.
    assert [window.number for window in found] == [22, 23, 25]
    assert [window.end_s for window in found] == pytest.approx([11.5, 12.0, 13.0])
    assert [window.top for window in found] == pytest.approx([11.483, 11.983, 12.983], abs=1e-3)
    assert {window.corner for window in found} == {1}
    assert calm.drop() == []
