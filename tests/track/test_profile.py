"""Track files: what they mean, and what cannot be a track."""

from __future__ import annotations

import copy
import math
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from numpy.testing import assert_allclose

from canticle_daemon.config import validate
from canticle_daemon.errors import ConfigError
from canticle_daemon.track.profile import Track, TrackFile

LENGTH = 2525.1
CURVE = 1.0 / 175.0


def contract_text(side: int = 1, extra: str = "", corner: str = "") -> str:
    """The example of the public contract, its profile drawn out to a lap that closes.

    Two half circles of 180° in 600 m each, their ends ramped over 50.2 m.
    """
    bend = side * math.pi / 550.0
    rows = [
        (0.0, 4.0, 0.0), (330.0, 4.0, 0.0), (380.0, 20.0, bend), (880.0, 20.0, bend),
        (930.0, 4.0, 0.0), (1600.0, 4.0, 0.0), (1650.0, 20.0, bend), (2150.0, 20.0, bend),
        (2200.0, 4.0, 0.0),
    ]  # fmt: skip
    profile = ",\n  ".join(f"[{s}, {b}, {c:.12f}]" for s, b, c in rows)
    return f"""
name = "Example"
length_m = {LENGTH}
direction = "{"left" if side > 0 else "right"}"
{extra}
profile = [
  {profile},
]
[[corner]]
name = "Turn 1"
transition_start_m = 210.0
transition_end_m = 330.0
apex_m = 630.0
exit_m = 1050.0
{corner}
"""


def load(tmp_path: Path, text: str) -> Track:
    path = tmp_path / "track.toml"
    path.write_text(text, encoding="utf-8")
    return Track.load(path)


def test_the_contract_s_example(tmp_path: Path) -> None:
    extra = "width_left_m = 8.0\nbank_axis_offset_m = 0.0\norigin = [0.0, 0.0, 0.0, 0.0]\n"
    own = 'target_m = 190.0\nwindow_m = [160.0, 195.0]\nlandmark = "the gate"\n'
    track = load(tmp_path, contract_text(extra=extra, corner=own))
    (corner,) = track.corners
    assert (corner.zone_start_m, corner.entry_start_m) == (10.0, 60.0)
    assert (corner.target_m, corner.target_source) == (190.0, "driver")
    assert corner.window_m == (160.0, 195.0)
    assert corner.side == 1.0
    assert track.length_m == LENGTH


def test_without_a_target_the_mark_is_the_transition(tmp_path: Path) -> None:
    (corner,) = load(tmp_path, contract_text()).corners
    assert (corner.target_m, corner.target_source) == (210.0, "transition")
    assert corner.window_m is None


@pytest.mark.parametrize("side", [1, -1])
def test_signs(tmp_path: Path, side: int) -> None:
    """Bank is positive on either hand; ISO 8855 roll falls to the inside of the turn."""
    track = load(tmp_path, contract_text(side))
    middle = np.array([600.0])
    assert_allclose(np.degrees(track.bank_rad(middle)), 20.0)
    assert_allclose(np.degrees(track.roll_rad(middle)), -20.0 * side)
    assert math.copysign(1.0, float(track.curvature_1pm(middle)[0])) == side
    assert track.corners[0].side == side


def test_a_corner_may_turn_the_other_way(tmp_path: Path) -> None:
    track = load(tmp_path, contract_text(corner='direction = "right"\n'))
    assert track.side == 1.0
    assert track.corners[0].side == -1.0


def test_profile_is_linear_between_rows_and_closes_round_the_lap(tmp_path: Path) -> None:
    track = load(tmp_path, contract_text())
    stations = np.array([355.0, 0.0, LENGTH, 2 * LENGTH + 355.0, -100.0, np.nan])
    expected = [12.0, 4.0, 4.0, 12.0, 4.0, np.nan]
    assert_allclose(np.degrees(track.bank_rad(stations)), expected, rtol=1e-9)


def test_differences_are_the_shortest_way_round(tmp_path: Path) -> None:
    track = load(tmp_path, contract_text())
    assert track.difference_m(10.0, 2520.0) == pytest.approx(15.1)
    assert track.difference_m(2520.0, 10.0) == pytest.approx(-15.1)
    assert track.difference_m(300.0, 100.0) == pytest.approx(200.0)


def test_phases(tmp_path: Path) -> None:
    track = load(tmp_path, contract_text())
    (corner,) = track.corners
    phases = [track.phase(corner, station) for station in (209.0, 210.0, 330.0, 331.0, 2000.0)]
    assert phases == ["before", "in", "in", "after", "before"]


def test_zone_and_entry_begin_at_the_previous_exit_if_that_is_nearer(tmp_path: Path) -> None:
    second = (
        '[[corner]]\nname = "Turn 2"\ntransition_start_m = 1130.0\ntransition_end_m = 1200.0\n'
        "apex_m = 1800.0\nexit_m = 2300.0\n"
    )
    first, other = load(tmp_path, contract_text(corner=second)).corners
    assert (other.zone_start_m, other.entry_start_m) == (1050.0, 1050.0)
    assert (first.zone_start_m, first.entry_start_m) == (10.0, 60.0)


def test_a_corner_across_the_start_line(tmp_path: Path) -> None:
    text = contract_text().replace("= 210.0", "= 2480.0").replace("= 330.0\n", "= 60.0\n")
    (corner,) = load(tmp_path, text).corners
    assert corner.transition_start_m == 2480.0
    assert corner.transition_end_m == 60.0
    assert corner.entry_start_m == 2330.0


def test_the_view_for_displays(tmp_path: Path) -> None:
    view = load(tmp_path, contract_text()).view(5.0, 30.0)
    (corner,) = view.corners
    assert corner.window_m == (180.0, 215.0)
    assert corner.profile[0][0] == 60.0
    assert corner.profile[-1] == pytest.approx((630.0, 20.0))


# --- a coach's marks ---------------------------------------------------------------------------


def test_targets_take_the_place_of_the_mark_and_leave_the_window(tmp_path: Path) -> None:
    track = load(tmp_path, contract_text(corner="target_m = 190.0\nwindow_m = [160.0, 195.0]\n"))
    (marked,) = track.with_targets({"Turn 1": 175.0}, "targets.toml").corners
    assert (marked.target_m, marked.target_source) == (175.0, "coach")
    assert marked.window_m == (160.0, 195.0)
    assert track.corners[0].target_m == 190.0


@pytest.mark.parametrize(
    ("targets", "part"),
    [({"Turn 9": 100.0}, "known: Turn 1"), ({"Turn 1": -5.0}, "lap"), ({"Turn 1": 9e9}, "lap"),
     ({"Turn 1": math.nan}, "lap")],
)  # fmt: skip
def test_targets_that_cannot_be(tmp_path: Path, targets: dict[str, float], part: str) -> None:
    track = load(tmp_path, contract_text())
    with pytest.raises(ConfigError) as caught:
        track.with_targets(targets, "targets.toml")
    assert str(caught.value).startswith("targets.toml: ")
    assert part in str(caught.value)


# --- impossible tracks -------------------------------------------------------------------------


def data() -> dict[str, Any]:
    import tomllib

    return tomllib.loads(contract_text())


def refused(**changes: Any) -> str:
    return refusal(data() | changes)


def refusal(content: dict[str, Any]) -> str:
    with pytest.raises(ConfigError) as caught:
        validate(TrackFile, content, "track.toml")
    text = str(caught.value)
    assert text.startswith("track.toml: ")
    assert "\n" not in text
    return text


def cornered(**changes: Any) -> str:
    content = copy.deepcopy(data())
    content["corner"][0] |= changes
    return refusal(content)


def profiled(row: int, column: int, value: float) -> str:
    content = copy.deepcopy(data())
    content["profile"][row][column] = value
    return refusal(content)


def test_keys_that_no_track_has() -> None:
    assert "did you mean 'length_m'" in refused(lenght_m=3.0)
    assert "did you mean 'apex_m'" in cornered(apexm=3.0)


def test_numbers_that_are_none() -> None:
    assert "profile.2.1" in profiled(2, 1, math.nan)
    assert "corner.0.apex_m" in cornered(apex_m=math.inf)
    assert "length_m" in refused(length_m=math.nan)
    assert "length_m" in refused(length_m=-5.0)
    assert "profile" in refused(profile=[[0.0, 4.0]])


def test_stations_that_do_not_rise() -> None:
    assert "profile row 3: station 330 does not rise above 330" in profiled(2, 0, 330.0)
    assert "profile row 4" in profiled(3, 0, 100.0)
    assert "start at station 0" in profiled(0, 0, 5.0)
    assert "beyond length_m" in profiled(8, 0, 2600.0)


def test_a_lap_that_does_not_close() -> None:
    told = profiled(2, 2, 0.0)
    assert "does not close" in told
    assert "±360°" in told


def test_a_direction_that_the_curvature_contradicts() -> None:
    assert "direction" in refused(direction="right")


def test_surfaces_that_are_none() -> None:
    assert "profile.3" in profiled(3, 1, 75.0)
    assert "radius" in profiled(3, 2, 0.5)


def test_corners_out_of_order() -> None:
    assert "'Turn 1': transition_end_m must come after" in cornered(transition_end_m=205.0)
    assert "apex_m must come after transition_end_m" in cornered(apex_m=300.0)
    assert "exit_m must come after apex_m" in cornered(exit_m=630.0)
    assert "not on the lap" in cornered(exit_m=2600.0)


def test_corners_that_overlap_or_share_a_name() -> None:
    first = data()["corner"][0]
    other = first | {
        "name": "Turn 2", "transition_start_m": 900.0, "transition_end_m": 950.0,
        "apex_m": 1200.0, "exit_m": 1500.0,
    }  # fmt: skip
    assert "exits after 'Turn 2' has begun" in refused(corner=[first, other])
    assert "two corners are named 'Turn 1'" in refused(corner=[first, other | {"name": "Turn 1"}])


def test_marks_and_windows_that_cannot_be() -> None:
    assert "target_m" in cornered(target_m=2600.0)
    assert "window_m" in cornered(window_m=[195.0, 160.0])
    assert "window_m" in cornered(window_m=[160.0, 2600.0])
    assert "window_m" in cornered(window_m=[160.0])
